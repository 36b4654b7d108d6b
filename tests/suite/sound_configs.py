"""Sound modules of many kinds: whatever the contract leaves open, the suite must not fail."""

from __future__ import annotations

from typing import Any

from emulator.config import CAPABILITIES, FaceConfig, ModuleConfig, MotionConfig

BASE = ModuleConfig()
SIZES = {"queue": "queue", "schedule": "scheduled", "groups": "groups"}


def variant(**changes: Any) -> ModuleConfig:
    """The default module with some fields changed, checked."""
    fields = {name: getattr(BASE, name) for name in ModuleConfig.model_fields}
    return ModuleConfig(**{**fields, **changes})


def motions(**changes: Any) -> dict[str, MotionConfig]:
    """The default motions, each with some fields changed; a function makes the new value from the old one."""
    return {
        name: motion.model_copy(
            update={key: new(getattr(motion, key)) if callable(new) else new for key, new in changes.items()}
        )
        for name, motion in BASE.motions.items()
    }


def without(capability: str) -> ModuleConfig:
    """The default module without one capability."""
    sizes = {SIZES[capability]: 0} if capability in SIZES else {}
    return variant(capabilities=tuple(name for name in CAPABILITIES if name != capability), **sizes)


HOP = MotionConfig(magnitude_min=1000, magnitude_max=60_000, typical_ms=140, longest_ms=250, no_return_ms=20)
BACKWARDS = MotionConfig(magnitude_min=-5000, magnitude_max=-100, typical_ms=100, longest_ms=200)
SLIDE = MotionConfig(magnitude_min=0, magnitude_max=7, typical_ms=60, longest_ms=61)

CONFIGS: dict[str, ModuleConfig] = {
    **{f"without-{capability}": without(capability) for capability in CAPABILITIES},
    "smallest": ModuleConfig.smallest(),
    "slow": ModuleConfig.slow(),
    "holding": ModuleConfig.holding(),
    "ballistic-only": variant(motions={"hop": HOP}, faces=()),
    "one-way-slide": variant(motions={"slide": SLIDE}, faces=()),
    "stops-at-once": variant(stop_ms=0, declared_stop_ms=0),
    "answers-at-once": variant(receipt_delay_us=0),
    "turnaround": variant(receipt_delay_us=2000, turnaround_us=2000),
    "large": variant(sessions=16, numbers=32, queue=20, outcomes=30, faults=30, groups=16, scheduled=4),
    "tight": variant(queue=1, outcomes=4, answers=4, groups=1),
    "queue-beyond-outcomes": variant(queue=8, outcomes=4),
    "all-faces-bonded": variant(faces=tuple(FaceConfig(bonded=True, neighbour=5) for _ in range(6))),
    "no-face-bonded": variant(faces=tuple(FaceConfig() for _ in range(3))),
    "long-motions": variant(
        motions=motions(typical_ms=3000, longest_ms=9000, no_return_ms=lambda old: 1500 if old else 0)
    ),
    "quick-motions": variant(
        motions=motions(typical_ms=2, longest_ms=3, no_return_ms=lambda old: 1 if old else 0), stop_ms=1
    ),
    "starts-at-once": variant(starting_ms=1, declared_starting_ms=1),
    "very-long-motions": variant(
        motions=motions(typical_ms=9000, longest_ms=10_000, no_return_ms=lambda old: 8000 if old else 0)
    ),
    "starts-late": variant(starting_ms=1000, declared_starting_ms=1000),
    "one-sided-range": variant(motions={"hinge": BACKWARDS}),
    "only-bonds": variant(motions={name: BASE.motions[name] for name in ("bond", "unbond")}),
    "highest-address": variant(address=0xEFFFFFFF),
    "greatest-sizes": variant(
        sessions=255, numbers=32, queue=255, outcomes=255, faults=255, groups=16, scheduled=255, answers=255
    ),
    "power-off-at-once": variant(motions=motions(halt_category=0, fault_category=0)),
}
