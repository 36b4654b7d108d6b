"""``protobench learn``: learn the machine that a module is and compare it with the contract's."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def learn(
    link: Annotated[
        str | None,
        typer.Option(help="Link to the module, as for check. Without it an emulated module in this process."),
    ] = None,
    address: Annotated[
        int | None, typer.Option(min=1, max=0xEFFFFFFF, help="The module's address; else a probe finds it.")
    ] = None,
    alphabet: Annotated[
        Path | None,
        typer.Option(dir_okay=False, help="TOML file with a list, inputs, of the inputs to learn over."),
    ] = None,
    queries: Annotated[
        int | None,
        typer.Option(min=1, help="Most sequences asked. Without it 60000 in virtual time, else 300."),
    ] = None,
    states: Annotated[
        int | None,
        typer.Option(
            min=1,
            help="Most states the module may have, in virtual time. Without it the contract's own number.",
        ),
    ] = None,
    seed: Annotated[int, typer.Option(help="Seed of everything random.")] = 1,
    out: Annotated[
        Path | None, typer.Option(file_okay=False, help="Folder for the machines and the difference.")
    ] = None,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print the report, and nothing else, to standard output.")
    ] = False,
    attended: Annotated[
        bool, typer.Option("--attended", help="Someone stands by: what can move hardware may be sent.")
    ] = False,
) -> None:
    """Learn the machine that a module is, and show the shortest sequence that tells it from the contract's.

    Exit status:
    0  no difference
    1  the module differs
    2  wrong use; nothing that can move a module was sent
    3  could not be decided: answers do not repeat, or the budget is spent
    4  the bench itself failed
    130  interrupted; the module was sent a halt

    Example: protobench learn --link lockstep:./my-module --out learned
    """
    from protobench.cli import learning  # noqa: PLC0415 - slow to import: not for --help

    status = learning.run_learning(
        learning.Request(link, address, alphabet, queries, states, seed, out, as_json, attended)
    )
    raise typer.Exit(status)
