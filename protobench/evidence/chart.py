"""A sequence chart as SVG. Colours come from the page's style sheet; nothing in it is a link or a script."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from html import escape

from protobench.evidence.sequence import MODULE, Chart, Condition, End, Message, Wait, order
from protobench.evidence.text import cut, plain

TIME_WIDTH = 92
HEAD_HEIGHT = 58
MARGIN = 84  # between an outer axis and the edge
SPAN_LEAST = 176  # between two axes
SPAN_ALL_LEAST = 340  # between the outer ones
MESSAGE_HEIGHT = 46
BARE_HEIGHT = 34  # of a message without a note
CONDITION_HEIGHT = 38
WAIT_HEIGHT = 34
FOOT_HEIGHT = 26
SLOPE = 7  # a message arrives below where it left
LOST_AT = 0.62  # of the way
GLYPH = 6.3  # width of a character of a note, on average, px
BOLD_GLYPH = 6.9  # of a label


@dataclass(frozen=True, slots=True)
class Layout:
    """Where everything stands, in px. ``ends``: height of each end of a message; ``rows``: top of each item."""

    width: int
    height: int
    axes: dict[str, int]
    rows: tuple[int, ...]
    ends: dict[End, int]


def place(chart: Chart) -> Layout:
    """Lay a chart out: items from top to bottom, each end of a message below all that comes before it."""
    count = len(chart.instances)
    span = max(SPAN_LEAST, SPAN_ALL_LEAST // max(count - 1, 1))
    axes = {
        instance.key: TIME_WIDTH + MARGIN + number * span for number, instance in enumerate(chart.instances)
    }
    top = HEAD_HEIGHT + 12
    rows: list[int] = []
    ends: dict[End, int] = {}
    before = order(chart)
    for number, item in enumerate(chart.items):
        rows.append(top)
        if isinstance(item, Message):
            for end in (End(number, False), End(number, True)):
                wanted = top + 17 + SLOPE * end.arrives
                ends[end] = max([wanted, *(ends[other] + 1 for other in before.get(end, ()))])
            top += MESSAGE_HEIGHT if item.note else BARE_HEIGHT
        else:
            top += WAIT_HEIGHT if isinstance(item, Wait) else CONDITION_HEIGHT
    width = TIME_WIDTH + 2 * MARGIN + max(count - 1, 1) * span
    return Layout(width, top + FOOT_HEIGHT, axes, tuple(rows), ends)


def svg(chart: Chart, ident: str, title: str) -> str:
    """The chart as one ``svg`` element. ``ident``: unique in the page; ``title``: said to those who cannot see it."""
    layout = place(chart)
    messages = sum(isinstance(item, Message) for item in chart.items)
    description = f"{messages} messages between {', '.join(instance.title for instance in chart.instances)}."
    size = f'width="{layout.width}" height="{layout.height}" viewBox="0 0 {layout.width} {layout.height}"'
    parts = [
        f'<svg class="chart" role="img" aria-labelledby="{ident}-t {ident}-d" {size}>',
        f'<title id="{ident}-t">{_text(title)}</title><desc id="{ident}-d">{_text(description)}</desc>',
        *_axes(chart, layout),
    ]
    for number, item in enumerate(chart.items):
        if isinstance(item, Message):
            parts += _message(item, number, layout)
        elif isinstance(item, Condition):
            parts += _condition(item, layout.rows[number], layout)
        else:
            parts += _wait(item, layout.rows[number], layout)
    return "".join([*parts, "</svg>"])


def _text(text: str) -> str:
    return escape(plain(text))


def _axes(chart: Chart, layout: Layout) -> Iterable[str]:
    bottom = layout.height - FOOT_HEIGHT
    yield f'<text class="time head" x="{TIME_WIDTH - 20}" y="{HEAD_HEIGHT - 12}">time in ms</text>'
    for instance in chart.instances:
        x = layout.axes[instance.key]
        yield f'<rect class="head" x="{x - 78}" y="8" width="156" height="40" rx="3"/>'
        yield f'<text class="title" x="{x}" y="{26 if instance.note else 32}">{_text(instance.title)}</text>'
        if instance.note:
            yield f'<text class="note" x="{x}" y="41">{_text(instance.note)}</text>'
        yield f'<line class="axis" x1="{x}" x2="{x}" y1="48" y2="{bottom}"/>'
        yield f'<rect class="foot" x="{x - 24}" y="{bottom}" width="48" height="7"/>'


def _message(message: Message, number: int, layout: Layout) -> Iterable[str]:
    begin = layout.axes[message.source]
    end = layout.axes[message.target or MODULE]
    y_out, y_in = layout.ends[End(number, False)], layout.ends[End(number, True)]
    lost = message.target is None
    if lost:
        end = round(begin + (end - begin) * LOST_AT)
        y_in = round(y_out + (y_in - y_out) * LOST_AT)
    style = "message lost" if lost else "message"
    yield f'<g class="{style}"><line x1="{begin}" y1="{y_out}" x2="{end}" y2="{y_in}"/>'
    yield f'<circle cx="{end}" cy="{y_in}" r="5"/>' if lost else _tip(begin, end, y_in)
    seen_at = y_in if message.source == MODULE else y_out
    yield f'<text class="time" x="{TIME_WIDTH - 20}" y="{seen_at + 4}">{message.time_ns / 1e6:.3f}</text>'
    longest = max(len(message.label) * BOLD_GLYPH, len(message.note) * GLYPH) / 2
    x = min(max((begin + end) / 2, TIME_WIDTH + longest - 12), layout.width - longest - 4)
    yield f'<text class="label" x="{x:.0f}" y="{y_out - 4}">{_text(message.label)}</text>'
    if message.note:
        yield f'<text class="note" x="{x:.0f}" y="{y_in + 14}">{_text(message.note)}</text>'
    yield "</g>"


def _tip(begin: int, end: int, y: int) -> str:
    back = -10 if end > begin else 10
    return f'<path d="M{end} {y}l{back} -5v9z"/>'


def _condition(condition: Condition, top: int, layout: Layout) -> Iterable[str]:
    """A hexagon over the axes that it speaks of."""
    over = [x for key, x in layout.axes.items() if not condition.axes or key in condition.axes]
    most = layout.width - TIME_WIDTH + 12
    text = cut(condition.text, int((most - 40) / BOLD_GLYPH))
    half = min(max(len(text) * BOLD_GLYPH / 2 + 18, (max(over) - min(over)) / 2 + 70), most / 2)
    middle = min((max(over) + min(over)) / 2, layout.width - half - 3)
    left, right, y = round(middle - half), round(middle + half), top + 4
    tone = f" {condition.tone}" if condition.tone else ""
    yield f'<g class="condition{tone}"><path d="M{left} {y + 12}l12 -12H{right - 12}l12 12l-12 12H{left + 12}z"/>'
    yield f'<text class="label" x="{(left + right) / 2:.0f}" y="{y + 16}">{_text(text)}</text></g>'


def _wait(wait: Wait, top: int, layout: Layout) -> Iterable[str]:
    """A timer of the bench: hourglass, and how long nothing passed."""
    x, y = TIME_WIDTH - 12, top + 6
    yield f'<g class="wait"><path d="M{x - 6} {y}h12l-12 18h12z"/>'
    yield f'<line x1="{x + 12}" x2="{layout.width - 12}" y1="{y + 9}" y2="{y + 9}"/>'
    spent = f"{(wait.until_ns - wait.time_ns) / 1e6:.3f} ms in which nothing passes"
    yield f'<text class="note" x="{x + 18 + len(spent) * GLYPH / 2:.0f}" y="{y + 13}">{spent}</text></g>'
