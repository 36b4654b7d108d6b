"""Sequence charts: what orders what, where it is drawn, and what of an exchange becomes an arrow."""

from __future__ import annotations

import itertools
import xml.etree.ElementTree as ET

import pytest
from exchanges import BUILDER, CODEC, LANGUAGE, MODULE_ADDRESS, A, B, frame, received, sent
from hypothesis import given
from hypothesis import strategies as st
from records import NASTY

from protobench.evidence.chart import Layout, place, svg
from protobench.evidence.sequence import (
    MODULE,
    OTHERS,
    Chart,
    Condition,
    End,
    Instance,
    Message,
    Wait,
    ends_by_axis,
    order,
    parts,
)
from protobench.evidence.text import cut

SVG = "{http://www.w3.org/2000/svg}"


def chart_of(*messages: Message) -> Chart:
    keys = dict.fromkeys(key for one in messages for key in (one.source, one.target) if key is not None)
    return Chart(tuple(Instance(key, key) for key in keys), messages)


def traces(chart: Chart) -> list[tuple[End, ...]]:
    """Every order of the ends that the chart allows."""
    before = order(chart)
    return [
        trace
        for trace in itertools.permutations(before)
        if all(before[end] <= set(trace[:position]) for position, end in enumerate(trace))
    ]


def test_two_messages_from_one_instance_to_another_have_two_traces() -> None:
    """ITU-T Z.120, basic chart: A sends m1 and m2 to B. Count of the traces from memory of the standard's semantics."""
    chart = chart_of(Message(0, "a", "b", "m1"), Message(1, "a", "b", "m2"))
    out_1, in_1, out_2, in_2 = End(0, False), End(0, True), End(1, False), End(1, True)
    assert sorted(traces(chart)) == sorted([(out_1, in_1, out_2, in_2), (out_1, out_2, in_1, in_2)])


def test_messages_that_share_no_axis_are_not_ordered() -> None:
    """Two pairs of instances: any merge of the two, 4! / (2! 2!) of them."""
    assert len(traces(chart_of(Message(0, "a", "b", "m1"), Message(1, "c", "d", "m2")))) == 6


def test_an_answer_comes_after_its_request() -> None:
    (trace,) = traces(chart_of(Message(0, "a", "b", "request"), Message(1, "b", "a", "answer")))
    assert trace == (End(0, False), End(0, True), End(1, False), End(1, True))


def test_a_lost_message_has_one_end() -> None:
    assert order(chart_of(Message(0, "a", None, "m"))) == {End(0, False): set()}


AXES = st.sampled_from(["a", "b", "c", MODULE])
MESSAGES = st.builds(
    lambda source, target, note, is_lost: Message(0, source, None if is_lost else target, "m", note),
    AXES,
    AXES,
    st.sampled_from(["", "a note"]),
    st.booleans(),
)
ITEMS = st.lists(
    st.one_of(MESSAGES, st.just(Condition(0, "c", (MODULE,))), st.just(Wait(0, 30_000_000))), max_size=30
)


@given(ITEMS)
def test_what_is_drawn_lower_comes_later(items: list[Message | Condition | Wait]) -> None:
    chart = Chart(tuple(Instance(key, key) for key in ("a", "b", "c", MODULE)), tuple(items))
    layout: Layout = place(chart)
    for number, item in enumerate(items):
        if isinstance(item, Message):
            assert layout.ends[End(number, False)] < layout.ends[End(number, True)]
    for ends in ends_by_axis(chart).values():
        heights = [layout.ends[end] for end in ends]
        assert heights == sorted(set(heights))
    assert all(height < layout.height for height in layout.ends.values())
    ET.fromstring(svg(chart, "c", "a chart"))


def test_a_chart_in_pieces_keeps_every_item_in_order() -> None:
    chart = chart_of(*(Message(number, "a", "b", f"m{number}") for number in range(40)))
    pieces = parts(chart, 18)
    assert [len(piece.items) for piece in pieces] == [14, 14, 12]
    assert tuple(item for piece in pieces for item in piece.items) == chart.items
    assert parts(Chart(chart.instances, ()), 18) == [Chart(chart.instances, ())]


# ---------------------------------------------------------------- from an exchange


def arrows(chart: Chart) -> list[tuple[str, str | None, str, str]]:
    return [
        (item.source, item.target, item.label, item.note) for item in chart.items if isinstance(item, Message)
    ]


