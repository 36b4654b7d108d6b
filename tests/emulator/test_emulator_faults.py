"""The fault list by itself and in the module: told, repeated, cleared, overflowing, outlasting a restart."""

from __future__ import annotations

from itertools import pairwise

import pytest
from module_driver import ANY_CONTROLLER, CONTRACT, OTHER, OWNER, Driver, Seen, endings, number_of, of_kind

from emulator.faults import FaultList

LATCHING = CONTRACT.fault("over-current").code
NOTICE = CONTRACT.fault("bond-weak").code
OVERFLOW = CONTRACT.fault("list-overflow").code


def faults_in(seen: list[Seen]) -> list[Seen]:
    return of_kind(seen, "fault")


def times_ms(seen: list[Seen]) -> list[float]:
    return [(one.time_us - seen[0].time_us) / 1000 for one in seen]


def test_told_at_once_to_the_holder_or_to_any_controller() -> None:
    driver = Driver()
    (told,) = faults_in(driver.send("assist", op=1, code=LATCHING, wait_ms=0))
    assert (told.frame.destination, told.frame.session, told.frame.number) == (ANY_CONTROLLER, 0, 0)
    driver.advance(400)
    driver.accept("take-lease", duration=30_000)
    (told,) = faults_in(driver.advance(50))
    assert (told.frame.destination, told.frame.session) == OWNER
    assert (told.message.event, told.message.occurrence, told.message.count) == (1, 1, 1)
    assert driver.state == "faulted"


def test_repeats_at_doubling_intervals_up_to_the_slowest() -> None:
    driver = Driver()
    seen = faults_in(driver.send("assist", op=1, code=LATCHING, wait_ms=40_000))
    assert times_ms(seen) == [0, 500, 1500, 3500, 7500, 15_500, 23_500, 31_500, 39_500]
    assert len({one.data for one in seen}) == 1


def test_a_notice_is_repeated_four_times_and_latches_nothing() -> None:
    driver = Driver().ready()
    seen = faults_in(driver.send("assist", op=1, code=NOTICE, wait_ms=60_000))
    assert times_ms(seen) == [0, 500, 1500, 3500, 7500]
    assert not driver.engine.state.fault


def test_whose_confirm_does_what() -> None:
    driver = Driver().ready()
    driver.raise_fault("over-current")
    driver.send("confirm", sender=OTHER, event=1, wait_ms=0)
    arrival_us = driver.now_us
    seen = faults_in(driver.advance(8100))
    assert [one.time_us for one in seen][-1] == arrival_us + 8_000_000
    assert driver.ask("read-faults").entries[0].told == 0
    driver.send("confirm", event=1)
    assert driver.ask("read-faults").entries[0].told == 1
    assert faults_in(driver.advance(20_000)) == []
    assert driver.state == "faulted", "confirming is not clearing"


def test_events_keep_their_distance_and_first_tellings_go_before_repeats() -> None:
    driver = Driver()
    names = [fault.name for fault in CONTRACT.faults if fault.name != "list-overflow"][:8]
    seen = []
    for name in names:
        seen += driver.send("assist", op=1, code=CONTRACT.fault(name).code, wait_ms=7)
    seen = faults_in(seen + driver.advance(20_000))
    gaps = [later.time_us - earlier.time_us for earlier, later in pairwise(seen)]
    assert min(gaps) >= 100_000
    assert [one.message.occurrence for one in seen[:8]] == list(range(1, 9))


def test_a_grant_announces_what_is_latched_afresh() -> None:
    driver = Driver().ready()
    driver.raise_fault("over-current")
    driver.send("confirm", event=1)
    driver.accept("release-lease")
    assert faults_in(driver.advance(9000)) == []
    driver.accept("take-lease", sender=OTHER, duration=5000)
    told = faults_in(driver.advance(600))
    assert [one.message.event for one in told] == [1, 1]
    assert {(one.frame.destination, one.frame.session) for one in told} == {OTHER}


