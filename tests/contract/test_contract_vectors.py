"""The vectors are sound data, cover the contract, and this project's wire agrees with each of them."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

import pytest

from protobench.contract import ContractError, load_contract, spec_root
from protobench.contract.vectors import (
    Dropped,
    Halted,
    Refused,
    Taken,
    Vector,
    VectorFile,
    load_vectors,
)
from protobench.wire import BodyError, FieldError, Frame, load_codec
from protobench.wire import Dropped as WireDropped

FILES = load_vectors()
CONTRACT = load_contract()
CODEC = load_codec(CONTRACT)
ALL = [pytest.param(file, vector, id=vector.id) for file in FILES for vector in file.vectors]
NS_PER_MS = 1_000_000
HALT, CONFIRM = CONTRACT.kind("halt").code, CONTRACT.kind("confirm").code

# ---------------------------------------------------------------- the wire's answer to a vector


def units(vector: Vector) -> list[bytes | WireDropped]:
    """Bare frames, and what was dropped on the way to them."""
    if vector.link == "datagram":
        return [vector.data]
    if vector.link == "part":
        return CODEC.split_part(vector.data)
    decoder = CODEC.stream_decoder()
    found: list[bytes | WireDropped] = []
    start, now_ns = 0, 0
    for offset, pause_ms in (*vector.gaps_ms, (len(vector.data), 0)):
        found += decoder.feed(vector.data[start:offset], now_ns)
        start, now_ns = offset, now_ns + pause_ms * NS_PER_MS
        found += decoder.expire(now_ns)
    return found


def judged(file: VectorFile, vector: Vector, unit: bytes | WireDropped) -> dict[str, Any]:
    """What a receiver in the vector's context makes of a unit, in the words of the vectors."""
    frame = CODEC.frames.unpack(unit) if isinstance(unit, bytes) else unit
    if isinstance(frame, WireDropped):
        return {"drop": frame.reason}
    stopped = front_door(file, frame) if vector.receiver == "module" else None
    if stopped is None and (dropped := CODEC.frames.check_length(frame)) is not None:
        stopped = {"drop": dropped.reason}
    if stopped is None and vector.context.free_answers == 0:
        stopped = {"drop": "no-room"}
    found = stopped or read(vector, frame)
    if frame.kind == HALT and "message" not in found and found != {"drop": "other-address"}:
        return {"halt": "executed"}
    if frame.kind == CONFIRM and "refusal" in found and frame.version == CONTRACT.major:
        return {"drop": "stale-confirm"}
    return found


def front_door(file: VectorFile, frame: Frame) -> dict[str, Any] | None:
    """Address, source, kind and version, in the order of the drop table."""
    own, groups, addresses = file.context.address, file.context.groups, CONTRACT.addresses
    other_major = frame.version != CONTRACT.major
    is_request = CONTRACT.frame.kind_ranges.of(frame.kind) in ("read", "command")
    reason = None
    if frame.destination not in (own, addresses.broadcast, *groups):
        reason = "other-address"
    elif frame.source == own:
        reason = "own-source"
    elif not addresses.is_unicast(frame.source):
        reason = "bad-source"
    elif not is_request and (frame.kind != CONFIRM or other_major):
        reason = "not-a-request"
    if reason is not None:
        return {"drop": reason}
    return {"refusal": "unsupported-version"} if other_major else None


def read(vector: Vector, frame: Frame) -> dict[str, Any]:
    """Kind, flags and body."""
    kind = CODEC.kinds_by_code.get(frame.kind)
    if kind is None or frame.flags:
        return {"refusal": "unknown-kind" if kind is None else "not-understood"}
    try:
        message = kind.decode(frame.body, CONTRACT.is_multicast(frame.destination))
    except BodyError:
        return {"refusal": "malformed"}
    except FieldError as error:
        return {"refusal": error.rule.refusal, "key": error.key}
    if kind.name == "confirm" and not known_event(vector, frame, message):
        return {"drop": "stale-confirm"}
    present = CODEC.unpack_body(frame.body)
    specs = [spec for spec in kind.spec.fields if spec.key in present]
    header = {name: getattr(frame, name) for name in ("source", "destination", "session", "number")}
    fields = {spec.name: as_json(getattr(message, spec.attribute)) for spec in specs}
    return {"message": {"kind": kind.name, **header, "fields": fields}}


def known_event(vector: Vector, frame: Frame, message: Any) -> bool:
    held = vector.context
    if held.epoch is None:
        return True
    senders = {(row.event, row.source, row.session) for row in held.outcomes}
    return message.epoch == held.epoch and (message.event, frame.source, frame.session) in senders


def as_json(value: Any) -> Any:
    if isinstance(value, bytes):
        return value.hex()
    return [as_json(item) for item in value] if isinstance(value, tuple) else value


def plain(value: Any) -> Any:
    """A result as plain data."""
    if isinstance(value, dict):
        return {key: plain(item) for key, item in value.items()}
    return [plain(item) for item in value] if isinstance(value, tuple | list) else value


