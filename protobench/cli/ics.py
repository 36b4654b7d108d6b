"""``protobench ics``: write the form of a conformance statement, and review one."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, NoReturn

import typer

if TYPE_CHECKING:
    from protobench.suite.facts import Facts
    from protobench.suite.statement_review import Finding

app = typer.Typer(
    no_args_is_help=True,
    rich_markup_mode="rich",
    help="Write and review conformance statements: what a supplier says that a build has.",
)
AGREES, DIFFERS, WRONG_USE, NO_MODULE = 0, 1, 2, 4

LinkOption = Annotated[
    str | None, typer.Option(help="Link to the module, as for check. Only reads are sent to it.")
]
AddressOption = Annotated[
    int | None, typer.Option(min=1, max=0xEFFFFFFF, help="The module's address; else a probe finds it.")
]
AttendedOption = Annotated[
    bool, typer.Option("--attended", help="Someone stands by; needed for serial devices and other hosts.")
]


@app.command("new")
def new(
    link: LinkOption = None,
    address: AddressOption = None,
    out: Annotated[
        Path | None,
        typer.Option(dir_okay=False, help="File to write; it must not be there yet. Else standard output."),
    ] = None,
    attended: AttendedOption = False,
) -> None:
    """Write an empty form with every item and its range; with --link one filled with what the module describes.

    The supplier checks a filled form before it is a statement.

    Exit status: 0 written; 2 wrong use; 4 no module answered.

    Example: protobench ics new --link run:./my-module --out my-module.toml
    """
    from protobench.contract import load_contract  # noqa: PLC0415 - slow to import: not for --help
    from protobench.suite.statement_form import write_form  # noqa: PLC0415

    if out is not None and out.exists():
        raise typer.BadParameter(f"{out} is there already; name another file", param_hint="--out")
    found = (None, None) if link is None else _describe(link, address, attended=attended)
    text = write_form(load_contract(), *found)
    if out is None:
        typer.echo(text, nl=False)
        return
    try:
        out.write_text(text, encoding="utf-8")
    except OSError as error:
        raise typer.BadParameter(f"{out}: {error.strerror}", param_hint="--out") from None
    typer.echo(f"wrote {out}; check every line, then: protobench ics review {out}")


@app.command("review")
def review(
    file: Annotated[Path, typer.Argument(exists=True, dir_okay=False, help="The statement (TOML).")],
    link: LinkOption = None,
    address: AddressOption = None,
    attended: AttendedOption = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print the findings as JSON.")] = False,
) -> None:
    """Review a statement by itself against the contract; with --link also against what the module describes.

    Each finding names file, item, value, rule and clause.

    Exit status: 0 nothing found; 1 something found; 2 wrong use, or a file that cannot be read; 4 no module answered.

    Example: protobench ics review my-module.toml --link run:./my-module
    """
    from protobench.cli import judging  # noqa: PLC0415 - slow to import: not for --help
    from protobench.contract import load_contract  # noqa: PLC0415
    from protobench.suite import statement_review  # noqa: PLC0415

    contract = load_contract()
    statement = judging.read_statement(file, "FILE")
    by_itself = statement_review.review(statement, contract)
    against: list[Finding] | None = None
    if link is not None:
        wanted = statement.address if address is None else address
        at, facts = _describe(link, wanted, attended=attended)
        against = statement_review.compare(statement, contract, at, facts)
    if as_json:
        report = {
            "file": statement.file,
            "sha256": statement.digest,
            "static": [finding.json() for finding in by_itself],
            "dynamic": None if against is None else [finding.json() for finding in against],
        }
        typer.echo(json.dumps(report, indent=2))
    else:
        _print("by itself", statement.file, by_itself)
        if against is not None:
            _print("against the module", statement.file, against)
    raise typer.Exit(DIFFERS if by_itself or against else AGREES)


def _print(what: str, file: str, findings: list[Finding]) -> None:
    typer.echo(f"{what}: {_count(len(findings))}")
    for finding in findings:
        typer.echo(f"  {file}: {finding}")


def _count(findings: int) -> str:
    return f"{findings} finding{'' if findings == 1 else 's'}" if findings else "nothing found"


def _describe(link: str, address: int | None, *, attended: bool) -> tuple[int, Facts]:
    """Ask the module what it is. What keeps it from answering ends the command."""
    from protobench.judge import Failed  # noqa: PLC0415
    from protobench.links import BadAddress, LinkError  # noqa: PLC0415
    from protobench.suite.bench import NoModule  # noqa: PLC0415
    from protobench.suite.options import RunOptions  # noqa: PLC0415
    from protobench.suite.session import NeedsAttendance, Session  # noqa: PLC0415

    try:
        session = Session(RunOptions(link=link, address=address, attended=attended, reads_only=True))
    except (NeedsAttendance, BadAddress) as error:
        _end(str(error), WRONG_USE)
    except (Failed, NoModule, LinkError) as error:
        _end(str(error), NO_MODULE)
    session.close()
    return session.bench.address, session.bench.facts


def _end(message: str, status: int) -> NoReturn:
    typer.echo(message, err=True)
    raise typer.Exit(status)