def test_clear_names_all_or_nothing_at_rest_and_causes_gone() -> None:
    driver = Driver().ready()
    driver.raise_fault("over-current")
    driver.raise_fault("winding-hot")
    assert driver.refusal("clear-faults", occurrences=[1, 3])[0] == "no-such-fault"
    driver.withdraw("over-current")
    assert driver.refusal("clear-faults", occurrences=[1, 2])[0] == "cause-stands"
    assert driver.status().latched_faults == 2
    driver.accept("clear-faults", occurrences=[1])
    assert (driver.status().latched_faults, driver.state) == (1, "faulted")
    driver.withdraw("winding-hot")
    driver.accept("clear-faults", occurrences=[2, 2])
    assert driver.state == "idle"
    assert driver.refusal("clear-faults", occurrences=[2])[0] == "no-such-fault"
    entries = driver.ask("read-faults").entries
    assert [(entry.occurrence, entry.latched) for entry in entries] == [(2, 0), (1, 0)]


def test_edges_count_and_standing_does_not() -> None:
    driver = Driver()
    for _ in range(3):
        driver.raise_fault("supply-low")
        driver.raise_fault("supply-low")
        driver.withdraw("supply-low")
    entries = driver.ask("read-faults").entries
    assert [(entry.occurrence, entry.count) for entry in entries] == [(3, 3), (2, 2), (1, 1)]


def test_a_latching_fault_stops_what_moves_and_cancels_what_waits() -> None:
    driver = Driver().ready()
    running, queued = driver.move(), driver.move()
    driver.raise_fault("over-current")
    assert driver.state == "stopping"
    assert endings(driver.advance(100)) == [(running, "failed", "fault"), (queued, "cancelled", "fault")]
    assert driver.state == "faulted"
    assert driver.engine.state.activity == "idle"


def test_a_full_list_tells_that_it_is_full_and_takes_what_stands_when_there_is_a_place() -> None:
    driver = Driver().ready()
    for _ in range(8):
        driver.raise_fault("over-current")
        driver.withdraw("over-current")
    driver.raise_fault("winding-hot")
    page = driver.ask("read-faults")
    assert (page.total, page.lost) == (9, 1)
    assert (page.entries[0].code, page.entries[0].value) == (OVERFLOW, 1)
    driver.accept("clear-faults", occurrences=[3])
    newest = driver.ask("read-faults").entries[0]
    assert (newest.code, newest.count) == (CONTRACT.fault("winding-hot").code, 1)
    assert driver.ask("read-faults").total == 9


@pytest.mark.parametrize("cause", ["watchdog", "brown-out", "power-on", "commanded", "external"])
def test_restarts_that_are_faults_are_told_in_the_start_that_follows(cause: str) -> None:
    driver = Driver()
    driver.assist("restart", cause=number_of("restart_cause", cause))
    seen = driver.advance(100)
    codes = [one.message.code for one in faults_in(seen)]
    assert codes == ([CONTRACT.fault(cause).code] if cause in ("watchdog", "brown-out") else [])
    assert driver.engine.state.fault == bool(codes)
    assert of_kind(seen, "started")[0].message.restart_cause == number_of("restart_cause", cause)


def test_a_cause_that_survives_is_latched_again_until_it_is_withdrawn() -> None:
    driver = Driver()
    driver.raise_fault("bond-lost", survives=True)
    driver.raise_fault("over-current")
    for _ in range(2):
        driver.assist("restart", cause=0)
        driver.advance(100)
        assert [entry.code for entry in driver.ask("read-faults").entries] == [CONTRACT.fault("bond-lost").code]
    driver.withdraw("bond-lost")
    driver.assist("restart", cause=0)
    driver.advance(100)
    assert driver.ask("read-faults").total == 0


def test_own_address_is_one_fault_until_it_is_cleared() -> None:
    driver = Driver().ready()
    for _ in range(5):
        driver.send("status", sender=(driver.engine.address, 1), wait_ms=0)
    assert driver.engine.drops["own-source"] == 5
    (entry,) = driver.ask("read-faults").entries
    assert (entry.code, entry.standing) == (CONTRACT.fault("address-conflict").code, 0)
    driver.accept("clear-faults", occurrences=[entry.occurrence])
    assert driver.state == "idle"


def test_the_machine_keeps_a_place_of_its_own_for_overflow() -> None:
    faults = FaultList(CONTRACT, 8)
    event = 0
    for step in range(50):
        if faults.occur(LATCHING, step, step, 0, event + 1):
            event += 1
    assert len(faults.occurrences) == 9
    assert [entry.code for entry in faults.occurrences].count(OVERFLOW) == 1
    assert faults.lost == 42
    assert [entry.count for entry in faults.latched] == list(range(1, 9))
