"""Lint: the contract has no findings, and each rule finds what breaks it."""

from __future__ import annotations

from collections.abc import Callable

import pytest
import umsgpack
from contract_copy import Copy
from hypothesis import given
from hypothesis import strategies as st

from protobench.contract import Contract, Field, load_contract
from protobench.contract.lint import lint
from protobench.contract.sizes import integer_size, longest_body


def test_the_contract_is_clean() -> None:
    assert [str(finding) for finding in lint()] == []


RULES = [
    (
        "kinds.toml",
        '{ key = 0, name = "t1"',
        '{ key = 120, name = "t1"',
        "kinds.toml",
        "key 120 lies outside 0..119",
    ),
    (
        "kinds.toml",
        '{ key = 65, name = "allow_last_bond"',
        '{ key = 5, name = "allow_last_bond"',
        "kinds.toml",
        "key 5 stands after key 64",
    ),
    (
        "kinds.toml",
        "items_min = 1, items_max = 8",
        "items_min = 1, items_max = 17",
        "kinds.toml",
        "above the body's 16",
    ),
    (
        "kinds.toml",
        'type = "text", size_max = 32',
        'type = "text", size_max = 33',
        "kinds.toml",
        "above the body's 32",
    ),
    (
        "kinds.toml",
        'type = "bytes", size = 8',
        'type = "bytes", size = 33',
        "kinds.toml",
        "above the body's 32",
    ),
    (
        "kinds.toml",
        "min = 500, max = 30000",
        "min = 500, max = 40000",
        "kinds.toml",
        "limit lease_duration 500..30000",
    ),
    ("kinds.toml", "min = 0, max = 2000", "min = 0, max = 2001", "kinds.toml", "limit answer_window 0..2000"),
    (
        "kinds.toml",
        "items_min = 12, items_max = 16",
        "items_min = 11, items_max = 16",
        "kinds.toml",
        "at least 11 items",
    ),
    ("reasons.toml", 'stage = "frame"', 'stage = "room"', "reasons.toml", "stands after"),
    ("reasons.toml", 'stage = "fence"', 'stage = "queue"', "reasons.toml", "stands after"),
    (
        "clauses.toml",
        "dropped as `too-short`",
        "dropped as `too-small`",
        "clauses.toml",
        "`too-small` is no known name",
    ),
    (
        "clauses.toml",
        "dropped as `too-short`",
        "dropped",
        "reasons.toml",
        "no clause names the drop reason too-short",
    ),
    ("clauses.toml", 'id = "FRM-02"', 'id = "FRM-88"', "clauses.toml", "FRM-03 stands after FRM-88"),
    (
        "clauses.toml",
        '[[area]]\ncode = "FRM"',
        '[[area]]\ncode = "ZZZ"\ntitle = "x"\n[[area]]\ncode = "FRM"',
        "clauses.toml",
        "area ZZZ has no clause",
    ),
    (
        "limits.toml",
        "value = 65535",
        "value = 65534",
        "limits.toml",
        "no clause states the limit counter_saturation",
    ),
    ("errors.toml", '"canonical-form"]', '"canonical-form", "luck"]', "errors.toml", "luck answers no error"),
    (
        "states.toml",
        'answer = "none"\nnext_activity = "moving"',
        'answer = "none"',
        "states.toml",
        "no sequence of inputs leads",
    ),
    ("frame.toml", "depth_max = 3", "depth_max = 2", "kinds.toml", "nests 3 deep, at most 2"),
    ("frame.toml", "pairs_max = 32", "pairs_max = 20", "kinds.toml", "24 fields, at most 20"),
]


@pytest.mark.parametrize(("file", "old", "new", "where", "rule"), RULES)
def test_each_rule_finds_what_breaks_it(
    copy: Copy, file: str, old: str, new: str, where: str, rule: str
) -> None:
    copy.edit(file, old, new)
    findings = lint("1.0", copy.root)
    assert any(finding.file == where and rule in finding.rule for finding in findings), [
        str(one) for one in findings
    ]


def test_the_longest_body_is_bounded(copy: Copy) -> None:
    copy.edit("kinds.toml", 'record = "truth_entry", items_max = 8', 'record = "truth_entry", items_max = 16')
    (finding,) = lint("1.0", copy.root)
    assert "truth-page: its longest body has 215 bytes, at most 213 are allowed" in finding.rule


