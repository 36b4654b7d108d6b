"""``protobench contract``: read, check and turn the contract into other forms."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from protobench.contract import Contract
    from protobench.contract.document import Encode

app = typer.Typer(help="Read, check and convert the contract.", no_args_is_help=True)
Version = Annotated[str, typer.Option("--contract-version", help="Version of the contract.")]
VERSION = "1.0"
FOUND, NOT_FOUND = 0, 1


def _expect_known(version: str) -> None:
    from protobench.contract import spec_root  # noqa: PLC0415 - slow to import: not for --help

    known = sorted(path.parent.name for path in spec_root().glob("*/contract.toml"))
    if version not in known:
        raise typer.BadParameter(f"{version!r}: one of {', '.join(known)}", param_hint="--contract-version")


def _load(version: str, root: Path | None = None) -> Contract:
    from protobench.contract import ContractError, load_contract  # noqa: PLC0415

    if root is None:
        _expect_known(version)
    try:
        return load_contract(version, root)
    except ContractError as error:
        typer.echo(str(error), err=True)
        raise typer.Exit(NOT_FOUND) from None


@app.command()
def show(version: Version = VERSION) -> None:
    """Print the readable contract (Markdown).

    Example: protobench contract show | less
    """
    typer.echo(readable(_load(version)), nl=False)


@app.command()
def document(
    check: Annotated[
        bool, typer.Option("--check", help="Only say whether contract.md is up to date.")
    ] = False,
    version: Version = VERSION,
) -> None:
    """Write the readable contract, contract.md, beside the data it is made from."""
    from protobench.contract import spec_root  # noqa: PLC0415

    path = spec_root() / version / "contract.md"
    wanted = readable(_load(version))
    found = path.read_text(encoding="utf-8") if path.exists() else ""
    if not check:
        path.write_text(wanted, encoding="utf-8")
        typer.echo(f"wrote {path}")
        return
    if found != wanted:
        lines = difflib.unified_diff(
            found.splitlines(), wanted.splitlines(), "contract.md", "the data", lineterm="", n=0
        )
        typer.echo("\n".join(list(lines)[:40]))
        typer.echo(f"{path} is stale; write it with: protobench contract document", err=True)
        raise typer.Exit(NOT_FOUND)


def encoder(contract: Contract) -> Encode:
    """What makes the frames of the worked exchanges."""
    from protobench.wire import load_codec  # noqa: PLC0415

    codec = load_codec(contract)

    def encode(
        kind: str, fields: Mapping[str, Any], source: int, destination: int, session: int, number: int
    ) -> bytes:
        message = codec.new(kind, **{_attribute(name): value for name, value in fields.items()})
        return message.to_frame(source, destination, session, number)

    return encode


def readable(contract: Contract) -> str:
    """The readable contract, as Markdown."""
    from protobench.contract.document import generate_document  # noqa: PLC0415

    return generate_document(contract, encoder(contract))


def _attribute(name: str) -> str:
    return "class_" if name == "class" else name


@app.command()
def lint(version: Version = VERSION) -> None:
    """Check the contract's files; one line a finding, with file, path and rule."""
    from protobench.contract.lint import lint as find  # noqa: PLC0415

    _expect_known(version)
    problems = find(version)
    for problem in problems:
        typer.echo(str(problem))
    if problems:
        typer.echo(f"{len(problems)} finding{'s' if len(problems) > 1 else ''}", err=True)
        raise typer.Exit(NOT_FOUND)
    contract = _load(version)
    typer.echo(f"{contract.name} {contract.version}: no findings in {len(contract.clauses)} clauses")


@app.command()
def header(version: Version = VERSION) -> None:
    """Print a C99 header with every constant of the contract.

    Example: protobench contract header > contract.h
    """
    from protobench.contract.header import generate_header  # noqa: PLC0415

    typer.echo(generate_header(_load(version)), nl=False)


@app.command()
def vectors(
    area: Annotated[
        str | None, typer.Argument(help="Only the vectors of areas whose name contains this.")
    ] = None,
    version: Version = VERSION,
) -> None:
    """List the test vectors: id, what it shows, bytes."""
    from protobench.contract import ContractError  # noqa: PLC0415
    from protobench.contract.vectors import load_vectors  # noqa: PLC0415

    _expect_known(version)
    try:
        files = load_vectors(version)
    except ContractError as error:
        typer.echo(str(error), err=True)
        raise typer.Exit(NOT_FOUND) from None
    found = [vector for file in files if area is None or area in file.area for vector in file.vectors]
    if not found:
        areas = ", ".join(file.area for file in files)
        raise typer.BadParameter(f"{area!r} is part of no area's name; there are {areas}", param_hint="AREA")
    for vector in found:
        typer.echo(f"{vector.id}  {vector.purpose}  {vector.data.hex()}")
    typer.echo(f"{len(found)} vectors", err=True)


@app.command()
def explain(
    name: Annotated[
        str,
        typer.Argument(help="A clause, case, kind, refusal, fault, drop reason, limit, capability or input."),
    ],
    version: Version = VERSION,
) -> None:
    """Say everything the contract and the suite say about a name.

    Examples: protobench contract explain SEQ-03; protobench contract explain stale-epoch
    """
    from protobench.contract.explain import UnknownName  # noqa: PLC0415
    from protobench.contract.explain import explain as find  # noqa: PLC0415
    from protobench.suite.run import list_cases  # noqa: PLC0415

    cases = list_cases()
    for info in cases:
        if info.id == name:
            typer.echo(f"case {info.id}\n  {info.purpose}\n  level: {info.level}, class: {info.case_class}")
            typer.echo(f"  needs: {info.needs or 'nothing'}\n  clauses: {', '.join(info.clauses)}")
            return
    try:
        entries = find(_load(version), name)
    except UnknownName as error:
        typer.echo(str(error), err=True)
        raise typer.Exit(NOT_FOUND) from None
    for entry in entries:
        typer.echo("\n".join(entry.lines()))
        covering = [info.id for info in cases if name in info.clauses]
        if covering:
            typer.echo(f"  cases: {', '.join(covering)}")


@app.command()
def diff(
    old: Annotated[
        Path,
        typer.Argument(exists=True, file_okay=False, help="Folder of the old version, such as spec/1.0."),
    ],
    new: Annotated[Path, typer.Argument(exists=True, file_okay=False, help="Folder of the new version.")],
) -> None:
    """Classify the difference of two contracts as compatible or breaking, and say why.

    Exit status 1 when something breaks.
    """
    from protobench.contract.versions import compare  # noqa: PLC0415

    comparison = compare(_load(old.name, old.parent), _load(new.name, new.parent))
    for change in comparison.changes:
        typer.echo(str(change))
    typer.echo("breaking" if comparison.breaking else "compatible")
    if comparison.breaking:
        raise typer.Exit(NOT_FOUND)
