"""A difference as a Python script that replays it: it ends with status 1 while the difference is there."""

from __future__ import annotations

from dataclasses import dataclass

from protobench.suite.machines.mealy import Word


@dataclass(frozen=True, slots=True)
class Replay:
    """What to replay, and against what. ``expected``: the contract's outputs to ``word``."""

    link: str | None
    address: int
    seed: int
    attended: bool
    word: Word
    expected: Word


def script(replay: Replay) -> str:
    """The text of the script. Every value is written as a Python literal, so that none can be read as code."""
    steps = "".join(
        f"    ({symbol!r}, {output!r}),\n"
        for symbol, output in zip(replay.word, replay.expected, strict=True)
    )
    return _TEXT.format(
        link=repr(replay.link),
        address=repr(replay.address),
        seed=repr(replay.seed),
        attended=repr(replay.attended),
        steps=steps,
    )


_TEXT = '''"""Replays a difference between a module and the contract.

Exit status: 1 while the module differs, 0 when it follows the contract. Written by protobench learn.
"""

import sys

from protobench.judge import CaseVerdict
from protobench.suite.machines.driver import ModuleDriver
from protobench.suite.options import RunOptions
from protobench.suite.session import Session

LINK = {link}
ADDRESS = {address}
SEED = {seed}
ATTENDED = {attended}
# inputs, and what the contract's machine puts out
STEPS = [
{steps}]


def main() -> int:
    options = RunOptions(link=LINK, address=ADDRESS, seed=SEED, attended=ATTENDED)
    with Session(options) as session:
        session.bench.begin("difference")
        driver = ModuleDriver(session.bench)
        different = 0
        try:
            driver.reset()
            for symbol, expected in STEPS:
                got = driver.step(symbol)
                print(f"{{symbol}}: {{got}}")
                if got != expected:
                    print(f"    the contract says: {{expected}}")
                    different = 1
                    break
        except CaseVerdict as verdict:
            print(f"stopped: {{verdict}}")
            different = 1
        session.halt()
    return different


if __name__ == "__main__":
    sys.exit(main())
'''
