"""The command line. Results go to standard output, everything else to standard error."""

from __future__ import annotations

import logging
import sys

import structlog
import typer

from protobench import __version__
from protobench.cli import check, contract, decode, emulate, ics, learn, robustness, soak, states

app = typer.Typer(
    name="protobench",
    help="Judge, decode and emulate robot modules that speak the Module Command Link.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode="rich",
)
app.command("check")(check.check)
app.command("emulate")(emulate.emulate)
app.command("states")(states.states)
app.command("learn")(learn.learn)
app.command("decode")(decode.decode)
app.command("robustness")(robustness.robustness)
app.command("soak")(soak.soak)
app.add_typer(contract.app, name="contract")
app.add_typer(ics.app, name="ics")


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"protobench {__version__}")
        raise typer.Exit


@app.callback()
def _common(
    log_level: str = typer.Option("warning", help="What is logged: debug, info, warning or error."),
    version: bool = typer.Option(  # noqa: ARG001 - its callback does it
        False, "--version", callback=_show_version, is_eager=True, help="Say which this is."
    ),
) -> None:
    level = logging.getLevelNamesMapping().get(log_level.upper())
    if level is None:
        raise typer.BadParameter(
            f"{log_level!r}: one of debug, info, warning, error", param_hint="--log-level"
        )
    structlog.configure(
        wrapper_class=structlog.make_filtering_bound_logger(level),
        logger_factory=structlog.PrintLoggerFactory(sys.stderr),
    )


def main() -> None:
    """The console script."""
    try:
        app()
    except BrokenPipeError:
        sys.stderr.close()
        sys.exit(1)
