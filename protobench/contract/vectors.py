"""The vectors of a version: bytes, and what a receiver must make of them."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated, Any, Literal

import pydantic as pd

from protobench.contract.base import U32, Model, Name, Natural, Positive, Text
from protobench.contract.load import FILE_SIZE_MAX, load_contract, plain_rule, spec_root, tuples
from protobench.contract.model import Contract
from protobench.contract.problems import ContractError, Problem

FOLDER = "vectors"


class Meaning(Model):
    """A frame that is taken. ``fields``: those that stand in the body; numbers for enumerations, lists for
    records, hexadecimal digits for bytes."""

    kind: Name
    source: U32
    destination: U32
    session: U32
    number: U32
    fields: dict[Name, Any]


class Taken(Model):
    """The frame is taken as this message."""

    message: Meaning


class Dropped(Model):
    """The frame is dropped for this reason, and not answered."""

    drop: Name


class Refused(Model):
    """The request is refused for this reason; ``key`` where the reason names one."""

    refusal: Name
    key: Natural | None = None


class Halted(Model):
    """The frame is a halt and is executed, whatever else is wrong with it."""

    halt: Literal["executed"]


class Outcome(Model):
    """An unconfirmed outcome that the module holds: its event number, and who asked for the motion."""

    event: U32
    source: U32
    session: U32


class Held(Model):
    """What the module holds when the bytes arrive, where that matters."""

    free_answers: Natural | None = None
    epoch: U32 | None = None
    outcomes: tuple[Outcome, ...] = ()


class Vector(Model):
    """One vector.

    ``link``: "stream" (COBS), "datagram" (one bare frame) or "part" (ZeroMQ); ``gaps_ms``: on a stream, pairs of
    an offset and the pause in ms before the byte there; ``expect``: what the bytes hold, in order.
    """

    id: Name
    purpose: Text
    link: Literal["stream", "datagram", "part"]
    receiver: Literal["module", "controller"]
    data: bytes = pd.Field(alias="bytes")
    gaps_ms: tuple[tuple[Positive, Positive], ...] = ()
    context: Held = Held()
    expect: tuple[Taken | Dropped | Refused | Halted, ...]

    @pd.field_validator("data", mode="before")
    @classmethod
    def _from_hex(cls, value: object) -> object:
        return bytes.fromhex(value) if isinstance(value, str) else value

    @pd.model_validator(mode="after")
    def _gaps_rise(self) -> Vector:
        offsets = [offset for offset, _ in self.gaps_ms]
        if offsets != sorted(set(offsets)) or (offsets and offsets[-1] >= len(self.data)):
            raise ValueError(f"offsets of gaps must rise and lie within the bytes, they are {offsets}")
        if offsets and self.link != "stream":
            raise ValueError("only a stream has gaps")
        return self


class Receiver(Model):
    """The module the vectors of a file are meant for."""

    address: U32
    groups: tuple[U32, ...]


class VectorFile(Model):
    """One file of vectors."""

    contract: Annotated[str, pd.StringConstraints(pattern=r"^[0-9]+\.[0-9]+$")]
    area: Name
    about: Text
    source: Text
    context: Receiver
    vectors: tuple[Vector, ...]


def load_vectors(version: str = "1.0", root: Path | None = None) -> tuple[VectorFile, ...]:
    """Return the vectors of a version, by file name. ContractError tells every problem found."""
    contract = load_contract(version, root)
    folder = (root or spec_root()).resolve() / version / FOLDER
    problems: list[Problem] = []
    files: list[VectorFile] = []
    ids: dict[str, str] = {}
    for path in sorted(folder.glob("*.json")):
        file = _read(path, problems)
        if file is not None:
            files.append(file)
            problems += _check(contract, file, path.name, ids)
    if not files and not problems:
        problems.append(Problem(FOLDER, (), f"there are no vectors in {folder}"))
    if problems:
        raise ContractError(problems)
    return tuple(files)


def _read(path: Path, problems: list[Problem]) -> VectorFile | None:
    try:
        if path.stat().st_size > FILE_SIZE_MAX:
            raise ValueError(f"longer than {FILE_SIZE_MAX} bytes")
        return VectorFile.model_validate(tuples(json.loads(path.read_text(encoding="utf-8"))))
    except pd.ValidationError as error:
        problems += [
            Problem(f"{FOLDER}/{path.name}", entry["loc"], plain_rule(entry))
            for entry in error.errors(include_url=False)
        ]
    except (OSError, ValueError, RecursionError) as error:
        problems.append(Problem(f"{FOLDER}/{path.name}", (), f"is no file of vectors: {error}"))
    return None


def _check(contract: Contract, file: VectorFile, name: str, ids: dict[str, str]) -> list[Problem]:
    """What the vectors name must be in the contract, and an id stands for one vector only."""
    where = f"{FOLDER}/{name}"
    problems = []
    if file.contract != contract.version:
        problems.append(Problem(where, ("contract",), f"{file.contract} is not {contract.version}"))
    for index, vector in enumerate(file.vectors):
        if (first := ids.setdefault(vector.id, name)) != name or _twice(file, index):
            problems.append(Problem(where, ("vectors", index, "id"), f"{vector.id} is used already, in {first}"))
        for place, result in enumerate(vector.expect):
            if (rule := _unknown(contract, result)) is not None:
                problems.append(Problem(where, ("vectors", index, "expect", place), rule))
    return problems


def _twice(file: VectorFile, index: int) -> bool:
    return any(vector.id == file.vectors[index].id for vector in file.vectors[:index])


def _unknown(contract: Contract, result: Taken | Dropped | Refused | Halted) -> str | None:
    """Return what a result names that the contract does not have."""
    try:
        if isinstance(result, Taken):
            kind = contract.kind(result.message.kind)
            for name in result.message.fields:
                kind.field(name)
        elif isinstance(result, Dropped):
            contract.drop(result.drop)
        elif isinstance(result, Refused):
            contract.refusal_rows(result.refusal)
    except KeyError as error:
        return str(error.args[0])
    return None
