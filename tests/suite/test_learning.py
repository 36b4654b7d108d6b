"""The command states: sound modules walk as the contract's machine does, learned ones equal it, broken ones do not."""

from __future__ import annotations

import random
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest
from judging import SEED, firmware
from machine_samples import WORKED, MachineSubject, from_rows
from sound_configs import CONFIGS

from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.judge import Failed
from protobench.links import LinkError, MemoryLink
from protobench.suite.machines.asking import ASKED_MAX, OUTPUT_MAX, Asker, BudgetSpent, NotRepeatable
from protobench.suite.machines.difference_script import Replay, script
from protobench.suite.machines.driver import ModuleDriver
from protobench.suite.machines.learn import DIFFERS, SAME, UNDECIDED, Effort, Learned, learn
from protobench.suite.machines.mealy import Mealy
from protobench.suite.machines.product import clause_of, contract_machine, inputs_of
from protobench.suite.options import RunOptions
from protobench.suite.session import Session

DEFECTS = Path(__file__).parents[1] / "defects"
sys.path.insert(0, str(DEFECTS))
from broken_modules import BROKEN  # noqa: E402

MACHINE = from_rows(WORKED)
SMALL = ("halt", "A.take", "A.release", "A.energize", "A.reset", "A.status", "B.take")
STEPS = 600
WORD = 40  # inputs between two starts of a walk


def sound(name: str) -> RunOptions:
    """A sound module by its configuration's name."""
    return RunOptions(
        opener=lambda: MemoryLink(
            ModuleEngine(CONFIGS[name], Storage(), random.Random(SEED), load_contract())
        )
    )


def variant(name: str) -> RunOptions:
    return RunOptions(link=f"lockstep:{firmware('module-lockstep', 'build-variants')} --variant {name}")


def machine_of(session: Session, inputs: tuple[str, ...] | None = None) -> Mealy:
    session.bench.begin("x")
    return contract_machine(session.contract, session.bench.facts, inputs)


# ---------------------------------------------------------------- the machine


def test_the_machine_says_what_the_clauses_say():
    with Session(RunOptions()) as session:
        machine = machine_of(session)
    expected = {
        "A.take,B.take,B.renew": "accepted;refused lease-held of A;refused not-holder of A",  # LSE-02, LSE-03
        "A.energize,A.take,A.energize": "refused not-holder of nobody;accepted;refused halted",  # STA-11
        "A.take,A.reset-older,A.move-stale-epoch": "accepted;refused newer-halt;refused stale-epoch",  # HLT-12
        "A.take,A.reset,A.move,A.energize,A.move,halt": "accepted;accepted;refused not-energized;accepted;accepted;"
        "halt-receipt stopping + outcome halted halt",  # MOT-01, HLT-05, HLT-07
        "A.take,A.reset,A.energize,A.move,commit,halt,complete": "accepted;accepted;accepted;accepted;nothing;"
        "halt-receipt past-no-return;outcome landed, interrupted halt",  # HLT-08
        "A.take,A.reset,A.energize,A.move,lease-end": "accepted;accepted;accepted;accepted;"
        "outcome cancelled lease-end",  # LSE-09
        "fault,A.take,A.clear,fault-ends,A.clear,A.clear": "fault to anyone;accepted + fault to A;"
        "refused cause-stands;nothing;accepted;refused no-such-fault",  # FLT-02, FLT-07, FLT-09
        "restart-faulty,A.status": "fault to anyone + started;"
        "status idle, halt and fault, free, shown faulted, power off",  # STA-04, STA-02
    }
    for sequence, outputs in expected.items():
        assert ";".join(machine.run(sequence.split(","))) == outputs
    assert machine.states == machine.minimal().states
    known = {clause.id for clause in load_contract().clauses}
    assert {clause_of(output) for output, _ in machine.table.values()} <= known


def test_the_declared_facts_decide_what_there_is():
    inputs = {}
    for name in ("without-assist", "one-way-slide", "only-bonds", "holding"):
        with Session(sound(name)) as session:
            inputs[name] = inputs_of(session.bench.facts)
            machine = machine_of(session)
            keeps = any(state.startswith("energized; halt") for state in machine.states)
            assert keeps == (name == "holding")
    assert not {"restart", "commit", "complete"} & set(inputs["without-assist"])
    assert "complete" in inputs["one-way-slide"]
    assert "commit" not in inputs["one-way-slide"]
    assert not any("move" in symbol for symbol in inputs["only-bonds"])
    assert "commit" in inputs["holding"]


def test_an_input_that_is_not_there_is_refused():
    with Session(sound("without-assist")) as session:
        session.bench.begin("x")
        with pytest.raises(ValueError, match="input 'restart': one of halt, "):
            contract_machine(session.contract, session.bench.facts, ["halt", "restart"])
        driver = ModuleDriver(session.bench)
        with pytest.raises(ValueError, match="input 'restart': one of "):
            driver.step("restart")


