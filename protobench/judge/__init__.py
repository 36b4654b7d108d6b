"""Verdicts and what a run leaves behind."""

from protobench.judge.record import CaseRecord, DeviationRecord, Exchange, Measurement, RunRecord
from protobench.judge.verdict import (
    KNOWN_DEVIATION,
    NOT_APPLICABLE,
    CaseVerdict,
    Failed,
    Inconclusive,
    NotApplicable,
    Verdict,
)

__all__ = [
    "KNOWN_DEVIATION",
    "NOT_APPLICABLE",
    "CaseRecord",
    "CaseVerdict",
    "DeviationRecord",
    "Exchange",
    "Failed",
    "Inconclusive",
    "Measurement",
    "NotApplicable",
    "RunRecord",
    "Verdict",
]
