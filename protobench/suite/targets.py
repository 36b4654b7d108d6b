"""Emulated modules in this process, in virtual time: the one that is judged when no link is named, and twins."""

from __future__ import annotations

import random
from collections.abc import Mapping
from typing import Any

from emulator.config import ConfigError, FaceConfig, ModuleConfig, MotionConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.links import MemoryLink
from protobench.suite.facts import MotionFacts

CATEGORIES = ("cat-0", "cat-1", "cat-2")
SIZES = ("sessions", "numbers", "queue", "outcomes", "faults", "groups")
TWIN_RECEIPT_US = 500


def embedded_link(seed: int) -> MemoryLink:
    """A link to a new emulated module with the default configuration and address 1."""
    engine = ModuleEngine(ModuleConfig(), Storage(), random.Random(seed), load_contract())
    return MemoryLink(engine, name="embedded emulated module")


def twin_link(
    description: Mapping[str, Any],
    motions: Mapping[str, MotionFacts],
    seed: int,
    address: int,
    faces: tuple[tuple[bool, int], ...] | None = None,
) -> MemoryLink:
    """A link to a sound module that describes itself as another does. ``faces``: bonded and neighbour, of each face.

    Raises ValueError where no emulated module can be what is described.
    """
    contract = load_contract()
    bits = description["capabilities"]
    capabilities = tuple(row.name for row in contract.capabilities if bits >> row.number & 1)
    default = ModuleConfig()
    known = faces if faces is not None else [(face.bonded, face.neighbour) for face in default.faces]
    count = description["faces"]
    shown = [FaceConfig(bonded=bonded, neighbour=neighbour) for bonded, neighbour in list(known)[:count]]
    shown += [FaceConfig() for _ in range(count - len(shown))]
    declared_us = 1000 * description["receipt_ms"]
    turnaround_us = description["turnaround_us"]
    delay_us = min(max(TWIN_RECEIPT_US, turnaround_us), declared_us - 1)
    try:
        config = ModuleConfig(
            address=address,
            hardware_id=description["hardware_id"],
            build=description["build"],
            capabilities=capabilities,
            motions={name: _motion(facts) for name, facts in motions.items()},
            faces=tuple(shown),
            scheduled=default.scheduled if "schedule" in capabilities else 0,
            receipt_delay_us=delay_us,
            turnaround_us=turnaround_us,
            starting_ms=min(default.starting_ms, description["starting_ms"]),
            stop_ms=min(default.stop_ms, description["stop_ms"]),
            declared_receipt_ms=description["receipt_ms"],
            declared_starting_ms=description["starting_ms"],
            declared_stop_ms=description["stop_ms"],
            **{name: description[name] for name in SIZES},
        )
    except (ConfigError, ValueError) as error:
        raise ValueError(f"no sound module can be what this one describes: {error}") from None
    engine = ModuleEngine(config, Storage(), random.Random(seed), contract)
    return MemoryLink(engine, name="sound twin")


def _motion(facts: MotionFacts) -> MotionConfig:
    return MotionConfig(
        actuator=facts.actuator,
        magnitude_min=facts.magnitude_min,
        magnitude_max=facts.magnitude_max,
        typical_ms=facts.typical_ms,
        longest_ms=facts.longest_ms,
        no_return_ms=facts.no_return_ms,
        halt_category=CATEGORIES.index(facts.halt_category),
        lease_end_category=CATEGORIES.index(facts.lease_end_category),
        fault_category=CATEGORIES.index(facts.fault_category),
    )
