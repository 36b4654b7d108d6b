"""``protobench soak``: many motions in a row, until a reliability is shown."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def soak(
    link: Annotated[
        str | None,
        typer.Option(help="Link to the module, as for check; without it an emulated one, in virtual time."),
    ] = None,
    address: Annotated[
        int | None, typer.Option(min=1, max=0xEFFFFFFF, help="The module's address; else a probe finds it.")
    ] = None,
    reliability: Annotated[
        float, typer.Option(help="What share of motions shall be sound, between 0 and 1.")
    ] = 0.999,
    confidence: Annotated[float, typer.Option(help="How sure that shall be, between 0 and 1.")] = 0.95,
    motion: Annotated[
        str | None, typer.Option(help="Which motion; the quickest that the module has unless given.")
    ] = None,
    seed: Annotated[int, typer.Option(help="Seed of everything random.")] = 1,
    out: Annotated[Path | None, typer.Option(file_okay=False, help="Folder for soak.json.")] = None,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print the result as JSON, and nothing else, to standard output.")
    ] = False,
    attended: Annotated[
        bool, typer.Option("--attended", help="Someone stands by: what can move hardware may be sent.")
    ] = False,
) -> None:
    """Make as many motions as a reliability needs, judge each, and stop at the first that fails.

    With no failure the number is the smallest n for which reliability^n is at most 1 - confidence: 2,995 for 0.999
    and 0.95.

    Exit status:
    0  the reliability is shown
    1  a motion failed
    2  wrong use; nothing that can move a module was sent
    3  too many motions were unclear
    4  the bench itself failed
    130  interrupted; the module was sent a halt

    Example: protobench soak --link run:./my-module --reliability 0.99 --confidence 0.9
    """
    from protobench.cli import soaking  # noqa: PLC0415 - slow to import: not for --help

    wanted = soaking.Wanted(link, address, reliability, confidence, motion, seed, out, attended)
    raise typer.Exit(soaking.run(wanted, as_json=as_json))
