"""The model of the contract: it accuses no sound module, and says the clause when an answer cannot be."""

from __future__ import annotations

import random
from collections.abc import Iterator
from typing import Any

import pytest
from judging import SEED, firmware
from sound_configs import CONFIGS
from sound_engines import ENGINES

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.links import MemoryLink
from protobench.suite.bench import Bench
from protobench.suite.facts import Facts
from protobench.suite.language import Language
from protobench.suite.model import Model
from protobench.suite.options import RunOptions
from protobench.suite.run import run_suite
from protobench.wire import load_codec

CONTRACT = load_contract()
CODEC = load_codec(CONTRACT)
MODULE, CONTROLLER, SESSION = 1, 0x00010001, 0x5EED0001
MS = 1_000_000
REPORT: dict[str, Any] = {
    "change": 5, "epoch": 3, "state": "halted", "activity": "idle", "halt_latch": True, "fault_latch": False,
    "halt_count": 1, "halt_cause": "restart", "restart_cause": "power-on", "lease": 0, "holder": 0,
    "holder_session": 0, "queued": 0, "scheduled": 0, "unconfirmed": 0, "position_known": False, "position": 0,
    "faces": [], "latched_faults": 0, "clock": 1000, "lease_remaining": 0, "supply": 7400, "battery": 900,
    "temperatures": [],
}  # fmt: skip


# ------------------------------------------------------------ no sound module is accused


