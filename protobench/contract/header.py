"""The contract's constants as a C99 header: macros only, so that it costs nothing where it is not used.

Single numbers are ``#define``; tables are lists of rows ``X(...)`` for the includer to give a meaning. No
logical line is longer than the 4095 characters that every C99 compiler must take.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Iterator

from protobench.contract.kinds import Field, Kind
from protobench.contract.model import Contract
from protobench.contract.states import DECLARED, State

PREFIX = "PB_"
LINE_LENGTH_MAX = 4095
ACTIVITY_DECLARED = 0
ANSWER_ACCEPTED = 0
# Beyond the refusals, whose numbers end at 255.
ANSWERS_BEYOND = {"none": 256, "answered": 257, "halt-receipt": 258}

Define = tuple[str, int]


def generate_header(contract: Contract) -> str:
    """Return the header's text. ValueError when two constants of the contract would have one name in C."""
    guard = f"{PREFIX}CONTRACT_H"
    lines = [
        f"/* {contract.name}, version {contract.version}: the constants of the contract.",
        " * Generated from the contract's tables; change those, not this file. */",
        f"#ifndef {guard}",
        f"#define {guard}",
    ]
    for title, section in _DEFINES:
        lines += ["", f"/* {title} */"]
        lines += [f"#define {PREFIX}{name} {_literal(value)}" for name, value in section(contract)]
    for title, columns, tables in _TABLES:
        lines += ["", *_comment(f"{title} X({columns})")]
        for name, rows in tables(contract):
            lines.append(_table(name, rows))
    lines += ["", "#endif"]
    text = "\n".join(lines) + "\n"
    _check(text)
    return text


# ---------------------------------------------------------------- single numbers


def _versions(contract: Contract) -> Iterator[Define]:
    yield "MAJOR", contract.major
    yield "MINOR", contract.minor


def _frame(contract: Contract) -> Iterator[Define]:
    layout = contract.frame.layout
    names = ("version", "header_size", "check_size", "frame_size_min", "frame_size_max", "body_size_max")
    for name in (*names, "stuffed_size_max"):
        yield _upper(name), getattr(layout, name)
    yield "DELIMITER", contract.frame.stuffing.delimiter
    for field in layout.field:
        yield f"OFFSET_{_upper(field.name)}", field.offset


def _check_sequence(contract: Contract) -> Iterator[Define]:
    for name in ("width", "polynomial", "initial", "final_xor", "check_value"):
        yield f"CRC_{_upper(name)}", getattr(contract.frame.check, name)
    yield "CRC_REFLECTED", contract.frame.check.reflected


def _addresses(contract: Contract) -> Iterator[Define]:
    for name in type(contract.addresses).model_fields:
        if name != "reason":
            yield f"ADDRESS_{_upper(name)}", getattr(contract.addresses, name)


def _kind_ranges(contract: Contract) -> Iterator[Define]:
    for name, (first, last) in contract.frame.kind_ranges.items():
        yield f"RANGE_{_upper(name)}_FIRST", first
        yield f"RANGE_{_upper(name)}_LAST", last


def _body(contract: Contract) -> Iterator[Define]:
    for name, value in contract.frame.body:
        if isinstance(value, int):
            yield f"BODY_{_upper(name)}", value


def _limits(contract: Contract) -> Iterator[Define]:
    for limit in contract.limits.values():
        name = f"LIMIT_{_upper(limit.name)}"
        if limit.is_fixed:
            yield name, limit.value
        else:
            yield f"{name}_MIN", limit.min
            yield f"{name}_MAX", limit.max


def _enumerations(contract: Contract) -> Iterator[Define]:
    for enum, table in contract.enums.items():
        for name, number in table.values.items():
            yield f"{_upper(enum)}_{_upper(name)}", number


def _kinds(contract: Contract) -> Iterator[Define]:
    for kind in contract.kinds:
        yield f"KIND_{_upper(kind.name)}", kind.code
        for field in kind.fields:
            yield f"KEY_{_upper(kind.name)}_{_upper(field.name)}", field.key


def _records(contract: Contract) -> Iterator[Define]:
    for name, record in contract.records.items():
        for place, field in enumerate(record.fields):
            yield f"PLACE_{_upper(name)}_{_upper(field.name)}", place
        yield f"PLACES_{_upper(name)}", len(record.fields)


