"""Random walks behind the fence: commands that are right, at awkward instants, and what must hold whatever comes.

Random bytes seldom get past epoch and lease; these do. Each walk is repeated by its seed.
"""

from __future__ import annotations

import random
from collections import Counter
from collections.abc import Callable
from typing import Any

import pytest
from module_driver import BROADCAST, CONTRACT, MODULUS, OTHER, Driver, Seen, number_of

from emulator.config import FaceConfig, ModuleConfig, MotionConfig

SEEDS = range(1, 161)
STEPS = 150
WAITS_MS = [0, 0, 0, 0.5, 1, 5, 10, 20, 30, 50, 69.5, 70, 90, 120, 600]
LEADS_US = [20_000, 21_000, 25_000, 40_000, 70_000, 100_000, 150_000, 250_000]
COVERED = [field.name for field in CONTRACT.kind("status-report").fields if field.key <= 18]
HOP = MotionConfig(magnitude_min=1000, magnitude_max=60_000, typical_ms=140, longest_ms=250, no_return_ms=20)
CONFIGS = [
    ModuleConfig(),
    ModuleConfig(scheduled=4, queue=3, outcomes=30),
    ModuleConfig.slow(),
    ModuleConfig.holding(),
    ModuleConfig(motions={"hop": HOP}, faces=(), receipt_delay_us=0),
    ModuleConfig(stop_ms=0, declared_stop_ms=0, answers=4, outcomes=4),
    ModuleConfig(faces=tuple(FaceConfig(bonded=True, neighbour=5) for _ in range(2))),
]
NEVER_BEGUN = ("late", "predecessor", "last-bond", "de-energized")
reached: Counter[tuple[str, str, str]] = Counter()