@pytest.mark.parametrize(("file", "vector"), ALL)
def test_the_wire_agrees(file: VectorFile, vector: Vector) -> None:
    found = [judged(file, vector, unit) for unit in units(vector)]
    assert found == [plain(result.model_dump(exclude_none=True)) for result in vector.expect]


# ---------------------------------------------------------------- coverage


def results() -> list[Taken | Dropped | Refused | Halted]:
    return [result for file in FILES for vector in file.vectors for result in vector.expect]


def test_there_are_enough_vectors() -> None:
    assert sum(len(file.vectors) for file in FILES) >= 150


def test_every_kind_is_covered() -> None:
    assert {result.message.kind for result in results() if isinstance(result, Taken)} == {
        kind.name for kind in CONTRACT.kinds
    }


def test_every_field_is_covered() -> None:
    meanings = [result.message for result in results() if isinstance(result, Taken)]
    told = {(meaning.kind, name) for meaning in meanings for name in meaning.fields}
    assert told == {(kind.name, field.name) for kind in CONTRACT.kinds for field in kind.fields}


def test_every_drop_reason_is_covered() -> None:
    told = {result.drop for result in results() if isinstance(result, Dropped)}
    assert told == {drop.name for drop in CONTRACT.drops}


def test_every_refusal_for_version_and_form_is_covered() -> None:
    wanted = {row.name for row in CONTRACT.refusals if row.stage == "form"} | {
        "unsupported-version",
        "out-of-range",
    }
    assert {result.refusal for result in results() if isinstance(result, Refused)} == wanted


def test_the_longest_frames_are_there() -> None:
    sizes = {len(vector.data) for file in FILES for vector in file.vectors if vector.link == "datagram"}
    layout = CONTRACT.frame.layout
    assert {layout.frame_size_min, layout.frame_size_max, layout.frame_size_max + 1} <= sizes
    assert layout.frame_size_min + layout.body_size_max in sizes


# ---------------------------------------------------------------- broken files


@pytest.fixture
def spec(tmp_path: Path) -> Path:
    shutil.copytree(spec_root() / "1.0", tmp_path / "1.0")
    return tmp_path


def edit(spec: Path, change: Any) -> ContractError:
    path = spec / "1.0" / "vectors" / "frame.json"
    data = json.loads(path.read_text())
    change(data)
    path.write_text(json.dumps(data))
    with pytest.raises(ContractError) as caught:
        load_vectors("1.0", spec)
    return caught.value


def _meaning(data: Any) -> Any:
    return data["vectors"][0]["expect"][0]["message"]


def test_vectors_load_from_another_place(spec: Path) -> None:
    assert load_vectors("1.0", spec) == FILES


@pytest.mark.parametrize(
    ("change", "path", "rule"),
    [
        (lambda data: data["vectors"][3].update(bytes="0g"), ("vectors", 3, "bytes"), "hex"),
        (lambda data: data["vectors"][2].update(surplus=1), ("vectors", 2, "surplus"), "Extra"),
        (
            lambda data: data["vectors"][1].update(id="frame-good"),
            ("vectors", 1, "id"),
            "used already, in frame.json",
        ),
        (
            lambda data: data["vectors"][1].update(id="body-nil"),
            ("vectors", 1, "id"),
            "used already, in body.json",
        ),
        (lambda data: data["vectors"][1].update(gaps_ms=[[1, 5]]), ("vectors", 1), "only a stream has gaps"),
        (
            lambda data: data["vectors"][1].update(expect=[{"drop": "no"}]),
            ("vectors", 1, "expect", 0),
            "'no'",
        ),
        (
            lambda data: data["vectors"][1].update(expect=[{"refusal": "x"}]),
            ("vectors", 1, "expect", 0),
            "refusal 'x'",
        ),
        (lambda data: _meaning(data).update(kind="x"), ("vectors", 0, "expect", 0), "kind 'x'"),
        (lambda data: _meaning(data).update(fields={"x": 1}), ("vectors", 0, "expect", 0), "no field 'x'"),
        (lambda data: data.update(contract="2.0"), ("contract",), "2.0 is not 1.0"),
    ],
)
def test_broken_vectors_are_told_with_file_path_and_rule(
    spec: Path, change: Any, path: Any, rule: str
) -> None:
    problem = edit(spec, change).problems[0]
    assert problem.file == "vectors/frame.json"
    assert problem.path == path
    assert rule in problem.rule


def test_a_file_that_is_no_json_is_told(spec: Path) -> None:
    (spec / "1.0" / "vectors" / "frame.json").write_text("{")
    with pytest.raises(ContractError, match=r"vectors/frame\.json: is no file of vectors"):
        load_vectors("1.0", spec)


def test_no_vectors_at_all_is_told(spec: Path) -> None:
    shutil.rmtree(spec / "1.0" / "vectors")
    with pytest.raises(ContractError, match="there are no vectors"):
        load_vectors("1.0", spec)
