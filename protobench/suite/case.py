"""A conformance case: an ordinary function with what a review needs to know about it."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from protobench.suite.bench import Bench

CaseFunction = Callable[["Bench"], None]
CASE_CLASSES = ("valid", "inopportune", "invalid")
LEVELS = ("required", "recommended")
_ID = re.compile(r"[A-Z]{3}\.[a-z0-9]+(-[a-z0-9]+)*")


@dataclass(frozen=True, slots=True)
class CaseInfo:
    """What a case is.

    ``needs``: condition over capabilities, items of the contract, and of the link (``stream``, ``virtual``)
    under which it applies; empty for always.
    """

    id: str
    level: str
    case_class: str
    purpose: str
    clauses: tuple[str, ...]
    needs: str
    function: CaseFunction

    @property
    def area(self) -> str:
        """Three letters, those of the area its first clauses belong to."""
        return self.id.partition(".")[0]


_registry: dict[str, CaseInfo] = {}


def case(
    case_id: str,
    case_class: str,
    purpose: str,
    *,
    clauses: Iterable[str],
    needs: str = "",
    level: str = "required",
) -> Callable[[CaseFunction], CaseFunction]:
    """Make a function ``test_…(bench)`` a conformance case; see :class:`CaseInfo` for the parameters.

    Raises ValueError for an id that is taken or ill-formed, and for an unknown class or level.
    """
    if not _ID.fullmatch(case_id):
        raise ValueError(f"case id {case_id!r}: three capitals, a dot, lower-case words joined by hyphens")
    if case_class not in CASE_CLASSES:
        raise ValueError(f"case {case_id}: class {case_class!r}: one of {', '.join(CASE_CLASSES)}")
    if level not in LEVELS:
        raise ValueError(f"case {case_id}: level {level!r}: one of {', '.join(LEVELS)}")

    def register(function: CaseFunction) -> CaseFunction:
        known = _registry.get(case_id)
        if known is not None and known.function.__module__ != function.__module__:
            raise ValueError(f"case id {case_id!r} is taken by {known.function.__module__}")
        info = CaseInfo(case_id, level, case_class, purpose, tuple(clauses), needs, function)
        _registry[case_id] = info
        function.case_info = info  # type: ignore[attr-defined]
        return function

    return register


def registered() -> dict[str, CaseInfo]:
    """All cases known so far, by id, in the order of their definition."""
    return dict(_registry)
