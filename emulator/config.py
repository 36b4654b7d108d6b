"""What an emulated module is: its identity, what it declares, and the times it takes."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Annotated, Any

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from protobench.contract import Contract

Milliseconds = Annotated[int, Field(ge=0, le=10_000)]
Magnitude = Annotated[int, Field(ge=-(1 << 31), lt=1 << 31)]
Temperature = Annotated[int, Field(ge=-1000, le=3000)]
UNICAST_LAST = 0xEFFFFFFF
GROUPS_MAX = 16
CAPABILITIES = ("queue", "schedule", "telemetry", "groups", "identify", "assist", "energy")
MOTIONS = ("pivot", "slide", "hinge", "hop", "bond", "unbond")
BONDING = ("bond", "unbond")
CAUSES = ("halt", "fault", "lease_end")


class ConfigError(ValueError):
    """A configuration that cannot be used; the message names the field, the value and the rule."""


class MotionConfig(BaseModel):
    """One motion: times in ms, magnitudes in its own unit, stop categories of its actuator."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    actuator: int = Field(0, ge=0, le=15)
    magnitude_min: Magnitude = 0
    magnitude_max: Magnitude = 0
    typical_ms: int = Field(ge=1, le=10_000)
    longest_ms: int = Field(ge=1, le=10_000)
    no_return_ms: Milliseconds = 0
    halt_category: int = Field(1, ge=0, le=2)
    lease_end_category: int = Field(1, ge=0, le=2)
    fault_category: int = Field(1, ge=0, le=2)

    @model_validator(mode="after")
    def _times_fit(self) -> MotionConfig:
        if self.typical_ms > self.longest_ms:
            raise ValueError(f"typical_ms {self.typical_ms} is more than longest_ms {self.longest_ms}")
        if self.no_return_ms >= self.typical_ms:
            raise ValueError(f"no_return_ms {self.no_return_ms} is not before the end, {self.typical_ms}")
        if self.magnitude_min > self.magnitude_max:
            raise ValueError(
                f"magnitude_min {self.magnitude_min} is more than magnitude_max {self.magnitude_max}"
            )
        return self