class Attached:
    """Puts a model beside the module in every case of a run, and keeps what it says."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch) -> None:
        self.accused: list[str] = []
        self.models: list[Model] = []
        begin, end = Bench.begin, Bench.end

        def begin_with_model(bench: Bench, case_id: str) -> None:
            model = Model(bench.contract, bench.facts, bench.address, codec=bench.language.codec)
            self.models = [model]
            bench.port.beside = model
            begin(bench, case_id)
            bench.a.status()  # what the model begins from

        def end_and_keep(bench: Bench) -> None:
            try:
                end(bench)
            finally:
                self.accused += [f"{one.clause}: {one.reason}" for one in self.models[0].violations]
                self.models[0].violations.clear()

        monkeypatch.setattr(Bench, "begin", begin_with_model)
        monkeypatch.setattr(Bench, "end", end_and_keep)


@pytest.fixture
def attached(monkeypatch: pytest.MonkeyPatch) -> Attached:
    return Attached(monkeypatch)


def test_the_python_module_is_not_accused_in_any_case(attached: Attached) -> None:
    assert run_suite(RunOptions(seed=SEED)).count("pass") > 200
    assert attached.accused == []


def test_the_c_module_is_not_accused_in_any_case(attached: Attached) -> None:
    run_suite(RunOptions(link=f"lockstep:{firmware('module-lockstep')}", seed=SEED))
    assert attached.accused == []


@pytest.mark.parametrize("name", ["smallest", "slow", "turnaround", "tight", "quick-motions", "holding"])
def test_other_sound_modules_are_not_accused(name: str, attached: Attached) -> None:
    def opener() -> MemoryLink:
        return MemoryLink(ModuleEngine(CONFIGS[name], Storage(), random.Random(SEED), CONTRACT))

    run_suite(RunOptions(opener=opener, seed=SEED, only="MOT or LSE or HLT or SEQ"))
    assert attached.accused == []


@pytest.mark.parametrize("name", ENGINES)
def test_modules_that_take_other_freedoms_are_not_accused(name: str, attached: Attached) -> None:
    def opener() -> MemoryLink:
        return MemoryLink(ENGINES[name](ModuleConfig(), Storage(), random.Random(SEED), CONTRACT))

    run_suite(RunOptions(opener=opener, seed=SEED, only="MOT or LSE or HLT or ACK"))
    assert attached.accused == []


# ------------------------------------------------------------ what cannot be is said with its clause


class Talk:
    """Frames both ways, by hand, a millisecond apart."""

    def __init__(self) -> None:
        description = {
            "sessions": 4, "numbers": 8, "queue": 2, "outcomes": 4, "groups": 2, "faces": 0, "receipt_ms": 10,
            "stop_ms": 50, "starting_ms": 50, "majors": (1,), "hardware_id": bytes(8),
        }  # fmt: skip
        self.language = Language(CONTRACT, CODEC)
        self.model = Model(CONTRACT, Facts(description), MODULE, codec=CODEC)
        self.now = 0
        self.number = 0
        self.ask("status")
        self.answer("status-report", **REPORT)

    def ask(self, kind: str, **fields: Any) -> None:
        self.number += 1
        self.again(kind, self.number, **fields)

    def again(self, kind: str, number: int, **fields: Any) -> None:
        self.now += MS
        body = self.language.body(kind, fields)
        code = self.language.code(kind)
        frame = self.language.pack(
            code, body, source=CONTROLLER, destination=MODULE, session=SESSION, number=number
        )
        self.model.sent(frame, self.now)

    def answer(self, kind: str, *, number: int | None = None, session: int = SESSION, **fields: Any) -> None:
        self.now += MS
        where = {"source": MODULE, "destination": CONTROLLER, "session": session}
        body = self.language.body(kind, fields)
        code = self.language.code(kind)
        frame = self.language.pack(code, body, number=self.number if number is None else number, **where)
        self.model.received(frame, self.now)

    @property
    def clauses(self) -> list[str]:
        return [violation.clause for violation in self.model.violations]


@pytest.fixture
def talk() -> Iterator[Talk]:
    talk = Talk()
    assert not talk.model.lost
    return talk


def test_a_right_exchange_is_allowed(talk: Talk) -> None:
    talk.ask("take-lease", epoch=3, lease=0, duration=1000)
    talk.answer("receipt", result="accepted", lease=1)
    talk.ask("reset", epoch=3, lease=1, halt_count=1)
    talk.answer("receipt", result="accepted")
    talk.ask("energize", epoch=3, lease=1)
    talk.answer("receipt", result="accepted")
    told = {
        "activity": "energized",
        "state": "energized",
        "halt_latch": False,
        "lease": 1,
        "lease_remaining": 990,
    }
    talk.ask("status")
    talk.answer("status-report", **{**REPORT, **told, "holder": CONTROLLER, "holder_session": SESSION})
    assert talk.clauses == []
    assert not talk.model.lost


WRONG = {
    "an old epoch accepted": (
        "take-lease",
        {"epoch": 2, "lease": 0, "duration": 1000},
        {"result": "accepted", "lease": 1},
        "SEQ-14",
    ),
    "a wrong lease number given": (
        "take-lease",
        {"epoch": 3, "lease": 0, "duration": 1000},
        {"result": "accepted", "lease": 2},
        "STA-01",
    ),
    "too short a lease given": (
        "take-lease",
        {"epoch": 3, "lease": 0, "duration": 499},
        {"result": "accepted", "lease": 1},
        "BDY-13",
    ),
    "energized by one without lease": (
        "energize",
        {"epoch": 3, "lease": 0},
        {"result": "accepted"},
        "LSE-03",
    ),
    "another reason": (
        "energize",
        {"epoch": 3, "lease": 0},
        {"result": "refused", "reason": "halted"},
        "LSE-03",
    ),
    "the wrong key": (
        "take-lease",
        {"epoch": 3, "lease": 0},
        {"result": "refused", "reason": "malformed", "key": 1},
        "BDY-08",
    ),
    "a form that is refused": ("status", {70: 1}, {"result": "accepted"}, "BDY-10"),
    "a stale epoch that is not told": (
        "energize",
        {"epoch": 2, "lease": 0},
        {"result": "refused", "reason": "stale-epoch", "epoch": 2, "lease": 0},
        "SEQ-14",
    ),
}


@pytest.mark.parametrize("name", WRONG)
def test_a_wrong_receipt(name: str, talk: Talk) -> None:
    kind, fields, receipt, clause = WRONG[name]
    talk.ask(kind, **{str(key): value for key, value in fields.items()}) if all(
        isinstance(key, str) for key in fields
    ) else talk.model.sent(_frame(talk, kind, fields), talk.now + MS)
    talk.answer("receipt", **receipt)
    assert talk.clauses == [clause]


def _frame(talk: Talk, kind: str, fields: dict[Any, Any]) -> bytes:
    talk.number += 1
    body = talk.language.body(kind, fields)
    return talk.language.pack(
        talk.language.code(kind),
        body,
        source=CONTROLLER,
        destination=MODULE,
        session=SESSION,
        number=talk.number,
    )


def test_no_answer(talk: Talk) -> None:
    talk.ask("describe")
    talk.model.quiet(talk.now + 10 * MS)
    assert talk.clauses == []
    talk.model.quiet(talk.now + 11 * MS)
    assert talk.clauses == ["ACK-01"]


def test_an_answer_out_of_order(talk: Talk) -> None:
    talk.ask("probe")
    talk.ask("time-exchange", t1=7)
    talk.answer("time-answer", t1=7, t2=1, t3=2)
    assert talk.clauses == ["ACK-16"]


def test_a_copy_answered_otherwise(talk: Talk) -> None:
    fields = {"epoch": 3, "lease": 0, "duration": 1000}
    talk.ask("take-lease", **fields)
    talk.answer("receipt", result="accepted", lease=1)
    talk.again("take-lease", talk.number, **fields)
    talk.answer("receipt", result="accepted", lease=2)
    assert talk.clauses == ["SEQ-03"]


def test_a_lease_that_ends_too_soon(talk: Talk) -> None:
    talk.ask("take-lease", epoch=3, lease=0, duration=1000)
    talk.answer("receipt", result="accepted", lease=1)
    talk.ask("status")
    talk.answer("status-report", **{**REPORT, "lease": 1})
    assert talk.clauses == ["DSC-03"]


def test_a_lease_may_end_late_by_what_the_contract_allows(talk: Talk) -> None:
    talk.ask("take-lease", epoch=3, lease=0, duration=500)
    end = talk.now + 500 * MS
    talk.answer("receipt", result="accepted", lease=1)
    talk.now = end + 10 * MS
    held = {"lease": 1, "holder": CONTROLLER, "holder_session": SESSION}
    talk.ask("status")
    talk.answer("status-report", **{**REPORT, **held})
    assert talk.clauses == []
    talk.now = end + 60 * MS
    talk.ask("status")
    talk.answer("status-report", **{**REPORT, **held})
    assert talk.clauses == ["DSC-03"]


def test_a_halt_that_was_not_executed(talk: Talk) -> None:
    talk.ask("halt")
    talk.answer("halt-receipt", disposition="at-rest", halt_count=1, epoch=3)
    assert talk.clauses == ["HLT-05"]


def test_an_outcome_of_nothing(talk: Talk) -> None:
    told = {"motion": "pivot", "outcome": "done", "cause": "none", "displacement": 0, "duration_ms": 0}
    talk.answer("outcome", event=1, epoch=3, change=6, **told)
    assert talk.clauses == ["ACK-07"]


def test_a_restart_that_nobody_asked_for(talk: Talk) -> None:
    told = {"restart_cause": "watchdog", "hardware_id": bytes(8), "nature": "emulated"}
    talk.answer("started", number=0, session=0, epoch=4, change=1, **told)
    assert talk.clauses == ["LOD-02"]
    assert talk.model.lost
