"""Verdicts, in the sense of ISO/IEC 9646 and ES 201 873-1: a case's verdict only ever worsens."""

from __future__ import annotations

import enum


class Verdict(enum.IntEnum):
    """Verdicts in order of severity; merging two is taking the greater."""

    NONE = 0
    PASS = 1
    INCONC = 2
    FAIL = 3
    ERROR = 4

    @property
    def word(self) -> str:
        """The verdict as it stands in reports: ``none``, ``pass``, ``inconc``, ``fail`` or ``error``."""
        return self.name.lower()


NOT_APPLICABLE = "not_applicable"
KNOWN_DEVIATION = "known_deviation"  # a fail that a list of known deviations expects


class CaseVerdict(Exception):  # noqa: N818 - it carries a verdict, not always an error
    """Raised inside a case to end it with a verdict other than ``pass``.

    ``reason`` is one line; ``detail`` says, readably, what was sent, expected and received.
    """

    verdict = Verdict.ERROR

    def __init__(self, reason: str, *, clause: str | None = None, detail: str = "") -> None:
        super().__init__(reason if clause is None else f"{clause}: {reason}")
        self.reason = reason
        self.clause = clause
        self.detail = detail


class Failed(CaseVerdict):
    """Non-conformance was observed."""

    verdict = Verdict.FAIL


class Inconclusive(CaseVerdict):
    """Neither conformance nor non-conformance could be shown."""

    verdict = Verdict.INCONC


class NotApplicable(Exception):  # noqa: N818 - an outcome of selection, not an error
    """The module, as it describes itself or as it is, gives this case nothing to judge; the message says why.

    ``item``: the item of the conformance statement from which that follows, such as ``sizes.queue``; None where it
    follows from none.
    """

    def __init__(self, reason: str, *, item: str | None = None) -> None:
        super().__init__(reason)
        self.item = item