# ---------------------------------------------------------------- walks


def walk(options: RunOptions, seed: int = SEED) -> None:
    with Session(options) as session:
        machine = machine_of(session)
        driver = ModuleDriver(session.bench)
        rng = random.Random(seed)
        for _ in range(STEPS // WORD):
            session.bench.port.begin_case()
            driver.reset()
            word = [rng.choice(machine.inputs) for _ in range(WORD)]
            for at, expected in enumerate(machine.run(word)):
                got = driver.step(word[at])
                assert got == expected, f"seed {seed}: {','.join(word[: at + 1])}"


@pytest.mark.parametrize("program", ["module-lockstep", "module-smallest-lockstep"])
def test_c_modules_walk_as_the_machine_does(program):
    walk(RunOptions(link=f"lockstep:{firmware(program)}"))


@pytest.mark.parametrize("name", CONFIGS)
def test_python_modules_walk_as_the_machine_does(name):
    walk(sound(name))


# ---------------------------------------------------------------- learning


def learned(
    options: RunOptions, inputs: tuple[str, ...] | None, budget: int = 5000, states: int | None = 1
) -> tuple[Mealy, Learned, Asker]:
    with Session(options) as session:
        contract = machine_of(session, inputs)
        asker = Asker(ModuleDriver(session.bench), budget)
        return contract, learn(contract, asker, Effort(states)), asker


@pytest.mark.parametrize("link", [None, "module-lockstep"])
def test_sound_modules_are_learned_to_be_the_contracts_machine(link):
    options = RunOptions(link=None if link is None else f"lockstep:{firmware(link)}")
    moving = ("halt", "A.take", "A.reset", "A.energize", "A.move", "commit", "complete", "A.status")
    for inputs in (SMALL, moving):
        contract, found, asker = learned(options, inputs, states=8)
        assert (found.verdict, found.complete, found.word) == (SAME, True, ())
        assert found.machine.difference(contract) is None
        assert len(found.machine.states) == len(contract.states) > 6
        assert asker.unsteady == {}


def test_the_smallest_profile_is_learned_over_all_its_inputs():
    options = RunOptions(link=f"lockstep:{firmware('module-smallest-lockstep')}")
    contract, found, _ = learned(options, None)
    assert (found.verdict, len(found.machine.states)) == (SAME, len(contract.states))


MOVING = ("A.take", "A.reset", "A.energize", "A.move", "commit", "complete", "halt", "A.cancel", "A.status")
FAULTY = ("A.take", "A.clear", "A.reset", "A.energize", "fault", "fault-ends", "restart-faulty", "A.status")
BROKEN_C = {
    "energize-while-halted": SMALL,
    "start-not-halted": SMALL,
    "started-told-at-grant": SMALL,
    "motion-takes-too-long": MOVING,
    "halted-shown-over-faulted": FAULTY,
    "stopping-shown-as-moving": MOVING,
    "watchdog-restart-unnoticed": FAULTY,
    "energizes-while-faulted": FAULTY,
    "reset-energizes": SMALL,
    "anyone-resets": ("A.take", "B.reset", "A.status"),
    "halt-says-at-rest": MOVING,
    "first-cause-stays": MOVING,
    "interruption-not-noted": MOVING,
    "halt-keeps-power": MOVING,
    "lease-end-moves-on": (*MOVING, "lease-end"),
    "move-while-faulted": (*FAULTY, "A.move"),
}


@pytest.mark.parametrize("name", BROKEN_C)
def test_broken_c_modules_differ_by_a_short_sequence(name):
    variants = tomllib.loads((DEFECTS / "c_variants.toml").read_text())["variant"]
    assert name in [one["name"] for one in variants]
    contract, found, _ = learned(variant(name), BROKEN_C[name])
    assert found.verdict == DIFFERS
    expected = contract.run(found.word)
    assert found.outputs[:-1] == expected[:-1]
    assert found.outputs[-1] != expected[-1]
    assert len(found.word) <= 8


def test_every_other_broken_python_module_that_differs_keeps_its_difference():
    """What the learner says of a broken module is what the module says when asked by itself."""
    differing = 0
    for module in BROKEN[::3]:
        options = RunOptions(opener=module.link)
        _, found, _ = learned(options, SMALL)
        assert found.verdict in (SAME, DIFFERS), f"{module.name}: {found.why}"
        if found.verdict == DIFFERS:
            differing += 1
            with Session(options) as session:
                session.bench.begin("x")
                outputs = Asker(ModuleDriver(session.bench), 1).ask(found.word)
                assert outputs == found.outputs, module.name
    assert differing < len(BROKEN[::3])


def test_the_worked_machine_is_learned_and_each_change_of_an_output_is_found():
    asker = Asker(MachineSubject(MACHINE), 5000)
    found = learn(MACHINE, asker, Effort(5))
    assert (found.verdict, len(found.machine.states)) == (SAME, 5)
    (state, symbol), (output, after) = next(iter(MACHINE.table.items()))
    changed = Mealy(
        MACHINE.inputs, MACHINE.initial, {**MACHINE.table, (state, symbol): (f"{output}?", after)}
    )
    found = learn(MACHINE, Asker(MachineSubject(changed), 5000), Effort(5))
    assert found.verdict == DIFFERS
    assert found.word == MACHINE.difference(changed)
    assert found.outputs == changed.run(found.word)


# ---------------------------------------------------------------- answers that do not repeat, budgets


class Flickering(MachineSubject):
    """Gives a wrong output in every sequence whose number fits."""

    def __init__(self, wrong: frozenset[int]) -> None:
        super().__init__(MACHINE)
        self._wrong = wrong

    def step(self, symbol: str) -> str:
        right = super().step(symbol)
        return "wrong" if self.resets in self._wrong else right


def test_a_rare_wrong_answer_is_outvoted_and_told():
    asker = Asker(Flickering(frozenset({4, 40})), 5000)
    found = learn(MACHINE, asker, Effort(5))
    assert found.verdict == SAME
    assert asker.unsteady
    assert all(times >= 3 for times in asker.unsteady.values())


def test_answers_without_a_majority_are_given_up():
    class Restless(MachineSubject):
        def step(self, symbol: str) -> str:
            return f"{super().step(symbol)} {self.resets}"

    asker = Asker(Restless(MACHINE), 5000)
    found = learn(MACHINE, asker, Effort(5))
    assert found.verdict == UNDECIDED
    assert "do not repeat" in found.why
    with pytest.raises(NotRepeatable, match=f"asked {ASKED_MAX} times"):
        Asker(Restless(MACHINE), 100).ask_afresh(("a",))


def test_a_spent_budget_decides_nothing_unless_a_difference_is_known():
    found = learn(MACHINE, Asker(MachineSubject(MACHINE), 7), Effort(5))
    assert (found.verdict, found.why) == (UNDECIDED, "the budget of queries is spent")
    with pytest.raises(BudgetSpent):
        Asker(MachineSubject(MACHINE), 0).ask(("a",))


def test_a_word_is_asked_once_and_its_beginnings_never():
    subject = MachineSubject(MACHINE)
    asker = Asker(subject, 10)
    assert asker.ask(("a", "b", "a")) == MACHINE.run("aba")
    assert asker.ask(("a", "b")) == asker.ask(("a", "b", "a"))[:2]
    assert (asker.queries, asker.inputs, subject.resets) == (1, 3, 1)


def test_random_words_stop_at_the_first_difference():
    (state, symbol), (output, after) = next(iter(MACHINE.table.items()))
    changed = Mealy(
        MACHINE.inputs, MACHINE.initial, {**MACHINE.table, (state, symbol): (f"{output}?", after)}
    )
    found = learn(MACHINE, Asker(MachineSubject(changed), 5000), Effort(None, seed=3))
    assert (found.verdict, found.complete, found.why) == (DIFFERS, False, "the first difference was enough")
    assert learn(MACHINE, Asker(MachineSubject(MACHINE), 5000), Effort(None, seed=3)).verdict == SAME


def test_whatever_a_module_does_is_an_output_and_a_link_that_ends_is_not():
    class Stuck(MachineSubject):
        def step(self, symbol: str) -> str:
            raise Failed("x" * 5000, clause="FRM-14")

    (output,) = Asker(Stuck(MACHINE), 5).ask(("a",))
    assert output.startswith("stopped: FRM-14: xxx")
    assert len(output) == OUTPUT_MAX

    class Gone(MachineSubject):
        def reset(self) -> None:
            raise LinkError("link", "gone", "look")

    with pytest.raises(LinkError):
        learn(MACHINE, Asker(Gone(MACHINE), 5), Effort(5))


# ---------------------------------------------------------------- the script


@pytest.mark.parametrize(("name", "status"), [("energize-while-halted", 1), ("stamped-at-first-byte", 0)])
def test_the_script_ends_with_1_while_the_difference_is_there(tmp_path, name, status):
    word = ("A.take", "A.energize")
    replay = Replay(variant(name).link, 1, 1, False, word, ("accepted", "refused halted"))
    file = tmp_path / "difference.py"
    file.write_text(script(replay))
    done = subprocess.run([sys.executable, file], capture_output=True, text=True, check=False, timeout=60)
    assert done.returncode == status, done.stderr
    assert done.stdout.startswith("A.take: accepted\nA.energize: ")
    assert ("the contract says: refused halted" in done.stdout) == (status == 1)
