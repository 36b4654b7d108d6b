"""The order in which a request is judged, for every pair of reasons, and the contract's vectors."""

from __future__ import annotations

import itertools
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from module_driver import (
    BROADCAST,
    CODEC,
    CONTRACT,
    OTHER,
    OWNER,
    Driver,
    Seen,
    number_of,
    of_kind,
    reason_number,
    reason_of,
)

from emulator.config import CAPABILITIES, ModuleConfig
from emulator.engine import ModuleEngine
from emulator.judge import CHECKS
from emulator.storage import Storage
from protobench.wire import Frame

VECTORS = Path(__file__).parents[2] / "spec" / "1.0" / "vectors"
Fields = dict[str, Any]


class Spoiled:
    """A move that would be accepted, before it is spoiled."""

    def __init__(self) -> None:
        self.driver = Driver(ModuleConfig(queue=1, outcomes=4, scheduled=1)).ready()
        engine = self.driver.engine
        start_at = engine.clock() + 1_000_000
        self.fields: Fields = {
            "epoch": engine.epoch, "lease": engine.lease.number, "motion": 6, "face": 0,
            "start_at": start_at, "allow_last_bond": True,
        }  # fmt: skip
        self.header: Fields = {"source": OWNER[0], "session": OWNER[1], "number": 50}
        self.kind = CODEC.kind("move").code
        self.body: bytes | None = None
        self.extra = b""

    def answer(self) -> Any:
        body = self.body
        if body is None:
            plain = CODEC.new("move", **self.fields).to_body()
            body = bytes([plain[0] + len(self.extra) // 2]) + plain[1:] + self.extra
        data = CODEC.frames.pack(self.kind, body, destination=1, **self.header)
        (receipt,) = of_kind(self.driver.feed(data, 10), "receipt")
        return receipt.message


def _number(spoiled: Spoiled, number: int) -> None:
    """Number 50 becomes what the history knows by another."""
    spoiled.driver.number = number - 1
    spoiled.driver.refusal("energize", lease=99)
    spoiled.header["number"] = 50


def _latch(name: str) -> Callable[[Spoiled], None]:
    return lambda spoiled: setattr(
        spoiled.driver.engine, "state", spoiled.driver.engine.state._replace(**{name: True})
    )


def _halt(spoiled: Spoiled) -> None:
    _latch("halt")(spoiled)


def _power_off(spoiled: Spoiled) -> None:
    state = spoiled.driver.engine.state
    spoiled.driver.engine.state = state._replace(activity="idle")


def _fill_outcomes(spoiled: Spoiled) -> None:
    while spoiled.driver.engine.motions.has_outcome_place():
        spoiled.driver.move()
        spoiled.driver.advance(110)


def _fill_schedule(spoiled: Spoiled) -> None:
    spoiled.driver.move(start_at=spoiled.driver.engine.clock() + 59_000_000)


# How to spoil it, so that this reason fits; a later one may spoil what an earlier one needs, see _apply.
SPOILERS: dict[str, Callable[[Spoiled], None]] = {
    "unsupported-version": lambda spoiled: spoiled.header.update(version=2),
    "conflict": lambda spoiled: _number(spoiled, 50),
    "late-unseen": lambda spoiled: _number(spoiled, 60),
    "answer-expired": lambda spoiled: _number(spoiled, 90),
    "unknown-kind": lambda spoiled: setattr(spoiled, "kind", 0x3B),
    "not-understood/flags": lambda spoiled: spoiled.header.update(flags=0x80),
    "malformed/form": lambda spoiled: setattr(spoiled, "body", b"\xc0"),
    "not-understood/critical-key": lambda spoiled: setattr(spoiled, "extra", b"\x77\x00"),
    "malformed/field": lambda spoiled: setattr(spoiled, "body", b"\x81\x00\xa1x"),
    "stale-epoch": lambda spoiled: spoiled.fields.update(epoch=99),
    "stale-lease": lambda spoiled: spoiled.fields.update(lease=99),
    "not-holder": lambda spoiled: spoiled.header.update(source=OTHER[0]),
    "unsupported": lambda spoiled: spoiled.fields.update(motion=number_of("motion", "hop")),
    "out-of-range": lambda spoiled: spoiled.fields.update(face=15),
    "halted": _halt,
    "fault-latched": _latch("fault"),
    "not-energized": _power_off,
    "last-bond": lambda spoiled: spoiled.fields.pop("allow_last_bond"),
    "late": lambda spoiled: spoiled.fields.update(start_at=spoiled.driver.engine.clock()),
    "too-far": lambda spoiled: spoiled.fields.update(start_at=spoiled.driver.engine.clock() + 70_000_000),
    "busy": _fill_schedule,
    "outcomes-full": _fill_outcomes,
}
# What cannot be at once, or needs a body or header that the other takes away.
APART = [
    {"conflict", "late-unseen", "answer-expired"},
    {"malformed/form", "malformed/field", "not-understood/critical-key"},
    {"late", "too-far"},
    {"unsupported", "last-bond"},
    {"out-of-range", "last-bond"},
]
EXCLUSIVE = {frozenset(pair) for group in APART for pair in itertools.combinations(group, 2)}
EXCLUSIVE |= {frozenset((name, "not-holder")) for name in ("conflict", "late-unseen", "answer-expired")}
# those that need the module as it was come first
NEED_SOUND = ("busy", "outcomes-full", "conflict", "late-unseen", "answer-expired", "late", "too-far")


def _apply(spoiled: Spoiled, *names: str) -> None:
    for name in sorted(names, key=lambda name: NEED_SOUND.index(name) if name in NEED_SOUND else 99):
        SPOILERS[name](spoiled)


def _rank(name: str) -> int:
    reason, _, row = name.partition("/")
    return next(
        place
        for place, refusal in enumerate(CONTRACT.refusals)
        if refusal.name == reason and row in ("", refusal.row)
    )


def test_unspoiled_it_is_accepted() -> None:
    assert Spoiled().answer().result == 0


@pytest.mark.parametrize("name", SPOILERS)
def test_each_reason_by_itself(name: str) -> None:
    spoiled = Spoiled()
    _apply(spoiled, name)
    assert reason_of(spoiled.answer()) == name.partition("/")[0]


def test_of_two_reasons_the_first_of_the_table_is_told() -> None:
    pairs = [pair for pair in itertools.combinations(SPOILERS, 2) if frozenset(pair) not in EXCLUSIVE]
    assert len(pairs) > 200
    for pair in pairs:
        spoiled = Spoiled()
        _apply(spoiled, *pair)
        assert reason_of(spoiled.answer()) == min(pair, key=_rank).partition("/")[0], pair


def test_every_row_of_the_table_has_its_check_and_no_check_is_without_a_row() -> None:
    assert set(CHECKS) == {(row.name, row.row or "") for row in CONTRACT.refusals}


def test_the_lowest_key_is_named() -> None:
    driver = Driver().ready()
    fields = {"motion": 3, "magnitude": 1 << 30, "face": 3}
    assert driver.refusal("move", **fields) == ("out-of-range", 3)
    assert driver.refusal("move", **{**fields, "magnitude": 0}) == ("out-of-range", 4)


def test_refused_requests_change_nothing_but_the_history() -> None:
    driver = Driver().ready()
    before, end_us = driver.status(), driver.engine.lease.end_us
    for fields in ({"epoch": 9}, {"lease": 9}, {"motion": 4}, {"magnitude": 1 << 30}, {"start_at": 0}):
        driver.refusal("move", **{"motion": 3, "magnitude": 1, **fields})
    driver.refusal("assist", op=5, item=2, value=65_536)
    after = driver.status()
    assert (after.change, driver.engine.lease.end_us) == (before.change, end_us)


@pytest.mark.parametrize("capability", CAPABILITIES)
def test_what_is_not_declared_is_unsupported(capability: str) -> None:
    sizes = {"queue": "queue", "schedule": "scheduled", "groups": "groups"}
    names = tuple(name for name in CAPABILITIES if name != capability)
    config = ModuleConfig(capabilities=names, **({sizes[capability]: 0} if capability in sizes else {}))
    driver = Driver(config).ready()
    fields: dict[str, Fields] = {
        "telemetry-on": {"period": 20, "duration": 20}, "telemetry-off": {}, "set-groups": {"groups": []},
        "identify": {"duration": 100}, "assist": {"op": 7}, "read-groups": {}, "read-truth": {},
    }  # fmt: skip
    kinds = [kind.name for kind in CONTRACT.kinds if kind.needs == capability]
    for kind in kinds:
        assert driver.refusal(kind, **fields[kind]) == ("unsupported", None)
    if capability == "schedule":
        assert driver.refusal("move", motion=3, start_at=0) == ("unsupported", 64)
    elif capability == "queue":
        driver.move()
        assert driver.refusal("move", motion=3, magnitude=1) == ("busy", None)
    elif capability == "energy":
        assert driver.ask("describe").capabilities >> 6 & 1 == 0
    else:
        assert kinds


# ---------------------------------------------------------------- to many


@pytest.mark.parametrize("kind", [kind for kind in CONTRACT.kinds if kind.class_ in ("read", "command")])
def test_what_may_not_go_to_many_is_refused_in_silence(kind: Any) -> None:
    driver = Driver().ready()
    data = CODEC.frames.pack(
        kind.code, b"\x80", source=OWNER[0], destination=BROADCAST, session=OWNER[1], number=999
    )
    before = driver.status()
    assert driver.feed(data, 3000) == []
    expected = 0 if kind.name in ("halt", "probe") else 1
    assert driver.engine.silent_refusals == expected, "an empty body lacks a duration, an address, or telemetry"
    if kind.name != "halt":
        assert driver.status().change == before.change


# ---------------------------------------------------------------- storage


class Worn(Storage):
    """A storage that takes no more writes than it has left."""

    left = 1

    def _keep(self, values: dict[str, object]) -> None:
        from emulator.storage import WriteFailed

        if not Worn.left:
            raise WriteFailed
        Worn.left -= 1


def test_what_cannot_be_kept_is_refused_and_is_a_fault() -> None:
    Worn.left = 1
    driver = Driver(storage=Worn())
    driver.accept("take-lease", duration=30_000)
    before = (driver.engine.address, driver.engine.storage.groups)
    end_us = driver.engine.lease.end_us
    hardware_id = driver.engine.config.hardware_id
    assert driver.refusal("set-groups", groups=[0xF0000001]) == ("storage-failed", None)
    assert driver.refusal("assign-address", hardware_id=hardware_id, address=9) == ("storage-failed", None)
    driver.accept("release-lease")
    driver.send("assign-address", to=BROADCAST, hardware_id=hardware_id, address=9, answer_window=5)
    assert driver.engine.silent_refusals == 1
    assert (driver.engine.address, driver.engine.storage.groups) == before
    assert end_us is not None
    faults = driver.ask("read-faults")
    assert {entry.code for entry in faults.entries} == {CONTRACT.fault("storage-failed").code}
    assert faults.total == 3
    assert driver.state == "faulted"


def test_without_its_epoch_kept_a_module_refuses_motion() -> None:
    Worn.left = 0
    driver = Driver(storage=Worn())
    driver.accept("take-lease", duration=30_000)
    driver.accept("reset", halt_count=1)
    assert driver.refusal("energize") == ("fault-latched", None)
    assert driver.refusal("clear-faults", occurrences=[1]) == ("cause-stands", None)


# ---------------------------------------------------------------- vectors


def _vectors() -> list[Any]:
    areas = ("body", "field", "frame", "judging", "message")
    vectors = [
        vector for area in areas for vector in json.loads((VECTORS / f"{area}.json").read_text())["vectors"]
    ]
    return [
        pytest.param(vector, id=vector["id"])
        for vector in vectors
        if vector["receiver"] == "module" and vector["link"] == "datagram"
    ]


def _receive(data: bytes) -> tuple[ModuleEngine, dict[str, int], list[Seen]]:
    """A module for which the vectors' epoch 3 and lease 1 are right, after the bytes came."""
    config = ModuleConfig(hardware_id=bytes(8))
    driver = Driver(config, Storage(epoch=2, groups=(0xF0000007,)))
    engine = driver.engine
    frame = CODEC.frames.unpack(data)
    if isinstance(frame, Frame) and frame.kind != CODEC.kind("take-lease").code:
        engine.lease.grant((frame.source, frame.session), 30_000, driver.now_us)
        engine.state = engine.state._replace(halt=False, lease="held")
    engine.lease.number = 1
    seen = driver.feed(data, 2100)
    return engine, {name: count for name, count in engine.drops.items() if count}, seen


@pytest.mark.parametrize("vector", [one for one in _vectors() if one.id != "judging-no-room"])
def test_vector(vector: dict[str, Any]) -> None:
    (expected,) = vector["expect"]
    engine, drops, seen = _receive(bytes.fromhex(vector["bytes"]))
    refused = [one.message for one in of_kind(seen, "receipt") if one.message.result]
    if "drop" in expected:
        assert drops == {expected["drop"]: 1}
        assert [one.kind for one in seen if one.kind != "fault"] == []
    elif "refusal" in expected:
        aloud = [(reason_of(receipt), receipt.key) for receipt in refused]
        if engine.silent_refusals:
            assert expected["refusal"] in ("not-for-many", "not-newer", "wrong-module")
            assert aloud == []
        else:
            assert aloud == [(expected["refusal"], expected.get("key"))]
    elif "halt" in expected:
        assert engine.halt_count == (2 if expected["halt"] == "executed" else 1)
    else:
        assert drops in ({}, {"stale-confirm": 1})
        form = [reason_number(name) for name in ("malformed", "not-understood", "unknown-kind")]
        assert not [receipt for receipt in refused if receipt.reason in form]


def test_the_vector_that_finds_no_room() -> None:
    (vector,) = [one.values[0] for one in _vectors() if one.id == "judging-no-room"]
    driver = Driver(ModuleConfig(answers=4))
    for _ in range(4):
        driver.send("status", wait_ms=0)
    driver.feed(bytes.fromhex(vector["bytes"]))
    assert driver.engine.drops["no-room"] == 1
