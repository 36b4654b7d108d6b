"""The benchmark of derived sequences, run small: that it runs every machine over every link and reckons the whole."""

from __future__ import annotations

import bench_states

from protobench.suite.machines.states_run import names


def test_the_benchmark_of_derived_sequences_runs() -> None:
    rows = bench_states.run(budget_s=0.5)
    assert [(row.link, row.machine) for row in rows] == [
        (link, machine) for link in bench_states.LINKS for machine in names("both")
    ]
    for row in rows:
        assert 0 < row.run < row.sequences
        assert row.whole_s > 0.5
        assert row.limit_s > 0
