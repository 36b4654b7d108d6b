"""What passed in a case, as its record keeps it: raw, in order, up to the verdict, and bounded."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterator

import pytest

from protobench.judge import CaseRecord, Failed, NotApplicable
from protobench.suite import session as session_module
from protobench.suite.bench import Bench
from protobench.suite.case import CaseInfo
from protobench.suite.options import RunOptions
from protobench.suite.session import Session
from protobench.suite.watch import Violation


@pytest.fixture
def session() -> Iterator[Session]:
    """A session with the embedded module."""
    with Session(RunOptions()) as opened:
        yield opened


def judge(session: Session, function: Callable[[Bench], None]) -> CaseRecord:
    return session.judge(CaseInfo("STA.x", "required", "valid", "A purpose.", ("STA-01",), "", function))


def ask(bench: Bench, times: int) -> None:
    for _ in range(times):
        bench.a.status()


def fail_after(times: int) -> Callable[[Bench], None]:
    def function(bench: Bench) -> None:
        ask(bench, times)
        raise Failed("as the test wants it", clause="STA-01")

    return function


def test_a_failed_case_keeps_what_passed_up_to_the_failure(session: Session) -> None:
    before = judge(session, fail_after(0)).exchange
    record = judge(session, fail_after(3))
    asked = record.exchange[len(before) :]
    assert [passed.direction for passed in asked] == ["->", "<-"] * 3
    assert all(passed.words.startswith(("status #", "status-report #")) for passed in asked)
    times_ns = [passed.time_ns for passed in record.exchange]
    assert times_ns == sorted(times_ns)
    assert times_ns[0] == 0
    for passed in record.exchange:
        assert session.bench.language.read(passed.data).words == passed.words
        assert f"{passed.direction} {passed.words}\n" in record.detail
        assert passed.data.hex(" ") in record.detail


def test_a_passed_case_keeps_nothing(session: Session) -> None:
    record = judge(session, lambda bench: ask(bench, 3))
    assert (record.verdict, list(record.exchange), record.detail) == ("pass", [], "")


def test_what_the_watch_finds_ends_the_exchange(session: Session) -> None:
    before = len(judge(session, fail_after(0)).exchange)

    def function(bench: Bench) -> None:
        ask(bench, 2)
        bench.port.watch.violations.append(Violation("FRM-16", "as the test wants it"))
        ask(bench, 5)

    record = judge(session, function)
    assert record.reason == "FRM-16: as the test wants it"
    assert len(record.exchange) == before + 6  # two questions, and the one whose answer comes after it


def test_raw_bytes_are_kept_as_they_were_sent(session: Session) -> None:
    def function(bench: Bench) -> None:
        bench.port.send_raw(b"\x01\x02" * 500)
        raise Failed("as the test wants it")

    last = judge(session, function).exchange[-1]
    assert (last.direction, last.data, last.words) == ("->", b"\x01\x02" * 500, "raw bytes")


def test_the_oldest_of_too_many_are_given_up(session: Session) -> None:
    session.bench.port.events = deque(maxlen=10)
    record = judge(session, fail_after(20))
    assert len(record.exchange) == 10
    assert record.exchange[-1].words.startswith("status-report #")
    assert record.exchange[0].time_ns > 0


def test_a_run_keeps_only_ends_after_so_many(session: Session, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(session_module, "EXCHANGE_RUN_MAX", 50)
    monkeypatch.setattr(session_module, "EXCHANGE_LEAST", 4)
    assert len(judge(session, fail_after(30)).exchange) > 60
    record = judge(session, fail_after(30))
    assert [passed.direction for passed in record.exchange] == ["->", "<-"] * 2
    assert "as the test wants it" in record.reason


def test_a_case_that_finds_itself_not_applicable_may_fail_in_its_postamble(
    session: Session, monkeypatch: pytest.MonkeyPatch
) -> None:
    def not_for_this_module(bench: Bench) -> None:
        ask(bench, 1)
        raise NotApplicable("as the test wants it")

    def end(bench: Bench) -> None:
        ask(bench, 1)
        raise Failed("it does not come back")

    monkeypatch.setattr(Bench, "end", end)
    record = judge(session, not_for_this_module)
    assert (record.verdict, record.reason) == ("fail", "postamble: it does not come back")
    assert record.exchange
