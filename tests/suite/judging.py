"""Judging a module in a test, and saying readably what went wrong."""

from __future__ import annotations

from pathlib import Path

import pytest

from protobench.judge import RunRecord
from protobench.suite.options import RunOptions
from protobench.suite.run import run_suite

FIRMWARE = Path(__file__).parents[2] / "emulator" / "firmware"
SEED = 20261


def firmware(program: str, build: str = "build") -> Path:
    """A built firmware program; ``make firmware`` builds both kinds."""
    path = FIRMWARE / build / program
    if not path.exists():
        pytest.fail(f"{path} is missing; build it with: make firmware")
    return path


def expect_sound(record: RunRecord, *, inconclusive_allowed: int = 0) -> None:
    """Nothing failed, the bench did not fail, something was judged."""
    assert record.stopped is None
    bad = [case for case in record.cases if case.verdict in ("fail", "error")]
    words = "\n\n".join(f"{case.id} {case.verdict}: {case.reason}\n{case.detail}" for case in bad[:5])
    assert not bad, f"{len(bad)} of {len(record.cases)} cases with seed {record.seed}:\n{words}"
    unclear = [f"{case.id}: {case.reason}" for case in record.cases if case.verdict == "inconc"]
    assert len(unclear) <= inconclusive_allowed, "\n".join(unclear)
    assert record.count("pass") > 50


def judge(link: str | None = None, **options: object) -> RunRecord:
    """Run the whole suite over a link, or over the embedded module without one."""
    return run_suite(RunOptions(link=link, seed=SEED, **options))  # type: ignore[arg-type]
