"""What a page tells of each case that neither passed nor was out of question."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import NamedTuple

from markupsafe import Markup

from protobench.contract import Contract
from protobench.evidence.chart import svg
from protobench.evidence.matrix import anchor
from protobench.evidence.sequence import Builder, parts
from protobench.evidence.text import cut, cut_block
from protobench.judge import CaseRecord, Exchange, RunRecord
from protobench.wire import load_codec

FRAMES_ALL = 1200  # of all failures together, so that the page stays small when everything fails
FRAMES_MOST, FRAMES_LEAST = 40, 6
CROWD = 40  # more failures than that get less room each
REPLAY_MAX = 1200
DETAIL_MAX = 6000
ITEMS_A_PIECE = 18  # of a chart, so that a piece fits on a page of paper
OPEN_MOST = 6  # with more failures than that the frames are folded on the screen
ORDER = {word: place for place, word in enumerate(("fail", "error", "known_deviation", "inconc"))}


class Room(NamedTuple):
    """How much of one failure is shown: frames, characters of a frame's words, its bytes, characters of the reason."""

    frames: int
    words: int
    size: int
    reason: int


@dataclass(frozen=True, slots=True)
class FrameRow:
    """A frame as it passed, in words and bytes."""

    time_ms: str
    is_sent: bool
    words: str
    data: str


@dataclass(frozen=True, slots=True)
class Failure:
    """A case with its clauses as (id, text, whether it was broken), its chart and its frames.

    ``detail``: the frames as text, where the record has no more than that.
    """

    case: CaseRecord
    anchor: str
    reason: str
    clauses: tuple[tuple[str, str, bool], ...]
    chart: Markup
    frames: tuple[FrameRow, ...]
    detail: str
    left_out: int
    is_open: bool
    replay: str
    script: str


def failures(record: RunRecord, contract: Contract, names: Mapping[int, str]) -> list[Failure]:
    """The failed first, then errors, known deviations, and what could not be shown."""
    cases = sorted(
        (case for case in record.cases if case.verdict in ORDER), key=lambda case: ORDER[case.verdict]
    )
    if not cases:
        return []
    address = record.iut.get("address")
    builder = Builder(load_codec(contract), address if isinstance(address, int) else 0, names)
    room = _room(len(cases))
    return [
        _failure(case, f"chart-{number}", room, contract, builder, is_open=len(cases) <= OPEN_MOST)
        for number, case in enumerate(cases)
    ]


def _room(count: int) -> Room:
    if count <= CROWD:
        return Room(min(FRAMES_MOST, FRAMES_ALL // count), 400, 256, 1200)
    return Room(max(FRAMES_LEAST, FRAMES_ALL // count), 160, 80, 300)


def _failure(
    case: CaseRecord, ident: str, room: Room, contract: Contract, builder: Builder, *, is_open: bool
) -> Failure:
    pieces = []
    if case.exchange:
        first_line = case.reason.partition("\n")[0]
        drawn = builder.chart(case.exchange, room.frames, case.verdict.replace("_", " "), first_line)
        for number, piece in enumerate(parts(drawn, ITEMS_A_PIECE), 1):
            title = f"Sequence chart of {case.id}, part {number}: {cut(first_line, 200)}"
            pieces.append(svg(piece, f"{ident}-{number}", title))
    return Failure(
        case=case,
        anchor=anchor(case),
        reason=cut_block(case.reason, room.reason),
        clauses=tuple(_clauses(case, contract)),
        chart=Markup("".join(pieces)),  # noqa: S704 - made by chart.svg, which escapes every text
        frames=tuple(_row(exchange, room) for exchange in case.exchange[-room.frames :]),
        detail="" if case.exchange else cut_block(case.detail, DETAIL_MAX * room.frames // FRAMES_MOST),
        left_out=max(0, len(case.exchange) - room.frames),
        is_open=is_open,
        replay=cut(case.replay, REPLAY_MAX),
        script=cut(str(getattr(case, "script", "") or ""), REPLAY_MAX),
    )


def _clauses(case: CaseRecord, contract: Contract) -> Iterator[tuple[str, str, bool]]:
    """Those that the case says are broken, then the others that it observes."""
    broken = [clause for clause in dict.fromkeys(case.broken) if clause]
    texts = {clause.id: clause.text for clause in contract.clauses}
    for clause in dict.fromkeys([*broken, *case.clauses]):
        yield (
            clause,
            texts.get(clause, "a clause that this version of the contract does not have"),
            clause in broken,
        )


def _row(exchange: Exchange, room: Room) -> FrameRow:
    data = exchange.data
    shown = data[: room.size].hex(" ") + (f" ... {len(data)} bytes" if len(data) > room.size else "")
    return FrameRow(
        f"{exchange.time_ns / 1e6:.3f}", exchange.direction == "->", cut(exchange.words, room.words), shown
    )
