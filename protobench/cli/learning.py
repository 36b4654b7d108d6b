"""What ``protobench learn`` does once its options are read."""

from __future__ import annotations

import json
import shutil
import subprocess
import time
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import typer
from rich.console import Console

from protobench.cli import check
from protobench.cli.cautions import CAUTIONS
from protobench.judge import CaseVerdict
from protobench.links import BadAddress, LinkError, NoVirtualTime
from protobench.suite.bench import NoModule
from protobench.suite.machines import learn as learner
from protobench.suite.machines import product
from protobench.suite.machines.asking import Asker
from protobench.suite.machines.difference_script import Replay, script
from protobench.suite.machines.driver import ModuleDriver
from protobench.suite.machines.learn import Effort, Learned
from protobench.suite.machines.mealy import Mealy, Word
from protobench.suite.machines.subjects import PortTape
from protobench.suite.options import RunOptions
from protobench.suite.session import NeedsAttendance, Session

FILE = "learned.json"
SCRIPT = "difference.py"
QUERIES_VIRTUAL, QUERIES_REAL = 60_000, 300
# in real time, where every sequence costs: the lease, the latches and the power, and nothing that moves
REAL_INPUTS = ("halt", "A.take", "B.take", "A.release", "A.reset", "A.energize", "A.de-energize", "A.status")
STATUS = {
    learner.SAME: check.PASSED,
    learner.DIFFERS: check.FAILED,
    learner.UNDECIDED: check.INCONCLUSIVE,
}
LIVE_EVERY_S, PLAIN_EVERY_S = 0.5, 10.0
DOT_LIMIT_S = 60.0


@dataclass(frozen=True, slots=True)
class Request:
    """The command's options; see ``protobench learn --help``."""

    link: str | None
    address: int | None
    alphabet: Path | None
    queries: int | None
    states: int | None
    seed: int
    out: Path | None
    as_json: bool
    attended: bool


class _Progress:
    """Queries and states so far: one line that changes on a terminal, one now and then elsewhere."""

    def __init__(self, console: Console, budget: int) -> None:
        self._console = console
        self._budget = budget
        self._queries = 0
        self._states = 0
        self._last = time.monotonic()

    def asked(self, queries: int) -> None:
        self._queries = queries
        every_s = LIVE_EVERY_S if self._console.is_terminal else PLAIN_EVERY_S
        if (now := time.monotonic()) - self._last >= every_s:
            self._last = now
            self._tell()

    def grew(self, states: int) -> None:
        self._states = states

    def _tell(self) -> None:
        words = f"{self._queries} of at most {self._budget} queries, {self._states} states so far"
        self._console.print(words, end="\r" if self._console.is_terminal else "\n", highlight=False)


class _Subject:
    """The driver; what passed in the sequence before is forgotten, so that no run outgrows the memory."""

    def __init__(self, session: Session) -> None:
        self._tape = PortTape(session.bench)
        self._driver = ModuleDriver(session.bench)

    def reset(self) -> None:
        self._tape.begin()
        self._driver.reset()

    def step(self, symbol: str, /) -> str:
        return self._driver.step(symbol)


def run_learning(request: Request) -> int:
    """Learn, compare, print and write what came of it; the exit status."""
    wanted = None if request.alphabet is None else read_alphabet(request.alphabet)
    _make_folder(request.out)
    console = Console(stderr=True)
    if request.attended:
        console.print(CAUTIONS, highlight=False)
    try:
        return _learn(request, wanted, console)
    except (NeedsAttendance, BadAddress, NoVirtualTime) as error:
        status, message = check.WRONG_USE, str(error)
    except (NoModule, LinkError) as error:
        status, message = check.BENCH_FAILED, str(error)
    except CaseVerdict as verdict:
        status, message = check.FAILED, f"the module cannot be brought to its start: {verdict}"
    except KeyboardInterrupt:
        status, message = check.INTERRUPTED, "interrupted; the module has been sent a halt"
    console.print(message, highlight=False, soft_wrap=True, markup=False)
    return status


def read_alphabet(path: Path) -> Word:
    """The inputs that a file lists. Raises typer.BadParameter that names file, field, value and rule."""
    try:
        values = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise _bad_alphabet(f"{path}: {error}") from None
    inputs = values.get("inputs")
    if set(values) != {"inputs"} or not isinstance(inputs, list) or not inputs:
        raise _bad_alphabet(f"{path}: inputs = {inputs!r}: one list of inputs and nothing else is wanted")
    for symbol in inputs:
        if not isinstance(symbol, str):
            raise _bad_alphabet(f"{path}: inputs: {symbol!r}: an input is a text")
        if inputs.count(symbol) > 1:
            raise _bad_alphabet(f"{path}: inputs: {symbol!r}: is named twice")
    return tuple(inputs)


def _bad_alphabet(words: str) -> typer.BadParameter:
    return typer.BadParameter(words, param_hint="--alphabet")


def _make_folder(out: Path | None) -> None:
    if out is not None:
        try:
            out.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise typer.BadParameter(f"{out}: {error.strerror}", param_hint="--out") from None


