"""What a run of the suite leaves behind: plain records, ready for a report."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True)
class Exchange:
    """One frame, or raw bytes, that passed in a case.

    ``time_ns``: since the start of the case; ``direction``: ``->`` to the module, ``<-`` from it; ``data``: the bare
    frame or the raw bytes, of what was received no more than some hundred; ``words``: what they say.
    """

    time_ns: int
    direction: str
    data: bytes
    words: str


@dataclass(frozen=True, slots=True)
class Measurement:
    """What a case measured of one quantity: ``values`` in ``unit``, with the limits that its clause sets.

    ``low``, ``high``: None where there is no such limit. ``U``: expanded uncertainty of one value, in ``unit``, with
    coverage factor ``k``. ``decision``: what that says, in words.
    """

    name: str
    clause: str
    unit: str
    values: Sequence[float]
    low: float | None = None
    high: float | None = None
    U: float = 0.0
    k: float = 2.0
    decision: str = ""


@dataclass(slots=True)
class CaseRecord:
    """One case as judged.

    ``verdict`` is a word of :class:`protobench.judge.verdict.Verdict`, ``not_applicable`` or ``known_deviation``;
    ``detail`` holds readable lines on what was sent, expected and received; ``replay`` is the command
    that runs this case again the same way; ``broken`` holds the clauses that its failures name, in the order they
    were seen, an empty string for one that names none; ``exchange`` is what passed up to the verdict, for a case
    that did not pass, and ``ended_ns`` when that was, on the exchange's clock; ``measurements`` what was measured,
    whatever the verdict; ``script`` the path of a script that replays the failure, ``shown_by`` who says so: one of
    ``watch``, ``model``, ``twin``, ``link``, ``case``; ``unrepeated`` what came instead where it did not repeat.
    """

    id: str
    level: str
    case_class: str
    purpose: str
    clauses: tuple[str, ...]
    verdict: str
    reason: str
    duration_s: float
    detail: str = ""
    replay: str = ""
    broken: tuple[str, ...] = ()
    exchange: Sequence[Exchange] = ()
    measurements: Sequence[Measurement] = ()
    ended_ns: int = 0
    script: str = ""
    shown_by: str = ""
    unrepeated: str = ""


@dataclass(frozen=True, slots=True)
class DeviationRecord:
    """One entry of a list of known deviations, and what came of it.

    ``state``: ``known`` (the case fails as listed), ``passed``, ``other`` (it fails otherwise), ``not_applicable``,
    ``expired``, ``unclear`` (inconc or error), or ``not_judged``. ``expires``: ISO 8601 date.
    """

    case: str
    clause: str | None
    reason: str
    owner: str
    expires: str
    state: str
    message: str

    @property
    def stale(self) -> bool:
        """Whether the list is wrong here, which fails the run."""
        return self.state in ("passed", "other", "not_applicable", "expired")


@dataclass(slots=True)
class RunRecord:
    """One run: who was judged, where, with which seed, and every case's record.

    ``iut`` and ``environment`` hold JSON values only. ``stopped`` says why a run ended before its last case.
    ``deviations`` is None when the run was judged without a list of known ones.
    """

    contract: str
    seed: int
    iut: dict[str, object] = field(default_factory=dict)
    environment: dict[str, object] = field(default_factory=dict)
    cases: list[CaseRecord] = field(default_factory=list)
    stopped: str | None = None
    deviations: list[DeviationRecord] | None = None

    def count(self, verdict: str) -> int:
        """How many cases have this verdict."""
        return sum(case.verdict == verdict for case in self.cases)
