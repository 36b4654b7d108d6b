"""``protobench emulate``: serve emulated modules."""

from __future__ import annotations

from typing import Annotated

import typer

BIND = "zmq+tcp://127.0.0.1:5570"


def emulate(
    bind: Annotated[str, typer.Option(help="Where to listen: zmq+tcp://HOST:PORT or zmq+ipc://PATH.")] = BIND,
    modules: Annotated[
        int, typer.Option(min=1, max=10_000, help="How many modules, with addresses from 1 on.")
    ] = 1,
    seed: Annotated[int, typer.Option(help="Seed of everything random.")] = 1,
) -> None:
    """Serve emulated modules in real time until interrupted.

    Example: protobench emulate --modules 3, and in another terminal:
    protobench check --link zmq+tcp://127.0.0.1:5570 --address 1
    """
    from emulator.serve import ServeError, serve  # noqa: PLC0415 - slow to import: not for --help

    def ready(bound: str) -> None:
        last = f" to {modules}" if modules > 1 else ""
        typer.echo(
            f"serving {modules} emulated module{'s' if modules > 1 else ''}, address 1{last}, on {bound}, seed {seed}"
        )
        typer.echo(f"judge with: protobench check --link {bound} --address 1")

    try:
        serve(bind, modules, seed, ready=ready)
    except ServeError as error:
        typer.echo(str(error), err=True)
        raise typer.Exit(2) from None
