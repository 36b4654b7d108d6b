"""Measured times on the page: pooled, nearest to their limit first, and pictures whose text is text."""

from __future__ import annotations

import math
import re
import xml.etree.ElementTree as ET
from collections.abc import Sequence

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pages import page_of, parse
from records import NASTY, case
from scipy import stats

from protobench.evidence.plots import COLOURS, PICTURES_MAX, POINTS_MAX, picture, steps, timings
from protobench.judge import Measurement, RunRecord


def measured(name: str, values: Sequence[float], high: float | None = 10.0, **more: object) -> Measurement:
    return Measurement(
        name, "ACK-02", "ms", values, **{"low": None, "high": high, "U": 0.5, "k": 2.0, **more}
    )  # type: ignore[arg-type]


def record_of(*measurements: Measurement) -> RunRecord:
    record = RunRecord("c", 1)
    for number, one in enumerate(measurements):
        judged = case(f"ACK.{number}", "pass", "ACK-02")
        judged.measurements = [one]
        record.cases.append(judged)
    return record


def test_the_same_quantity_of_several_cases_is_one() -> None:
    first = measured("receipt", [1.0, 2.0], U=0.25, decision="kept")
    (timing, other) = timings(
        record_of(first, measured("receipt", [9.0], decision="kept"), measured("receipt", [3.0], high=99.0))
    )
    assert (timing.values, timing.cases, timing.decisions) == ([1.0, 2.0, 9.0], ["ACK.0", "ACK.1"], ["kept"])
    assert timing.spread == "1 / 2 / 9"
    assert timing.uncertainty == "0.5 ms (k = 2)"
    assert timing.limits == "at most 10 ms"
    assert other.limits == "at most 99 ms"


def test_the_nearest_to_its_limit_comes_first() -> None:
    found = timings(
        record_of(
            measured("far", [1.0]),
            measured("near", [9.9]),
            measured("low", [12.0], high=None, low=11.0),
            measured("free", [5.0], high=None),
        )
    )
    assert [timing.name for timing in found] == ["near", "low", "far", "free"]
    assert [timing.limits for timing in found][1::2] == ["at least 11 ms", "none"]


def test_what_is_no_number_is_left_out() -> None:
    found = timings(record_of(measured("a", [math.nan, 1.0, math.inf]), measured("b", [math.nan])))
    assert [(timing.name, timing.values) for timing in found] == [("a", [1.0])]


@given(st.lists(st.floats(0, 1e6), min_size=1, max_size=60))
def test_steps_are_the_empirical_distribution(values: list[float]) -> None:
    """Against scipy.stats.ecdf: at each value, the share of values that are no greater."""
    ordered, shares = steps(values)
    reference = stats.ecdf(values).cdf
    highest = dict(zip(ordered, shares, strict=True))  # of equal values the last counts
    for value, share in zip(reference.quantiles, reference.probabilities, strict=True):
        assert highest[value] == pytest.approx(share)


def test_many_values_are_thinned_and_keep_their_ends() -> None:
    ordered, shares = steps(list(range(100_000)))
    assert len(ordered) == POINTS_MAX
    assert (ordered[0], ordered[-1], shares[-1]) == (0, 99_999, 1.0)
    assert ordered == sorted(set(ordered))


def test_a_picture_is_one_element_in_the_colours_of_the_page() -> None:
    (timing,) = timings(record_of(measured("time to the receipt", [1.0, 2.0, 3.0, 9.7], low=0.5)))
    drawn = picture(timing, "plot-7")
    root = ET.fromstring(drawn)
    assert root.tag.endswith("svg")
    texts = {text for element in root.iter() if element.tag.endswith("text") for text in element.itertext()}
    assert {"time to the receipt, ms", "share of values"} <= texts
    assert root.attrib["aria-label"] == "time to the receipt: 4 values, median 2.5, limits: 0.5 to 10 ms"
    assert not any(colour in drawn for colour in COLOURS)
    assert all(variable in drawn for variable in COLOURS.values())
    idents = re.findall(r'\bid="([^"]*)"', drawn)
    assert len(set(idents)) == len(idents)
    assert all(ident.startswith("plot-7-") for ident in idents)
    assert all(target.startswith("plot-7-") for target in re.findall(r"(?:url\(#|href=\"#)([^)\"]*)", drawn))
    assert drawn == picture(timing, "plot-7")


def test_the_page_shows_pictures_and_table() -> None:
    many = [measured(f"quantity {number}", [1.0, 2.0, 3.0, 4.0]) for number in range(PICTURES_MAX + 4)]
    page = parse(page_of(record_of(*many, measured("once", [1.0], decision="limit kept"))))
    pictures = page.all("svg", role="img")
    assert len(pictures) == PICTURES_MAX
    assert len({picture.attributes["aria-label"] for picture in pictures}) == PICTURES_MAX
    (table,) = [table for table in page.all("table") if table.all("caption")]
    assert len(table.all("tr")) == PICTURES_MAX + 6
    assert "limit kept" in table.text


@pytest.mark.parametrize(
    "name", [NASTY, "<script>alert(1)</script>", "$\\frac{1}{0}$", "</svg><img src=x onerror=y>"]
)
def test_hostile_names_stay_text(name: str) -> None:
    page = parse(page_of(record_of(measured(name, [1.0, 2.0, 3.0, 4.0], decision=name))))
    assert len(page.all("svg", role="img")) == 1
    assert not page.all("script")
    assert not page.all("img")
