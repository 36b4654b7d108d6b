"""Running derived sequences: against simulated subjects, and the number window against sound and broken modules."""

from __future__ import annotations

import multiprocessing
import sys
import tomllib
from collections.abc import Callable
from pathlib import Path

import pytest
from judging import firmware
from machine_samples import WORKED, MachineSubject, from_rows, mutants, word

from protobench.judge import Failed, Inconclusive
from protobench.links import LinkError
from protobench.suite.machines import states_run, workers
from protobench.suite.machines.compare import RESET, UNREPEATED_MAX, Comparison, compare, run_word
from protobench.suite.machines.derive import derive
from protobench.suite.machines.mealy import Mealy
from protobench.suite.machines.states_run import Wanted, open_plan, verdict
from protobench.suite.machines.subjects import prepare
from protobench.suite.machines.window import INPUTS, WORD_MAX, clause_of, window_machine
from protobench.suite.machines.window_driver import WindowDriver
from protobench.suite.options import RunOptions
from protobench.suite.session import Session

DEFECTS = Path(__file__).parents[1] / "defects"
sys.path.insert(0, str(DEFECTS))
from broken_modules import BROKEN  # noqa: E402

MACHINE = from_rows(WORKED)
SUITE = derive(MACHINE, "W", 0)


def always(_: Comparison) -> bool:
    return True


# ---------------------------------------------------------------- simulated subjects


def test_a_subject_that_follows_the_machine_takes_every_sequence():
    subject = MachineSubject(MACHINE)
    done = compare(MACHINE, subject, SUITE, always)
    assert (done.sequences, done.inputs) == SUITE.size == (subject.resets, subject.steps)
    assert done.difference is None
    assert done.unrepeated == []


@pytest.mark.parametrize("index", range(50))
def test_the_first_difference_is_told_where_it_is(index):
    _, mutant = list(mutants(MACHINE))[index]
    done = compare(MACHINE, MachineSubject(mutant), SUITE, always)
    assert done.difference is not None
    sequence, found, _ = done.difference
    upto = sequence[: found.at + 1]
    assert MACHINE.run(upto)[:-1] == mutant.run(upto)[:-1]
    assert (MACHINE.run(upto)[-1], mutant.run(upto)[-1]) == (found.expected, found.got)


class Wavering(MachineSubject):
    """Gives a wrong output the first time that a sequence of a certain kind comes, as often as told."""

    def __init__(self, machine: Mealy, wrong_answers: list[str | Exception]) -> None:
        super().__init__(machine)
        self.wrong = wrong_answers

    def step(self, symbol: str) -> str:
        right = super().step(symbol)
        if self.wrong and self.steps % 3 == 0:
            wrong = self.wrong.pop()
            if isinstance(wrong, Exception):
                raise wrong
            return wrong
        return right


def test_what_does_not_come_again_is_no_difference():
    done = compare(MACHINE, Wavering(MACHINE, ["x"]), SUITE, always)
    assert done.difference is None
    assert len(done.unrepeated) == 1
    assert done.sequences == SUITE.size.sequences


def test_a_subject_that_never_repeats_itself_is_given_up():
    class Restless(MachineSubject):
        def step(self, symbol: str) -> str:
            return f"{super().step(symbol)} {self.steps}"

    long = derive(MACHINE, "W", 1)
    done = compare(MACHINE, Restless(MACHINE), long, always)
    assert done.difference is None
    assert len(done.unrepeated) == UNREPEATED_MAX
    assert done.sequences == UNREPEATED_MAX < long.size.sequences


def test_a_verdict_on_the_way_is_a_difference_and_an_unclear_one_is_not():
    class Stuck(MachineSubject):
        def reset(self) -> None:
            raise Failed("it stays where it is", clause="STA-08")

    done = compare(MACHINE, Stuck(MACHINE), SUITE, always)
    assert done.difference is not None
    assert done.difference.found == (RESET, "the start", "STA-08: it stays where it is", "STA-08", False)

    class Lossy(MachineSubject):
        def step(self, symbol: str) -> str:
            raise Inconclusive("a frame may have been lost")

    done = compare(MACHINE, Lossy(MACHINE), SUITE, always)
    assert done.difference is None
    assert len(done.unrepeated) == SUITE.size.sequences


