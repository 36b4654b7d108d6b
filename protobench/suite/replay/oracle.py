"""Does a play still show the failure? Who says so: the watch, the model of the contract, or a sound twin."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

from protobench.suite.replay.observe import Place, Seen, same
from protobench.suite.replay.trial import Difference, Trial, differences, numberless, shape
from protobench.suite.watch import Violation

WATCH, MODEL, TWIN, LINK, CASE = "watch", "model", "twin", "link", "case"
SIDE = ("change", "late", "repeats", "lease_remaining")  # fields that others explain better
COUNTS = ("drops for", "silent_refusals", "motion_starts", "total")
FOUND = {WATCH: "watched", MODEL: "modelled"}


class Oracle(Protocol):
    """Decides by a play of the module and, where it is asked for, one of a sound twin.

    ``name``: which kind of oracle; ``clause``: what it says is broken, or nothing; ``words``: what is wrong.
    """

    @property
    def name(self) -> str: ...

    @property
    def clause(self) -> str: ...

    @property
    def words(self) -> str: ...

    def suspects(self, module: Trial) -> bool:
        """Whether the module alone looks wrong in this way; if not, nobody need ask the twin."""

    def shows(self, module: Trial, twin: Trial) -> bool:
        """Whether the module is wrong in this way and a sound one is not."""


@dataclass(frozen=True, slots=True)
class Violated:
    """The watch, or the model, finds a clause broken in a certain way."""

    name: str
    way: tuple[str, str]
    words: str

    @property
    def clause(self) -> str:
        return self.way[0]

    def suspects(self, module: Trial) -> bool:
        ways: list[tuple[str, str]] = self._ways(module)
        return self.way in ways

    def shows(self, module: Trial, twin: Trial) -> bool:
        return self.suspects(module) and self.way not in self._ways(twin)

    def _ways(self, trial: Trial) -> list[tuple[str, str]]:
        found: list[Violation] = getattr(trial, FOUND[self.name])
        return [shape(violation) for violation in found]


@dataclass(frozen=True, slots=True)
class Differs:
    """A field that the module and its sound twin show differently, always in the same way."""

    way: tuple[str, str, str, str]
    difference: Difference
    clause: str = ""
    name: str = TWIN

    @property
    def words(self) -> str:
        about, field = self.way[:2]
        module, twin = str(self.difference.module), str(self.difference.twin)
        if field in ("it", "answer"):
            return f"{about}: {_came(module)} here, {_came(twin)} from a sound module"
        return f"{about}: {field} is {module} here, {twin} from a sound module"

    def suspects(self, module: Trial) -> bool:
        """Only the twin knows."""
        return not module.ended

    def shows(self, module: Trial, twin: Trial) -> bool:
        return self.where(module, twin) is not None

    def where(self, module: Trial, twin: Trial) -> Difference | None:
        """The first place where it shows."""
        return next((found for found in differences(module, twin) if found.way == self.way), None)


@dataclass(frozen=True, slots=True)
class Ends:
    """The link to the module ends, or the module floods it."""

    words: str
    clause: str = "LOD-02"
    name: str = LINK

    def suspects(self, module: Trial) -> bool:
        return numberless(module.ended) == numberless(self.words)

    def shows(self, module: Trial, twin: Trial) -> bool:
        return self.suspects(module) and not twin.ended


def _came(word: str) -> str:
    return {"came": "it came", "absent": "nothing came", "none": "no answer came"}.get(word, f"{word} came")


def candidates(
    broken: Sequence[str], recorded: Mapping[Place, Seen], module: Trial, twin: Trial
) -> Iterator[Oracle]:
    """Who can decide, the surest first. ``broken``: the clauses of the record; ``recorded``: what it shows."""
    if module.ended:
        yield Ends(module.ended)
    violated = [
        Violated(name, shape(violation), f"{violation.clause}: {violation.reason}")
        for name in (WATCH, MODEL)
        for violation in getattr(module, FOUND[name])
    ]
    violated = [oracle for oracle in violated if oracle.shows(module, twin)]
    yield from (oracle for oracle in violated if oracle.clause in broken)
    found = list(differences(module, twin))
    found = [difference for difference in found if _was(difference, recorded)]
    for difference in sorted(found, key=lambda difference: (-difference.at, difference.name in SIDE)):
        yield Differs(difference.way, difference)
    yield from (oracle for oracle in violated if oracle.clause not in broken)


def _was(difference: Difference, recorded: Mapping[Place, Seen]) -> bool:
    """Whether the recorded run showed the same there."""
    if difference.name.startswith(COUNTS):
        return True  # what a count was before the case is not recorded
    seen = recorded.get(difference.place)
    if difference.name == "it":
        return bool((seen is not None) == (difference.module == "came"))
    value: object = "absent" if seen is None else seen.fields.get(difference.name, "absent")
    return same(value, difference.module)
