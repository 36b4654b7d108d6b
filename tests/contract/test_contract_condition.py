"""Conditions: what they mean, and what is said of those that cannot be read."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from protobench.contract import ConditionError, parse_condition

NAMES = st.from_regex(r"[a-z][a-z0-9]{0,3}(-[a-z0-9]{1,3})?", fullmatch=True).filter(
    lambda name: name not in ("and", "not", "or")
)


@pytest.mark.parametrize(
    ("text", "items", "why"),
    [
        ("queue", {"queue"}, None),
        ("queue", set(), "needs queue"),
        ("not queue", set(), None),
        ("not queue", {"queue"}, "only without queue"),
        ("queue and schedule", {"queue"}, "needs schedule"),
        ("  queue   and\nnot assist ", {"assist"}, "needs queue; only without assist"),
        ("a and b and not c", {"a", "b", "d"}, None),
    ],
)
def test_conditions(text: str, items: set[str], why: str | None) -> None:
    condition = parse_condition(text)
    assert condition.why_not(items) == why
    assert condition.holds(items) is (why is None)


@pytest.mark.parametrize(
    ("text", "place", "rule"),
    [
        ("", 0, "empty"),
        ("   ", 0, "empty"),
        ("and", 0, "a name is wanted, 'and' found"),
        ("not", 3, "a name is wanted, the end found"),
        ("queue and", 9, "a name is wanted, the end found"),
        ("queue schedule", 6, "'and' is wanted, 'schedule' found"),
        ("queue or schedule", 6, "'and' is wanted, 'or' found"),
        ("not not queue", 4, "a name is wanted, 'not' found"),
        ("(queue)", 0, "a name is wanted, '(queue)' found"),
        ("Queue", 0, "a name is wanted, 'Queue' found"),
        ("queue and not queue", 14, "'queue' is named twice"),
        ("queue and queue", 10, "'queue' is named twice"),
        ("__import__('os')", 0, "a name is wanted"),
    ],
)
def test_a_condition_that_cannot_be_read_says_where_and_why(text: str, place: int, rule: str) -> None:
    with pytest.raises(ConditionError) as caught:
        parse_condition(text)
    assert caught.value.place == place
    assert rule in caught.value.rule
    assert str(caught.value) == f"condition {text!r}, character {place + 1}: {caught.value.rule}"


def test_unknown_names_are_told_with_the_known_ones() -> None:
    with pytest.raises(ConditionError, match=r"character 15: unknown name 'wings'; known: assist, queue"):
        parse_condition("queue and not wings", {"queue", "assist"})


@given(
    st.lists(st.tuples(NAMES, st.booleans()), min_size=1, max_size=8, unique_by=lambda pair: pair[0]),
    st.sets(NAMES),
)
def test_a_condition_reads_back_and_means_its_terms(terms: list[tuple[str, bool]], items: set[str]) -> None:
    text = " and ".join(name if wanted else f"not {name}" for name, wanted in terms)
    condition = parse_condition(text)
    assert parse_condition(str(condition)) == condition
    assert sorted(condition.names) == sorted(name for name, _ in terms)
    assert condition.holds(items) is all((name in items) is wanted for name, wanted in terms)


@given(st.text(max_size=40))
def test_any_text_is_read_or_refused(text: str) -> None:
    try:
        condition = parse_condition(text)
    except ConditionError as error:
        assert 0 <= error.place <= len(text)
    else:
        assert condition.names