def _drops(contract: Contract) -> Iterator[Define]:
    for drop in contract.drops:
        yield f"DROP_{_upper(drop.name)}", drop.number
    yield "DROP_NUMBER_LAST", max(drop.number for drop in contract.drops)


def _faults(contract: Contract) -> Iterator[Define]:
    for fault in contract.faults:
        yield f"FAULT_{_upper(fault.name)}", fault.code


def _capabilities(contract: Contract) -> Iterator[Define]:
    for capability in contract.capabilities:
        yield f"CAPABILITY_{_upper(capability.name)}", capability.number


def _sizes(contract: Contract) -> Iterator[Define]:
    for size in contract.sizes:
        yield f"SIZE_{_upper(size.name)}_MIN", size.min


def _state_codes(contract: Contract) -> Iterator[Define]:
    for number, item in enumerate(contract.states.inputs):
        yield f"INPUT_{_upper(item.name)}", number
    yield "INPUT_COUNT", len(contract.states.inputs)
    yield "LEASE_FREE", 0
    yield "LEASE_HELD", 1
    yield "ACTIVITY_DECLARED", ACTIVITY_DECLARED
    yield "ANSWER_ACCEPTED", ANSWER_ACCEPTED
    for name, number in ANSWERS_BEYOND.items():
        yield f"ANSWER_{_upper(name)}", number


_DEFINES: tuple[tuple[str, Callable[[Contract], Iterator[Define]]], ...] = (
    ("Version of the contract.", _versions),
    ("Frame: sizes and offsets in bytes.", _frame),
    ("Check sequence, by the parameters of the CRC catalogue; sent big-endian.", _check_sequence),
    ("Addresses.", _addresses),
    ("Ranges of kind codes.", _kind_ranges),
    ("Bounds of every body.", _body),
    ("Limits: durations in ms, clock_wrap in us, the rest are counts.", _limits),
    ("Enumerations, and refusal reasons.", _enumerations),
    ("Message kinds and the keys of their fields.", _kinds),
    ("Places in records.", _records),
    ("Drop reasons; the number less one is the place in counters.", _drops),
    ("Fault codes.", _faults),
    ("Capabilities: bit numbers.", _capabilities),
    ("Least numbers of places.", _sizes),
    ("State table: inputs, and what its columns hold besides enumerations and refusals.", _state_codes),
)

# ---------------------------------------------------------------- tables

Rows = list[tuple[str | int, ...]]


def _kind_table(contract: Contract) -> Iterator[tuple[str, Rows]]:
    rows: Rows = []
    for kind in contract.kinds:
        if kind.answer is None:
            continue
        needs = contract.capability(kind.needs).number if kind.needs else -1
        answer = contract.kind(kind.answer).code
        fence = _upper(kind.fence or "none")
        rows.append((_upper(kind.name), kind.code, _upper(kind.class_), answer, int(kind.many), fence, needs))
    yield "KIND_TABLE", rows


def _field_tables(contract: Contract) -> Iterator[tuple[str, Rows]]:
    for kind in contract.kinds:
        yield f"FIELDS_{_upper(kind.name)}", [_field_row(contract, kind, field) for field in kind.fields]


def _field_row(contract: Contract, kind: Kind, field: Field) -> tuple[str | int, ...]:
    low, high = field.min or 0, field.max or 0
    items_min, items_max = field.items_min or 0, field.items_max or 0
    if field.enum is not None:
        numbers = sorted(contract.enum_values(field.enum).values())
        low, high = numbers[0], numbers[-1]
        if len(numbers) != high - low + 1:
            raise ValueError(
                f"{kind.name}.{field.name}: the numbers of {field.enum} have a gap; a range cannot tell"
            )
    if field.size is not None:
        items_min = items_max = field.size
    if field.size_max is not None:
        items_max = field.size_max
    bounds = (f"({low}LL)", f"({high}LL)")
    return (field.key, _upper(field.type), _upper(field.required), *bounds, items_min, items_max)


def _fault_table(contract: Contract) -> Iterator[tuple[str, Rows]]:
    classes, severities = contract.enum_values("fault_class"), contract.enum_values("severity")
    rows: Rows = [
        (_upper(fault.name), fault.code, classes[fault.class_], severities[fault.severity])
        for fault in contract.faults
    ]
    yield "FAULT_TABLE", rows