def _learn(request: Request, wanted: Word | None, console: Console) -> int:
    options = RunOptions(
        link=request.link, address=request.address, seed=request.seed, attended=request.attended
    )
    with Session(options) as session:
        bench = session.bench
        bench.begin("learn")
        virtual = bench.port.link.virtual
        contract = _contract_machine(request, session, wanted)
        budget = request.queries or (QUERIES_VIRTUAL if virtual else QUERIES_REAL)
        progress = _Progress(console, budget)
        asker = Asker(_Subject(session), budget, progress.asked)
        states = (request.states or len(contract.states)) if virtual else None
        begin = time.monotonic()
        learned = learner.learn(contract, asker, Effort(states, request.seed), progress.grew)
        elapsed_s = time.monotonic() - begin
        session.halt()
        address, record = bench.address, session.record()
    report: dict[str, Any] = {
        "contract": record.contract,
        "seed": record.seed,
        "iut": record.iut,
        "environment": record.environment,
        **_report(contract, learned, asker, budget, states),
        "elapsed_s": round(elapsed_s, 3),
    }
    notes: list[str] = []
    if request.out is not None:
        replay = Replay(
            request.link, address, request.seed, request.attended, learned.word, contract.run(learned.word)
        )
        notes = _write(request.out, report, contract, learned, replay)
    typer.echo(json.dumps(report, indent=2) if request.as_json else "\n".join([*_words(report), *notes]))
    return STATUS[learned.verdict]


def _contract_machine(request: Request, session: Session, wanted: Word | None) -> Mealy:
    facts = session.bench.facts
    known = product.inputs_of(facts)
    if wanted is None and not session.bench.port.link.virtual:
        wanted = tuple(symbol for symbol in REAL_INPUTS if symbol in known)
    try:
        return product.contract_machine(session.contract, facts, wanted)
    except ValueError as error:
        raise _bad_alphabet(f"{request.alphabet}: inputs: {error}") from None


def _report(
    contract: Mealy, learned: Learned, asker: Asker, budget: int, states: int | None
) -> dict[str, Any]:
    expected = contract.run(learned.word)
    steps = zip(learned.word, expected, learned.outputs, strict=True)
    return {
        "verdict": learned.verdict,
        "complete": learned.complete,
        "why": learned.why,
        "alphabet": list(contract.inputs),
        "contract_states": len(contract.states),
        "learned_states": 0 if learned.machine is None else len(learned.machine.states),
        "states_max": states,
        "queries": asker.queries,
        "queries_max": budget,
        "inputs": asker.inputs,
        "not_repeated": [
            {"sequence": ",".join(word), "asked": times} for word, times in asker.unsteady.items()
        ],
        "difference": [{"input": symbol, "contract": output, "module": got} for symbol, output, got in steps],
        "clause": product.clause_of(expected[-1]) if expected else "",
    }


# ---------------------------------------------------------------- telling


def _words(report: dict[str, Any]) -> list[str]:
    asked = f"{report['queries']} queries, {report['inputs']} inputs, {report['elapsed_s']:.1f} s"
    found = f"{report['learned_states']} states learned, the contract has {report['contract_states']}"
    lines = [f"{_verdict_words(report)}", f"  {found}; {len(report['alphabet'])} inputs; {asked}"]
    lines += [
        f"  did not repeat, asked {one['asked']} times: {one['sequence']}" for one in report["not_repeated"]
    ]
    if report["why"]:
        lines.append(f"  learning is not complete: {report['why']}")
    if report["difference"]:
        lines.append(f"  a sequence that tells them apart ({report['clause']}):")
        for place, step in enumerate(report["difference"], 1):
            lines.append(f"  {place}. {step['input']}")
            if step["contract"] == step["module"]:
                lines.append(f"     both: {step['contract']}")
            else:
                lines += [f"     contract: {step['contract']}", f"     module:   {step['module']}"]
    return lines


def _verdict_words(report: dict[str, Any]) -> str:
    if report["verdict"] == learner.DIFFERS:
        return "the module differs from the contract"
    if report["verdict"] == learner.UNDECIDED:
        return "could not be decided"
    if report["states_max"] is None:
        return f"no difference found within {report['queries']} queries"
    bound = max(report["states_max"], report["learned_states"])
    return f"equivalent to the contract's machine, if the module has at most {bound} states"


def _write(out: Path, report: dict[str, Any], contract: Mealy, learned: Learned, replay: Replay) -> list[str]:
    """Write everything; what to say of it."""
    (out / FILE).write_text(json.dumps(report, indent=2) + "\n", encoding="utf-8")
    (out / "contract.dot").write_text(contract.dot("contract"), encoding="utf-8")
    written = [FILE, "contract.dot"]
    notes = []
    if learned.machine is not None:
        (out / "learned.dot").write_text(learned.machine.dot("learned"), encoding="utf-8")
        written.append("learned.dot")
        problem = _draw(out / "learned.dot", out / "learned.svg")
        if problem:
            notes.append(f"no learned.svg: {problem}")
        else:
            written.append("learned.svg")
    if learned.word:
        (out / SCRIPT).write_text(script(replay), encoding="utf-8")
        written.append(SCRIPT)
    else:
        (out / SCRIPT).unlink(missing_ok=True)  # of an earlier run: there is no such difference now
    return [f"written to {out}: {', '.join(written)}", *notes]


def _draw(graph: Path, picture: Path) -> str:
    """Let Graphviz draw a graph; what kept it from doing so, or nothing."""
    program = shutil.which("dot")
    if program is None:
        return "Graphviz' program dot is not there"
    try:
        subprocess.run(  # noqa: S603 - Graphviz, on files written here
            [program, "-Tsvg", "-o", picture, graph], check=True, capture_output=True, timeout=DOT_LIMIT_S
        )
    except (OSError, subprocess.SubprocessError) as error:
        return f"{program}: {error}"
    return ""
