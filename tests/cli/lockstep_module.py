"""The emulated module as a lockstep program: sound, broken on purpose, or one that says it is physical.

    protobench check --link 'lockstep:python tests/cli/lockstep_module.py halts-for-others'

The argument is ``sound``, ``physical``, or the name of a broken module in ``tests/defects/broken_modules.py``. With a
second argument, every frame that comes in is also appended to that file, in hex, one record a line.
"""

from __future__ import annotations

import random
import sys
from pathlib import Path
from typing import BinaryIO

sys.path.insert(0, str(Path(__file__).parents[1] / "defects"))
from broken_modules import BROKEN

from emulator import answers
from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract

NEVER = 2**64 - 1
FEED, ADVANCE = 1, 2


def engine_class(name: str) -> type[ModuleEngine]:
    """The engine that the name stands for."""
    if name == "sound":
        return ModuleEngine
    if name == "physical":
        number = answers.Answers._number
        answers.Answers._number = lambda self, enumeration, word: number(  # type: ignore[method-assign]
            self, enumeration, "physical" if word == "emulated" else word
        )
        return ModuleEngine
    (module,) = [module for module in BROKEN if module.name == name]
    return module.make()


def serve(engine: ModuleEngine, records: BinaryIO, replies: BinaryIO, log: Path | None) -> None:
    """Answer records until they end; ``protobench/links/lockstep.md`` says how."""
    while len(head := records.read(11)) == 11:
        now_us, size = int.from_bytes(head[1:9], "big"), int.from_bytes(head[9:], "big")
        data = records.read(size)
        if head[0] == FEED:
            engine.feed(now_us, data)
        else:
            engine.advance(now_us)
        if log is not None and data:
            with log.open("a") as stream:
                stream.write(data.hex() + "\n")
        output = b"".join(engine.take_output())
        deadline_us = engine.next_deadline_us()
        replies.write(len(output).to_bytes(4, "big") + output)
        replies.write((NEVER if deadline_us is None else max(deadline_us, now_us)).to_bytes(8, "big"))
        replies.flush()


if __name__ == "__main__":
    made = engine_class(sys.argv[1])(ModuleConfig(), Storage(), random.Random(1), load_contract())
    serve(made, sys.stdin.buffer, sys.stdout.buffer, Path(sys.argv[2]) if len(sys.argv) > 2 else None)
