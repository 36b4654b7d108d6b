"""Versions: another major is answered with what is supported, the unknown is refused by name."""

from __future__ import annotations

from protobench.judge import Failed
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.tools import expect_drops, expect_silent_refusals


@case(
    "VER.other-major",
    "invalid",
    "A request of another major is answered with the majors supported, in version 1.",
    clauses=["VER-01", "FRM-16"],
)
def test_other_major(bench: Bench) -> None:
    a = bench.a
    majors = bench.facts.description["majors"]
    for version in (2, 3, 127, 255):
        for kind in ("status", "describe", "energize", 0x1F, 0x3A):
            receipt = a.refused("unsupported-version", kind, version=version, clause="VER-01")
            if receipt.get("majors") != majors or receipt.frame.version != 1:
                raise Failed(f"version {version} was answered {receipt.fields}", clause="VER-01")
    a.refused("unsupported-version", "status", version=2, body=b"\xc1" * 7, body_length=0, clause="VER-01")


@case(
    "VER.other-major-many",
    "invalid",
    "A request of another major to many is refused silently.",
    clauses=["VER-01", "ADR-06"],
)
def test_other_major_many(bench: Bench) -> None:
    with expect_silent_refusals(bench, 1, "ADR-06"):
        bench.a.send("probe", to=bench.broadcast, version=2, answer_window=50)
        bench.port.wait_ms(80)
        bench.a.silent("a request of another major to many", "ADR-06")


@case(
    "VER.other-major-events",
    "invalid",
    "Answers, events and notices of another major are dropped.",
    clauses=["VER-02"],
)
def test_other_major_events(bench: Bench) -> None:
    kinds = [0x40, 0x50, 0x60, 0x81]
    with expect_drops(bench, {"not-a-request": len(kinds)}, "VER-02"):
        for kind in kinds:
            bench.a.send(kind, version=3)
        bench.a.silent("what is no request", "VER-02")


@case(
    "VER.unknown-kind",
    "invalid",
    "Unknown read and command kinds are refused unknown-kind.",
    clauses=["VER-03"],
)
def test_unknown_kind(bench: Bench) -> None:
    for kind in (0x0B, 0x15, 0x1F, 0x30, 0x3B):
        bench.a.refused("unknown-kind", kind, clause="VER-03")
        bench.a.refused("unknown-kind", kind, body=b"\xc1", clause="VER-03")
