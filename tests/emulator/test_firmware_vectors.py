"""The contract's vectors into the C module: what it answers, drops and counts is what each vector expects."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from itertools import pairwise
from pathlib import Path
from typing import Any

import msgpack
import pytest

from protobench.contract import load_contract
from protobench.links import open_link
from protobench.suite.bench import Bench
from protobench.suite.port import Received
from protobench.suite.tester import Tester
from protobench.wire import Frame, load_codec, stuff

CONTRACT = load_contract()
CODEC = load_codec(CONTRACT)
VECTORS = Path(__file__).parents[2] / "spec" / "1.0" / "vectors"
FIRMWARE = Path(__file__).parents[2] / "emulator" / "firmware" / "build-sanitized" / "module-lockstep"
CONTEXT_EPOCH, CONTEXT_LEASE = 3, 1  # what the vectors' frames carry
GROUP, LOWEST_MANY = 0xF0000007, 0xF0000000
HARDWARE_ID = 16 * "0"  # what the vectors name
CONTROLLER, SESSION = 0x10001, 0x5EED0001
SILENT = ("not-for-many", "not-newer", "wrong-module")  # refusals of a request to many are counted, not sent
FORM = ("malformed", "not-understood", "unknown-kind")


def vectors(link: str, *areas: str) -> list[Any]:
    files = [json.loads((VECTORS / f"{area}.json").read_text()) for area in areas]
    rows = [
        vector
        for file in files
        for vector in file["vectors"]
        if vector["link"] == link and vector["receiver"] == "module"
    ]
    assert rows
    return [pytest.param(vector, id=vector["id"]) for vector in rows]


@contextmanager
def module() -> Iterator[Bench]:
    """A bench at a fresh C module, started."""
    if not FIRMWARE.exists():
        pytest.fail(f"{FIRMWARE} is missing; build it with: make firmware")
    with open_link(f"lockstep:{FIRMWARE} --hardware-id {HARDWARE_ID}") as link:
        bench = Bench(link, CONTRACT, CODEC, seed=1)
        bench.discover(1)
        yield bench


def bring_to_context(bench: Bench, frame: Frame | None) -> None:
    """Epoch and lease number as in the vectors, the group joined, halt latch clear, the frame's sender the holder."""
    keeper = bench.tester(0x1EEEE)
    keeper.take_lease()
    keeper.accepted("set-groups", groups=[GROUP])
    while keeper.read("describe")["epoch"] < CONTEXT_EPOCH:
        keeper.restart()
        bench.port.wait_ms(bench.facts.starting_ms)
    if frame is not None and frame.kind == CODEC.kind("take-lease").code:
        keeper.take_lease()
        keeper.accepted("release-lease")
        return
    from_controller = frame is not None and 0 < frame.source < LOWEST_MANY and frame.source != bench.address
    holder = bench.tester(frame.source if frame and from_controller else CONTROLLER)
    holder.session = frame.session if frame and from_controller else SESSION
    holder.use_number((frame.number if frame else 1) - 9)
    holder.take_lease(30_000)
    holder.reset()
    assert (holder.epoch, holder.lease) == (CONTEXT_EPOCH, CONTEXT_LEASE)


def difference(before: tuple[dict[str, int], int], after: tuple[dict[str, int], int]) -> dict[str, int]:
    """The drop counters that rose, and by how much."""
    return {name: count - before[0][name] for name, count in after[0].items() if count != before[0][name]}


def put_in(bench: Bench, data: bytes) -> tuple[Tester, list[Received], dict[str, int], int]:
    """The vector's bytes as one block; what came back, which drops and silent refusals were counted."""
    frame = CODEC.frames.unpack(data)
    bring_to_context(bench, frame if isinstance(frame, Frame) else None)
    keeper = bench.a = bench.tester(0x1EEEE)
    keeper.learn()
    before = bench.counters()
    bench.port.inbox.clear()
    bench.port.send_raw(stuff(data) + b"\0")
    bench.port.wait_ms(2100)
    seen = [one for one in bench.port.inbox if one.kind not in ("fault", "telemetry")]
    if seen:
        bench.address = seen[0].frame.source  # an address just assigned answers from then on
    after = bench.counters()
    return keeper, seen, difference(before, after), after[1] - before[1]


def no_such_motion(bench: Bench, data: bytes) -> list[tuple[str, int]] | None:
    """The earlier refusal of a move that this module does not have; its range is then not looked at."""
    reading = bench.language.read(data)
    move = CODEC.kind("move")
    if reading.frame is None or reading.frame.kind != move.code:
        return None
    motion_key = bench.language.keys("move")["motion"]
    asked = msgpack.unpackb(reading.frame.body, strict_map_key=False).get(motion_key)
    known = [bench.language.number_of("motion", name) for name in bench.facts.motions]
    return None if asked in known else [("unsupported", motion_key)]


@pytest.mark.parametrize(
    "vector",
    [
        one
        for one in vectors("datagram", "body", "field", "frame", "judging", "message")
        if one.id != "judging-no-room"
    ],
)
def test_frame_vector(vector: dict[str, Any]) -> None:
    (expected,) = vector["expect"]
    data = bytes.fromhex(vector["bytes"])
    with module() as bench:
        keeper, seen, drops, silent = put_in(bench, data)
        refused = [(one["reason"], one.get("key")) for one in seen if one.get("result") == "refused"]
        if "drop" in expected:
            assert drops == {expected["drop"]: 1}
            assert seen == []
        elif "refusal" in expected:
            if silent:
                assert expected["refusal"] in SILENT
                assert refused == []
            else:
                assert refused in ([(expected["refusal"], expected.get("key"))], no_such_motion(bench, data))
        elif "halt" in expected:
            assert keeper.status()["halt_latch"] is (expected["halt"] == "executed")
        else:
            assert drops in ({}, {"stale-confirm": 1})
            assert not [reason for reason, _ in refused if reason in FORM]


@pytest.mark.parametrize("in_pieces", [False, True])
@pytest.mark.parametrize("vector", vectors("stream", "stream", "frame"))
def test_stream_vector(vector: dict[str, Any], in_pieces: bool) -> None:
    data = bytes.fromhex(vector["bytes"])
    gaps = dict(vector.get("gaps_ms", []))
    cuts = sorted({0, len(data), *gaps, *(range(len(data)) if in_pieces else ())})
    wanted_drops: dict[str, int] = {}
    for one in vector["expect"]:
        if "drop" in one:
            wanted_drops[one["drop"]] = wanted_drops.get(one["drop"], 0) + 1
    with module() as bench:
        bench.a = bench.tester(0x1EEEE)
        before = bench.counters()
        bench.port.inbox.clear()
        for start, end in pairwise(cuts):
            bench.port.wait_ms(gaps.get(start, 0))
            bench.port.send_raw(data[start:end], lead=False)
        bench.port.wait_ms(100)
        answered = [one.frame.number for one in bench.port.inbox]
        bench.port.send_raw(b"\0")
        drops = difference(before, bench.counters())
    assert answered == [one["message"]["number"] for one in vector["expect"] if "message" in one]
    assert drops == wanted_drops
