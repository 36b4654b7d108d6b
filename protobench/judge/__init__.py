"""Verdicts and what a run leaves behind."""

from protobench.judge.record import CaseRecord, RunRecord
from protobench.judge.verdict import (
    NOT_APPLICABLE,
    CaseVerdict,
    Failed,
    Inconclusive,
    NotApplicable,
    Verdict,
)

__all__ = [
    "NOT_APPLICABLE",
    "CaseRecord",
    "CaseVerdict",
    "Failed",
    "Inconclusive",
    "NotApplicable",
    "RunRecord",
    "Verdict",
]
