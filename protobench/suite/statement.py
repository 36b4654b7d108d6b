"""A conformance statement: what a supplier says of a build, in TOML, in the sense of ISO/IEC 9646-7.

The statement proper (ICS) says what the build has; the table ``testing`` holds the extra information for testing
(IXIT). Every table and every item may be left out; what is left out says nothing:

    capabilities = ["queue", "schedule"]   # every capability the module declares, and no other
    motions = ["pivot", "bond", "unbond"]  # every motion
    [times]
    stop_ms = 120
    [testing.restart]
    command = "./power-cycle.sh 3"
"""

from __future__ import annotations

import functools
import hashlib
import shlex
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal, Self

import pydantic as pd

from protobench.contract import Contract
from protobench.contract.base import Model, Text
from protobench.suite.files import near, read_toml
from protobench.suite.statement_items import Item, item_tables, requests

RESTART_LONGEST_MS = 600_000


class Identification(Model):
    """Who states what; free text, for people."""

    supplier: Text | None = pd.Field(None, description="Who makes this statement.")
    contact: Text | None = pd.Field(None, description="Whom to ask.")
    product: Text | None = pd.Field(None, description="What the module is called.")
    revision: Text | None = pd.Field(None, description="Revisions of hardware and firmware.")
    date: Text | None = pd.Field(None, description="When this was stated.")


class Clauses(Model):
    """Clauses that the build does not keep."""

    not_kept: tuple[str, ...] | None = pd.Field(
        None,
        description="Their ids. A recommended one takes its cases out of the run; a required one breaks the contract.",
    )


class Restart(Model):
    """How the module is restarted from outside: by exactly one means."""

    command: Text | None = pd.Field(
        None,
        description="A program that the bench runs, with its arguments; no shell. It ends with status 0.",
    )
    line: Literal["dtr", "rts"] | None = pd.Field(
        None, description="A control line of the serial link that the bench pulses."
    )
    operator: Text | None = pd.Field(
        None, description="What a person has to do; for the reader, the bench does not ask for it."
    )
    takes_ms: int | None = pd.Field(
        None,
        ge=0,
        le=RESTART_LONGEST_MS,
        description="Longest time from the means being used to the module starting, in ms.",
    )

    @pd.field_validator("command")
    @classmethod
    def _splits(cls, command: str | None) -> str | None:
        try:
            shlex.split(command or "")
        except ValueError as error:
            raise ValueError(f"must be a command as in a shell ({error})") from None
        return command

    @pd.model_validator(mode="after")
    def _one_means(self) -> Self:
        means = [name for name in ("command", "line", "operator") if getattr(self, name) is not None]
        if len(means) != 1:
            found = " and ".join(means) or "none of them"
            raise ValueError(f"exactly one of command, line, operator is wanted; found {found}")
        return self


class Testing(Model):
    """Extra information for testing."""

    assist: bool | None = pd.Field(None, description="This build has the upper tester's channel, assist.")
    loss_permille: int | None = pd.Field(
        None, ge=0, le=1000, description="Of a thousand frames, the most that the link loses."
    )
    delay_ms: int | None = pd.Field(
        None, ge=0, le=60_000, description="Longest delay of the link in one direction, in ms."
    )
    restart: Restart | None = None


@dataclass(frozen=True, slots=True)
class Statement:
    """A statement as read. ``said`` holds what is stated, with the tables and names of the file, and nothing else."""

    file: str
    digest: str
    said: Mapping[str, Any]
    testing: Testing | None = None

    def table(self, name: str) -> Mapping[str, Any]:
        """What a table states; empty when it is absent."""
        table: Mapping[str, Any] = self.said.get(name, {})
        return table

    @property
    def capabilities(self) -> tuple[str, ...] | None:
        """All capabilities; None when they are not stated."""
        return self.said.get("capabilities")

    @property
    def motions(self) -> tuple[str, ...] | None:
        """All motions; None when they are not stated."""
        return self.said.get("motions")

    @property
    def not_kept(self) -> tuple[str, ...]:
        """Clauses that the supplier says are not kept."""
        clauses: tuple[str, ...] = self.table("clauses").get("not_kept", ())
        return clauses

    @property
    def restart_words(self) -> str:
        """How the module is restarted from outside, in words; ``nothing`` where that is not stated."""
        means = self.testing.restart if self.testing is not None else None
        if means is None:
            return "nothing"
        return next(f"{name} {value}" for name, value in means.model_dump(exclude_none=True).items())

    @property
    def address(self) -> int | None:
        """The module's address; None when it is not stated."""
        return self.table("module").get("address")


def load_statement(path: Path, contract: Contract) -> Statement:
    """Read a statement. Raises FileError with all that keeps it from being read."""
    form: Any = read_toml(path, form_model(contract))
    digest = hashlib.sha256(path.read_bytes()).hexdigest()
    return Statement(str(path), digest, form.model_dump(exclude_none=True), form.testing)


@functools.cache
def form_model(contract: Contract) -> type[Model]:
    """The model of a statement for this contract. Ranges are left to the review, which names rule and clause."""
    tables = {name: _table_model(name, items) for name, items in item_tables(contract).items()}
    capability = _name_of("capability", [row.name for row in contract.capabilities])
    motion = _name_of("motion", list(contract.enum_values("motion")))
    request = _name_of("request", [kind.name for kind in requests(contract)])
    clause = _name_of("clause", [row.id for row in contract.clauses])
    optional: dict[str, Any] = {
        "contract": Text,
        "profile": Text,
        "capabilities": tuple[capability, ...],  # type: ignore[valid-type]
        "motions": tuple[motion, ...],  # type: ignore[valid-type]
        "identification": Identification,
        **{name: tables[name] for name in ("module", "sizes", "times")},
        "motion": dict[motion, tables["motion"]],  # type: ignore[valid-type]
        "requests": dict[request, bool],  # type: ignore[valid-type]
        "clauses": pd.create_model("Clauses", __base__=Clauses, not_kept=(tuple[clause, ...] | None, None)),  # type: ignore[valid-type]
        "testing": Testing,
    }
    fields: dict[str, Any] = {name: (kind | None, None) for name, kind in optional.items()}
    form: type[Model] = pd.create_model("Form", __base__=Model, **fields)
    return form


_PYTHON: dict[str, Any] = {"uint": int, "int": int, "enum": str, "bytes": str, "list": tuple[int, ...]}


def _table_model(name: str, items: tuple[Item, ...]) -> type[Model]:
    fields: dict[str, Any] = {item.name: (_PYTHON[item.type] | None, None) for item in items}
    model: type[Model] = pd.create_model(name.capitalize(), __base__=Model, **fields)
    return model


def _name_of(what: str, known: list[str]) -> Any:
    def check(name: str) -> str:
        if name not in known:
            raise ValueError(f"{name!r} is no {what} of the contract{near(name, known)}")
        return name

    return Annotated[str, pd.AfterValidator(check)]
