"""``protobench states``: run sequences derived from the contract's machines against a module."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def states(
    link: Annotated[
        str | None,
        typer.Option(help="Link to the module, as for check. Without it an emulated module in this process."),
    ] = None,
    address: Annotated[
        int | None, typer.Option(min=1, max=0xEFFFFFFF, help="The module's address; else a probe finds it.")
    ] = None,
    machine: Annotated[
        str,
        typer.Option(
            help="state: activity, latches and lease; window: the numbers of one session; or both of them."
        ),
    ] = "both",
    method: Annotated[str, typer.Option(help="How sequences are derived: W, Wp or HSI.")] = "HSI",
    extra: Annotated[
        int | None,
        typer.Option(
            min=0,
            max=3,
            help="How many states more than the machine the module may have. Without it 1 in virtual time, else 0.",
        ),
    ] = None,
    dry_run: Annotated[
        bool, typer.Option("--dry-run", help="Say what would be run and how long it may take; move nothing.")
    ] = False,
    budget: Annotated[
        float | None,
        typer.Option(
            min=0.1, help="Seconds for each machine; the sequences are then a sample, drawn by the seed."
        ),
    ] = None,
    only_sequence: Annotated[
        str | None, typer.Option(help="Run this sequence of inputs only, joined by commas.")
    ] = None,
    seed: Annotated[int, typer.Option(help="Seed of everything random.")] = 1,
    out: Annotated[Path | None, typer.Option(file_okay=False, help="Folder for states.json.")] = None,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print the report, and nothing else, to standard output.")
    ] = False,
    attended: Annotated[
        bool, typer.Option("--attended", help="Someone stands by: what can move hardware may be sent.")
    ] = False,
    jobs: Annotated[
        int, typer.Option(min=1, max=64, help="Processes, where each can start a module of its own.")
    ] = 1,
) -> None:
    """Run sequences derived from the contract's machines, and say where the module first differs.

    A module with at most as many states as stated that differs anywhere is found.

    Exit status:
    0  no difference, and every sequence was run
    1  the module differs
    2  wrong use; nothing that can move a module was sent
    3  no difference, but sequences were left out or did not repeat
    4  the bench itself failed
    130  interrupted; the module was sent a halt

    Example: protobench states --link lockstep:./my-module --jobs 2
    """
    from protobench.cli import deriving  # noqa: PLC0415 - slow to import: not for --help

    status = deriving.run_states(
        deriving.Request(
            link=link,
            address=address,
            machine=machine,
            method=method,
            extra=extra,
            dry_run=dry_run,
            budget_s=budget,
            only_sequence=only_sequence,
            seed=seed,
            out=out,
            as_json=as_json,
            attended=attended,
            jobs=jobs,
        )
    )
    raise typer.Exit(status)
