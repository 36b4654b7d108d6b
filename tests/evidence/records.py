"""Invented records of a run."""

from __future__ import annotations

from protobench.judge import CaseRecord, RunRecord

NASTY = "bytes \x00\x1b\ufffe <&>\"' ]]> \ud800 end"


def case(
    name: str, verdict: str, *clauses: str, reason: str = "", detail: str = "", replay: str = ""
) -> CaseRecord:
    return CaseRecord(name, "required", "valid", "A purpose.", clauses, verdict, reason, 0.25, detail, replay)


def run() -> RunRecord:
    """One case of each verdict, one with text that no format likes."""
    return RunRecord(
        "Module Command Link 1.0",
        42,
        {"address": 1, "nature": "emulated"},
        {"link": "memory:", "time": "virtual"},
        [
            case("LSE.a", "pass", "LSE-01", "LSE-02"),
            case("LSE.b", "fail", "LSE-02", reason=NASTY, detail="-> one\n<- two", replay="protobench check"),
            case("LSE.c", "inconc", "LSE-03", reason="lost", replay="protobench check"),
            case("LSE.d", "error", "LSE-04", reason="KeyError", replay="protobench check"),
            case("LSE.e", "not_applicable", "LSE-05", reason="no queue"),
            case("LSE.f", "not_applicable", "LSE-01", reason="no queue"),
        ],
    )