class FaceConfig(BaseModel):
    """One face at the start: bonded or not, and the neighbour within reach (address, 0 for none)."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    bonded: bool = False
    neighbour: int = Field(0, ge=0, le=UNICAST_LAST)


def _default_motions() -> dict[str, MotionConfig]:
    short = MotionConfig(actuator=2, typical_ms=30, longest_ms=80)
    return {
        "pivot": MotionConfig(
            magnitude_min=-90_000, magnitude_max=90_000, typical_ms=120, longest_ms=220, no_return_ms=70
        ),
        "hinge": MotionConfig(
            actuator=1, magnitude_min=-180_000, magnitude_max=180_000, typical_ms=100, longest_ms=200
        ),
        "bond": short,
        "unbond": short,
    }


def _default_faces() -> tuple[FaceConfig, ...]:
    return (FaceConfig(bonded=True, neighbour=2), FaceConfig(neighbour=3), *(FaceConfig() for _ in range(4)))


class ModuleConfig(BaseModel):
    """One module. Times with ``declared_`` in front are what it says, the others what it takes."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    address: int = Field(1, ge=0, le=UNICAST_LAST)
    hardware_id: bytes = Field(b"\xe0\0\0\0\0\0\0\x01", min_length=8, max_length=8)
    build: bytes = Field(b"emulated", min_length=8, max_length=8)
    capabilities: tuple[str, ...] = CAPABILITIES
    motions: dict[str, MotionConfig] = Field(default_factory=_default_motions, min_length=1)
    faces: tuple[FaceConfig, ...] = Field(default_factory=_default_faces, max_length=6)
    sessions: int = Field(4, ge=4, le=255)
    numbers: int = Field(8, ge=8, le=32)
    queue: int = Field(8, ge=0, le=255)
    scheduled: int = Field(1, ge=0, le=255)
    outcomes: int = Field(8, ge=4, le=255)
    faults: int = Field(8, ge=8, le=255)
    groups: int = Field(8, ge=0, le=GROUPS_MAX)
    answers: int = Field(16, ge=4, le=255)
    receipt_delay_us: int = Field(500, ge=0, le=50_000)
    turnaround_us: int = Field(0, ge=0, le=10_000)
    starting_ms: Milliseconds = 20
    stop_ms: Milliseconds = 20
    declared_receipt_ms: int = Field(10, ge=1, le=50)
    declared_starting_ms: int = Field(50, ge=1, le=1000)
    declared_stop_ms: int = Field(50, ge=0, le=500)
    supply_mv: int = Field(7400, ge=0, le=65_535)
    battery_permille: int = Field(870, ge=0, le=1000)
    temperatures: tuple[Temperature, ...] = Field((231, 228, 224), max_length=4)

    @model_validator(mode="after")
    def _agrees(self) -> ModuleConfig:
        for name in self.capabilities:
            if name not in CAPABILITIES:
                raise ValueError(f"capability {name!r}: one of {', '.join(CAPABILITIES)}")
        for name in self.motions:
            if name not in MOTIONS:
                raise ValueError(f"motion {name!r}: one of {', '.join(MOTIONS)}")
        for name, size in (("queue", self.queue), ("schedule", self.scheduled), ("groups", self.groups)):
            if (name in self.capabilities) != bool(size):
                raise ValueError(f"capability {name} and its size {size} contradict each other")
        if not self.turnaround_us <= self.receipt_delay_us < 1000 * self.declared_receipt_ms:
            raise ValueError(
                f"receipt_delay_us {self.receipt_delay_us} is not between turnaround and declared_receipt_ms"
            )
        if self.starting_ms > self.declared_starting_ms or self.stop_ms > self.declared_stop_ms:
            raise ValueError("starting_ms and stop_ms may not be more than what is declared")
        return self

    def has(self, capability: str) -> bool:
        return capability in self.capabilities

    def settles(self, *causes: str) -> str:
        """The activity after a stop for these causes: energized where an actuator holds for each of them."""
        holds = any(
            all(getattr(motion, f"{cause}_category") == 2 for cause in causes)
            for motion in self.motions.values()
        )
        return "energized" if holds else "idle"

    def at(self, address: int) -> ModuleConfig:
        """The same module with another address, and a hardware id made from it. Raises ConfigError."""
        if not 1 <= address <= UNICAST_LAST:
            raise ConfigError(f"address = {address}: a module's address lies between 1 and {UNICAST_LAST}")
        return self.model_copy(
            update={"address": address, "hardware_id": b"\xe0\0\0\0" + address.to_bytes(4, "big")}
        )

    @classmethod
    def smallest(cls) -> ModuleConfig:
        """The smallest conformant module."""
        pivot = MotionConfig(magnitude_min=-90_000, magnitude_max=90_000, typical_ms=120, longest_ms=220)
        return cls(
            capabilities=(), motions={"pivot": pivot}, faces=(), queue=0, scheduled=0, outcomes=4, groups=0, answers=4
        )  # fmt: skip

    @classmethod
    def slow(cls) -> ModuleConfig:
        """Slow in everything, and still within every limit."""
        motions = {
            name: motion.model_copy(
                update={field: 6 * getattr(motion, field) for field in ("typical_ms", "longest_ms", "no_return_ms")}
            )
            for name, motion in _default_motions().items()
        }  # fmt: skip
        return cls(
            motions=motions,
            receipt_delay_us=40_000,
            declared_receipt_ms=50,
            starting_ms=800,
            declared_starting_ms=1000,
            stop_ms=300,
            declared_stop_ms=400,
        )

    @classmethod
    def holding(cls) -> ModuleConfig:
        """With an actuator that keeps its power through halt, fault and lease end."""
        motions = _default_motions()
        kept = {"halt_category": 2, "lease_end_category": 2, "fault_category": 2}
        motions["hinge"] = motions["hinge"].model_copy(update=kept)
        return cls(motions=motions)

    @classmethod
    def load(cls, path: Path) -> ModuleConfig:
        """Read a TOML file; bytes are given in hex. Raises ConfigError."""
        try:
            values: dict[str, Any] = tomllib.loads(path.read_text(encoding="utf-8"))
            for name in ("hardware_id", "build"):
                if name in values:
                    values[name] = bytes.fromhex(values[name])
            return cls.model_validate(values)
        except ValidationError as error:
            fault = error.errors()[0]
            place = ".".join(str(item) for item in fault["loc"])
            raise ConfigError(f"{path}: {place} = {fault['input']!r}: {fault['msg']}") from None
        except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError, ValueError, TypeError) as error:
            raise ConfigError(f"{path}: {error}") from None


def capability_bits(config: ModuleConfig, contract: Contract) -> int:
    """The capabilities as the description tells them."""
    return sum(1 << row.number for row in contract.capabilities if config.has(row.name))