def test_a_record_is_no_longer_than_a_list_may_be(copy: Copy) -> None:
    place = '  { name = "bonded", type = "uint", min = 0, max = 1, unit = "1" },\n'
    more = "".join(place.replace("bonded", f"b{number}") for number in range(14))
    copy.edit("kinds.toml", place, place + more)
    assert any("record face has more than 16 places" in finding.rule for finding in lint("1.0", copy.root))


def test_a_refusal_that_no_clause_names(copy: Copy) -> None:
    path = copy.folder / "clauses.toml"
    path.write_text(path.read_text().replace("`late-unseen`", "late"))
    assert any(
        "no clause names the refusal late-unseen" in finding.rule for finding in lint("1.0", copy.root)
    )


def test_a_kind_to_many_with_an_epoch_needs_a_clause(copy: Copy) -> None:
    path = copy.folder / "clauses.toml"
    path.write_text(path.read_text().replace("assign-address", "that kind"))
    assert any("assign-address to many needs the epoch" in finding.rule for finding in lint("1.0", copy.root))


@pytest.mark.parametrize(
    ("old", "new", "rule"),
    [
        (
            'name = "duration", type = "uint", unit = "ms", min = 100',
            'name = "span", type = "uint", unit = "ms", min = 100',
            "identify has no field 'duration'",
        ),
        ('name = "drops"', 'name = "lost"', "counters has no field 'drops'"),
        ('name = "identify"', 'name = "shine"', "there is no kind 'identify'"),
    ],
)
def test_what_lint_looks_for_must_be_there(copy: Copy, old: str, new: str, rule: str) -> None:
    copy.edit("kinds.toml", old, new)
    assert any(rule in finding.rule for finding in lint("1.0", copy.root))


def test_what_does_not_load_is_told_by_lint(copy: Copy) -> None:
    copy.edit("kinds.toml", "code = 0x27", "code = 0x26")
    assert any("used already" in finding.rule for finding in lint("1.0", copy.root))


def test_a_number_of_an_earlier_version_is_not_used_again(make_copy: Callable[[str], Copy]) -> None:
    make_copy("1.0")
    later = make_copy("1.1")
    later.edit("faults.toml", 'name = "bond-weak"\ncode = 4', 'name = "bond-cold"\ncode = 4')
    later.edit("kinds.toml", 'key = 2, name = "number"', 'key = 2, name = "which"')
    found = [str(finding) for finding in lint("1.1", later.root) if "since 1.0" in finding.rule]
    assert any("code 4 was bond-weak's since 1.0" in text for text in found)
    assert any("key 2 was number's since 1.0" in text for text in found)


def test_an_earlier_version_that_does_not_load_is_told(make_copy: Callable[[str], Copy]) -> None:
    (make_copy("1.0").folder / "faults.toml").unlink()
    (finding,) = lint("1.1", make_copy("1.1").root)
    assert finding.file == "../1.0"
    assert "cannot be loaded" in finding.rule


# ---------------------------------------------------------------- longest bodies, against a second encoder


@given(st.integers(-(2**63), 2**64 - 1))
def test_integer_sizes(value: int) -> None:
    assert integer_size(value) == len(umsgpack.packb(value))


def _longest(contract: Contract, field: Field) -> object:
    """The longest value of a field, by another way: the widest of its ends."""
    if field.type == "bool":
        return True
    if field.size is not None:
        return bytes(field.size)
    if field.size_max is not None:
        return "a" * field.size_max
    if field.record is not None:
        row = [_widest(contract, place) for place in contract.records[field.record].fields]
        return [row] * (field.items_max or 0)
    return [_widest(contract, field)] * field.items_max if field.items_max else _widest(contract, field)


def _widest(contract: Contract, shape: object) -> int:
    enum, low, high = (getattr(shape, name) for name in ("enum", "min", "max"))
    numbers = contract.enum_values(enum).values() if enum else (low, high)
    return max(numbers, key=lambda number: len(umsgpack.packb(number)))


@pytest.mark.parametrize("name", [kind.name for kind in load_contract().kinds])
def test_the_longest_body_of_each_kind(contract: Contract, name: str) -> None:
    kind = contract.kind(name)
    packed = umsgpack.packb({field.key: _longest(contract, field) for field in kind.fields})
    assert longest_body(contract, kind) == len(packed) <= contract.frame.layout.body_size_max
