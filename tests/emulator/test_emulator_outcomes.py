"""Outcomes: told once, repeated, confirmed, never lost; and the answers around them."""

from __future__ import annotations

import pytest
from module_driver import OTHER, OWNER, Driver, endings, number_of, of_kind

from emulator.config import ModuleConfig

REPEATS_AFTER_MS = [0, 200, 600, 1400, 3000]


def test_repeats_at_doubling_intervals_the_same_bytes_and_then_no_more() -> None:
    driver = Driver().ready()
    driver.move()
    seen = of_kind(driver.advance(60_000), "outcome")
    assert [(one.time_us - seen[0].time_us) / 1000 for one in seen] == REPEATS_AFTER_MS
    assert len({one.data for one in seen}) == 1
    assert driver.status().unconfirmed == 1


@pytest.mark.parametrize("confirmed_after", [1, 2, 5])
def test_a_confirm_ends_the_repeats_and_is_not_answered(confirmed_after: int) -> None:
    driver = Driver().ready()
    driver.move()
    driver.advance(100)
    driver.advance(REPEATS_AFTER_MS[confirmed_after - 1] + 1)
    assert driver.send("confirm", event=1, wait_ms=10_000) == []
    assert driver.status().unconfirmed == 0
    assert driver.ask("read-motions").entries[0].confirmed == 1


def test_who_may_confirm() -> None:
    driver = Driver().ready()
    driver.move()
    driver.advance(110)
    wrong = [
        {"sender": OTHER, "event": 1},
        {"sender": (OWNER[0], OWNER[1] + 1), "event": 1},
        {"event": 2},
        {"event": 0},
        {"event": 1, "epoch": driver.engine.epoch + 1},
    ]
    for fields in wrong:
        driver.send("confirm", wait_ms=0, **fields)
    assert driver.engine.drops["stale-confirm"] == len(wrong)
    assert driver.status().unconfirmed == 1
    driver.accept("release-lease")
    driver.accept("take-lease", sender=OTHER, duration=500)
    driver.send("confirm", sender=OTHER, event=1)
    assert driver.status().unconfirmed == 0
    driver.send("confirm", event=1)
    assert driver.engine.drops["stale-confirm"] == len(wrong) + 1


def test_a_copied_move_brings_its_outcome_again_but_not_more_than_ten_times_a_second() -> None:
    driver = Driver().ready()
    data = driver.make("move", motion=3, magnitude=1)
    (first,) = of_kind(driver.feed(data, 101), "outcome")
    times_us = [first.time_us]
    for _ in range(100):
        seen = driver.feed(data, 5)
        assert [one.kind for one in seen][:1] == ["receipt"]
        times_us += [one.time_us for one in of_kind(seen, "outcome")]
    own_us = [first.time_us + 1000 * after for after in REPEATS_AFTER_MS]
    again = [time_us for time_us in times_us if time_us not in own_us]
    assert len(again) == 3
    for time_us in again:
        assert time_us - max(one for one in times_us if one < time_us) >= 100_000


def test_the_repeat_timer_is_not_moved_by_a_copy() -> None:
    driver = Driver().ready()
    data = driver.make("move", motion=3, magnitude=1)
    (first,) = of_kind(driver.feed(data, 101), "outcome")
    driver.advance(120)
    driver.feed(data, 1)
    again = of_kind(driver.advance(150), "outcome")
    assert [one.time_us - first.time_us for one in again] == [200_000]


def test_outcomes_that_end_together_come_in_their_order() -> None:
    driver = Driver(ModuleConfig(scheduled=2)).ready()
    running, queued = driver.move(), driver.move()
    scheduled = [driver.move(start_at=driver.engine.clock() + lead) for lead in (900_000, 800_000)]
    last = driver.move()
    seen = driver.send("halt", wait_ms=100)
    assert [number for number, _, _ in endings(seen)] == [running, queued, last, *scheduled]
    events = [one.message.event for one in of_kind(seen, "outcome")]
    assert events == sorted(events)
    assert {(outcome, cause) for _, outcome, cause in endings(seen)} == {("halted", "halt")}


def test_an_outcome_never_leaves_before_its_own_receipt() -> None:
    driver = Driver(ModuleConfig.slow()).ready()
    move = driver.make("move", motion=3, magnitude=1)
    driver.feed(move, 0)
    seen = driver.send("halt", wait_ms=100)
    kinds = [one.kind for one in seen]
    assert kinds == ["halt-receipt", "receipt", "outcome"]


def test_pages_newest_first_and_empty_past_the_end() -> None:
    driver = Driver().ready()
    for _ in range(5):
        driver.move()
        driver.advance(110)
    pages = [driver.ask("read-motions", page=page) for page in (0, 1, 2, 255)]
    assert [page.total for page in pages] == [5, 5, 5, 5]
    assert [[entry.event for entry in page.entries] for page in pages] == [[5, 4, 3], [2, 1], [], []]


def test_only_confirmed_outcomes_give_up_their_places() -> None:
    driver = Driver().ready()
    for event in range(1, 12):
        driver.move()
        driver.advance(110)
        if event % 2:
            driver.send("confirm", event=event)
    kept = [entry.event for page in (0, 1, 2) for entry in driver.ask("read-motions", page=page).entries]
    assert {2, 4, 6, 8, 10} <= set(kept)
    assert len(kept) == driver.engine.config.outcomes


def test_energy_is_told_only_where_it_is_declared() -> None:
    told = []
    for capabilities in (("queue", "energy"), ("queue",)):
        config = ModuleConfig(capabilities=capabilities, scheduled=0, groups=0)
        driver = Driver(config).ready()
        driver.move()
        (outcome,) = of_kind(driver.advance(110), "outcome")
        told.append(outcome.message.energy_mj)
    assert told == [800, None]


def test_no_outcome_survives_a_restart() -> None:
    driver = Driver().ready()
    driver.move()
    driver.assist("restart", cause=number_of("restart_cause", "external"))
    seen = driver.advance(5000)
    assert endings(seen) == []
    assert [one.kind for one in seen] == ["started"]
    assert (driver.engine.epoch, driver.engine.truth.motion_starts) == (2, 0)
    status = driver.status()
    assert (status.restart_cause, status.position, status.position_known, status.lease) == (4, 0, False, 0)