def _transition_tables(contract: Contract) -> Iterator[tuple[str, Rows]]:
    names = []
    for item in contract.states.inputs:
        rows: Rows = []
        for state in contract.states.states:
            cell = contract.states.cell(state, item.name)
            before, after = _state_codes_of(contract, state), _state_codes_of(contract, cell.after)
            rows.append((_upper(item.name), *before, _answer_code(contract, cell.answer), *after))
        names.append(f"TRANSITIONS_{_upper(item.name)}")
        yield names[-1], rows
    yield "TRANSITIONS", [(name,) for name in names]


def _displayed_table(contract: Contract) -> Iterator[tuple[str, Rows]]:
    numbers = contract.enum_values("state")
    rows: dict[tuple[int, ...], int] = {}
    for state in contract.states.states:
        factors = _state_codes_of(contract, state)[:3]
        number = numbers[contract.states.displayed(state)]
        if rows.setdefault(factors, number) != number:
            raise ValueError(f"the displayed state of {state} depends on the lease")
    yield "DISPLAYED", [(*factors, number) for factors, number in rows.items()]


def _state_codes_of(contract: Contract, state: State) -> tuple[int, int, int, int]:
    activities = contract.enum_values("activity")
    activity = ACTIVITY_DECLARED if state.activity == DECLARED else activities[state.activity]
    return activity, int(state.halt), int(state.fault), int(state.lease == "held")


def _answer_code(contract: Contract, answer: str) -> int:
    if answer == "accepted":
        return ANSWER_ACCEPTED
    if answer in ANSWERS_BEYOND:
        return ANSWERS_BEYOND[answer]
    return contract.enum_values("refusal")[answer]


_TABLES: tuple[tuple[str, str, Callable[[Contract], Iterator[tuple[str, Rows]]]], ...] = (
    (
        "Requests. needs: capability number, -1 for none.",
        "NAME, code, CLASS, answer code, many, FENCE, needs",
        _kind_table,
    ),
    (
        "Fields of each kind, by ascending key. Bytes and text: items are bytes.",
        "key, TYPE, REQUIRED, minimum, maximum, items_min, items_max",
        _field_tables,
    ),
    ("Faults.", "NAME, code, class, severity", _fault_table),
    (
        """State table. answer: a refusal or one of PB_ANSWER; next activity PB_ACTIVITY_DECLARED: by the stop
        categories that are declared for every cause that applies.""",
        "INPUT, activity, halt, fault, lease, answer, next activity, next halt, next fault, next lease",
        _transition_tables,
    ),
    ("Displayed states.", "activity, halt, fault, state", _displayed_table),
)

# ---------------------------------------------------------------- text


def _upper(name: str) -> str:
    return name.upper().replace("-", "_")


def _literal(value: int) -> str:
    if value < 0:
        return f"({value})"
    return f"{value}u" if value >= 2**31 else str(int(value))


def _comment(text: str) -> list[str]:
    """A comment broken into lines of about a hundred characters."""
    lines = [""]
    for word in text.split():
        if len(lines[-1]) + len(word) > 96:
            lines.append("")
        lines[-1] += f" {word}"
    return ["/*" + "\n *".join(lines) + " */"]


def _table(name: str, rows: Iterable[tuple[str | int, ...]]) -> str:
    """A list of rows; a row of one name only stands for the table of that name."""
    parts = [f"#define {PREFIX}{name}(X)"]
    parts += [f"{PREFIX}{row[0]}(X)" if len(row) == 1 else f"X({', '.join(map(str, row))})" for row in rows]
    return " \\\n  ".join(parts)


def _check(text: str) -> None:
    seen: set[str] = set()
    for name in re.findall(r"^#define (\w+)", text, re.MULTILINE):
        if name in seen:
            raise ValueError(f"two constants of the contract would be called {name} in C")
        seen.add(name)
    for line in text.replace("\\\n", "").splitlines():
        if len(line) > LINE_LENGTH_MAX:
            raise ValueError(
                f"{line[:60]}...: longer than the {LINE_LENGTH_MAX} characters a C99 compiler must take"
            )
