"""The emulated module without assist, on standard input and output in real time, that restarts when a file appears.

    protobench check --link 'run:python tests/cli/restartable_module.py FILE' --ics module.toml --restart

with ``command = "touch FILE"`` in the table ``testing.restart`` of ``module.toml``.
"""

from __future__ import annotations

import os
import random
import select
import sys
import time
from pathlib import Path

from emulator.config import CAPABILITIES, ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract

LOOK_S = 0.005
STDIN, STDOUT = 0, 1


def serve(engine: ModuleEngine, asked: Path) -> None:
    """Run until standard input ends."""
    while True:
        due_us = engine.next_deadline_us()
        wait_s = LOOK_S if due_us is None else min(LOOK_S, max(0.0, due_us / 1e6 - time.monotonic()))
        ready, _, _ = select.select([STDIN], [], [], wait_s)
        now_us = time.monotonic_ns() // 1000
        if ready:
            data = os.read(STDIN, 65_536)
            if not data:
                return
            engine.feed(now_us, data)
        engine.advance(now_us)
        if asked.exists():
            asked.unlink()
            engine.restart("external")
        for block in engine.take_output():
            os.write(STDOUT, block)


if __name__ == "__main__":
    without = tuple(name for name in CAPABILITIES if name != "assist")
    made = ModuleEngine(ModuleConfig(capabilities=without), Storage(), random.Random(1), load_contract())
    serve(made, Path(sys.argv[1]))
