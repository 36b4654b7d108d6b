"""What waits to be sent: order, delay, room, windows; identity, groups, assist, truth."""

from __future__ import annotations

import random

import pytest
from module_driver import (
    ANY_CONTROLLER,
    BROADCAST,
    CODEC,
    CONTRACT,
    OTHER,
    OWNER,
    Driver,
    endings,
    number_of,
    of_kind,
)

from emulator.config import ModuleConfig
from emulator.storage import Storage

PROFILES = [ModuleConfig(), ModuleConfig.smallest(), ModuleConfig.slow(), ModuleConfig.holding()]
GROUP = 0xF0000001


@pytest.mark.parametrize("config", PROFILES, ids=["default", "smallest", "slow", "holding"])
def test_the_description_is_true(config: ModuleConfig) -> None:
    driver = Driver(config, started=False)
    starting = driver.advance(config.declared_starting_ms)
    (started,) = of_kind(starting, "started")
    assert started.time_us == 1000 * config.starting_ms
    assert started.frame.destination == ANY_CONTROLLER
    told = driver.ask("describe")
    sizes = ("sessions", "numbers", "queue", "outcomes", "faults", "groups", "turnaround_us")
    assert {name: getattr(told, name) for name in sizes} == {name: getattr(config, name) for name in sizes}
    assert told.nature == number_of("nature", "emulated")
    assert (told.faces, told.epoch, told.lease) == (len(config.faces), 1, 0)
    names = CONTRACT.enum_names("motion")
    assert {name for number, name in names.items() if told.motions >> number & 1} == set(config.motions)
    for number, name in names.items():
        if name in config.motions:
            motion = driver.ask("describe-motion", motion=number)
            assert motion.longest_ms == config.motions[name].longest_ms
        else:
            assert driver.refusal("describe-motion", motion=number) == ("unsupported", 0)


@pytest.mark.parametrize("delay_us", [0, 500, 40_000])
def test_answers_leave_after_their_delay_in_order_of_arrival(delay_us: int) -> None:
    driver = Driver(ModuleConfig(receipt_delay_us=delay_us, declared_receipt_ms=50)).ready()
    arrival_us = driver.now_us
    kinds = ["status", "energize", "describe", "read-faults"]
    seen = []
    for kind in kinds:
        seen += driver.send(kind, wait_ms=0.1)
    seen += driver.advance(100)
    assert [one.kind for one in seen] == ["status-report", "receipt", "description", "fault-page"]
    assert [one.time_us - arrival_us for one in seen] == [delay_us + 100 * place for place in range(4)]


def test_a_halt_receipt_overtakes() -> None:
    driver = Driver(ModuleConfig(receipt_delay_us=5000)).ready()
    driver.send("status", wait_ms=0)
    driver.send("describe", wait_ms=0)
    kinds = [one.kind for one in driver.send("halt", wait_ms=10)]
    assert kinds == ["halt-receipt", "status-report", "description"]


def test_without_room_a_request_is_dropped_before_the_history_and_a_halt_is_not() -> None:
    driver = Driver(ModuleConfig(answers=4)).ready()
    driver.advance(10)
    for _ in range(4):
        driver.send("status", wait_ms=0)
    data = driver.make("de-energize")
    driver.feed(data)
    assert driver.engine.drops["no-room"] == 1
    seen = driver.send("halt", wait_ms=10)
    assert [one.kind for one in seen] == ["halt-receipt", *["status-report"] * 4]
    assert of_kind(driver.feed(data, 10), "receipt")[0].message.result == 0


def test_a_halt_receipt_keeps_the_turnaround() -> None:
    driver = Driver(ModuleConfig(receipt_delay_us=3000, turnaround_us=3000))
    arrival_us = driver.now_us
    (receipt,) = driver.send("halt", wait_ms=10)
    assert receipt.time_us - arrival_us == 3000


# ---------------------------------------------------------------- to many


