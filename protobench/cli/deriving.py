"""What ``protobench states`` does once its options are read."""

from __future__ import annotations

import json
import shlex
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import typer
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

from protobench.cli import check
from protobench.cli.cautions import CAUTIONS
from protobench.contract import load_contract
from protobench.judge import CaseVerdict
from protobench.links import BadAddress, LinkError, NoVirtualTime
from protobench.suite.bench import NoModule
from protobench.suite.machines import states_run, workers
from protobench.suite.machines.derive import METHODS
from protobench.suite.machines.states_run import ALL, SEPARATOR, Planned, Wanted
from protobench.suite.machines.subjects import MACHINES
from protobench.suite.options import RunOptions
from protobench.suite.session import NeedsAttendance, Session

FILE = "states.json"
STATUS = {"pass": check.PASSED, "fail": check.FAILED, "inconc": check.INCONCLUSIVE}
PLAIN_EVERY_S = 10.0
FRAMES_SHOWN = 60


@dataclass(frozen=True, slots=True)
class Request:
    """The command's options; see ``protobench states --help``."""

    link: str | None
    address: int | None
    machine: str
    method: str
    extra: int | None
    dry_run: bool
    budget_s: float | None
    only_sequence: str | None
    seed: int
    out: Path | None
    as_json: bool
    attended: bool
    jobs: int

    @property
    def options(self) -> RunOptions:
        return RunOptions(link=self.link, address=self.address, seed=self.seed, attended=self.attended)

    def wanted(self, machine: str) -> Wanted:
        """What to run of one machine."""
        word = None if self.only_sequence is None else tuple(self.only_sequence.split(SEPARATOR))
        return Wanted(machine, self.method, self.extra, self.budget_s, word)


def run_states(request: Request) -> int:
    """Run what is asked for, print and write what came of it; the exit status."""
    _check(request)
    console = Console(stderr=True)
    if request.attended:
        console.print(CAUTIONS, highlight=False)
    report: dict[str, Any] = {}
    try:
        for machine in states_run.names(request.machine):
            _run_machine(request, machine, report, console)
        status = max((STATUS[one.get("verdict", "pass")] for one in report["machines"]), key=_gravity)
    except (NeedsAttendance, BadAddress, NoVirtualTime) as error:
        status, message = check.WRONG_USE, str(error)
    except ValueError as error:
        raise typer.BadParameter(str(error), param_hint="--only-sequence") from None
    except (NoModule, LinkError, workers.WorkerFailed) as error:
        status, message = check.BENCH_FAILED, str(error)
    except CaseVerdict as verdict:
        status, message = check.FAILED, f"the module cannot be brought to its start: {verdict}"
    except KeyboardInterrupt:
        status, message = check.INTERRUPTED, "interrupted; the module has been sent a halt"
    else:
        message = ""
    if message:
        console.print(message, highlight=False, soft_wrap=True, markup=False)
    if report:
        _publish(request, report)
    return status


def _gravity(status: int) -> int:
    return (check.PASSED, check.INCONCLUSIVE, check.FAILED).index(status)


def _check(request: Request) -> None:
    """Refuse what cannot be meant, before anything is opened."""
    if request.machine not in (*MACHINES, ALL):
        raise typer.BadParameter(
            f"{request.machine!r}: one of {', '.join(MACHINES)}, {ALL}", param_hint="--machine"
        )
    if request.method not in METHODS:
        raise typer.BadParameter(f"{request.method!r}: one of {', '.join(METHODS)}", param_hint="--method")
    if request.only_sequence is not None and request.machine == ALL:
        raise typer.BadParameter(
            "give --machine with it; an input belongs to one", param_hint="--only-sequence"
        )
    if request.jobs > 1 and not workers.opens_twice(request.link):
        raise typer.BadParameter(
            f"{request.jobs} processes need a link that starts a module for each: none, lockstep: or run:",
            param_hint="--jobs",
        )
    if request.out is not None:
        try:
            request.out.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise typer.BadParameter(f"{request.out}: {error.strerror}", param_hint="--out") from None


# ---------------------------------------------------------------- running


def _run_machine(request: Request, machine: str, report: dict[str, Any], console: Console) -> None:
    wanted = request.wanted(machine)
    session, planned = states_run.open_plan(request.options, wanted)
    with session:
        if not report:
            report.update(_head(session))
        more: dict[str, Any] = {}
        if request.dry_run:
            more["estimate_s"] = round(states_run.estimate_s(session, planned) / request.jobs, 1)
        else:
            _say_plan(planned, console)
        begin = time.monotonic()
        done = None
        if not request.dry_run and request.jobs == 1:
            with _progress(planned, console) as told:
                done = states_run.run(session, planned, _watcher(wanted.budget_s, told))
    if not request.dry_run and request.jobs > 1:
        with _progress(planned, console) as told:
            done = workers.run_shares(request.options, planned.wanted, request.jobs, told)
    part = states_run.result(planned, done, time.monotonic() - begin, more)
    if done is not None and done.difference is not None:
        part["replay"] = _replay(request, report["iut"]["address"], part)
    report["machines"].append(part)