class Walk:
    """One module, what was sent to it, and what must hold."""

    def __init__(self, seed: int) -> None:
        self.rng = random.Random(seed)
        self.config = CONFIGS[seed % len(CONFIGS)]
        self.driver = Driver(self.config, seed=seed)
        self.moves: dict[int, int] = {}  # number: epoch
        self.accepted: dict[int, int] = {}
        self.ended: dict[int, tuple[bytes, int]] = {}
        self.reports: dict[tuple[int, int], tuple[Any, ...]] = {}
        self.fault_us: tuple[int, int] | None = None
        self.sent: list[bytes] = []
        self.operations: list[Callable[[], None]] = [
            *[self.move] * 8, *[self.start_later] * 6, *[self.prepare] * 4, *[self.release] * 3, *[self.confirm] * 3,
            *[self.cancel_one] * 2, *[self.hold] * 2, *[self.copy] * 2, self.cancel, self.halt, self.halt_many,
            self.fault, self.calm, self.restart, self.power_cut, self.preset, self.read, self.groups, self.address,
            self.renew_many, self.telemetry,
            lambda: self.send("release-lease"), lambda: self.send("de-energize"),
            lambda: self.send("take-lease", sender=OTHER, duration=500),
        ]  # fmt: skip

    # ------------------------------------------------------------ what is sent

    def send(self, kind: str, **fields: Any) -> None:
        data = self.driver.make(kind, **fields)
        self.sent = [*self.sent[-7:], data]
        if kind == "move":
            self.moves[self.driver.number] = self.driver.engine.epoch
        self.see(self.driver.feed(data))

    def assist(self, operation: str, **fields: Any) -> None:
        self.send("assist", op=number_of("assist_op", operation), **fields)

    def move(self, **fields: Any) -> None:
        name, motion = self.rng.choice(list(self.config.motions.items()))
        if name in ("bond", "unbond"):
            fields |= {"face": self.rng.randrange(len(self.config.faces) or 1)}
        else:
            fields |= {"magnitude": self.rng.randint(motion.magnitude_min, motion.magnitude_max)}
        last = self.rng.random() < 0.3
        self.send("move", motion=number_of("motion", name), allow_last_bond=last, **fields)

    def start_later(self) -> None:
        lead_us = self.rng.choice([*LEADS_US, self.rng.randint(20_000, 300_000)])
        self.move(start_at=(self.driver.engine.clock() + lead_us) % MODULUS)

    def prepare(self) -> None:
        engine = self.driver.engine
        self.send("take-lease", duration=self.rng.choice([500, 600, 30_000]))
        latched = [entry.occurrence for entry in engine.faults.latched][:8]
        if latched:
            self.send("clear-faults", occurrences=latched)
        self.send("reset", halt_count=engine.halt_count)
        self.send("energize")

    def halt(self) -> None:
        self.send("halt")

    def halt_many(self) -> None:
        self.send("halt", to=BROADCAST, answer_window=self.rng.choice([0, 10, 100]))

    def cancel(self) -> None:
        self.send("cancel")

    def cancel_one(self) -> None:
        if self.moves:
            self.send("cancel", number=self.rng.choice(list(self.moves)[-6:]))

    def hold(self) -> None:
        self.assist("hold", phase=self.rng.randint(1, 4))

    def release(self) -> None:
        self.assist("release")

    def fault(self) -> None:
        self.assist("raise", code=self.rng.choice(CONTRACT.faults).code, survives=self.rng.random() < 0.2)

    def calm(self) -> None:
        for code in sorted(self.driver.engine.faults.standing):
            self.assist("withdraw", code=code)

    def restart(self) -> None:
        if self.rng.random() < 0.4:
            self.assist("restart", cause=self.rng.randrange(5))

    def power_cut(self) -> None:
        if self.rng.random() < 0.3:
            self.assist("power-cut", writes=self.rng.randint(1, 2))

    def preset(self) -> None:
        item = self.rng.choice(["clock", "counters"])
        values = [0, 5, 65_535] if item == "counters" else [0, MODULUS - 1, MODULUS - 20_000]
        self.assist("preset", item=number_of("preset_item", item), value=self.rng.choice(values))

    def copy(self) -> None:
        if self.sent:
            self.see(self.driver.feed(self.rng.choice(self.sent)))

    def confirm(self) -> None:
        engine = self.driver.engine
        events = [motion.event for motion in engine.motions.formed if motion.is_open]
        events += [entry.event for entry in engine.faults.occurrences]
        for event in events:
            if self.rng.random() < 0.6:
                self.send("confirm", event=event)

    def read(self) -> None:
        for kind in ("read-motions", "read-faults", "read-truth", "describe", "read-counters", "read-groups"):
            self.send(kind)

    def groups(self) -> None:
        self.send("set-groups", groups=[0xF0000001] * self.rng.randrange(2))

    def address(self) -> None:
        self.send("assign-address", hardware_id=self.config.hardware_id, address=self.rng.choice([1, 5]))

    def renew_many(self) -> None:
        window = self.rng.choice([0, 20])
        self.send("renew-lease", to=BROADCAST, duration=self.rng.choice([500, 30_000]), answer_window=window)

    def telemetry(self) -> None:
        self.send("telemetry-on", period=20, duration=200)

    # ------------------------------------------------------------ what must hold

    def see(self, seen: list[Seen]) -> None:
        checks = {
            "receipt": self._receipt, "outcome": self._outcome, "fault": self._fault, "status-report": self._report
        }  # fmt: skip
        for one in seen:
            check = checks.get(one.kind)
            if check is not None:
                check(one)

    def _receipt(self, one: Seen) -> None:
        number = one.frame.number
        if number in self.moves and one.message.result == 0:
            self.accepted[number] = self.moves[number]

    def _outcome(self, one: Seen) -> None:
        """One for each accepted motion, after its receipt, the same in every sending but for a new address."""
        number, message = one.frame.number, one.message
        assert number in self.accepted, "an outcome before its receipt, or without one"
        body, event = self.ended.setdefault(number, (one.frame.body, message.event))
        assert (body, event) == (one.frame.body, message.event), "two outcomes of one motion"
        names = [CONTRACT.enum_names(enum) for enum in ("motion", "outcome", "cause")]
        reached[names[0][message.motion], names[1][message.outcome], names[2][message.cause]] += 1
        if names[2][message.cause] in NEVER_BEGUN:
            assert (message.displacement, message.duration_ms) == (0, 0)

    def _fault(self, one: Seen) -> None:
        if self.fault_us is not None and self.fault_us[0] == one.message.epoch:
            assert one.time_us - self.fault_us[1] >= 100_000, "fault events crowd"
        self.fault_us = one.message.epoch, one.time_us

    def _report(self, one: Seen) -> None:
        told = tuple(getattr(one.message, name) for name in COVERED)
        known = self.reports.setdefault((one.message.epoch, one.message.change), told)
        assert known == told, "reports with equal change numbers differ"

    def check(self) -> None:
        engine = self.driver.engine
        motions, running = engine.motions, engine.motions.run is not None
        assert engine.state in CONTRACT.states.states
        assert running == (engine.state.activity == "moving")
        if engine.state.activity in ("idle", "starting"):
            assert not motions.queued
            assert not motions.scheduled
        waiting = len(motions.queued) + len(motions.scheduled) + running
        assert waiting + len(motions.formed) <= self.config.outcomes
        assert (engine.lease.holder is not None) == (engine.state.lease == "held")
        assert len(engine.faults.latched) == 0 or engine.state.fault
        begun = [number for number, epoch in self.accepted.items() if epoch == engine.epoch]
        assert engine.truth.motion_starts <= len(begun)

    def go(self) -> None:
        for _ in range(STEPS):
            self.rng.choice(self.operations)()
            self.send("status")
            self.see(self.driver.advance(self.rng.choice(WAITS_MS)))
            self.check()
        for _ in range(4):
            self.release()
            self.see(self.driver.advance(1000))
        self.see(self.driver.advance(70_000))
        for number, epoch in self.accepted.items():
            assert epoch != self.driver.engine.epoch or number in self.ended, f"move {number} has no outcome"
        self.driver.now_us += 1
        assert self.driver.ask("status").epoch == self.driver.engine.epoch


def test_walks() -> None:
    for seed in SEEDS:
        try:
            Walk(seed).go()
        except Exception as error:
            error.add_note(f"repeat with: Walk({seed}).go()")
            raise
    endings = {(outcome, cause) for _, outcome, cause in reached}
    wanted = {
        ("done", "none"), ("halted", "halt"), ("failed", "fault"), ("failed", "late"), ("failed", "last-bond"),
        ("failed", "no-neighbour"), ("cancelled", "cancel"), ("cancelled", "fault"), ("cancelled", "lease-end"),
        ("cancelled", "predecessor"), ("cancelled", "de-energized"),
    }  # fmt: skip
    assert wanted <= endings, f"walks no longer reach {wanted - endings}"
    assert sum(reached.values()) > 4000


@pytest.mark.parametrize("config", CONFIGS)
def test_the_reports_of_two_runs_are_the_same(config: ModuleConfig) -> None:
    seed = CONFIGS.index(config) + len(CONFIGS)
    first, second = Walk(seed), Walk(seed)
    first.go()
    second.go()
    assert first.reports == second.reports
    assert first.ended == second.ended
