"""The readable contract is what the tables make, and lacks nothing of them."""

from __future__ import annotations

import pytest

from protobench.cli.contract import encoder, readable
from protobench.contract import Contract, load_contract, spec_root
from protobench.contract.diagram import byte_chart, state_diagram
from protobench.contract.document import frame_of
from protobench.wire import Frame, load_codec

DOCUMENT = readable(load_contract())


def test_the_committed_document_is_not_stale() -> None:
    path = spec_root() / "1.0" / "contract.md"
    assert path.read_text(encoding="utf-8") == DOCUMENT, "run: protobench contract document"


def test_the_document_is_the_same_each_time() -> None:
    assert readable(load_contract()) == DOCUMENT


def test_nothing_of_the_tables_is_missing(contract: Contract) -> None:
    flat = " ".join(DOCUMENT.split())
    for clause in contract.clauses:
        assert f"**{clause.id}**" in flat
        assert " ".join(clause.text.split()) in flat
    for kind in contract.kinds:
        assert f"#### {kind.name} (0x{kind.code:02X})" in DOCUMENT
        for field in kind.fields:
            assert f"| {field.key} | {field.name} |" in DOCUMENT
    for row in (*contract.drops, *contract.refusals):
        assert f"| {row.name} | {row.number} | {row.stage} |" in DOCUMENT
    for fault in contract.faults:
        assert f"| {fault.name} | {fault.code} |" in DOCUMENT
    for name in (*contract.limits, *contract.enums):
        assert f"| {name} |" in DOCUMENT
    for note in contract.notes:
        assert f"### {note.title}\n" in DOCUMENT
    for error in contract.errors.error:
        assert f"| {error.name} |" in DOCUMENT
    rows = [line for line in DOCUMENT.splitlines() if line.count(" | ") == 6 and line.startswith("| ")]
    table = [
        line for line in rows if line.split(" | ")[0][2:] in {item.name for item in contract.states.inputs}
    ]
    assert len(table) == len(contract.states.file.transition)


def test_tables_are_whole() -> None:
    """Each row of a table has as many cells as its head."""
    columns = 0
    for line in DOCUMENT.splitlines():
        if not line.startswith("|"):
            columns = 0
            continue
        found = line.replace("\\|", "").count("|")
        columns = columns or found
        assert found == columns, line


def test_the_byte_chart_has_every_field(contract: Contract) -> None:
    chart = byte_chart(contract.frame.layout)
    lines = chart.splitlines()
    assert len({len(line) for line in lines if "+" in line or "|" in line}) == 1
    for field in contract.frame.layout.field:
        line = next(line for line in lines if field.name in line and "|" in line)
        assert line.strip().startswith(str(field.offset - field.offset % 4))


def test_the_diagram_has_every_displayed_state_and_change(contract: Contract) -> None:
    diagram = state_diagram(contract)
    for name in contract.enum_values("state"):
        assert f" {name}" in diagram
    assert "    [*] --> starting" in diagram
    assert "    energized --> moving: begin" in diagram
    assert "    moving --> stopping: halt, fault" in diagram
    assert "--> moving: move" not in diagram


def test_worked_frames_are_sound_and_say_what_the_chart_says(contract: Contract) -> None:
    codec = load_codec(contract)
    for chart in contract.charts:
        for step in chart.step:
            data = frame_of(contract, step, encoder(contract))
            frame = codec.frames.unpack(data)
            assert isinstance(frame, Frame)
            assert frame.number == step.number
            message = codec.kind(step.kind).decode(frame.body)
            for name, value in step.fields.items():
                told = getattr(message, name)
                assert (told.hex() if isinstance(told, bytes) else told) == value
            assert data[:20].hex() in DOCUMENT


@pytest.mark.parametrize("word", ["TODO", "None", "Traceback", "<bound", "`None`"])
def test_no_trace_of_the_program(word: str) -> None:
    assert word not in DOCUMENT
