"""Conditions over capabilities and items: ``queue and schedule and not assist``."""

from __future__ import annotations

import re
from collections.abc import Collection
from dataclasses import dataclass

_NAME = re.compile(r"[a-z][a-z0-9]*([-_][a-z0-9]+)*")
_WORD = re.compile(r"\S+")
_RESERVED = ("and", "not", "or")


class ConditionError(ValueError):
    """A condition that cannot be read. ``text``: the whole; ``place``: index of the character at fault."""

    def __init__(self, text: str, place: int, rule: str) -> None:
        super().__init__(f"condition {text!r}, character {place + 1}: {rule}")
        self.text = text
        self.place = place
        self.rule = rule


@dataclass(frozen=True, slots=True)
class Condition:
    """Holds when every name of ``wanted`` is there and none of ``unwanted``."""

    wanted: tuple[str, ...]
    unwanted: tuple[str, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """All names used."""
        return self.wanted + self.unwanted

    def holds(self, items: Collection[str]) -> bool:
        """Whether it holds for a module that has these capabilities and items, and no others."""
        return self.why_not(items) is None

    def why_not(self, items: Collection[str]) -> str | None:
        """Return None when it holds, else what is missing or should not be there."""
        parts = [f"needs {name}" for name in self.wanted if name not in items]
        parts += [f"only without {name}" for name in self.unwanted if name in items]
        return "; ".join(parts) or None

    def __str__(self) -> str:
        return " and ".join([*self.wanted, *(f"not {name}" for name in self.unwanted)])


def parse_condition(text: str, known: Collection[str] | None = None) -> Condition:
    """Read ``[not] name (and [not] name)*``.

    With ``known``, any other name is refused. Raises ConditionError.
    """
    words = [(match.start(), match.group()) for match in _WORD.finditer(text)]
    if not words:
        raise ConditionError(text, 0, "empty; a name is wanted")
    found: dict[bool, list[str]] = {True: [], False: []}
    place = 0
    while True:
        place, name, plain = _term(text, words, place)
        if known is not None and name not in known:
            rule = f"unknown name {name!r}; known: {', '.join(sorted(known))}"
            raise ConditionError(text, words[place - 1][0], rule)
        if name in found[True] or name in found[False]:
            raise ConditionError(text, words[place - 1][0], f"{name!r} is named twice")
        found[plain].append(name)
        if place == len(words):
            return Condition(tuple(found[True]), tuple(found[False]))
        if words[place][1] != "and":
            raise ConditionError(text, words[place][0], f"'and' is wanted, {words[place][1]!r} found")
        place += 1


def _term(text: str, words: list[tuple[int, str]], place: int) -> tuple[int, str, bool]:
    """Return the place after the term, its name, and whether the name is wanted."""
    plain = True
    if place < len(words) and words[place][1] == "not":
        plain = False
        place += 1
    if place == len(words):
        raise ConditionError(text, len(text), "a name is wanted, the end found")
    start, word = words[place]
    if word in _RESERVED or not _NAME.fullmatch(word):
        raise ConditionError(text, start, f"a name is wanted, {word!r} found")
    return place + 1, word, plain