def test_it_stops_where_it_is_told():
    subject = MachineSubject(MACHINE)
    done = compare(MACHINE, subject, SUITE, lambda so_far: so_far.sequences < 3)
    assert done.sequences == subject.resets == 3
    assert run_word(MACHINE, subject, word("abab")) is None


# ---------------------------------------------------------------- the number window


def test_the_window_machine_says_what_the_clauses_say():
    machine = window_machine()
    assert machine.inputs == tuple(INPUTS)
    expected = {
        "next,copy,next,copy,copy-before": "granted,copy granted,accepted,copy accepted,copy granted",  # SEQ-03
        "next,other-body,other-kind,top": "granted,refused conflict,refused conflict,refused conflict",  # SEQ-04
        "skip,gap,skip,gap": "granted,refused late-unseen,accepted,refused late-unseen",  # SEQ-05
        "next,inside,outside,half": "granted,refused late-unseen,refused answer-expired,refused answer-expired",
        "next,many,top,gap": "granted,nothing,refused answer-expired,refused conflict",  # SEQ-12, SEQ-06, SEQ-04
        "next,read,halt,next": "granted,status held,halt-receipt,accepted",  # SEQ-11, SEQ-13
        "refused,next,copy-before": "refused stale-epoch,granted,copy refused stale-epoch",  # SEQ-02
        "outside,copy": "granted,copy granted",  # SEQ-02: the first number of a session, whatever it is
    }
    for sequence, outputs in expected.items():
        assert ",".join(machine.run(sequence.split(","))) == outputs
    assert {clause_of(output) for output, _ in machine.table.values()} >= {
        f"SEQ-0{index}" for index in range(2, 7)
    }
    with pytest.raises(ValueError, match="input 'jump': one of next, skip"):
        window_machine(["next", "jump"])


def test_a_word_beyond_the_window_is_refused_by_the_bench_itself():
    with Session(RunOptions()) as session:
        session.bench.begin("x")
        driver = WindowDriver(session.bench)
        driver.reset()
        for _ in range(WORD_MAX):
            driver.step("next")
        with pytest.raises(ValueError, match=f"at most {WORD_MAX} inputs"):
            driver.step("next")
        driver.reset()
        assert driver.step("next") == "granted"


SMALL = ["next", "skip", "refused", "copy", "gap", "read"]


@pytest.mark.parametrize("link", [None, "module-lockstep", "module-smallest-lockstep"])
@pytest.mark.parametrize("inputs", [SMALL, ["next", "many", "top", "gap", "halt", "outside", "half"]])
def test_both_sound_modules_follow_the_window(link, inputs):
    options = RunOptions(link=None if link is None else f"lockstep:{firmware(link)}")
    with Session(options) as session:
        session.bench.begin("x")
        prepared = prepare(session.bench, "window", inputs)
        suite = derive(prepared.machine, "HSI", 1 if inputs is SMALL else 0)
        done = compare(prepared.machine, prepared.subject, suite, always)
        session.bench.end()
    assert done.difference is None, done.difference
    assert done.unrepeated == []
    assert done.sequences == suite.size.sequences > 50


WINDOW_DEFECTS = {
    "copy-executed-again": "SEQ-03",
    "conflict-taken-for-copy": "SEQ-04",
    "overtaken-accepted": "SEQ-05",
    "one-history-a-source": "SEQ-02",
}
C_WINDOW_DEFECTS = (
    "history-by-address", "refusals-not-stored", "copies-not-answered", "copied-refusal-tells-now",
    "digest-of-first-bytes", "digest-leaves-out-kind", "window-half", "expired-executed", "half-circle-is-newer",
    "late-unseen-consumed", "numbers-compared-plainly", "reads-consume-numbers", "halt-goes-through-history",
)  # fmt: skip


def run_window(**options: object) -> tuple[states_run.Planned, Comparison]:
    session, planned = open_plan(RunOptions(**options), Wanted("window", "HSI", 0))  # type: ignore[arg-type]
    with session:
        return planned, states_run.run(session, planned, lambda _: True)


