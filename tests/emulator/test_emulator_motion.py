"""Motions: queue, stated starts, phases, stops, bonds, and the displacement that they tell."""

from __future__ import annotations

import pytest
from module_driver import MODULUS, Driver, Seen, endings, number_of, of_kind

from emulator.config import FaceConfig, ModuleConfig, MotionConfig

SLIDE = MotionConfig(magnitude_min=-(1 << 31), magnitude_max=(1 << 31) - 1, typical_ms=10, longest_ms=20)


def interruption(one: Seen) -> int:
    return int(one.message.interrupted)


def test_done_after_its_typical_time_with_all_of_its_magnitude() -> None:
    driver = Driver().ready()
    assert not driver.status().position_known
    number = driver.move("hinge", -12_345)
    begun_us = driver.now_us
    seen = driver.advance(150)
    assert endings(seen) == [(number, "done", "none")]
    assert seen[0].time_us == begun_us + 100_000
    assert (seen[0].message.displacement, seen[0].message.duration_ms) == (-12_345, 100)
    assert (driver.status().position, driver.status().position_known) == (-12_345, True)


def test_first_in_first_out_and_each_begins_after_the_outcome_before() -> None:
    driver = Driver().ready()
    numbers = [driver.move() for _ in range(5)]
    assert driver.status().queued == 4
    seen = driver.advance(600)
    assert endings(seen) == [(number, "done", "none") for number in numbers]
    assert driver.engine.truth.motion_starts == 5


def test_what_is_behind_a_motion_that_fails_is_cancelled() -> None:
    driver = Driver().ready()
    failing = driver.move("bond", 0, face=5)
    behind = [driver.move(), driver.move()]
    assert endings(driver.advance(300)) == [
        (failing, "failed", "no-neighbour"),
        *((number, "cancelled", "predecessor") for number in behind),
    ]


def test_cancel_of_a_queued_motion_takes_those_behind_it_along_at_once() -> None:
    driver = Driver().ready()
    running, kept, cancelled, behind = (driver.move() for _ in range(4))
    seen = driver.send("cancel", number=cancelled, wait_ms=20)
    assert endings(seen) == [(cancelled, "cancelled", "cancel"), (behind, "cancelled", "predecessor")]
    assert endings(driver.advance(300)) == [(running, "done", "none"), (kept, "done", "none")]


@pytest.mark.parametrize("ahead_ms", [0, 30, 69, 99])
def test_a_stop_tells_what_was_made(ahead_ms: int) -> None:
    driver = Driver().ready()
    driver.move("hinge", 100_000)
    driver.advance(ahead_ms)
    seen = driver.send("halt", wait_ms=60)
    (outcome,) = of_kind(seen, "outcome")
    assert outcome.message.displacement == 1000 * ahead_ms
    assert outcome.message.duration_ms == ahead_ms + driver.engine.config.stop_ms
    assert driver.engine.true_position() == 1000 * ahead_ms


@pytest.mark.parametrize(("ahead_ms", "ending"), [(69.999, "halted"), (70.001, "done")])
def test_the_point_of_no_return(ahead_ms: float, ending: str) -> None:
    driver = Driver().ready()
    driver.move("pivot", 1200)
    driver.advance(ahead_ms)
    (outcome,) = of_kind(driver.send("halt", wait_ms=200), "outcome")[:1]
    assert endings([outcome])[0][1] == ending
    assert interruption(outcome) == (0 if ending == "halted" else number_of("cause", "halt"))
    assert driver.state == "halted"


@pytest.mark.parametrize("past_return", [False, True])
def test_the_strongest_cause_is_told_whatever_came_first(past_return: bool) -> None:
    driver = Driver().ready()
    driver.move("pivot")
    driver.advance(80 if past_return else 10)
    driver.accept("cancel")
    driver.accept("release-lease")
    driver.raise_fault("over-current")
    driver.send("halt", wait_ms=1)
    (outcome,) = of_kind(driver.advance(100), "outcome")
    told = outcome.message.interrupted if past_return else outcome.message.cause
    assert told == number_of("cause", "halt")


# ---------------------------------------------------------------- stated starts


