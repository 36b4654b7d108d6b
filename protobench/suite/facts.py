"""What the module says of itself: the ground on which cases are selected and limits are set."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from protobench.contract import Contract

STOPPABLE_MS = 40  # a motion that can be stopped for at least this long after its start
BONDING = ("bond", "unbond")


@dataclass(frozen=True, slots=True)
class MotionFacts:
    """One declared motion; times in ms, magnitudes in the motion's own unit."""

    name: str
    actuator: int
    magnitude_min: int
    magnitude_max: int
    typical_ms: int
    longest_ms: int
    no_return_ms: int
    halt_category: str
    lease_end_category: str
    fault_category: str

    @property
    def magnitude(self) -> int:
        """A magnitude to ask for, neither zero nor an end of the range where it can be helped."""
        low, high = self.magnitude_min, self.magnitude_max
        wanted = (high // 2, low // 2, (low + high) // 2, high, low)
        return next((value for value in wanted if value and low <= value <= high), 0)

    @property
    def stoppable_ms(self) -> int:
        """For how long after its start a halt stops it."""
        return self.no_return_ms or self.typical_ms


@dataclass(slots=True)
class Facts:
    """The description as received, the declared motions, and what follows from both."""

    description: dict[str, Any] = field(default_factory=dict)
    motions: dict[str, MotionFacts] = field(default_factory=dict)
    items: frozenset[str] = frozenset()

    @property
    def emulated(self) -> bool:
        return self.description.get("nature") == "emulated"

    @property
    def receipt_ms(self) -> int:
        return int(self.description.get("receipt_ms", 50))

    @property
    def stop_ms(self) -> int:
        return int(self.description.get("stop_ms", 500))

    @property
    def starting_ms(self) -> int:
        return int(self.description.get("starting_ms", 1000))

    def has(self, item: str) -> bool:
        """Whether a capability, an item or a property of the link is there."""
        return item in self.items

    def travel(self) -> MotionFacts:
        """The quickest declared motion that is neither bond nor unbond; KeyError without one."""
        return min(self._travels(), key=lambda motion: motion.typical_ms)

    def stoppable(self) -> MotionFacts:
        """The declared motion that can be stopped for the longest time."""
        return max(self._travels(), key=lambda motion: motion.stoppable_ms)

    def ballistic(self) -> MotionFacts:
        """The declared motion with a point of no return and the longest way behind it."""
        return max(
            (motion for motion in self._travels() if motion.no_return_ms),
            key=lambda motion: motion.typical_ms - motion.no_return_ms,
        )

    def _travels(self) -> list[MotionFacts]:
        return [motion for motion in self.motions.values() if motion.name not in BONDING]

    def settles(self, cause: str) -> str:
        """The activity after a stop of an energized module for ``cause``: halt, lease_end or fault."""
        categories = {getattr(motion, f"{cause}_category") for motion in self.motions.values()}
        return "energized" if "cat-2" in categories else "idle"

    def settles_for(self, *causes: str) -> str:
        """The same where several causes apply: power stays only on what keeps it for each of them."""
        kept = any(
            all(getattr(motion, f"{cause}_category") == "cat-2" for cause in causes)
            for motion in self.motions.values()
        )
        return "energized" if kept else "idle"


def derive_items(
    contract: Contract, description: dict[str, Any], motions: dict[str, MotionFacts], link_items: set[str]
) -> frozenset[str]:
    """The names that conditions of clauses and cases can use and that hold for this module on this link."""
    bits = description.get("capabilities", 0)
    items = {capability.name for capability in contract.capabilities if bits >> capability.number & 1}
    items |= link_items
    travels = [motion for motion in motions.values() if motion.name not in BONDING]
    conditions = {
        "restart": "assist" in items,
        "bonds": description.get("faces", 0) >= 1 and all(name in motions for name in BONDING),
        "ballistic": any(motion.no_return_ms for motion in travels),
        "stoppable": any(motion.stoppable_ms >= STOPPABLE_MS for motion in travels),
        "holding": any(motion.halt_category == "cat-2" for motion in motions.values()),
        "travel": bool(travels),
    }
    return frozenset(items | {name for name, holds in conditions.items() if holds})
