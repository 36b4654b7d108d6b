"""What ``protobench robustness`` does once its options are read."""

from __future__ import annotations

import contextlib
import itertools
import json
import shlex
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple

import typer
from rich.console import Console

from protobench.cli.cautions import CAUTIONS
from protobench.cli.check import BENCH_FAILED, FAILED, WRONG_USE
from protobench.judge import CaseVerdict, Failed
from protobench.links import BadAddress, ImpairedLink, LinkError, NoVirtualTime
from protobench.suite.bench import NoModule
from protobench.suite.options import RunOptions
from protobench.suite.robust.again import read_again, write_again
from protobench.suite.robust.campaign import Campaign, Failure
from protobench.suite.robust.steps import Step
from protobench.suite.session import NeedsAttendance, Session
from protobench.suite.tools import same_groups_after

PROGRESS_S = 2.0


class Setting(NamedTuple):
    """What is played against, and where results go."""

    link: str | None
    address: int | None
    seed: int
    attended: bool
    out: Path | None

    def command(self, *more: str) -> str:
        """The command line for the same module."""
        words = ["protobench", "robustness"]
        words += ["--link", self.link] if self.link is not None else []
        words += ["--address", str(self.address)] if self.address is not None else []
        words += ["--attended"] if self.attended else []
        return shlex.join([*words, "--seed", str(self.seed), *more])


@dataclass(slots=True)
class Report:
    """The results as data, and the failures with their sequences."""

    data: dict[str, Any]
    failures: list[Failure]


def read_steps(path: Path) -> list[Step]:
    """The sequence of a file; one that cannot be read ends the command."""
    try:
        return read_again(path)
    except ValueError as error:
        raise typer.BadParameter(str(error), param_hint="--again") from None


def run(
    setting: Setting, count: int | None, budget_s: float | None, steps: list[Step] | None, console: Console
) -> Report:
    """Play; what keeps it from beginning ends the command with a message and the right status."""
    if setting.attended:
        console.print(CAUTIONS, highlight=False)
    if setting.out is not None:
        _make_folder(setting.out)
    options = RunOptions(
        link=setting.link, address=setting.address, seed=setting.seed, attended=setting.attended
    )
    try:
        with Session(options) as session:
            if isinstance(session.bench.port.link, ImpairedLink):
                rule = "a model cannot judge what a link loses or delays on purpose"
                raise BadAddress(setting.link or "", "impairment", rule)
            return _play(session, setting, count, budget_s, steps, console)
    except (NeedsAttendance, BadAddress, NoVirtualTime) as error:
        message, status = str(error), WRONG_USE
    except Failed as error:
        message, status = str(error), FAILED
    except (NoModule, LinkError) as error:
        message, status = str(error), BENCH_FAILED
    console.print(message, highlight=False, soft_wrap=True, markup=False)
    raise typer.Exit(status)


def _make_folder(out: Path) -> None:
    try:
        out.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise typer.BadParameter(f"{out}: {error.strerror}", param_hint="--out") from None


def _play(
    session: Session,
    setting: Setting,
    count: int | None,
    budget_s: float | None,
    steps: list[Step] | None,
    console: Console,
) -> Report:
    campaign = Campaign(session, setting.seed)
    interrupted, stopped = False, ""
    begin = time.monotonic()
    indices: Iterator[int] = itertools.count() if count is None else iter(range(count))
    try:
        # A module that cannot be brought back to its groups has failed a sequence already.
        with contextlib.suppress(CaseVerdict), same_groups_after(session.bench):
            if steps is not None:
                campaign.once(steps)
            else:
                until_s = None if budget_s is None else begin + budget_s
                campaign.run(indices, until_s, _Progress(console, count))
    except KeyboardInterrupt:
        interrupted = True
        session.halt()
    except (LinkError, NoModule) as error:
        stopped = f"the link could not be opened again: {error}"
    return Report(_data(campaign, setting, interrupted, stopped, time.monotonic() - begin), campaign.failures)