def test_who_speaks_to_whom() -> None:
    exchange = [
        sent(0, frame("status", source=A, number=5)),
        received(1, frame("receipt", source=MODULE_ADDRESS, destination=A, number=5, result=1, reason=1)),
        sent(2, frame("halt", source=B, destination=0xFFFFFFFF, number=9)),
        received(3, frame("halt-receipt", MODULE_ADDRESS, B, number=9, disposition=0, halt_count=3, epoch=1)),
        sent(4, frame("status", source=A, destination=MODULE_ADDRESS + 1, number=6)),
        sent(5, b"\0\1\2"),
    ]
    chart = BUILDER.chart(exchange, 40)
    assert [(axis.title, axis.note) for axis in chart.instances] == [
        ("controller A", "0x10001"),
        ("controller B", "0x10002"),
        ("bench", "raw, to all, others"),
        ("module", "0x1"),
    ]
    found = arrows(chart)
    assert found[0] == ("10001", MODULE, "status #5", "")
    assert found[1][:3] == (MODULE, "10001", "receipt #5")
    assert found[2] == ("10002", MODULE, "halt #9", "to all")
    assert found[3][:3] == (MODULE, "10002", "halt-receipt #9")
    assert found[4] == ("10001", None, "status #6", "for 0x2")
    assert found[5][:3] == (OTHERS, None, "no sound frame")
    assert [item.text for item in chart.items if isinstance(item, Condition)] == ["halt latch set"]


def test_frames_that_must_be_dropped_do_not_arrive() -> None:
    good = frame("status", source=A, number=5)
    damaged = bytes([*good[:-1], good[-1] ^ 1])
    (found,) = arrows(BUILDER.chart([sent(0, damaged)], 40))
    assert found == ("10001", None, "no sound frame", f"{len(good)} bytes, must be dropped: crc")


def test_a_sound_frame_among_raw_bytes_arrives() -> None:
    raw = b"\x05\0" + LANGUAGE.stuff(frame("status", source=A, number=5)) + b"\0"
    (found,) = arrows(BUILDER.chart([sent(0, raw)], 40))
    assert found == ("10001", MODULE, "raw bytes", f"{len(raw)} bytes with 1 sound frame")


def test_waits_and_the_verdict_are_drawn() -> None:
    status = frame("status", source=A, number=5)
    chart = BUILDER.chart([sent(0, status), sent(250.5, status)], 40, "fail", "ACK-01: no answer")
    assert chart.items[1] == Wait(0, 250_500_000)
    assert chart.items[-1] == Condition(250_500_000, "fail: ACK-01: no answer", (), "fail")
    drawn = svg(chart, "c", "a chart")
    assert "250.500 ms in which nothing passes" in drawn
    assert "fail: ACK-01: no answer" in drawn


def test_a_short_pause_is_no_wait() -> None:
    status = frame("status", source=A, number=5)
    chart = BUILDER.chart([sent(0, status), sent(19.9, status)], 40)
    assert not [item for item in chart.items if isinstance(item, Wait)]


def test_a_long_exchange_is_cut_before_its_end() -> None:
    exchange = [sent(number, frame("status", source=A, number=number)) for number in range(100)]
    chart = BUILDER.chart(exchange, 7)
    assert chart.left_out == 93
    assert [label for _, _, label, _ in arrows(chart)] == [f"status #{number}" for number in range(93, 100)]


def test_many_strange_addresses_share_an_axis() -> None:
    exchange = [sent(0, frame("status", source=0x500 + number, number=1)) for number in range(30)]
    chart = BUILDER.chart(exchange, 40)
    assert len(chart.instances) == 6
    assert arrows(chart)[-1][0] == OTHERS


def test_what_the_module_says_of_itself_is_called_self_report() -> None:
    page = frame(
        "truth-page",
        MODULE_ADDRESS,
        A,
        number=1,
        motion_starts=3,
        energized=True,
        position=0,
        total=0,
        entries=[],
    )
    ((_, _, _, note),) = arrows(BUILDER.chart([received(0, page)], 40))
    assert note.startswith("self-report: ")


def test_a_body_that_breaks_the_contract_is_said_to() -> None:
    broken = CODEC.frames.pack(
        CODEC.contract.kind("receipt").code,
        b"\xc1",
        source=MODULE_ADDRESS,
        destination=A,
        session=1,
        number=1,
    )
    ((_, _, label, note),) = arrows(BUILDER.chart([received(0, broken)], 40))
    assert label == "receipt #1"
    assert note.startswith("bad body: ")


@pytest.mark.parametrize(
    "text", [NASTY, "</text><script>alert(1)</script>", '"><svg onload=x>', "\u202egnihton"]
)
def test_hostile_text_stays_text(text: str) -> None:
    chart = Chart(
        (Instance("a", text, text), Instance(MODULE, "m")),
        (Message(0, "a", MODULE, text, text), Condition(0, text)),
    )
    root = ET.fromstring(svg(chart, "c", text).replace("<svg", '<svg xmlns="http://www.w3.org/2000/svg"', 1))
    assert {element.tag.removeprefix(SVG) for element in root.iter()} <= {
        "svg", "title", "desc", "text", "line", "rect", "path", "circle", "g"
    }  # fmt: skip
    assert not any(name.startswith("on") for element in root.iter() for name in element.attrib)
    assert "\u202e" not in svg(chart, "c", text)


@given(st.text(), st.integers(1, 50))
def test_cut_text_is_one_line_of_that_length(text: str, length: int) -> None:
    assert len(cut(text, length)) <= length
    assert len(cut(text, length).splitlines()) <= 1
