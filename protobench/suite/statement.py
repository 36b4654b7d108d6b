"""A conformance statement (ICS): what a supplier says the module has, in TOML.

capabilities = ["queue", "schedule"]   # every capability the module declares, and no other
motions = ["pivot", "bond", "unbond"]  # every motion
"""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from pydantic import BaseModel, ConfigDict, ValidationError

from protobench.contract import Contract


class StatementError(ValueError):
    """A statement that cannot be used; the message names the file, the field, the value and the rule."""


class Statement(BaseModel):
    """What the supplier says. Absent fields state nothing."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    capabilities: tuple[str, ...] | None = None
    motions: tuple[str, ...] | None = None

    def differences(self, contract: Contract, description: dict[str, Any]) -> list[str]:
        """Where the module's own description says something else, in words."""
        numbers = {capability.name: capability.number for capability in contract.capabilities}
        return [
            *_differ("capability", self.capabilities, numbers, description["capabilities"]),
            *_differ("motion", self.motions, dict(contract.enum_values("motion")), description["motions"]),
        ]


def _differ(what: str, stated: tuple[str, ...] | None, numbers: dict[str, int], bits: int) -> list[str]:
    if stated is None:
        return []
    found = {name for name, number in numbers.items() if bits >> number & 1}
    lines = [f"{what} {name} is stated and not described" for name in sorted(set(stated) - found)]
    return lines + [f"{what} {name} is described and not stated" for name in sorted(found - set(stated))]


def load_statement(path: Path, contract: Contract) -> Statement:
    """Read a statement. Raises StatementError."""
    try:
        statement = Statement.model_validate(tomllib.loads(path.read_text(encoding="utf-8")))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise StatementError(f"{path}: {error}") from None
    except ValidationError as error:
        fault = error.errors()[0]
        place = ".".join(str(item) for item in fault["loc"])
        raise StatementError(f"{path}: {place} = {fault['input']!r}: {fault['msg']}") from None
    known = {
        "capabilities": [capability.name for capability in contract.capabilities],
        "motions": list(contract.enum_values("motion")),
    }
    for field, names in known.items():
        for name in getattr(statement, field) or ():
            if name not in names:
                raise StatementError(f"{path}: {field} has {name!r}; the contract has {', '.join(names)}")
    return statement
