"""Measured times of a run: a table of all, and pictures of those that were measured often enough to have a shape."""

from __future__ import annotations

import io
import math
import re
import statistics
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from markupsafe import Markup

from protobench.evidence.text import cut
from protobench.judge import RunRecord

PICTURES_MAX = 16
POINTS_MAX = 400  # of a picture
VALUES_LEAST = 4  # fewer have no distribution to show
TABLE_MAX = 200
WIDTH_IN, HEIGHT_IN = 5.4, 2.3
# Stand-ins that become variables of the page's style sheet, so that a picture follows light and dark.
COLOURS = {
    "#010203": "var(--ink)",
    "#040506": "var(--soft)",
    "#070809": "var(--fail)",
    "#0a0b0c": "var(--accent)",
}
INK, SOFT, LIMIT, SHAPE = COLOURS


@dataclass(slots=True)
class Timing:
    """One quantity over all cases that measured it in the same way.

    ``low`` and ``high``: limits, None where there is none; ``expanded``: expanded uncertainty U of a value with
    coverage factor ``factor``, the greatest of the cases; all in ``unit``.
    """

    name: str
    clause: str
    unit: str
    low: float | None
    high: float | None
    expanded: float
    factor: float
    values: list[float] = field(default_factory=list)
    cases: list[str] = field(default_factory=list)
    decisions: list[str] = field(default_factory=list)
    picture: Markup | str = ""

    @property
    def median(self) -> float:
        return statistics.median(self.values)

    @property
    def spread(self) -> str:
        """Least, middle and greatest."""
        return f"{shown(min(self.values))} / {shown(self.median)} / {shown(max(self.values))}"

    @property
    def limits(self) -> str:
        if self.low is None and self.high is None:
            return "none"
        if self.low is None:
            return f"at most {shown(self.high)} {self.unit}"
        if self.high is None:
            return f"at least {shown(self.low)} {self.unit}"
        return f"{shown(self.low)} to {shown(self.high)} {self.unit}"

    @property
    def uncertainty(self) -> str:
        return f"{shown(self.expanded)} {self.unit} (k = {shown(self.factor)})"

    @property
    def nearness(self) -> float:
        """How much of the way to its nearer limit the worst value has gone; 1 is at the limit."""
        parts = []
        if self.high:
            parts.append(max(self.values) / self.high)
        if self.low and min(self.values) > 0:
            parts.append(self.low / min(self.values))
        return max(parts, default=0.0)


def timings(record: RunRecord) -> list[Timing]:
    """Everything that was measured, nearest to its limit first; the first of them with pictures."""
    found: dict[tuple[object, ...], Timing] = {}
    for case in record.cases:
        for one in case.measurements:
            first = Timing(one.name, one.clause, one.unit, one.low, one.high, one.U, one.k)
            timing = found.setdefault((one.name, one.clause, one.unit, one.low, one.high), first)
            timing.expanded = max(timing.expanded, one.U)
            timing.values += [value for value in one.values if math.isfinite(value)]
            timing.cases.append(case.id)
            if one.decision and one.decision not in timing.decisions:
                timing.decisions.append(one.decision)
    measured_ones = sorted(
        (timing for timing in found.values() if timing.values), key=lambda one: -one.nearness
    )
    drawn = [timing for timing in measured_ones if len(timing.values) >= VALUES_LEAST][:PICTURES_MAX]
    for number, timing in enumerate(drawn):
        timing.picture = Markup(picture(timing, f"plot-{number}"))  # noqa: S704 - text in it is escaped by matplotlib
    return measured_ones[:TABLE_MAX]


def picture(timing: Timing, ident: str) -> str:
    """Empirical distribution of the values as one ``svg``; limits as lines, guard bands of one U as shaded strips."""
    # Slow to import, and wanted only where something was measured.
    import matplotlib as mpl  # noqa: PLC0415
    from matplotlib.figure import Figure  # noqa: PLC0415

    rules: Any = {
        "svg.fonttype": "none", "svg.hashsalt": ident, "font.family": "sans-serif", "font.size": 9,
        "text.color": INK, "axes.edgecolor": SOFT, "axes.labelcolor": INK, "xtick.color": INK, "ytick.color": INK,
        "text.parse_math": False,
    }  # fmt: skip
    with mpl.rc_context(rules):
        figure = Figure(figsize=(WIDTH_IN, HEIGHT_IN), layout="constrained")
        axes = figure.add_subplot()
        values, heights = steps(timing.values)
        axes.step([values[0], *values], [0.0, *heights], where="post", color=SHAPE, linewidth=1.6)
        for limit in (timing.low, timing.high):
            if limit is not None:
                axes.axvspan(
                    limit - timing.expanded, limit + timing.expanded, color=LIMIT, alpha=0.16, linewidth=0
                )
                axes.axvline(limit, color=LIMIT, linewidth=1.4, linestyle=(0, (6, 2)))
        axes.set_ylim(0, 1.04)
        axes.set_xlabel(cut(f"{timing.name}, {timing.unit}", 60))
        axes.set_ylabel("share of values")
        axes.spines[["top", "right"]].set_visible(False)
        return _element(figure_svg(figure), timing, ident)


def steps(values: Sequence[float]) -> tuple[list[float], list[float]]:
    """The empirical distribution: values in order, and the share of all that are no greater; thinned when many.

    The least and the greatest value are always kept.
    """
    ordered = sorted(values)
    count = len(ordered)
    kept = (
        range(count)
        if count <= POINTS_MAX
        else [place * (count - 1) // (POINTS_MAX - 1) for place in range(POINTS_MAX)]
    )
    return [ordered[place] for place in kept], [(place + 1) / count for place in kept]


def figure_svg(figure: object) -> str:
    """A figure of matplotlib as SVG text without dates."""
    stream = io.StringIO()
    figure.savefig(stream, format="svg", transparent=True, metadata={"Date": None, "Creator": None})  # type: ignore[attr-defined]
    return stream.getvalue()


def _element(document: str, timing: Timing, ident: str) -> str:
    """The bare element, with a title, colours of the page and ids of its own."""
    element = document[document.index("<svg") :]
    element = re.sub(r"<metadata>.*?</metadata>", "", element, flags=re.DOTALL)
    element = re.sub(r'\b(id="|href="#|url\(#)', rf"\g<1>{ident}-", element)
    for stand_in, variable in COLOURS.items():
        element = element.replace(stand_in, variable)
    label = cut(
        f"{timing.name}: {len(timing.values)} values, median {shown(timing.median)}, limits: {timing.limits}",
        200,
    )
    head = f'<svg class="plot" role="img" aria-label="{Markup.escape(label)}"'
    return head + element[len("<svg") :]


def shown(value: float | None) -> str:
    """A number of a table: four digits, or a dash where there is none."""
    return "none" if value is None else f"{value:.4g}"
