"""``protobench decode``: frames explained field by field."""

from __future__ import annotations

import json
import re
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
from rich.console import Console
from rich.table import Table
from rich.text import Text

if TYPE_CHECKING:
    from protobench.wire import Codec, Dropped, Explanation, Line

NOT_SOUND = 1
SIZE_MAX = 1 << 20
_HEX = re.compile(r"(?:0[xX])?[0-9A-Fa-f]{2}(?:[\s:,]*(?:0[xX])?[0-9A-Fa-f]{2})*")


def decode(
    source: Annotated[str, typer.Argument(help="Hex text, a file, or - for standard input.")] = "-",
    stream: Annotated[
        bool, typer.Option("--stream", help="The bytes are stuffed frames ended by 00.")
    ] = False,
    bare: Annotated[bool, typer.Option("--bare", help="The bytes are one bare frame.")] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
) -> None:
    """Explain frames field by field; dropped ones too, with the reason.

    Bytes are given as hex (spaces, colons, commas and 0x allowed) or as a binary file. Without --stream or --bare, what
    is no sound frame but holds one when read as a stream is taken for a stream.
    Exit status 1 when a frame was dropped or would be refused.

    Example: protobench decode 010300030001ffffffffffff1e2feb8a7311d8a481006465756399
    """
    from protobench.wire import load_codec  # noqa: PLC0415 - slow to import: not for --help

    if stream and bare:
        raise typer.BadParameter("choose one", param_hint="--stream, --bare")
    data = _read(source)
    codec = load_codec()
    units = _split(codec, data, bare=bare, stream=stream)
    explained = [(unit, _explain(codec, unit)) for unit in units]
    if as_json:
        typer.echo(json.dumps([_as_json(unit, found) for unit, found in explained], indent=2))
    else:
        console = Console()
        for unit, found in explained:
            _print(console, unit, found)
    if not explained:
        typer.echo("no frame in there" if data else "no bytes were given", err=True)
    if any(not found.header or found.dropped or found.problems for _, found in explained) or not explained:
        raise typer.Exit(NOT_SOUND)


def _read(source: str) -> bytes:
    """The bytes named: hex text as it stands, else a file, else standard input; text in files may be hex too."""
    if source != "-" and _HEX.fullmatch(source.strip()):
        return _unhex(source)
    try:
        data = sys.stdin.buffer.read(SIZE_MAX + 1) if source == "-" else _read_file(Path(source))
    except OSError as error:
        raise typer.BadParameter(
            f"{source!r} is neither hex nor a file that can be read: {error.strerror}"
        ) from None
    if len(data) > SIZE_MAX:
        raise typer.BadParameter(f"more than {SIZE_MAX} bytes")
    text = data.decode("ascii", "replace").strip()
    return _unhex(text) if _HEX.fullmatch(text) else data


def _read_file(path: Path) -> bytes:
    with path.open("rb") as stream:
        return stream.read(SIZE_MAX + 1)


def _unhex(text: str) -> bytes:
    return bytes.fromhex(re.sub(r"0[xX]|[\s:,]", "", text))


def _split(codec: Codec, data: bytes, *, bare: bool, stream: bool) -> list[bytes | Dropped]:
    """The frames in there; without a hint, one sound bare frame is not taken for a stream."""
    from protobench.wire import Frame  # noqa: PLC0415

    if not data:
        return []
    if bare:
        return [data]
    if stream:
        return codec.split_part(b"\0" + data)
    if isinstance(codec.frames.unpack(data), Frame):
        return [data]
    units = codec.split_part(b"\0" + data)
    found = [
        unit for unit in units if isinstance(unit, bytes) and isinstance(codec.frames.unpack(unit), Frame)
    ]
    return units if found else [data]


def _explain(codec: Codec, unit: bytes | Dropped) -> Explanation:
    from protobench.wire import Explanation, explain_frame  # noqa: PLC0415

    if isinstance(unit, bytes):
        return explain_frame(codec, unit)
    return Explanation("", (), (), unit, ())


def _bytes(unit: bytes | Dropped) -> bytes:
    return unit if isinstance(unit, bytes) else unit.data


def _as_json(unit: bytes | Dropped, found: Explanation) -> dict[str, Any]:
    return {
        "bytes": _bytes(unit).hex(),
        "kind": found.kind or None,
        "dropped": None
        if found.dropped is None
        else {"reason": found.dropped.reason, "detail": found.dropped.detail},
        "header": [_line(line) for line in found.header],
        "body": [_line(line) for line in found.body],
        "problems": [str(problem) for problem in found.problems],
    }


def _line(line: Line) -> dict[str, str]:
    return {
        "place": line.place,
        "name": line.name,
        "value": line.value,
        "unit": line.unit,
        "problem": line.problem,
    }


def _print(console: Console, unit: bytes | Dropped, found: Explanation) -> None:
    data = _bytes(unit)
    size = "1 byte" if len(data) == 1 else f"{len(data)} bytes"
    console.print(Text(f"{found.kind or 'frame'}, {size}", style="bold"))
    console.print(Text(f"  {data.hex(' ')}"), soft_wrap=True)
    if found.dropped is not None:
        console.print(Text(f"  dropped: {found.dropped.reason}, {found.dropped.detail}"), soft_wrap=True)
    table = Table(box=None, pad_edge=False, show_header=False)
    for line in (*found.header, *found.body):
        unit_text = "" if line.unit in ("", "1") else line.unit
        table.add_row(f"  {line.place}", line.name, line.value, unit_text, line.problem)
    if table.row_count:
        console.print(table)
    for problem in found.problems:
        console.print(Text(f"  a module refuses this: {problem}"), soft_wrap=True)
    console.print()
