"""Numbers and copies, against a plain model that keeps everything."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st
from module_driver import OTHER, OWNER, Driver, of_kind

from emulator.history import COPY, NEW, Entry, History

KEY = (0x10001, 1)
HALF = 1 << 31
MODULUS = 1 << 32
START = st.sampled_from([0, 5, HALF - 3, HALF, MODULUS - 20, MODULUS - 1])


def history(holder: tuple[int, int] | None = None) -> History:
    return History(4, 8, lambda key: key == holder)


def take(kept: History, key: tuple[int, int], number: int, digest: int = 0) -> str:
    """What a command with this number is told; a new one is consumed and its receipt kept."""
    standing, _ = kept.lookup(key, number, digest)
    if standing == NEW:
        kept.store(kept.consume(key, number), number, Entry(digest, b""))
    return standing


class Model:
    """The contract's clauses SEQ-02 to SEQ-06, word by word."""

    def __init__(self) -> None:
        self.highest: int | None = None
        self.seen: set[int] = set()
        self.stored: list[tuple[int, int]] = []

    def take(self, number: int, digest: int) -> str:
        if self.highest is None or 0 < (number - self.highest) % MODULUS < HALF:
            self.highest = number
            self.seen.add(number)
            kept = [one for one in self.stored if one[0] != number]
            self.stored = [*kept[-7:], (number, digest)]
            return NEW
        stored = dict(self.stored)
        if number in stored:
            return COPY if stored[number] == digest else "conflict"
        behind = (self.highest - number) % MODULUS
        if behind >= 32 or number in self.seen:
            return "answer-expired"
        return "late-unseen"


@given(start=START, steps=st.lists(st.tuples(st.integers(-40, 40), st.integers(0, 1)), max_size=60))
def test_agrees_with_the_clauses(start: int, steps: list[tuple[int, int]]) -> None:
    kept, model = history(), Model()
    assert take(kept, KEY, start) == model.take(start, 0) == NEW
    for offset, digest in steps:
        assert model.highest is not None
        number = (model.highest + offset) % MODULUS
        assert take(kept, KEY, number, digest) == model.take(number, digest)


def test_distance_that_is_undefined_is_expired() -> None:
    kept = history()
    take(kept, KEY, 10)
    assert take(kept, KEY, 10 + HALF) == "answer-expired"
    assert take(kept, KEY, 10 + HALF - 1) == NEW


def test_the_session_used_longest_ago_goes_and_the_holders_stays() -> None:
    holder = (9, 9)
    kept = history(holder)
    for key in (holder, (1, 1), (2, 1), (3, 1)):
        take(kept, key, 1)
    take(kept, (1, 1), 1)  # a copy uses the session too
    take(kept, (4, 1), 1)
    assert list(kept.sessions) == [holder, (3, 1), (1, 1), (4, 1)]
    for source in range(5, 20):
        take(kept, (source, 1), 1)
    assert holder in kept.sessions
    assert len(kept.sessions) == 4


def test_a_copy_gets_the_same_bytes_and_acts_no_more() -> None:
    driver = Driver().ready()
    data = driver.make("move", motion=3, magnitude=500)
    first = of_kind(driver.feed(data, 300), "receipt")
    driver.send("halt")  # the copy is answered as before, although a move would now be refused
    again = of_kind(driver.feed(data, 60), "receipt")
    assert [one.data for one in first] == [one.data for one in again]
    assert driver.engine.truth.motion_starts == 1


def test_a_copy_to_another_destination_is_a_conflict() -> None:
    driver = Driver().ready()
    fields = {"epoch": driver.engine.epoch, "lease": driver.engine.lease.number, "duration": 1000}
    driver.accept("renew-lease", **fields)
    driver.number -= 1
    assert driver.refusal("renew-lease", **{**fields, "duration": 1001}) == ("conflict", None)
    driver.number -= 1
    assert driver.ask("renew-lease", **fields).result == 0


def test_a_command_to_many_is_consumed_and_a_copy_of_it_refused_in_silence() -> None:
    driver = Driver().ready()
    data = driver.make("renew-lease", to=0xFFFFFFFF, duration=2000, answer_window=10)
    assert len(of_kind(driver.feed(data, 60), "receipt")) == 1
    assert driver.feed(data, 60) == []
    assert driver.engine.silent_refusals == 1
    number = driver.number
    driver.number = number - 1
    assert driver.refusal("energize") == ("answer-expired", None)


def test_what_may_not_go_to_many_and_reads_to_many_consume_no_number() -> None:
    driver = Driver().ready()
    number = driver.number
    driver.send("energize", to=0xFFFFFFFF)
    driver.send("probe", to=0xFFFFFFFF, answer_window=1)
    driver.send("probe", sender=OTHER, to=0xFFFFFFFF, answer_window=1)
    assert {key: kept.highest for key, kept in driver.engine.history.sessions.items()} == {OWNER: number}
    driver.send("renew-lease", sender=OTHER, to=0xFFFFFFFF, duration=500)
    assert driver.engine.history.sessions[OTHER].highest == driver.number, "refused, and consumed all the same"


def test_a_refused_number_is_consumed_and_reads_and_halts_consume_none() -> None:
    driver = Driver().ready()
    driver.number = 100
    assert driver.refusal("take-lease", sender=OTHER, duration=1000)[0] == "lease-held"
    driver.number = 100
    again = driver.ask("take-lease", sender=OTHER, duration=1000)
    assert again.result == 1  # the stored receipt
    for before, kind in ((200, "status"), (400, "halt")):
        driver.number = before
        driver.send(kind, sender=OTHER)
        driver.number = before
        assert driver.refusal("energize", sender=OTHER)[0] == "not-holder"
        assert driver.engine.history.sessions[OTHER].highest == before + 1