class _Progress:
    """A line on standard error every few seconds."""

    def __init__(self, console: Console, count: int | None) -> None:
        self._console = console
        self._of = "" if count is None else f" of {count}"
        self._next_s = time.monotonic() + PROGRESS_S

    def __call__(self, played: int, failed: int) -> None:
        if time.monotonic() >= self._next_s:
            self._next_s = time.monotonic() + PROGRESS_S
            self._console.print(f"{played}{self._of} sequences, {failed} failed", highlight=False)


# ------------------------------------------------------------ results


def _data(
    campaign: Campaign, setting: Setting, interrupted: bool, stopped: str, duration_s: float
) -> dict[str, Any]:
    tally, contract = campaign.tally, campaign.session.contract
    refusals = sorted({row.name for row in contract.refusals if not row.silent})
    return {
        "contract": f"{contract.name} {contract.version}",
        "link": setting.link or "embedded",
        "seed": setting.seed,
        "sequences": tally.sequences,
        "duration_s": round(duration_s, 3),
        "interrupted": interrupted,
        "stopped": stopped,
        "frames_sent": dict(tally.sent),
        "requests_sent": dict(tally.commands),
        "answers": dict(tally.answers),
        "events": dict(tally.events),
        "accepted": tally.reasons["accepted"],
        "refused": {name: tally.reasons[name] for name in refusals},
        "dropped": {drop.name: tally.drops[drop.name] for drop in contract.drops},
        "slowest_answer_ms": round(tally.slowest_ms, 3),
        "failures": [_failure(failure, place, setting) for place, failure in enumerate(campaign.failures)],
    }


def _failure(failure: Failure, place: int, setting: Setting) -> dict[str, Any]:
    record = failure.record
    again = (
        ["--again", str(setting.out / _name(place))]
        if setting.out is not None
        else ["--sequences", str(failure.index + 1)]
    )
    return {
        "sequence": failure.index,
        "verdict": record.verdict,
        "clause": next(iter(record.broken), ""),
        "reason": record.reason,
        "steps_drawn": failure.drawn,
        "steps": [list(step) for step in failure.steps],
        "detail": record.detail,
        "replay": setting.command(*again),
    }


def _name(place: int) -> str:
    return f"sequence-{place + 1}.json"


def write(report: Report, setting: Setting) -> None:
    """Write the results and each failed sequence, with a folder."""
    if setting.out is None:
        return
    (setting.out / "robustness.json").write_text(json.dumps(report.data, indent=2) + "\n", encoding="utf-8")
    for place, failure in enumerate(report.failures):
        told = report.data["failures"][place]
        path = setting.out / _name(place)
        write_again(path, failure.steps, clause=told["clause"], reason=told["reason"], seed=setting.seed)


def show(report: Report) -> None:
    """Print the results in words."""
    from protobench.contract import load_contract  # noqa: PLC0415 - with the results only

    data = report.data
    for told, failure in zip(data["failures"], report.failures, strict=True):
        typer.echo(f"sequence {told['sequence']} {told['verdict']}: {told['reason']}")
        if told["clause"]:
            clause = load_contract().clause(told["clause"])
            typer.echo(f"  {clause.id}: {clause.text}")
        typer.echo(f"  {len(failure.steps)} of {told['steps_drawn']} steps are enough:")
        for step in failure.steps:
            typer.echo(f"    {step.words}")
        typer.echo(told["detail"])
        typer.echo(f"  replay: {told['replay']}\n")
    refused = {name: count for name, count in data["refused"].items() if count}
    dropped = {name: count for name, count in data["dropped"].items() if count}
    typer.echo(f"{data['sequences']} sequences, seed {data['seed']}: {len(report.failures)} failed")
    typer.echo(f"frames sent: {_counts(data['frames_sent'])}")
    typer.echo(f"accepted {data['accepted']}, refused {sum(refused.values())}: {_counts(refused)}")
    typer.echo(f"not reached: {', '.join(sorted(set(data['refused']) - set(refused))) or 'none'}")
    typer.echo(f"dropped {sum(dropped.values())}: {_counts(dropped)}")
    typer.echo(f"events: {_counts(data['events'])}")
    typer.echo(f"slowest answer: {data['slowest_answer_ms']:.1f} ms")


def _counts(counts: dict[str, int]) -> str:
    ordered = sorted(counts.items(), key=lambda item: (-item[1], item[0]))
    return ", ".join(f"{name} {count}" for name, count in ordered) or "none"
