"""What changed between two versions of the contract, and whether peers of both still understand each other."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from protobench.contract.base import Model
from protobench.contract.kinds import Field, Kind
from protobench.contract.model import Contract

PROSE = frozenset({"text", "reason", "rules", "links", "title", "also_known_as", "covers", "format"})


@dataclass(frozen=True, slots=True)
class Change:
    """One difference.

    ``file`` and ``item``: where, e.g. "kinds.toml" and "move.magnitude"; ``what``: the difference; ``why``:
    why it is compatible or breaking; ``reuse``: a number, key or id has another meaning than before.
    """

    file: str
    item: str
    what: str
    breaking: bool
    why: str
    reuse: bool = False

    def __str__(self) -> str:
        word = "breaking" if self.breaking else "compatible"
        return f"{word}: {self.file}: {self.item}: {self.what} ({self.why})"


@dataclass(frozen=True, slots=True)
class Comparison:
    """All differences between two versions."""

    old: str
    new: str
    changes: tuple[Change, ...]

    @property
    def breaking(self) -> tuple[Change, ...]:
        """The changes that need another major version."""
        return tuple(change for change in self.changes if change.breaking)

    @property
    def is_compatible(self) -> bool:
        """Whether no change is breaking."""
        return not self.breaking


def compare(old: Contract, new: Contract) -> Comparison:
    """Return every difference between two versions, file by file, each classified."""
    changes = [change for section in _SECTIONS for change in section(old, new)]
    return Comparison(old.version, new.version, tuple(changes))


# ---------------------------------------------------------------- tools


def _breaking(file: str, item: str, what: str, why: str) -> Change:
    return Change(file, item, what, True, why)


def _compatible(file: str, item: str, what: str, why: str) -> Change:
    return Change(file, item, what, False, why)


def _reused(file: str, item: str, what: str) -> Change:
    return Change(file, item, what, True, "an older peer reads it in the old meaning", reuse=True)


def _values(old: Model, new: Model, skip: Iterable[str] = ()) -> Iterator[tuple[str, Any, Any]]:
    """Attributes that differ, prose apart."""
    for name in type(old).model_fields:
        if name in PROSE or name in skip:
            continue
        before, after = getattr(old, name), getattr(new, name)
        if before != after:
            yield name.rstrip("_"), before, after


def _numbers(file: str, old: Mapping[str, int], new: Mapping[str, int], item: str, what: str) -> Iterator[Change]:
    """Numbers that moved to another name, and names that have another number."""
    owners = {number: name for name, number in old.items()}
    for name, number in new.items():
        before = owners.get(number)
        if before is not None and before != name:
            yield _reused(file, f"{item}{name}", f"{what} {number} was {before}'s")
        elif name in old and old[name] != number:
            change = f"{what} {old[name]} became {number}"
            yield _breaking(file, f"{item}{name}", change, "an older peer uses the old one")


# ---------------------------------------------------------------- frame


def _frame(old: Contract, new: Contract) -> Iterator[Change]:
    why = "every frame of an older peer is read by it"
    sections = ("layout", "check", "stuffing", "addresses", "kind_ranges", "body")
    for section in sections:
        before, after = getattr(old.frame, section), getattr(new.frame, section)
        for name, value, other in _values(before, after, skip=("field",)):
            yield _breaking("frame.toml", f"{section}.{name}", f"{value} became {other}", why)
    places = [{field.name: (field.offset, field.size) for field in side.frame.layout.field} for side in (old, new)]
    for name in sorted(places[0].keys() | places[1].keys()):
        value, other = places[0].get(name), places[1].get(name)
        if value != other:
            yield _breaking("frame.toml", f"layout.{name}", f"offset and size {value} became {other}", why)
    bindings = [{binding.name: binding.text for binding in side.frame.binding} for side in (old, new)]
    for name in bindings[0].keys() - bindings[1].keys():
        yield _breaking("frame.toml", f"binding.{name}", "removed", "older peers are connected by it")
    for name in bindings[1].keys() - bindings[0].keys():
        yield _compatible("frame.toml", f"binding.{name}", "added", "no older peer uses it")


# ---------------------------------------------------------------- kinds


def _kinds(old: Contract, new: Contract) -> Iterator[Change]:
    before, after = {kind.name: kind for kind in old.kinds}, {kind.name: kind for kind in new.kinds}
    codes = [{kind.name: kind.code for kind in side.kinds} for side in (old, new)]
    yield from _numbers("kinds.toml", codes[0], codes[1], "", "code")
    for name in before.keys() - after.keys():
        yield _breaking("kinds.toml", name, "kind removed", "an older peer sends it, or waits for it")
    for name, kind in after.items():
        if name not in before:
            yield _compatible("kinds.toml", name, "kind added", _NEW_KIND[kind.class_])
        else:
            yield from _kind(before[name], kind, new)


_NEW_KIND = {
    "read": "an older module refuses it as unknown-kind",
    "command": "an older module refuses it as unknown-kind",
    "answer": "it answers only what an older controller does not ask",
    "notice": "an older module drops it",
    "event": "an older controller drops it",
}


def _kind(before: Kind, after: Kind, new: Contract) -> Iterator[Change]:
    for name, value, other in _values(before, after, skip=("code", "fields")):
        if name == "many" and other:
            why = "an older module refuses it silently when it comes to many"
            yield _compatible("kinds.toml", before.name, "may go to many now", why)
        else:
            why = "an older peer keeps to the old one"
            yield _breaking("kinds.toml", before.name, f"{name} {value} became {other}", why)
    fields = [{field.name: field for field in kind.fields} for kind in (before, after)]
    keys = [{name: field.key for name, field in side.items()} for side in fields]
    yield from _numbers("kinds.toml", keys[0], keys[1], f"{before.name}.", "key")
    for name in fields[0].keys() - fields[1].keys():
        why = "an older peer sends it and its meaning is lost, or waits for it"
        yield _breaking("kinds.toml", f"{before.name}.{name}", "field removed", why)
    for name, field in fields[1].items():
        if name not in fields[0]:
            yield _new_field(after, field, new)
        else:
            yield from _field(after, fields[0][name], field)


def _new_field(kind: Kind, field: Field, new: Contract) -> Change:
    item = f"{kind.name}.{field.name}"
    if field.required != "optional":
        return _breaking("kinds.toml", item, "required field added", "an older peer does not send it")
    if field.key >= new.frame.body.critical_first:
        why = "a peer that does not know a critical key refuses the request"
        return _breaking("kinds.toml", item, f"critical key {field.key} added", why)
    return _compatible("kinds.toml", item, "optional field added", "an older peer ignores the unknown key")


def _field(kind: Kind, before: Field, after: Field) -> Iterator[Change]:
    item = f"{kind.name}.{before.name}"
    differing = {name: (value, other) for name, value, other in _values(before, after, skip=("key", "name"))}
    for low, high in (("min", "max"), ("items_min", "items_max")):
        if {low, high} & differing.keys():
            differing.pop(low, None)
            differing.pop(high, None)
            yield _range(kind, item, (low, high), before, after)
    for name, (value, other) in differing.items():
        why = "the same bytes mean something else, or nothing, to an older peer"
        yield _breaking("kinds.toml", item, f"{name} {value} became {other}", why)


def _range(kind: Kind, item: str, names: tuple[str, str], before: Field, after: Field) -> Change:
    (low, high), (new_low, new_high) = (
        tuple(getattr(side, name) or 0 for name in names) for side in (before, after)
    )
    what = f"{names[0]}..{names[1]} {low}..{high} became {new_low}..{new_high}"
    if new_low > low or new_high < high:
        return _breaking("kinds.toml", item, f"range narrowed, {what}", "an older peer sends what is refused now")
    if kind.is_request:
        why = "an older module refuses the rest as out-of-range"
        return _compatible("kinds.toml", item, f"range widened, {what}", why)
    return _breaking("kinds.toml", item, f"range widened, {what}", "an older controller cannot take the rest")


def _enumerations(old: Contract, new: Contract) -> Iterator[Change]:
    told = {
        shape.enum
        for kind in old.kinds
        if not kind.is_request
        for field in kind.fields
        for shape in (field, *(old.records[field.record].fields if field.record else ()))
    }
    for enum, before in old.enums.items():
        after = new.enums.get(enum)
        if after is None:
            yield _breaking("kinds.toml", enum, "enumeration removed", "an older peer uses its values")
            continue
        yield from _numbers("kinds.toml", before.values, after.values, f"{enum}.", "number")
        for name in before.values.keys() - after.values.keys():
            yield _breaking("kinds.toml", f"{enum}.{name}", "value removed", "an older peer uses it")
        for name in after.values.keys() - before.values.keys():
            if enum in told:
                why = "an older controller does not know what it is told"
                yield _breaking("kinds.toml", f"{enum}.{name}", "value added", why)
            else:
                why = "an older module refuses it as out-of-range"
                yield _compatible("kinds.toml", f"{enum}.{name}", "value added", why)
    for enum in new.enums.keys() - old.enums.keys():
        yield _compatible("kinds.toml", enum, "enumeration added", "no older field uses it")


def _records(old: Contract, new: Contract) -> Iterator[Change]:
    for name, before in old.records.items():
        after = new.records.get(name)
        if after is None:
            yield _breaking("kinds.toml", name, "record removed", "an older peer uses it")
        elif [_plain(place) for place in before.fields] != [_plain(place) for place in after.fields]:
            yield _breaking("kinds.toml", name, "places changed", "a record has a fixed length and fixed places")
    for name in new.records.keys() - old.records.keys():
        yield _compatible("kinds.toml", name, "record added", "no older field uses it")


def _plain(model: Model) -> dict[str, Any]:
    return {name: value for name, value in model.model_dump().items() if name not in PROSE}


# ---------------------------------------------------------------- reasons, limits, states


def _drops(old: Contract, new: Contract) -> Iterator[Change]:
    before, after = ({drop.name: drop.number for drop in side.drops} for side in (old, new))
    yield from _numbers("reasons.toml", before, after, "drop ", "number")
    for name in before.keys() - after.keys():
        yield _breaking("reasons.toml", f"drop {name}", "removed", "an older tester counts on it")
    for name in after.keys() - before.keys():
        yield _compatible("reasons.toml", f"drop {name}", "added", "counters have room, and unknown ones are ignored")
    kept = [[name for name in side if name in before and name in after] for side in (before, after)]
    if kept[0] != kept[1]:
        yield _breaking("reasons.toml", "drop", "order of checking changed", "the same frame is counted elsewhere")


def _refusals(old: Contract, new: Contract) -> Iterator[Change]:
    sides = [{(row.name, row.row): row for row in side.refusals} for side in (old, new)]
    kept = [[key for key in side if key in sides[0] and key in sides[1]] for side in sides]
    if kept[0] != kept[1]:
        why = "a request with two errors gets another answer"
        yield _breaking("reasons.toml", "refusal", "order of judging changed", why)
    for key in kept[0]:
        for name, value, other in _values(sides[0][key], sides[1][key], skip=("number",)):
            why = "the same refusal tells or counts something else"
            yield _breaking("reasons.toml", f"refusal {key[0]}", f"{name} {value} became {other}", why)


def _limits(old: Contract, new: Contract) -> Iterator[Change]:
    for name in sorted(old.limits.keys() | new.limits.keys()):
        before, after = old.limits.get(name), new.limits.get(name)
        if after is None:
            yield _breaking("limits.toml", name, "limit removed", "an older peer relies on it")
        elif before is None:
            yield _breaking("limits.toml", name, "limit added", "an older module was not held to it")
        else:
            for attribute, value, other in _values(before, after):
                why = "one side is slower, longer or wider than the other expects"
                yield _breaking("limits.toml", name, f"limit changed, {attribute} {value} became {other}", why)


def _states(old: Contract, new: Contract) -> Iterator[Change]:
    inputs = [{item.name for item in side.states.inputs} for side in (old, new)]
    for name in sorted(inputs[0] - inputs[1]):
        yield _breaking("states.toml", name, "input removed", "an older peer still causes it")
    for name in sorted(inputs[1] - inputs[0]):
        yield _compatible("states.toml", name, "input added", "no older peer causes it")
    for state in old.states.states:
        if state not in new.states.states:
            yield _breaking("states.toml", str(state), "state removed", "an older module can be in it")
            continue
        if (value := old.states.displayed(state)) != (other := new.states.displayed(state)):
            why = "an older controller reads another state"
            yield _breaking("states.toml", str(state), f"displayed as {value}, now {other}", why)
        for name in sorted(inputs[0] & inputs[1]):
            before, after = old.states.cell(state, name), new.states.cell(state, name)
            if (before.answer, before.after) != (after.answer, after.after):
                what = f"{before.answer}, then {before.after}; now {after.answer}, then {after.after}"
                yield _breaking("states.toml", f"{name} in {state}", what, "the same request does something else")
    if old.states.order != new.states.order:
        yield _breaking("states.toml", "order", "order at equal times changed", "a race has another winner")


# ---------------------------------------------------------------- faults, capabilities, clauses


def _rows(file: str, old: Iterable[Any], new: Iterable[Any], number: str, added: str) -> Iterator[Change]:
    """Rows with a name and a number; any other attribute may not change."""
    before, after = ({row.name: row for row in side} for side in (old, new))
    numbers = [{name: getattr(row, number) for name, row in side.items()} for side in (before, after)]
    yield from _numbers(file, numbers[0], numbers[1], "", number)
    for name in before.keys() - after.keys():
        yield _breaking(file, name, "removed", "an older peer uses it")
    for name, row in after.items():
        if name not in before:
            yield _compatible(file, name, "added", added)
        else:
            for attribute, value, other in _values(before[name], row, skip=(number,)):
                yield _breaking(file, name, f"{attribute} {value} became {other}", "an older peer takes it for the old")


def _faults(old: Contract, new: Contract) -> Iterator[Change]:
    added = "class and severity tell an older controller enough"
    yield from _rows("faults.toml", old.faults, new.faults, "code", added)


def _capabilities(old: Contract, new: Contract) -> Iterator[Change]:
    added = "an older controller ignores the bit"
    yield from _rows("capabilities.toml", old.capabilities, new.capabilities, "number", added)
    sizes = [{size.name: size.min for size in side.sizes} for side in (old, new)]
    for name in sorted(sizes[0].keys() | sizes[1].keys()):
        if (value := sizes[0].get(name)) != (other := sizes[1].get(name)):
            why = "an older module has fewer places, or an older controller counts on more"
            yield _breaking("capabilities.toml", f"size {name}", f"least number {value} became {other}", why)


def _clauses(old: Contract, new: Contract) -> Iterator[Change]:
    before, after = ({clause.id: clause for clause in side.clauses} for side in (old, new))
    news = {row.name for row in new.capabilities} - {row.name for row in old.capabilities}
    for clause_id in sorted(before.keys() - after.keys()):
        yield _breaking("clauses.toml", clause_id, "clause removed", "an older peer relies on it")
    for clause_id, clause in after.items():
        if clause_id not in before:
            free = clause.level == "recommended" or bool(news & set((clause.needs or "").split()))
            why = "no older module is held to it" if free else "an older module was not held to it"
            yield Change("clauses.toml", clause_id, f"{clause.level} clause added", not free, why)
            continue
        for name, value, other in _values(before[clause_id], clause):
            softer = name == "level" and other == "recommended"
            why = "less is asked than before" if softer else "other modules are held to it, or in another way"
            yield Change("clauses.toml", clause_id, f"{name} {value} became {other}", not softer, why)
        if before[clause_id].text != clause.text:
            why = "a program cannot tell wording from meaning"
            yield _breaking("clauses.toml", clause_id, "sentence changed", why)


_SECTIONS: tuple[Callable[[Contract, Contract], Iterator[Change]], ...] = (
    _frame,
    _kinds,
    _enumerations,
    _records,
    _drops,
    _refusals,
    _limits,
    _states,
    _faults,
    _capabilities,
    _clauses,
)
