"""The readable contract, made from the tables."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from typing import Any

from protobench.contract.diagram import byte_chart, state_diagram
from protobench.contract.explain import describe_field, describe_shape
from protobench.contract.kinds import Field, Kind
from protobench.contract.model import Contract
from protobench.contract.states import FACTORS, Transition
from protobench.contract.tables import Chart, Clause, Limit, Step

# Bytes of a bare frame: kind, fields by name, source, destination, session, number.
Encode = Callable[[str, Mapping[str, Any], int, int, int, int], bytes]

CONTROLLER, MODULE, SESSION = 0x0001_0001, 0x0000_0001, 0x5EED_0001
CLASSES = (
    ("read", "Reads"),
    ("command", "Commands"),
    ("answer", "Answers"),
    ("notice", "Notices"),
    ("event", "Events"),
)


def generate_document(contract: Contract, encode: Encode) -> str:
    """Return the contract as Markdown. ``encode`` gives the bytes of the worked exchanges' frames."""
    lines = [f"# {contract.name}, version {contract.version}", ""]
    lines += ["Generated from the tables beside it; change those, not this file.", "", *_prose(contract.purpose)]
    for section in _SECTIONS:
        lines += section(contract)
    lines += _charts(contract, encode)
    return "\n".join(_one_blank_line(lines)) + "\n"


# ---------------------------------------------------------------- frame and body


def _frame(contract: Contract) -> Iterator[str]:
    frame, layout = contract.frame, contract.frame.layout
    yield from ("## Frame", "", "```text", byte_chart(layout), "```", "")
    rows = ((field.name, field.offset, field.size, field.text, field.reason) for field in layout.field)
    yield from _table(("Field", "Offset", "Bytes", "Meaning", "Reason"), rows)
    yield f"Whole frames have {layout.frame_size_min} to {layout.frame_size_max} bytes before stuffing."
    yield f"{layout.authenticator_reserve} bytes are kept free for an authenticator."
    yield from ("", "### Check sequence", "")
    check = frame.check
    rows2 = (
        ("name", f"{check.name} ({check.also_known_as})"),
        ("polynomial", f"0x{check.polynomial:08X}"),
        ("initial value", f"0x{check.initial:08X}"),
        ("bits reflected", "yes" if check.reflected else "no"),
        ("final exclusive or", f"0x{check.final_xor:08X}"),
        ("check value of `123456789`", f"0x{check.check_value:08X}"),
        ("byte order", check.byte_order),
        ("Hamming distance, bare frames", check.hamming_distance),
    )
    yield from _table(("Parameter", "Value"), rows2)
    yield from _prose(check.reason)
    yield from ("", "### Stuffing", "", f"{frame.stuffing.name}, delimiter 0x{frame.stuffing.delimiter:02X}.", "")
    yield from _prose(frame.stuffing.reason)
    yield from ("", "### Links", "")
    for binding in frame.binding:
        yield f"**{binding.name.capitalize()}** ({', '.join(binding.links)}). {_flat(binding.text)}"
        yield ""


def _addresses(contract: Contract) -> Iterator[str]:
    places = contract.addresses
    yield from ("## Addresses", "")
    rows = (
        ("none assigned", f"0x{places.unassigned:08X}"),
        ("unicast", f"0x{places.unicast_first:08X} to 0x{places.unicast_last:08X}"),
        ("group", f"0x{places.group_first:08X} to 0x{places.group_last:08X}"),
        ("any controller", f"0x{places.any_controller:08X}"),
        ("broadcast", f"0x{places.broadcast:08X}"),
    )
    yield from _table(("Address", "Value"), rows)
    yield from _prose(places.reason)


def _body(contract: Contract) -> Iterator[str]:
    body = contract.frame.body
    yield from ("## Body", "", f"{body.format}.", "")
    yield from (f"- {rule}" for rule in body.rules)
    private = f"{body.private_first} to {body.key_last}"
    yield f"- Keys from {body.critical_first} on must be understood; {private} are private."
    yield ""
    yield from _prose(body.reason)