def test_without_room_for_another_sessions_answer_a_request_to_many_is_dropped() -> None:
    driver = Driver()
    for session in range(driver.engine.config.sessions):
        driver.send("probe", sender=(OWNER[0], session), to=BROADCAST, answer_window=2000, wait_ms=0)
    driver.send("probe", sender=(OWNER[0], 99), to=BROADCAST, answer_window=2000, wait_ms=0)
    assert driver.engine.drops["no-room"] == 1
    driver.send("probe", sender=(OWNER[0], 99), to=BROADCAST, wait_ms=0)  # asks for no answer
    driver.send("probe", sender=(OWNER[0], 0), to=BROADCAST, answer_window=2000, wait_ms=0)  # replaces
    driver.send("halt", sender=(OWNER[0], 99), to=BROADCAST, answer_window=2000, wait_ms=0)
    assert (driver.engine.drops["no-room"], driver.engine.halt_count) == (1, 2)
    assert len(driver.advance(2100)) == driver.engine.config.sessions


def test_answers_to_many_are_spread_evenly_over_their_window() -> None:
    delays_ms = []
    for seed in range(300):
        driver = Driver(seed=seed)
        arrival_us = driver.now_us
        (answer,) = driver.send("probe", to=BROADCAST, answer_window=400, wait_ms=401)
        delays_ms.append((answer.time_us - arrival_us) / 1000)
    assert 0 <= min(delays_ms) < 20
    assert 380 < max(delays_ms) <= 400
    quarters = [sum(100 * place <= delay < 100 * (place + 1) for delay in delays_ms) for place in range(4)]
    assert all(45 < count < 105 for count in quarters), quarters


def test_a_newer_request_to_many_replaces_the_answer_that_waits() -> None:
    driver = Driver()
    driver.send("probe", to=BROADCAST, answer_window=2000, wait_ms=0)
    driver.send("probe", to=BROADCAST, sender=OTHER, answer_window=2000, wait_ms=0)
    driver.send("status", to=BROADCAST, wait_ms=0)  # refused in silence: replaces nothing
    driver.send("probe", to=BROADCAST, answer_window=1, wait_ms=0)
    number = driver.number
    seen = driver.advance(2100)
    assert [(one.frame.destination, one.frame.number) for one in seen if one.frame.destination == OWNER[0]] == [
        (OWNER[0], number)
    ]
    assert len(seen) == 2
    driver.send("probe", to=BROADCAST, answer_window=2000, wait_ms=0)
    driver.send("probe", to=BROADCAST, answer_window=0, wait_ms=0)
    assert driver.advance(2100) == []


@pytest.mark.parametrize("body", [b"", b"\x80", b"\x81\x00\x00", b"\xff", b"\x81\x00\xcd\x0b\xb8", b"\x81\x00\xa1x"])
def test_a_halt_to_many_whose_body_asks_for_no_answer(body: bytes) -> None:
    driver = Driver().ready()
    data = CODEC.frames.pack(0x20, body, source=OWNER[0], destination=BROADCAST, session=1, number=1)
    assert driver.feed(data, 3000) == []
    assert driver.engine.halt_count == 2
    assert sum(driver.engine.drops.values()) == 0


def test_a_halt_to_many_is_executed_at_once_and_answered_in_its_window() -> None:
    driver = Driver().ready()
    driver.move()
    seen = driver.send("halt", to=BROADCAST, answer_window=300, wait_ms=301)
    assert endings(seen)[0][1] == "halted"
    (receipt,) = of_kind(seen, "halt-receipt")
    assert receipt.message.disposition == number_of("disposition", "stopping")


def test_groups_are_kept_and_heard_by_members_only() -> None:
    storage = Storage()
    driver = Driver(storage=storage).ready()
    driver.send("probe", to=GROUP, answer_window=10)
    assert driver.engine.drops["other-address"] == 1
    driver.accept("set-groups", groups=[GROUP + 5, GROUP, GROUP])
    assert driver.ask("read-groups").groups == (GROUP, GROUP + 5)
    assert len(driver.send("probe", to=GROUP, answer_window=10)) == 1
    driver.assist("restart", cause=0)
    driver.advance(100)
    assert driver.ask("read-groups").groups == (GROUP, GROUP + 5)
    assert driver.refusal("set-groups", groups=[], lease=0)[0] == "not-holder"
    assert storage.writes == 3


# ---------------------------------------------------------------- addresses


def test_a_new_address_is_answered_from_and_kept() -> None:
    driver = Driver().ready()
    driver.accept("de-energize")
    old = driver.engine.address
    (receipt,) = driver.send("assign-address", hardware_id=driver.engine.config.hardware_id, address=77, wait_ms=5)
    assert (receipt.frame.source, receipt.message.result) == (77, 0)
    assert driver.send("status", to=old) == []
    driver.assist("restart", cause=0)
    driver.advance(100)
    assert driver.engine.address == 77
    assert driver.ask("status").epoch == 2


