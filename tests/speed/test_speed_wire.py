"""The wire's benchmark, run small: that it works and measures both sides of what it says."""

from __future__ import annotations

import bench_wire


def test_the_wire_benchmark_runs() -> None:
    ratios = bench_wire.run(rounds=2, calls=20, frames=200)
    assert len(ratios) == 5
    for ratio in ratios:
        assert ratio.ours_ns > 0
        assert ratio.theirs_ns > 0
        assert ratio.ratio > 0