# ---------------------------------------------------------------- kinds


def _kinds(contract: Contract) -> Iterator[str]:
    yield from ("## Message kinds", "")
    ranges = contract.frame.kind_ranges.items()
    codes = ((name.replace("_", " "), f"0x{first:02X} to 0x{last:02X}") for name, (first, last) in ranges)
    yield from _table(("Range", "Codes"), codes)
    for class_, title in CLASSES:
        yield from (f"### {title}", "")
        for kind in contract.kinds:
            if kind.class_ == class_:
                yield from _kind(contract, kind)
    yield from ("### Records", "")
    for name, record in contract.records.items():
        yield from (f"**{name}**: {_flat(record.text)}", "")
        places = ((n, place.name, describe_shape(contract, place)) for n, place in enumerate(record.fields))
        yield from _table(("Place", "Name", "Type"), places)
    yield from ("### Enumerations", "")
    values = ((name, _values(enum.values), enum.text) for name, enum in contract.enums.items())
    yield from _table(("Name", "Values", "Meaning"), values)


def _kind(contract: Contract, kind: Kind) -> Iterator[str]:
    yield from (f"#### {kind.name} (0x{kind.code:02X})", "", _flat(kind.text), "")
    facts = []
    if kind.answer:
        facts += [f"Answer: {kind.answer}.", "May go to many." if kind.many else "Unicast only."]
    if kind.fence:
        facts.append(f"Fence: {_FENCES[kind.fence]}.")
    if kind.needs:
        facts.append(f"Needs {kind.needs}.")
    if facts:
        yield from (" ".join(facts), "")
    if kind.fields:
        rows = ((field.key, field.name, _field_type(contract, field), field.text) for field in kind.fields)
        yield from _table(("Key", "Field", "Type", "Meaning"), rows)
    else:
        yield from ("No fields.", "")


_FENCES = {
    "none": "none",
    "take": "the epoch and the last lease number, and nobody holds the lease",
    "full": "epoch, lease number, and the sender holds the lease",
    "many": "as for other commands when unicast; to many a newer number and what its clause says",
    "epoch": "the epoch",
}


def _field_type(contract: Contract, field: Field) -> str:
    words = describe_field(contract, field)
    return f"{words}, critical" if field.key >= contract.frame.body.critical_first else words


# ---------------------------------------------------------------- reasons, limits, states


def _reasons(contract: Contract) -> Iterator[str]:
    yield from ("## Drop reasons", "", "In the order of checking; the first that fits is counted.", "")
    drops = ((row.name, row.number, row.stage, row.text) for row in contract.drops)
    yield from _table(("Reason", "Number", "Stage", "Meaning"), drops)
    yield from ("## Refusals", "", "In the order of judging; the first that fits is the answer.", "")
    rows = (
        (row.name, row.number, row.stage, "silent" if row.silent else ", ".join(row.carries), row.text)
        for row in contract.refusals
    )
    yield from _table(("Reason", "Number", "Stage", "Receipt carries", "Meaning"), rows)


def _limits(contract: Contract) -> Iterator[str]:
    yield from ("## Limits", "")
    rows = ((limit.name, _limit(limit), limit.text, limit.reason) for limit in contract.limits.values())
    yield from _table(("Limit", "Value", "Meaning", "Reason"), rows)


def _limit(limit: Limit) -> str:
    value = str(limit.value) if limit.is_fixed else f"{limit.min} to {limit.max}"
    return value if limit.unit == "1" else f"{value} {limit.unit}"


