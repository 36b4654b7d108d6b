"""What a run of the suite leaves behind: plain records, ready for a report."""

from __future__ import annotations

from dataclasses import dataclass, field


@dataclass(slots=True)
class CaseRecord:
    """One case as judged.

    ``verdict`` is a word of :class:`protobench.judge.verdict.Verdict` or ``not_applicable``;
    ``detail`` holds readable lines on what was sent, expected and received; ``replay`` is the command
    that runs this case again the same way.
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


@dataclass(slots=True)
class RunRecord:
    """One run: who was judged, where, with which seed, and every case's record.

    ``iut`` and ``environment`` hold JSON values only. ``stopped`` says why a run ended before its last case.
    """

    contract: str
    seed: int
    iut: dict[str, object] = field(default_factory=dict)
    environment: dict[str, object] = field(default_factory=dict)
    cases: list[CaseRecord] = field(default_factory=list)
    stopped: str | None = None

    def count(self, verdict: str) -> int:
        """How many cases have this verdict."""
        return sum(case.verdict == verdict for case in self.cases)