@pytest.mark.parametrize("name", WINDOW_DEFECTS)
def test_broken_modules_leave_the_window(name):
    (module,) = [module for module in BROKEN if module.name == name]
    planned, done = run_window(opener=module.link)
    assert verdict(planned, done) == "fail"
    told = states_run.result(planned, done, 1.0, {})["difference"]
    assert told["clause"] == WINDOW_DEFECTS[name]
    assert told["transcript"][-1]["direction"] == "<-"
    assert planned.prepared.machine.run([*told["access"], told["input"]])[-1] == told["expected"]


@pytest.mark.parametrize("name", C_WINDOW_DEFECTS)
def test_broken_c_modules_leave_the_window(name):
    variants = tomllib.loads((DEFECTS / "c_variants.toml").read_text())["variant"]
    assert name in [variant["name"] for variant in variants if variant["clause"].startswith("SEQ")]
    program = firmware("module-lockstep", "build-variants")
    planned, done = run_window(link=f"lockstep:{program} --variant {name}")
    assert verdict(planned, done) == "fail"
    assert len(done.difference.word) <= 4  # the shortest come first


def test_a_link_that_ends_is_a_difference():
    session, planned = open_plan(RunOptions(), Wanted("window", "HSI", 0))

    def watcher(done: int) -> bool:
        if done == 3:
            raise LinkError("link", "gone", "look")
        return True

    with session:
        done = states_run.run(session, planned, watcher)
    assert verdict(planned, done) == "fail"
    assert done.difference.found.clause == "LOD-02"
    assert "gone" in done.difference.found.got


def test_a_sample_is_drawn_by_the_seed_and_is_not_the_whole():
    session, planned = open_plan(RunOptions(seed=5), Wanted("window", "W", 0, budget_s=60.0))
    with session:
        whole = planned.words()
        done = states_run.run(session, planned, lambda done: done < 5)
    assert whole == planned.words()
    assert whole != sorted(whole, key=len)
    assert sorted(whole) == sorted(planned.suite)
    assert (done.sequences, verdict(planned, done)) == (5, "inconc")


def test_shares_are_all_sequences_once():
    parts = []
    for index in range(3):
        session, planned = open_plan(RunOptions(), Wanted("window", "HSI", 0, share=(index, 3)))
        session.close()
        parts.append(set(planned.words()))
    assert set.union(*parts) == set(planned.suite)
    assert sum(map(len, parts)) == planned.suite.size.sequences


def test_an_unknown_input_is_refused_and_the_link_closed():
    with pytest.raises(ValueError, match="input 'jump': the window machine has next, skip"):
        open_plan(RunOptions(), Wanted("window", word=("next", "jump")))


# ---------------------------------------------------------------- processes


def test_processes_share_what_is_run():
    told: list[int] = []
    wanted = Wanted("window", "HSI", 0, budget_s=3.0)
    done = workers.run_shares(RunOptions(), wanted, 2, told.append)
    assert done.difference is None
    assert done.sequences > 10
    assert told == sorted(told)


def test_a_difference_in_one_process_ends_all():
    program = firmware("module-lockstep", "build-variants")
    options = RunOptions(link=f"lockstep:{program} --variant overtaken-accepted")
    done = workers.run_shares(options, Wanted("window", "HSI", 0), 2, lambda _: None)
    assert done.difference is not None
    assert done.sequences < 2529


def test_a_process_that_cannot_open_its_link_says_why():
    with pytest.raises(workers.WorkerFailed, match="no-such-program"):
        workers.run_shares(RunOptions(link="lockstep:./no-such-program"), Wanted("window"), 1, lambda _: None)


@pytest.mark.parametrize(
    ("order", "outcome"),
    [("stop", False), ("halt", KeyboardInterrupt), (None, KeyboardInterrupt)],
)
def test_a_process_obeys_and_halts_when_nobody_is_left(monkeypatch, order, outcome):
    monkeypatch.setattr(workers, "TELL_S", 0.0)
    ours, theirs = multiprocessing.Pipe()
    watch = workers._Watch(theirs, None)
    assert watch(1) is True
    assert ours.recv() == 1
    if order is None:
        ours.close()
    else:
        ours.send(order)
    obeyed: Callable[[], bool] = lambda: watch(2)  # noqa: E731
    if outcome is False:
        assert obeyed() is False
    else:
        with pytest.raises(outcome):
            obeyed()
