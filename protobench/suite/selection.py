"""Choosing cases by an expression: ``FRM and not crc``, ``LSE.take or halt``, ``inopportune``."""

from __future__ import annotations

import re
from collections.abc import Sequence

from protobench.suite.case import CaseInfo

_TOKEN = re.compile(r"\s*(\(|\)|[A-Za-z0-9_.\-]+)")
_WORDS = ("and", "or", "not", "(", ")")


def select(cases: Sequence[CaseInfo], expression: str | None) -> list[CaseInfo]:
    """The cases that an expression selects; all of them without one.

    A whole id selects that case, an area its cases; another word selects the cases whose id contains it, whose class
    or level it is, or which cover the clause it names. Capitals and small letters are the same. Words are joined by
    ``and``, ``or``, ``not`` and parentheses. Raises ValueError, with the place, for anything else.
    """
    if expression is None:
        return list(cases)
    ids = frozenset(info.id.lower() for info in cases)
    areas = frozenset(info.area.lower() for info in cases)
    return [info for info in cases if _Reader(expression, info, ids, areas).value()]


class _Reader:
    """Recursive descent over ``or``, ``and``, ``not``; evaluates as it reads."""

    def __init__(self, text: str, info: CaseInfo, ids: frozenset[str], areas: frozenset[str]) -> None:
        self._ids = ids
        self._areas = areas
        self._text = text
        self._info = info
        self._tokens = self._split(text)
        self._next = 0

    def _split(self, text: str) -> list[str]:
        tokens, position = [], 0
        while position < len(text.rstrip()):
            match = _TOKEN.match(text, position)
            if match is None:
                raise ValueError(
                    f"expression {text!r}: {text[position]!r} at place {position + 1} has no meaning"
                )
            tokens.append(match[1])
            position = match.end()
        return tokens

    def value(self) -> bool:
        found = self._either()
        if self._next < len(self._tokens):
            raise ValueError(f"expression {self._text!r}: {self._tokens[self._next]!r} is not expected there")
        return found

    def _either(self) -> bool:
        found = self._both()
        while self._take("or"):
            found = self._both() or found
        return found

    def _both(self) -> bool:
        found = self._one()
        while self._take("and"):
            found = self._one() and found
        return found

    def _one(self) -> bool:
        if self._take("not"):
            return not self._one()
        if self._take("("):
            found = self._either()
            if not self._take(")"):
                raise ValueError(f"expression {self._text!r}: a closing parenthesis is missing")
            return found
        if self._next >= len(self._tokens) or self._tokens[self._next].lower() in _WORDS:
            before = " ".join(self._tokens[: self._next]) or "the start"
            raise ValueError(f"expression {self._text!r}: a word is missing after {before}")
        self._next += 1
        return self._selects(self._tokens[self._next - 1].lower())

    def _selects(self, word: str) -> bool:
        info = self._info
        case_id = info.id.lower()
        if word in self._ids:
            return word == case_id
        if word in self._areas:  # "MOT" is no part of DSC.motions
            return case_id.startswith(f"{word}.")
        clauses = (clause.lower() for clause in info.clauses)
        return word in case_id or word in (info.case_class, info.level, *clauses)

    def _take(self, word: str) -> bool:
        if self._next < len(self._tokens) and self._tokens[self._next].lower() == word:
            self._next += 1
            return True
        return False
