"""What can be wrong with a contract: one problem each, and the error that carries all of them."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

Path = tuple[str | int, ...]


@dataclass(frozen=True, slots=True, order=True)
class Problem:
    """One broken rule.

    ``file``: name of the file below the version's folder; ``path``: keys and indices (from 0) down to the
    item; ``rule``: the rule, with the value that breaks it.
    """

    file: str
    path: Path
    rule: str

    @property
    def place(self) -> str:
        """File and path in one string: ``kinds.toml: kind[3].fields[0].min``."""
        text = ""
        for part in self.path:
            text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else part
        return f"{self.file}: {text}" if text else self.file

    def __str__(self) -> str:
        return f"{self.place}: {self.rule}"


class ContractError(ValueError):
    """A contract that cannot be used. ``problems`` holds every problem found, never none."""

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems: Sequence[Problem] = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))
