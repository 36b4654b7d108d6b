"""``protobench robustness``: generated sequences against a module."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console

from protobench.cli.check import BENCH_FAILED, FAILED, INTERRUPTED, PASSED, WRONG_USE

SEQUENCES = 300
UNITS_S = {"": 1, "s": 1, "m": 60, "min": 60, "h": 3600}


def robustness(
    link: Annotated[
        str | None,
        typer.Option(help="Link to the module, as for check; without it an emulated one, in virtual time."),
    ] = None,
    address: Annotated[
        int | None, typer.Option(min=1, max=0xEFFFFFFF, help="The module's address; else a probe finds it.")
    ] = None,
    sequences: Annotated[
        int | None, typer.Option(min=1, max=10_000_000, help=f"How many sequences; {SEQUENCES} unless --for.")
    ] = None,
    for_time: Annotated[
        str | None, typer.Option("--for", help="For how long instead: 90s, 10min, 2h.")
    ] = None,
    seed: Annotated[int, typer.Option(help="Seed of everything random.")] = 1,
    again: Annotated[
        Path | None,
        typer.Option(exists=True, dir_okay=False, help="Play the one sequence of this file, saved by --out."),
    ] = None,
    out: Annotated[
        Path | None, typer.Option(file_okay=False, help="Folder for robustness.json and failed sequences.")
    ] = None,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print the results as JSON, and nothing else, to standard output.")
    ] = False,
    attended: Annotated[
        bool, typer.Option("--attended", help="Someone stands by: what can move hardware may be sent.")
    ] = False,
) -> None:
    """Send generated sequences, sound and unsound, and judge every answer by a model of the contract.

    Exit status:
    0  no sequence failed
    1  a sequence failed
    2  wrong use; nothing that can move a module was sent
    4  the bench itself failed or nothing ran
    130  interrupted

    Example: protobench robustness --link run:./my-module --for 10min --out found
    """
    from protobench.cli import robust_run  # noqa: PLC0415 - slow to import: not for --help

    if sequences is not None and for_time is not None:
        raise typer.BadParameter("a number or a time, not both", param_hint="--sequences, --for")
    budget_s = None if for_time is None else _seconds(for_time)
    console = Console(stderr=True)
    setting = robust_run.Setting(link, address, seed, attended, out)
    steps = robust_run.read_steps(again) if again is not None else None
    count = sequences or (None if budget_s is not None else SEQUENCES)
    report = robust_run.run(setting, count, budget_s, steps, console)
    robust_run.write(report, setting)
    if as_json:
        typer.echo(json.dumps(report.data, indent=2))
    else:
        robust_run.show(report)
    raise typer.Exit(_status(report.data))


def _status(data: dict[str, object]) -> int:
    if data["interrupted"]:
        return INTERRUPTED
    if data["failures"]:
        return FAILED
    return BENCH_FAILED if data["stopped"] or not data["sequences"] else PASSED


def _seconds(text: str) -> float:
    found = re.fullmatch(r"(\d{1,6}(?:\.\d{1,3})?)\s*(s|m|min|h)?", text)
    seconds = float(found[1]) * UNITS_S[found[2] or ""] if found else 0.0
    if seconds <= 0:
        raise typer.BadParameter(f"{text!r}: a time above zero such as 90s, 10min, 2h", param_hint="--for")
    return seconds


__all__ = ["WRONG_USE", "robustness"]
