"""What ``protobench soak`` does once its options are read."""

from __future__ import annotations

import json
import shlex
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, NamedTuple

import typer
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn

from protobench.cli.cautions import CAUTIONS
from protobench.cli.check import BENCH_FAILED, FAILED, INCONCLUSIVE, INTERRUPTED, PASSED, WRONG_USE
from protobench.judge import Failed
from protobench.judge.statistics import trials_needed
from protobench.links import BadAddress, LinkError, NoVirtualTime
from protobench.suite import soak
from protobench.suite.bench import NoModule
from protobench.suite.options import RunOptions
from protobench.suite.session import NeedsAttendance, Session
from protobench.suite.soak import Soak

PLAIN_EVERY_S = 10.0
ASSUMED = "assumed: motions are alike and independent; shown for this motion, build, link and load, and for no other"


class Wanted(NamedTuple):
    """The command's options; see ``protobench soak --help``."""

    link: str | None
    address: int | None
    reliability: float
    confidence: float
    motion: str | None
    seed: int
    out: Path | None
    attended: bool

    @property
    def command(self) -> str:
        """The command line again."""
        words = ["protobench", "soak"]
        words += ["--link", self.link] if self.link is not None else []
        words += ["--address", str(self.address)] if self.address is not None else []
        words += ["--reliability", str(self.reliability), "--confidence", str(self.confidence)]
        words += ["--motion", self.motion] if self.motion is not None else []
        words += ["--attended"] if self.attended else []
        return shlex.join([*words, "--seed", str(self.seed)])


def run(wanted: Wanted, *, as_json: bool) -> int:
    """Make the motions, tell the result, and return the exit status."""
    try:
        trials_needed(wanted.reliability, wanted.confidence)
    except ValueError as error:
        raise typer.BadParameter(str(error), param_hint="--reliability, --confidence") from None
    console = Console(stderr=True)
    if wanted.attended:
        console.print(CAUTIONS, highlight=False)
    options = RunOptions(link=wanted.link, address=wanted.address, seed=wanted.seed, attended=wanted.attended)
    try:
        with Session(options) as session:
            done, interrupted = _soak(session, wanted, console)
    except (NeedsAttendance, BadAddress, NoVirtualTime) as error:
        message, status = str(error), WRONG_USE
    except Failed as error:
        message, status = str(error), FAILED
    except (NoModule, LinkError) as error:
        message, status = str(error), BENCH_FAILED
    else:
        status = INTERRUPTED if interrupted else _status(done)
        _tell(done, wanted, interrupted=interrupted, as_json=as_json)
        return status
    console.print(message, highlight=False, soft_wrap=True, markup=False)
    return status


def _soak(session: Session, wanted: Wanted, console: Console) -> tuple[Soak, bool]:
    try:
        planned = soak.plan(session.bench, wanted.reliability, wanted.confidence, wanted.motion)
    except ValueError as error:
        raise typer.BadParameter(str(error), param_hint="--motion") from None
    try:
        with _progress(console, planned) as progress:
            soak.run(session, planned, progress)
    except KeyboardInterrupt:
        session.halt()
        return planned, True
    return planned, False


@contextmanager
def _progress(console: Console, planned: Soak) -> Iterator[soak.Progress]:
    """A live line on a terminal, plain lines now and then elsewhere; both with what the motions so far take."""
    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("{task.fields[left]}"),
    )
    next_s = time.monotonic() + PLAIN_EVERY_S
    console.print(f"{planned.needed} motions ({planned.motion})", highlight=False)
    with Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as live:
        task = live.add_task("motions", total=planned.needed, left="")

        def tell(done: Soak) -> None:
            nonlocal next_s
            live.update(task, completed=done.made, left=f"about {done.remaining_s:.0f} s left")
            if not console.is_terminal and time.monotonic() >= next_s:
                next_s = time.monotonic() + PLAIN_EVERY_S
                left = f"about {done.remaining_s:.0f} s left"
                console.print(f"{done.made} of {done.needed} motions, {left}", highlight=False)

        yield tell


def _status(done: Soak) -> int:
    if done.reason:
        return FAILED
    return INCONCLUSIVE if done.stopped else PASSED


def _tell(done: Soak, wanted: Wanted, *, interrupted: bool, as_json: bool) -> None:
    data = _data(done, wanted, interrupted=interrupted)
    if wanted.out is not None:
        try:
            wanted.out.mkdir(parents=True, exist_ok=True)
            (wanted.out / "soak.json").write_text(json.dumps(data, indent=2) + "\n", encoding="utf-8")
        except OSError as error:
            raise typer.BadParameter(f"{wanted.out}: {error.strerror}", param_hint="--out") from None
    if as_json:
        typer.echo(json.dumps(data, indent=2))
        return
    for line in _lines(done, wanted, interrupted=interrupted):
        typer.echo(line)


def _data(done: Soak, wanted: Wanted, *, interrupted: bool) -> dict[str, Any]:
    return {
        "link": wanted.link or "embedded",
        "seed": wanted.seed,
        "motion": done.motion,
        "reliability": done.reliability,
        "confidence": done.confidence,
        "method": "success-run theorem; lower limit after Clopper and Pearson",
        "needed": done.needed,
        "made": done.made,
        "unclear": done.unclear,
        "failure": done.reason,
        "stopped": "interrupted" if interrupted else done.stopped,
        "shown": done.shown,
        "exchange": [f"{one.direction} {one.words} | {one.data.hex()}" for one in done.exchange],
        "again": wanted.command,
    }


def _lines(done: Soak, wanted: Wanted, *, interrupted: bool) -> Iterator[str]:
    if done.reason:
        yield f"fail: {done.reason}"
        yield f"  what passed, the last {len(done.exchange)} frames:"
        for one in done.exchange:
            yield f"  {one.time_ns / 1e6:12.3f} ms {one.direction} {one.words}"
            yield f"{'':21}{one.data.hex()}"
    ending = "interrupted; the module was sent a halt" if interrupted else done.stopped
    if ending:
        yield f"stopped: {ending}"
    unclear = f", {done.unclear} more were unclear" if done.unclear else ""
    yield f"{done.made} of {done.needed} motions ({done.motion}) made{unclear}"
    yield (
        f"shown: at least {done.shown:.6g} of such motions are sound, with confidence {done.confidence:g}"
        if done.made
        else "shown: nothing"
    )
    yield ASSUMED
    if not done.is_complete:
        yield f"again: {wanted.command}"
