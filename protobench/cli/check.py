"""``protobench check``: judge a module."""

from __future__ import annotations

import json
from contextlib import ExitStack
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console

LEVELS = ("required", "recommended")
PASSED, FAILED, WRONG_USE, INCONCLUSIVE, BENCH_FAILED = 0, 1, 2, 3, 4
INTERRUPTED = 130


def check(
    link: Annotated[
        str | None,
        typer.Option(
            help="Link to the module: run:COMMAND, lockstep:COMMAND, tcp://HOST:PORT, udp://HOST:PORT, serial:DEVICE, "
            "zmq+tcp://HOST:PORT, zmq+ipc://PATH. Without it an emulated module in this process is judged, in "
            "virtual time."
        ),
    ] = None,
    address: Annotated[
        int | None, typer.Option(min=1, max=0xEFFFFFFF, help="The module's address; else a probe finds it.")
    ] = None,
    ics: Annotated[
        Path | None,
        typer.Option(
            exists=True,
            dir_okay=False,
            help="Conformance statement (TOML): what the supplier says the module has.",
        ),
    ] = None,
    deviations: Annotated[
        Path | None,
        typer.Option(
            exists=True,
            dir_okay=False,
            help="Known deviations (TOML): failures expected until a date, each with case, reason and owner.",
        ),
    ] = None,
    restart: Annotated[
        bool,
        typer.Option(
            "--restart",
            help="The statement's means of restarting the module may be used; it may run a program.",
        ),
    ] = False,
    only: Annotated[
        str | None,
        typer.Option(help="Cases to judge: words of ids, areas, classes or clause ids, with and, or, not."),
    ] = None,
    level: Annotated[str, typer.Option(help="required, or recommended: those too.")] = "required",
    seed: Annotated[int, typer.Option(help="Seed of everything random.")] = 1,
    out: Annotated[
        Path | None,
        typer.Option(
            file_okay=False, help="Folder for report.html, report.json, junit.xml and conformance.log."
        ),
    ] = None,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print the report, and nothing else, to standard output.")
    ] = False,
    list_only: Annotated[bool, typer.Option("--list", help="List the cases and judge nothing.")] = False,
    attended: Annotated[
        bool, typer.Option("--attended", help="Someone stands by: what can move hardware may be sent.")
    ] = False,
    virtual: Annotated[bool, typer.Option("--virtual", help="Insist on virtual time.")] = False,
) -> None:
    """Judge a module by the conformance cases.

    Exit status:
    0  nothing failed and all that applies was judged
    1  something failed, or the statement or the list of deviations is wrong
    2  wrong use; nothing that can move a module was sent
    3  nothing failed but something was inconclusive
    4  the bench itself failed or nothing ran
    130  interrupted; the report holds the cases judged before

    Example: protobench check --link run:./my-module --out report
    """
    from protobench.cli import judging  # noqa: PLC0415 - pytest-free, but slow to import: not for --help

    if level not in LEVELS:
        raise typer.BadParameter(f"{level!r}: one of {', '.join(LEVELS)}", param_hint="--level")
    judging.check_expression(level, only)
    if list_only:
        judging.list_cases(level, only, as_json=as_json)
        return
    options = judging.make_options(
        ics=ics,
        restart=restart,
        virtual=virtual,
        link=link,
        address=address,
        only=only,
        level=level,
        seed=seed,
        out=out,
        attended=attended,
    )
    listed = judging.read_deviations(deviations)
    console = Console(stderr=True)
    with ExitStack() as stack:
        record = judging.beside(judging.judge(options, stack, console), listed)
    report = judging.write_report(record, options, {"list of known deviations": deviations})
    status = judging.exit_status(record)
    if status == INTERRUPTED:
        judging.say_interrupted(record, out, console)
    if as_json:
        typer.echo(json.dumps(report, indent=2))
    elif status != INTERRUPTED:
        judging.summarize(record, out)
    raise typer.Exit(status)