def _head(session: Session) -> dict[str, Any]:
    record = session.record()
    return {
        "contract": record.contract,
        "seed": record.seed,
        "iut": record.iut,
        "environment": record.environment,
        "machines": [],
    }


def _watcher(budget_s: float | None, told: Callable[[int], None]) -> states_run.Watcher:
    begin: float | None = None

    def goes_on(done: int) -> bool:
        nonlocal begin
        begin = (
            time.monotonic() if begin is None else begin
        )  # the budget is for the sequences, not for deriving them
        told(done)
        return budget_s is None or time.monotonic() - begin < budget_s

    return goes_on


@contextmanager
def _progress(planned: Planned, console: Console) -> Iterator[Callable[[int], None]]:
    """A live line on a terminal, a plain one now and then elsewhere."""
    total = planned.total.sequences
    live = Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeRemainingColumn(),
        console=console,
        transient=True,
        disable=not console.is_terminal,
    )
    task = live.add_task(planned.prepared.name, total=total)
    begin = last = time.monotonic()

    def told(done: int) -> None:
        nonlocal last
        if console.is_terminal:
            live.update(task, completed=done)
        elif (now := time.monotonic()) - last >= PLAIN_EVERY_S and done:
            last = now
            left_s = (now - begin) / done * (total - done)
            console.print(f"{done} of {total} sequences, some {left_s:.0f} s left", highlight=False)

    with live:
        yield told


def _replay(request: Request, address: int, part: dict[str, Any]) -> str:
    command = ["protobench", "states"]
    if request.link is not None:
        command += ["--link", request.link]
    command += ["--address", str(address), "--seed", str(request.seed), "--machine", part["machine"]]
    command += ["--only-sequence", part["difference"]["sequence"]]
    return shlex.join([*command, "--attended"] if request.attended else command)


# ---------------------------------------------------------------- telling


def _say_plan(planned: Planned, console: Console) -> None:
    suite, total = planned.suite, planned.total
    console.print(
        f"{planned.prepared.name}: {suite.method}, n {suite.states}, m {suite.states_max}: "
        f"{total.sequences} sequences, {total.inputs} inputs",
        highlight=False,
    )


def _publish(request: Request, report: dict[str, Any]) -> None:
    text = json.dumps(report, indent=2)
    if request.out is not None and not request.dry_run:
        (request.out / FILE).write_text(text + "\n", encoding="utf-8")
    if request.as_json:
        typer.echo(text)
        return
    for part in report["machines"]:
        typer.echo("\n".join(_words(part)))
    if request.out is not None and not request.dry_run:
        typer.echo(f"report: {request.out}/{FILE}")


def _words(part: dict[str, Any]) -> list[str]:
    k = f"k {part['extra']}"
    what = f"{part['method']}, n {part['n']}, {k}, m {part['m']}, {len(part['alphabet'])} inputs"
    lines = [f"{part['machine']}: {what}: {part['sequences']} sequences, {part['inputs']} inputs in all"]
    if "estimate_s" in part:
        lines.append(f"  may take {part['estimate_s']} s")
    if "verdict" in part:
        ran = f"{part['sequences_run']} sequences, {part['inputs_run']} inputs, {part['elapsed_s']:.1f} s"
        lines.append(f"  {part['verdict']}: {_verdict_words(part)}; ran {ran}")
        lines += [f"  did not repeat: {sequence}" for sequence in part["not_repeated"]]
        if part["difference"] is not None:
            lines += _difference_words(part)
    return [*lines, *(f"  assumed: {line}" for line in part["assumptions"])]


def _verdict_words(part: dict[str, Any]) -> str:
    if part["difference"] is not None:
        return f"the module differs ({part['difference']['clause']})"
    if part["verdict"] == "inconc":
        return "no difference found that repeats, and not every sequence is settled"
    return "no difference"


def _difference_words(part: dict[str, Any]) -> list[str]:
    told = part["difference"]
    clause = next((one for one in load_contract().clauses if one.id == told["clause"]), None)
    lines = [
        f"  access word: {SEPARATOR.join(told['access']) or '(none)'}",
        f"  input: {told['input'] or '(the way back to the start)'}",
        f"  expected: {told['expected']}",
        f"  got: {told['got']}",
    ]
    if clause is not None:
        lines.append(f"  {clause.id} says: {clause.text}")
    shown = told["transcript"][-FRAMES_SHOWN:]
    lines.append(f"  what passed, the last {len(shown)} of {len(told['transcript'])} frames:")
    for one in shown:
        lines += [
            f"{one['time_ns'] / 1e6:12.3f} ms {one['direction']} {one['words']}",
            f"{'':19}{one['data']}",
        ]
    return [*lines, f"  again: {part['replay']}"]