def test_a_stated_start_is_kept_to_the_microsecond_across_the_clocks_wrap() -> None:
    driver = Driver().ready()
    driver.assist("preset", item=number_of("preset_item", "clock"), value=MODULUS - 40_000)
    start_at = (driver.engine.clock() + 90_000) % MODULUS
    start_us = driver.now_us + 90_000
    number = driver.move(start_at=start_at)
    driver.assist("preset", item=number_of("preset_item", "clock"), value=5)  # a countdown by now
    seen = driver.advance(200)
    assert endings(seen) == [(number, "done", "none")]
    assert seen[0].time_us == start_us + 100_000


@pytest.mark.parametrize(
    ("ahead_us", "reason"),
    [(-1, "late"), (0, "late"), (19_999, "late"), (20_000, None), (60_000_000, None), (60_000_001, "too-far"),
     (MODULUS // 2 - 1, "too-far"), (MODULUS // 2, "late")],
)  # fmt: skip
def test_the_lead_of_a_stated_start(ahead_us: int, reason: str | None) -> None:
    driver = Driver().ready()
    fields = {"motion": 3, "magnitude": 1, "start_at": (driver.engine.clock() + ahead_us) % MODULUS}
    if reason is None:
        driver.accept("move", **fields)
    else:
        assert driver.refusal("move", **fields) == (reason, 64)


def test_a_start_while_another_motion_runs_is_late_and_harms_nothing_else() -> None:
    driver = Driver().ready()
    running = driver.move()
    queued = driver.move()
    late = driver.move(start_at=driver.engine.clock() + 50_000)
    assert endings(driver.advance(60)) == [(late, "failed", "late")]
    assert endings(driver.advance(300)) == [(running, "done", "none"), (queued, "done", "none")]


@pytest.mark.parametrize("stop", ["halt", "release-lease", "cancel", "fault"])
def test_a_start_that_comes_while_a_stopped_module_still_lands(stop: str) -> None:
    driver = Driver().ready()
    running = driver.move("pivot")
    ended = driver.move(start_at=driver.engine.clock() + 100_000)
    driver.advance(85)
    seen = driver.send(stop, wait_ms=0) if stop != "fault" else []
    if stop == "fault":
        driver.raise_fault("over-current")
    seen += driver.advance(300)
    told = {"halt": "halted", "release-lease": "cancelled", "cancel": "cancelled", "fault": "cancelled"}
    assert [(number, outcome) for number, outcome, _ in endings(seen)[:2]] == [
        (running, "done"),
        (ended, told[stop]),
    ]
    assert driver.engine.truth.motion_starts == 1


def test_no_motion_begins_before_its_receipt_has_left() -> None:
    driver = Driver(ModuleConfig.slow()).ready()
    data = driver.make("move", motion=3, magnitude=7, start_at=driver.engine.clock() + 21_000)
    driver.feed(data, 39.999)
    assert driver.engine.truth.motion_starts == 0
    assert [one.kind for one in driver.advance(0.001)] == ["receipt"]
    assert driver.engine.truth.motion_starts == 1


def test_on_one_instant_the_stated_start_comes_before_the_queue() -> None:
    driver = Driver().ready()
    first = driver.move()
    rest_us = 100_000
    second = driver.move()
    stated = driver.move(start_at=(driver.engine.clock() + rest_us - 1000) % MODULUS)
    # moved to the very instant at which the first is at rest
    driver.engine.motions.scheduled[0].start_us = driver.engine.motions.run.next_us()  # type: ignore[union-attr]
    seen = driver.advance(500)
    assert [number for number, _, _ in endings(seen)] == [first, stated, second]
    assert {outcome for _, outcome, _ in endings(seen)} == {"done"}


# ---------------------------------------------------------------- phases


@pytest.mark.parametrize("phase", ["ready", "running", "committed", "settling"])
def test_a_held_phase_lasts_until_release(phase: str) -> None:
    driver = Driver().ready()
    driver.assist("hold", phase=number_of("phase", phase))
    number = driver.move("pivot", 1200)
    assert endings(driver.advance(5000)) == []
    made = {"ready": 0, "running": 0, "committed": 700, "settling": 1200}
    assert driver.engine.true_position() == made[phase]
    assert driver.state == ("energized" if phase == "ready" else "moving")
    driver.assist("release")
    assert endings(driver.advance(200)) == [(number, "done", "none")]


@pytest.mark.parametrize("phase", ["ready", "running", "committed", "settling"])
def test_a_halt_lets_a_held_motion_go_before_its_point_of_no_return(phase: str) -> None:
    driver = Driver().ready()
    driver.assist("hold", phase=number_of("phase", phase))
    driver.move("pivot", 1200)
    driver.advance(300)
    seen = driver.send("halt", wait_ms=100)
    if phase in ("committed", "settling"):
        assert endings(seen) == []
        driver.assist("release")
        seen = driver.advance(200)
        assert endings(seen)[0][1] == "done"
    else:
        assert endings(seen)[0][1] == "halted"


def test_release_with_nothing_held_forgets_the_hold() -> None:
    driver = Driver().ready()
    driver.assist("hold", phase=number_of("phase", "running"))
    driver.assist("release")
    driver.move()
    assert len(endings(driver.advance(150))) == 1


# ---------------------------------------------------------------- bonds, places, position


def test_bonds_close_and_open_and_the_last_one_stays() -> None:
    driver = Driver().ready()
    assert driver.refusal("move", motion=6, face=0) == ("last-bond", 65)
    driver.move("bond", 0, face=1)
    driver.advance(50)
    assert [(face.bonded, face.neighbour) for face in driver.status().faces[:3]] == [(1, 2), (1, 3), (0, 0)]
    opened = driver.move("unbond", 0, face=0)
    driver.advance(50)
    assert driver.refusal("move", motion=6, face=1) == ("last-bond", 65)
    last = driver.move("unbond", 0, face=1, allow_last_bond=True)
    seen = driver.advance(50)
    assert endings(seen) == [(last, "done", "none")]
    assert opened < last
    assert not driver.status().position_known


def test_a_bond_that_became_the_last_one_is_not_opened() -> None:
    bonded = (FaceConfig(bonded=True, neighbour=2), FaceConfig(bonded=True, neighbour=3))
    driver = Driver(ModuleConfig(faces=bonded)).ready()
    first = driver.move("unbond", 0, face=0)
    second = driver.move("unbond", 0, face=1)
    behind = driver.move()
    assert endings(driver.advance(300)) == [
        (first, "done", "none"),
        (second, "failed", "last-bond"),
        (behind, "cancelled", "predecessor"),
    ]
    assert driver.engine.truth.motion_starts == 1


@pytest.mark.parametrize("motion", ["bond", "unbond"])
def test_faces_end_at_the_declared_number(motion: str) -> None:
    driver = Driver().ready()
    fields = {"motion": number_of("motion", motion)}
    faces = len(driver.engine.config.faces)
    driver.accept("move", face=faces - 1, **fields)
    assert driver.refusal("move", face=faces, **fields) == ("out-of-range", 4)
    assert driver.refusal("move", magnitude=1, face=faces, **fields) == ("out-of-range", 3)


def test_a_full_queue_is_busy_and_a_full_table_of_outcomes_refuses() -> None:
    driver = Driver(ModuleConfig(queue=2, outcomes=4)).ready()
    for _ in range(3):
        driver.move()
    assert driver.refusal("move", motion=3, magnitude=1) == ("busy", None)
    driver.advance(1000)
    driver.move()
    driver.advance(1000)
    assert driver.refusal("move", motion=3, magnitude=1) == ("outcomes-full", None)
    driver.send("confirm", event=2)
    driver.move()


def test_the_sum_of_displacements_wraps_as_its_field_does() -> None:
    driver = Driver(ModuleConfig(motions={"slide": SLIDE})).ready()
    for magnitude in ((1 << 31) - 1, (1 << 31) - 1, -5):
        driver.move("slide", magnitude)
        driver.advance(5)
        assert driver.ask("read-truth").position == driver.engine.true_position()
        driver.advance(20)
    assert driver.status().position == -2 - 5
