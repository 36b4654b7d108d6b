"""Soaks: as many motions as a reliability needs, stopped at the first that fails."""

from __future__ import annotations

import random
from dataclasses import replace
from typing import Any

import pytest

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.motion import Motion
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.links import MemoryLink
from protobench.suite import soak
from protobench.suite.options import RunOptions
from protobench.suite.session import Session

SEED = 5


class ShortMotion(ModuleEngine):
    """Makes its 40th motion in a row a little short, and says that it is done."""

    ended = 0

    def _form(self, motions: list[Motion]) -> None:
        for motion in motions:
            self.ended += 1
            if self.ended == 40:
                motion.displacement -= motion.displacement // 20
        super()._form(motions)


class SecondOutcome(ModuleEngine):
    """Sends the outcome of its 25th motion with another event number as well; it shows in the motion after it."""

    ended = 0

    def _send_outcome(self, motion: Motion) -> None:
        super()._send_outcome(motion)
        self.ended += 1
        if self.ended == 25:
            self._output.append(self.answers.outcome(replace(motion, event=(motion.event or 0) + 1)))


def session_with(engine_class: type[ModuleEngine], config: ModuleConfig | None = None) -> Session:
    def opener() -> MemoryLink:
        engine = engine_class(config or ModuleConfig(), Storage(), random.Random(SEED), load_contract())
        return MemoryLink(engine)

    return Session(RunOptions(opener=opener, seed=SEED))


def soaked(engine_class: type[ModuleEngine], reliability: float = 0.99, **options: Any) -> soak.Soak:
    with session_with(engine_class) as session:
        planned = soak.plan(session.bench, reliability, 0.95, options.get("motion"))
        soak.run(session, planned)
    return planned


def test_a_thousandth_needs_2995_motions() -> None:
    told: list[int] = []
    with session_with(ModuleEngine) as session:
        planned = soak.plan(session.bench, 0.999, 0.95, None)
        soak.run(session, planned, lambda done: told.append(done.made))
        status = session.bench.a.status()
    assert planned.is_complete
    assert (planned.needed, planned.made, planned.reason) == (2995, 2995, "")
    assert planned.shown >= 0.999
    assert told == list(range(1, 2996))
    assert (status["activity"], status["unconfirmed"]) == ("idle", 0)


@pytest.mark.parametrize(
    ("broken", "clause", "made"), [(ShortMotion, "MOT-04", 40), (SecondOutcome, "ACK-07", 26)]
)
def test_the_first_failure_ends_it(broken: type[ModuleEngine], clause: str, made: int) -> None:
    done = soaked(broken)
    assert not done.is_complete
    assert done.made == made
    assert done.reason.startswith(f"motion {made}: {clause}")
    assert any("outcome" in one.words for one in done.exchange)
    assert 0 < done.shown < 0.99


def test_each_motion_that_moves_can_be_asked_for() -> None:
    for motion in ("pivot", "hinge"):
        done = soaked(ModuleEngine, 0.9, motion=motion)
        assert done.is_complete
        assert done.motion == motion


def test_what_cannot_be_planned_is_refused() -> None:
    with session_with(ModuleEngine) as session:
        with pytest.raises(ValueError, match="motion 'hop': the module has hinge, pivot"):
            soak.plan(session.bench, 0.9, 0.9, "hop")
        with pytest.raises(ValueError, match=r"reliability = 1\.5"):
            soak.plan(session.bench, 1.5, 0.9, None)
    only_bonds = ModuleConfig(motions={"bond": ModuleConfig().motions["bond"]})
    with (
        session_with(ModuleEngine, only_bonds) as session,
        pytest.raises(ValueError, match="no motion but of its faces"),
    ):
        soak.plan(session.bench, 0.9, 0.9, None)


def test_an_interruption_keeps_what_was_made() -> None:
    def interrupt(done: soak.Soak) -> None:
        if done.made == 30:
            raise KeyboardInterrupt

    with session_with(ModuleEngine) as session:
        planned = soak.plan(session.bench, 0.99, 0.95, None)
        with pytest.raises(KeyboardInterrupt):
            soak.run(session, planned, interrupt)
        session.halt()
    assert planned.made == 30
    assert planned.shown == pytest.approx(0.05 ** (1 / 30))
