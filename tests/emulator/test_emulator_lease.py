"""When the lease ends, what extends it, and what its end does."""

from __future__ import annotations

import pytest
from module_driver import BROADCAST, OTHER, OWNER, Driver, endings, number_of

from emulator.config import ModuleConfig
from emulator.lease import Lease


def test_the_machine_by_itself() -> None:
    lease = Lease()
    lease.number = (1 << 32) - 1
    lease.grant(OWNER, 500, 1_000)
    assert (lease.number, lease.end_us) == (0, 501_000)
    assert [lease.remaining_ms(at) for at in (1_000, 1_001, 500_999, 501_000, 600_000)] == [500, 500, 1, 0, 0]
    lease.end()
    assert not lease.is_holder(OWNER)
    assert lease.remaining_ms(0) == 0


def end_us(driver: Driver) -> int:
    assert driver.engine.lease.end_us is not None
    return driver.engine.lease.end_us


def test_it_lasts_from_the_arrival_of_the_last_byte_to_the_microsecond() -> None:
    driver = Driver()
    arrival_us = driver.now_us
    driver.accept("take-lease", duration=500)
    assert end_us(driver) == arrival_us + 500_000
    driver.advance((arrival_us + 499_999 - driver.now_us) / 1000)
    assert driver.engine.lease.is_holder(OWNER)
    driver.advance(0.001)
    assert driver.engine.lease.holder is None
    assert driver.status().lease == 1


def test_what_extends_it_and_what_does_not() -> None:
    driver = Driver().ready(500)
    for kind in ("energize", "de-energize", "reset"):
        driver.advance(10)
        fields = {"halt_count": driver.engine.halt_count} if kind == "reset" else {}
        arrival_us = driver.now_us
        copied = driver.make(kind, **fields)
        driver.feed(copied, 5)
        assert end_us(driver) == arrival_us + 500_000, kind
        driver.feed(copied, 5)
        assert end_us(driver) == arrival_us + 500_000, f"a copy of {kind}"
    before_us = end_us(driver)
    driver.refusal("move", motion=number_of("motion", "hinge"), magnitude=1_000_000)
    driver.refusal("energize", sender=OTHER)
    driver.assist("release")
    for kind in ("status", "describe", "halt", "probe"):
        driver.ask(kind)
    driver.send("renew-lease", sender=OTHER, to=BROADCAST, duration=5000)
    assert end_us(driver) == before_us
    arrival_us = driver.now_us
    driver.send("renew-lease", to=BROADCAST, duration=700)
    assert end_us(driver) == arrival_us + 700_000
    arrival_us = driver.now_us
    driver.accept("de-energize")
    assert end_us(driver) == arrival_us + 700_000, "the duration is that of the last renewal"


@pytest.mark.parametrize("ends_by", ["expiry", "release"])
def test_its_end_cancels_and_de_energizes_after_rest(ends_by: str) -> None:
    driver = Driver().ready(500)
    numbers = [driver.move() for _ in range(7)]
    numbers.append(driver.move(start_at=driver.engine.clock() + 5_000_000))
    seen = driver.advance(450)
    seen += driver.send("release-lease", wait_ms=0) if ends_by == "release" else driver.advance(50)
    assert driver.engine.lease.holder is None
    assert driver.state == "moving"
    seen += driver.advance(100)
    done = sum(outcome == "done" for _, outcome, _ in endings(seen))
    assert done in (4, 5)
    assert endings(seen) == [
        *((number, "done", "none") for number in numbers[:done]),
        *((number, "cancelled", "lease-end") for number in numbers[done:]),
    ]
    assert driver.engine.truth.motion_starts == done + 1
    assert driver.state == "idle"


def test_a_ballistic_motion_lands_and_nobody_takes_the_lease_before() -> None:
    driver = Driver().ready()
    number = driver.move("pivot")
    driver.advance(75)
    driver.accept("release-lease")
    assert driver.refusal("take-lease", sender=OTHER, duration=500) == ("moving", None)
    seen = driver.advance(60)
    assert endings(seen) == [(number, "done", "none")]
    assert seen[0].message.interrupted == number_of("cause", "lease-end")
    driver.accept("take-lease", sender=OTHER, duration=500)
    assert driver.engine.lease.number == 2


def test_a_holding_actuator_keeps_its_power() -> None:
    driver = Driver(ModuleConfig.holding()).ready()
    driver.accept("release-lease")
    assert driver.state == "energized"
    driver.accept("take-lease", duration=500)
    driver.move()  # still energized: nothing but the lease was missing


def test_a_former_holder_releases_nothing() -> None:
    driver = Driver().ready()
    old = driver.engine.lease.number
    driver.accept("release-lease")
    driver.accept("take-lease", sender=OTHER, duration=5000)
    assert driver.refusal("release-lease", lease=old)[0] == "stale-lease"
    assert driver.refusal("release-lease")[0] == "not-holder"
    assert driver.engine.lease.is_holder(OTHER)
