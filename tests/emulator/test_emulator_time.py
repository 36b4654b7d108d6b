"""The order of inputs that fall on one instant, and everything that wraps."""

from __future__ import annotations

from itertools import pairwise

import pytest
from module_driver import MODULUS, OTHER, OWNER, Driver, endings, number_of, of_kind

from emulator.config import ModuleConfig

LAST = MODULUS - 1


def at_rest_next(motion: str = "hinge") -> Driver:
    """A module whose running motion is at rest one microsecond from now."""
    driver = Driver().ready()
    driver.move(motion)
    run = driver.engine.motions.run
    assert run is not None
    driver.advance((run.begun_us + 1000 * run.config.typical_ms - 1 - driver.now_us) / 1000)
    driver.now_us += 1  # time is the driver's; the module learns of it from the next frame
    return driver


# ---------------------------------------------------------------- one instant


def test_a_halt_comes_before_rest() -> None:
    driver = at_rest_next()
    seen = driver.send("halt", wait_ms=100)
    assert endings(seen)[0][1:] == ("halted", "halt")
    assert of_kind(seen, "halt-receipt")[0].message.disposition == number_of("disposition", "stopping")


def test_rest_comes_before_a_cancel() -> None:
    driver = at_rest_next()
    seen = driver.send("cancel", wait_ms=100)
    assert endings(seen)[0][1:] == ("done", "none")
    driver = at_rest_next()
    assert driver.refusal("cancel", number=driver.number)[0] == "no-such-motion"


def test_a_halt_comes_before_the_point_of_no_return_and_a_cancel_after_it() -> None:
    told = []
    for kind in ("halt", "cancel"):
        driver = Driver().ready()
        driver.move("pivot")
        driver.advance(69.999)
        driver.now_us += 1
        told.append(endings(driver.send(kind, wait_ms=200))[0][1])
    assert told == ["halted", "done"]


def test_the_leases_end_comes_before_rest_and_before_frames() -> None:
    driver = at_rest_next()
    driver.engine.lease.end_us = driver.now_us
    assert endings(driver.advance(100))[0][1:] == ("cancelled", "lease-end")
    driver = Driver().ready(500)
    end_us = driver.engine.lease.end_us
    assert end_us is not None
    driver.now_us = end_us
    assert driver.refusal("renew-lease", duration=1000)[0] == "not-holder"


def test_a_halt_comes_before_the_leases_end() -> None:
    driver = Driver().ready(500)
    driver.move()
    driver.engine.lease.end_us = driver.now_us + 50_000
    driver.now_us += 50_000
    seen = driver.send("halt", wait_ms=100)
    assert endings(seen)[0][1:] == ("halted", "halt")
    assert driver.engine.lease.holder is None


def test_a_halt_comes_before_a_motion_begins() -> None:
    driver = Driver().ready()
    driver.move(start_at=driver.engine.clock() + 30_000)
    driver.advance((driver.engine.motions.scheduled[0].start_us - driver.now_us - 1) / 1000)  # type: ignore[operator]
    driver.now_us += 1
    assert endings(driver.send("halt", wait_ms=100))[0][1] == "halted"
    assert driver.engine.truth.motion_starts == 0


def test_rest_comes_before_the_next_motion_begins_on_the_same_instant() -> None:
    driver = Driver().ready()
    driver.move()
    driver.move()
    seen = driver.advance(300)
    first, second = of_kind(seen, "outcome")[:2]
    assert second.time_us - first.time_us == 100_000


# ---------------------------------------------------------------- wraps


def preset(driver: Driver, item: str, value: int) -> None:
    driver.assist("preset", item=number_of("preset_item", item), value=value)


def test_numbers_wrap() -> None:
    driver = Driver()
    driver.number = LAST - 3
    driver.ready()
    assert driver.number == LAST
    before = driver.make("energize")
    assert driver.number == 0
    driver.feed(before, 10)
    first, again = (of_kind(driver.feed(before, 10), "receipt") for _ in range(2))
    assert [one.data for one in first] == [one.data for one in again]
    driver.number = LAST - 1
    assert driver.refusal("de-energize")[0] == "conflict"