def test_a_module_without_an_address_answers_only_what_gives_it_one() -> None:
    driver = Driver(ModuleConfig(address=0))
    for kind in ("status", "probe", "halt"):
        assert driver.send(kind, to=0) == []
    assert driver.send("renew-lease", to=BROADCAST, duration=500) == []
    assert driver.engine.drops["other-address"] == 4
    (presence,) = driver.send("probe", to=BROADCAST, answer_window=5)
    assert presence.frame.source == 0
    fields = {"to": BROADCAST, "address": 12, "answer_window": 5}
    assert driver.send("assign-address", hardware_id=bytes(8), **fields) == []
    assert driver.engine.silent_refusals == 1
    (receipt,) = driver.send("assign-address", hardware_id=driver.engine.config.hardware_id, **fields)
    assert (receipt.frame.source, driver.engine.address) == (12, 12)


# ---------------------------------------------------------------- assist


def test_power_cut_lets_the_stated_write_fail_and_the_module_start_again() -> None:
    driver = Driver().ready()
    driver.assist("power-cut", writes=2)
    driver.accept("set-groups", groups=[GROUP])
    seen = driver.send("set-groups", groups=[], wait_ms=100)
    assert [one.kind for one in seen] == ["started"]
    assert seen[0].message.restart_cause == number_of("restart_cause", "power-on")
    assert driver.ask("read-groups").groups == (GROUP,)
    assert driver.engine.epoch == 2


def test_power_cut_in_the_write_of_the_epoch() -> None:
    driver = Driver()
    driver.assist("power-cut", writes=1)
    driver.assist("restart", cause=number_of("restart_cause", "watchdog"))
    (started,) = of_kind(driver.advance(100), "started")
    assert (started.message.epoch, started.message.restart_cause) == (2, 0)
    assert not driver.engine.state.fault


def test_a_restart_comes_after_its_receipt_has_left() -> None:
    driver = Driver(ModuleConfig.slow())
    seen = driver.send("assist", op=number_of("assist_op", "restart"), cause=1, wait_ms=1000)
    assert [one.kind for one in seen] == ["receipt", "started"]
    assert seen[1].time_us - seen[0].time_us == 800_000


def test_assist_lacking_a_field_is_malformed_and_with_a_strange_code_out_of_range() -> None:
    driver = Driver()
    needs = {"raise": 3, "withdraw": 3, "restart": 5, "power-cut": 6, "preset": 7, "hold": 9}
    for operation, key in needs.items():
        assert driver.refusal("assist", op=number_of("assist_op", operation)) == ("malformed", key)
    assert driver.refusal("assist", op=number_of("assist_op", "preset"), item=1) == ("malformed", 8)
    assert driver.refusal("assist", op=1, code=999) == ("out-of-range", 3)


def test_the_truth_log_tells_power_motion_and_bonds_newest_first() -> None:
    driver = Driver().ready()
    driver.move("bond", 0, face=1)
    driver.advance(60)
    driver.accept("de-energize")
    page = driver.ask("read-truth")
    names = [CONTRACT.enum_names("truth_event")[entry.event] for entry in page.entries]
    assert names == ["de-energized", "at-rest", "bond-closed", "motion-start", "energized"]
    assert (page.motion_starts, page.energized, page.total) == (1, False, 5)
    times = [entry.time for entry in page.entries]
    assert times == sorted(times, reverse=True)


def test_identify_moves_nothing_in_any_state() -> None:
    driver = Driver()
    driver.accept("take-lease", duration=30_000)
    driver.accept("identify", duration=100)
    driver.accept("reset", halt_count=1)
    driver.accept("energize")
    driver.move()
    driver.accept("identify", duration=100)
    driver.raise_fault("over-current")
    driver.accept("identify", duration=100)
    assert driver.engine.truth.motion_starts == 1


def test_one_seed_gives_one_byte_sequence() -> None:
    runs = []
    for _ in range(2):
        rng, driver = random.Random(4), Driver(seed=9)
        seen = []
        for _ in range(200):
            seen += driver.send("probe", to=BROADCAST, answer_window=rng.randrange(100), wait_ms=rng.randrange(60))
        runs.append([(one.time_us, one.data) for one in seen])
    assert runs[0] == runs[1]
    assert len(runs[0]) > 50