def _states(contract: Contract) -> Iterator[str]:
    table = contract.states
    yield from ("## States", "")
    yield f"{len(table.states)} states of activity, halt latch, fault latch and lease."
    yield table.file.factors.excluded_text
    initial = zip(FACTORS, table.initial, strict=True)
    yield "At power-on: " + ", ".join(f"{name} {_word(value)}" for name, value in initial) + "."
    yield from (f"On the same instant, inputs are taken in this order: {', '.join(table.order)}.", "")
    yield from ("### Displayed state", "", "The first row that fits.", "")
    rows = (
        (row.state, *(_factor(getattr(row, name)) for name in ("activity", "halt", "fault")))
        for row in table.file.displayed
    )
    yield from _table(("Displayed", "Activity", "Halt latch", "Fault latch"), rows)
    yield from ("```mermaid", state_diagram(contract), "```", "")
    yield from ("### Inputs", "")
    yield from _table(("Input", "Class", "Meaning"), ((row.name, row.class_, row.text) for row in table.inputs))
    yield from ("### State table", "")
    yield "Every state and input has exactly one row. Where the next activity is *declared*, it is idle, unless an"
    yield "actuator declares stop category 2 for every cause that applies: halt (halt latch set), fault (fault latch"
    yield from ("set), lease end (lease free); then it is energized.", "")
    head = ("Input", "Activity", "Halt", "Fault", "Lease", "Answer", "Next")
    yield from _table(head, (_transition(row) for row in table.file.transition))


def _transition(row: Transition) -> tuple[str, ...]:
    changes = [f"{name} {_word(new)}" for name in FACTORS if (new := getattr(row, f"next_{name}")) != "same"]
    factors = (_factor(getattr(row, name)) for name in FACTORS)
    return (row.input, *factors, row.answer, ", ".join(changes) or "same")


def _factor(value: object) -> str:
    return ", ".join(value) if isinstance(value, tuple) else _word(value)


def _word(value: object) -> str:
    if isinstance(value, bool):
        return "set" if value else "clear"
    return str(value)


# ---------------------------------------------------------------- capabilities, faults, clauses, errors, notes


def _capabilities(contract: Contract) -> Iterator[str]:
    yield from ("## Capabilities", "")
    yield from _table(
        ("Capability", "Bit", "Meaning"), ((row.name, row.number, row.text) for row in contract.capabilities)
    )
    yield from ("Items of the conformance statement that follow from the description:", "")
    yield from _table(("Item", "Holds when"), ((item.name, item.text) for item in contract.items))
    profile = contract.files.capabilities.profile
    yield from (f"Profile **{profile.name}**. {_flat(profile.text)}", "")
    yield from ("Least numbers of places, and their memory:", "")
    rows = ((size.name, size.min, size.bytes_each, size.text) for size in contract.sizes)
    yield from _table(("Places", "At least", "Bytes each", "For"), rows)


def _faults(contract: Contract) -> Iterator[str]:
    yield from ("## Faults", "")
    rows = ((row.name, row.code, row.class_, row.severity, row.value_unit, row.text) for row in contract.faults)
    yield from _table(("Fault", "Code", "Class", "Severity", "Unit of value", "Meaning"), rows)


def _clauses(contract: Contract) -> Iterator[str]:
    yield from ("## Clauses", "", "Each binds the module and is required and observable unless it says otherwise.", "")
    for area in contract.areas:
        yield from (f"### {area.code}: {area.title}", "")
        for clause in contract.clauses:
            if clause.area != area.code:
                continue
            reason = f" Reason: {_flat(clause.reason)}" if clause.reason else ""
            yield from (f"**{clause.id}**{_marks(clause)} {_flat(clause.text)}{reason}", "")


def _marks(clause: Clause) -> str:
    """What sets a clause apart from most."""
    marks = {
        clause.level: clause.level != "required",
        f"binds the {clause.subject}": clause.subject != "module",
        "not observable": not clause.observable,
        f"applies with: {clause.needs}": clause.needs is not None,
    }
    told = [mark for mark, holds in marks.items() if holds]
    return f" *({'; '.join(told)})*" if told else ""


def _errors(contract: Contract) -> Iterator[str]:
    errors = contract.errors
    yield from ("## Communication errors and what answers them", "", "A cell names the areas whose clauses do it.", "")
    rows = (
        (error.name, *(", ".join(error.answered_by.get(measure, ())) for measure in errors.measures))
        for error in errors.error
    )
    yield from _table(("Error", *errors.measures), rows)
    for error in errors.error:
        yield f"- {error.name}: {_flat(error.text)}{' ' + _flat(error.open) if error.open else ''}"
    yield ""