def test_the_clock_wraps_and_nothing_else_notices() -> None:
    driver = Driver().ready(1000)
    preset(driver, "clock", MODULUS - 100_000)
    driver.accept("telemetry-on", period=50, duration=1000)
    number = driver.move()
    lease_us = driver.engine.lease.end_us
    seen = driver.advance(400)
    assert endings(seen) == [(number, "done", "none")]
    assert len(of_kind(seen, "outcome")) == 2  # the first repeat came in time
    clocks = [one.message.clock for one in of_kind(seen, "telemetry")]
    assert len(clocks) == 8
    assert [(later - earlier) % MODULUS for earlier, later in pairwise(clocks)] == [50_000] * 7
    assert min(clocks) < max(clocks) - MODULUS // 2
    assert driver.engine.lease.end_us == lease_us


@pytest.mark.parametrize("item", ["change", "lease", "event"])
def test_what_is_counted_up_wraps_to_0(item: str) -> None:
    driver = Driver()
    preset(driver, item, LAST)
    driver.ready()
    driver.move()
    (outcome,) = of_kind(driver.advance(110), "outcome")
    status = driver.status()
    if item == "lease":
        assert status.lease == 0
    elif item == "event":
        assert outcome.message.event == 0
        driver.send("confirm", event=0)
        assert driver.status().unconfirmed == 0
    else:
        assert 0 < outcome.message.change < 20


def test_the_epoch_never_becomes_0() -> None:
    driver = Driver()
    preset(driver, "epoch", LAST - 1)
    for expected in (LAST, 1):
        driver.assist("restart", cause=0)
        driver.advance(100)
        assert driver.engine.epoch == expected


def test_counters_stop_at_their_end() -> None:
    driver = Driver()
    preset(driver, "counters", 65_534)
    for _ in range(3):
        driver.send("status", to=99, wait_ms=0)
        driver.send("status", to=0xFFFFFFFF, wait_ms=0)
    counters = driver.ask("read-counters")
    assert max(counters.drops) == 65_535
    assert sorted(counters.drops)[0] == 65_534
    assert counters.silent_refusals == 65_535


def test_counters_are_preset_to_their_end_and_not_beyond() -> None:
    driver = Driver()
    preset(driver, "counters", 65_535)
    counters = number_of("preset_item", "counters")
    fields = {"op": number_of("assist_op", "preset"), "item": counters, "value": 65_536}
    assert driver.refusal("assist", **fields) == ("out-of-range", 8)


def test_a_time_exchange_tells_both_instants() -> None:
    driver = Driver(ModuleConfig(receipt_delay_us=2000, turnaround_us=2000))
    arrival = driver.engine.clock()
    answer = driver.ask("time-exchange", t1=LAST)
    assert (answer.t1, answer.t2, answer.t3) == (LAST, arrival, arrival + 2000)


# ---------------------------------------------------------------- telemetry


def test_telemetry_begins_after_a_period_and_ends_by_itself() -> None:
    driver = Driver().ready()
    arrival_us = driver.now_us
    seen = of_kind(driver.send("telemetry-on", period=30, duration=100, wait_ms=500), "telemetry")
    assert [(one.time_us - arrival_us) // 1000 for one in seen] == [30, 60, 90]
    assert [one.message.sequence for one in seen] == [0, 1, 2]
    assert {(one.frame.destination, one.frame.session, one.frame.number) for one in seen} == {(*OWNER, driver.number)}


def test_telemetry_is_replaced_and_ended_by_those_who_may() -> None:
    driver = Driver().ready()
    driver.accept("telemetry-on", period=20, duration=60_000)
    driver.accept("telemetry-on", period=40, duration=60_000)
    number = driver.number
    seen = of_kind(driver.advance(85), "telemetry")
    assert [one.message.sequence for one in seen] == [0, 1]
    assert {one.frame.number for one in seen} == {number}
    driver.send("telemetry-off", sender=OTHER, to=0xFFFFFFFF)
    assert driver.engine.silent_refusals == 1
    driver.accept("release-lease")
    assert of_kind(driver.advance(100), "telemetry"), "it does not end with the lease"
    driver.send("telemetry-off", to=0xFFFFFFFF)
    assert driver.advance(200) == []
