"""One play of a sequence: what the module did, what watch and model found, and how a sound twin differs."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, NamedTuple, Protocol

from protobench.judge import CaseVerdict
from protobench.links import LinkError
from protobench.suite.bench import Bench
from protobench.suite.facts import Facts
from protobench.suite.options import RunOptions
from protobench.suite.replay.observe import OPEN, Place, Seen, observer, relation, same
from protobench.suite.replay.recorder import Passed
from protobench.suite.replay.replaying import Player, Replay
from protobench.suite.replay.steps import Sequence
from protobench.suite.session import Session
from protobench.suite.targets import twin_link
from protobench.suite.watch import Violation

ABSENT = "absent"


@dataclass(slots=True)
class Trial:
    """What one play showed, up to ``end_ms`` after its first frame. ``ended``: what ended it early, in words."""

    seen: dict[Place, Seen] = field(default_factory=dict)
    end_ms: float = 0.0
    watched: list[Violation] = field(default_factory=list)
    modelled: list[Violation] = field(default_factory=list)
    frames: list[Passed] = field(default_factory=list)
    ended: str = ""


class Plays(Protocol):
    """Plays a sequence; a module on a link, or a twin."""

    def play(self, sequence: Sequence) -> Trial: ...


def play(bench: Bench, sequence: Sequence) -> Trial:
    """Play a sequence on a bench. LinkError when the link ends before the first step."""
    replay = Replay(bench)
    trial = Trial()
    try:
        with replay:
            trial.ended = Player(replay, sequence).play()
            trial.watched = replay.watched()
            trial.frames = replay.frames
            trial.seen, trial.end_ms = observer(bench).observe(replay.before, trial.frames, bench.port.now_ns)
            if not trial.ended:
                trial.modelled = replay.modelled()
    except CaseVerdict as verdict:
        trial.ended = f"before the first step: {verdict}"
    except LinkError as error:
        trial.ended = trial.ended or f"the link to the module ended: {type(error).__name__}"
    return trial


class Twin:
    """A sound module that describes itself as another; ValueError where there cannot be one."""

    def __init__(
        self, facts: Facts, address: int, seed: int, faces: tuple[tuple[bool, int], ...] | None
    ) -> None:
        description: Mapping[str, Any] = facts.description

        def opener() -> Any:
            return twin_link(description, facts.motions, seed, address, faces)

        opener()  # what cannot be described is said at once
        self._options = RunOptions(opener=opener, address=address, seed=seed, attended=True)

    def play(self, sequence: Sequence) -> Trial:
        """Play it on a new twin."""
        with Session(self._options) as session:
            return play(session.bench, sequence)


class Difference(NamedTuple):
    """A field that the module and its twin show differently; ``place`` is where."""

    place: Place
    about: str
    name: str
    module: Any
    twin: Any
    at: int

    @property
    def way(self) -> tuple[str, str, str, str]:
        """In which way they differ, wherever."""
        return self.about, self.name, *relation(self.module, self.twin)


def differences(module: Trial, twin: Trial) -> Iterator[Difference]:
    """Where what a module did differs from what a sound one did, in the order of what was sent and came."""
    for place in dict.fromkeys([*module.seen, *twin.seen]):
        ours, theirs = module.seen.get(place), twin.seen.get(place)
        if _too_soon(ours, theirs, module.end_ms) or _too_soon(theirs, ours, twin.end_ms):
            continue
        about = (ours or theirs or Seen("", {}, 0)).about
        at = max(ours.at if ours else -1, theirs.at if theirs else -1)
        if ours is None or theirs is None:
            yield Difference(place, about, "it", *_words(ours, theirs), at)
            continue
        whole = _first(ours, theirs)
        for name in whole:
            one, other = ours.fields.get(name, ABSENT), theirs.fields.get(name, ABSENT)
            if not same(one, other):
                yield Difference(place, about, name, one, other, at)


def _too_soon(mine: Seen | None, other: Seen | None, end_ms: float) -> bool:
    """Whether what one showed and the other did not may only have been still to come when the play ended."""
    if mine is not None and mine.fields.get("answer") == OPEN:
        return True
    if mine is None:
        return other is not None and end_ms < other.ms + max(60.0, 0.25 * other.ms)
    return mine.fields.get("answer") == "none" and end_ms < mine.ms


def _first(ours: Seen, theirs: Seen) -> list[str]:
    """The fields to compare: where kind, result or reason of an answer differ, the rest follows from it."""
    for name in ("answer", "result", "reason"):
        if ours.fields.get(name) != theirs.fields.get(name):
            return [name]
    return list(dict.fromkeys([*ours.fields, *theirs.fields]))


def _words(ours: Seen | None, theirs: Seen | None) -> tuple[str, str]:
    return ("came" if ours else ABSENT), ("came" if theirs else ABSENT)


_NUMBERS = re.compile(r"0x[0-9a-f]+|\b[0-9a-f]{8}\b|\d+(\.\d+)?")


def shape(violation: Violation) -> tuple[str, str]:
    """A violation without the numbers of one play."""
    text = violation.reason.partition("{")[0]
    return violation.clause, numberless(text)


def numberless(text: str) -> str:
    """A text without its numbers."""
    return _NUMBERS.sub("N", text)