def _notes(contract: Contract) -> Iterator[str]:
    yield from ("## Notes for implementers", "")
    for note in contract.notes:
        yield from (f"### {note.title}", "", *_prose(note.text), "")


_SECTIONS: tuple[Callable[[Contract], Iterable[str]], ...] = (
    _frame,
    _addresses,
    _body,
    _kinds,
    _reasons,
    _limits,
    _states,
    _capabilities,
    _faults,
    _clauses,
    _errors,
    _notes,
)

# ---------------------------------------------------------------- worked exchanges


def _charts(contract: Contract, encode: Encode) -> Iterator[str]:
    yield from ("## Worked exchanges", "")
    yield f"Controller 0x{CONTROLLER:08X}, session 0x{SESSION:08X}; module 0x{MODULE:08X}. Bare frames, hexadecimal, as"
    yield from ("header, body and check sequence.", "")
    for chart in contract.charts:
        yield from _chart(contract, chart, encode)


def _chart(contract: Contract, chart: Chart, encode: Encode) -> Iterator[str]:
    yield from (f"### {chart.title}", "", *_prose(chart.text), "", "```text")
    for step in chart.step:
        arrow = "controller -> module" if step.from_ == "controller" else "controller <- module"
        if step.lost:
            arrow = arrow.replace("->", "-X").replace("<-", "X-")
        fields = step.fields.items()
        told = ", ".join(f"{name} {_named(contract, step.kind, name, value)}" for name, value in fields)
        number = f" #{step.number}" if step.number else ""
        yield f"{arrow}  {step.kind}{number}{f' ({told})' if told else ''}: {step.note}"
        data = frame_of(contract, step, encode)
        header, check = contract.frame.layout.header_size, contract.frame.layout.check_size
        yield f"    {data[:header].hex()} {data[header:-check].hex()} {data[-check:].hex()}"
    yield from ("```", "")


def frame_of(contract: Contract, step: Step, encode: Encode) -> bytes:
    """Return the bytes of one step; an event without a number is for any controller and has no session."""
    kind = contract.kind(step.kind)
    fields = {name: _value(kind.field(name), value) for name, value in step.fields.items()}
    source, destination, session = MODULE, CONTROLLER, SESSION
    if step.from_ == "controller":
        source, destination = CONTROLLER, MODULE
    elif kind.class_ == "event" and not step.number:
        destination, session = contract.addresses.any_controller, 0
    return encode(step.kind, fields, source, destination, session, step.number)


def _value(field: Field, value: int | bool | str) -> Any:
    return bytes.fromhex(value) if field.type == "bytes" and isinstance(value, str) else value


def _named(contract: Contract, kind: str, name: str, value: int | bool | str) -> str:
    """A value in words; an enumeration by its name."""
    field = contract.kind(kind).field(name)
    if field.enum is not None and isinstance(value, int):
        return contract.enum_names(field.enum).get(value, str(value))
    return str(value)


# ---------------------------------------------------------------- Markdown


def _flat(text: str) -> str:
    return " ".join(text.split())


def _prose(text: str) -> list[str]:
    return [line.strip() for line in text.strip().splitlines()]


def _values(values: Mapping[str, int]) -> str:
    return ", ".join(f"{name} {number}" for name, number in values.items())


def _table(head: tuple[str, ...], rows: Iterable[tuple[object, ...]]) -> Iterator[str]:
    yield "| " + " | ".join(head) + " |"
    yield "|" + " --- |" * len(head)
    for row in rows:
        yield "| " + " | ".join(_flat(str(cell)).replace("|", "\\|") for cell in row) + " |"
    yield ""


def _one_blank_line(lines: Iterable[str]) -> Iterator[str]:
    """No two blank lines in a row, and one before each heading."""
    last = ""
    for line in lines:
        if line.startswith("#") and last:
            yield ""
        if line or last:
            yield line
        last = line
