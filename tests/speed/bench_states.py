"""How long every derived sequence takes, for one state more than the machine has, on two processes, beside its limit.

Run it as a program: ``python tests/speed/bench_states.py [SECONDS]``. With seconds each run ends after so many, and the
whole is reckoned from what was run. Results go to standard output.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path
from typing import NamedTuple

from protobench.suite.machines.states_run import Wanted, names, open_plan
from protobench.suite.machines.workers import run_shares
from protobench.suite.options import RunOptions

FIRMWARE = Path(__file__).parents[2] / "emulator" / "firmware" / "build" / "module-lockstep"
LINKS = {"embedded": None, "lockstep": f"lockstep:{FIRMWARE}"}
JOBS = 2
LIMITS_S = {"state": 60.0, "window": 120.0}  # for all sequences, on two cores


class Row(NamedTuple):
    """One machine over one link; ``whole_s``: for all sequences, measured or reckoned."""

    link: str
    machine: str
    sequences: int
    run: int
    whole_s: float
    limit_s: float


def measure(link: str, machine: str, budget_s: float | None) -> Row:
    """Run one machine's sequences; the time includes starting the processes and deriving."""
    options = RunOptions(link=LINKS[link])
    wanted = Wanted(machine, "HSI", 1, budget_s)
    session, planned = open_plan(options, wanted)
    session.close()
    begin = time.monotonic()
    done = run_shares(options, wanted, JOBS, lambda _: None)
    elapsed_s = time.monotonic() - begin
    if done.difference is not None or done.unrepeated or not done.sequences:
        raise AssertionError(f"{machine} over {link}: {done}")
    started_s = max(elapsed_s - budget_s, 0.0) if budget_s is not None else 0.0
    total = planned.total.sequences
    whole_s = started_s + (elapsed_s - started_s) * total / done.sequences
    return Row(link, machine, total, done.sequences, whole_s, LIMITS_S[machine])


def run(budget_s: float | None = None) -> list[Row]:
    """Every machine over every link."""
    return [measure(link, machine, budget_s) for link in LINKS for machine in names("both")]


def main() -> None:
    """Print a row for each."""
    for row in run(float(sys.argv[1]) if len(sys.argv) > 1 else None):
        print(
            f"{row.machine:<8} {row.link:<9} {row.run} of {row.sequences} sequences: all take {row.whole_s:.0f} s, "
            f"limit {row.limit_s:.0f} s, two processes"
        )


if __name__ == "__main__":
    main()
