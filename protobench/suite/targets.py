"""The module that is judged when no link is named: emulated, in this process, in virtual time."""

from __future__ import annotations

import random

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.links import MemoryLink


def embedded_link(seed: int) -> MemoryLink:
    """A link to a new emulated module with the default configuration and address 1."""
    engine = ModuleEngine(ModuleConfig(), Storage(), random.Random(seed), load_contract())
    return MemoryLink(engine, name="embedded emulated module")
