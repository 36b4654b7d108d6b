"""The stream form: bytes in any pieces, gaps, and what the module itself puts on the line; parts of ZeroMQ."""

from __future__ import annotations

import json
from itertools import pairwise
from pathlib import Path
from typing import Any

import pytest
from module_driver import CODEC, CONTRACT, Driver, read_frame

from emulator.population import Population
from protobench.wire import stuff

VECTORS = Path(__file__).parents[2] / "spec" / "1.0" / "vectors"


def vectors(link: str) -> list[Any]:
    files = [json.loads((VECTORS / f"{area}.json").read_text()) for area in ("stream", "frame")]
    rows = [vector for file in files for vector in file["vectors"] if vector["link"] == link]
    assert rows
    return [pytest.param(vector, id=vector["id"]) for vector in rows]


def expectation(vector: dict[str, Any]) -> tuple[list[int], dict[str, int]]:
    """Numbers of the requests that must be answered, and the drops that must be counted."""
    numbers = [one["message"]["number"] for one in vector["expect"] if "message" in one]
    drops: dict[str, int] = {}
    for one in vector["expect"]:
        if "drop" in one:
            drops[one["drop"]] = drops.get(one["drop"], 0) + 1
    return numbers, drops


@pytest.mark.parametrize("in_pieces", [False, True])
@pytest.mark.parametrize("vector", vectors("stream"))
def test_stream_vector(vector: dict[str, Any], in_pieces: bool) -> None:
    driver = Driver()
    engine, now_us = driver.engine, driver.now_us
    data = bytes.fromhex(vector["bytes"])
    gaps = dict(vector.get("gaps_ms", []))
    cuts = sorted({0, len(data), *gaps, *(range(len(data)) if in_pieces else ())})
    for start, end in pairwise(cuts):
        now_us += 1000 * gaps.get(start, 0)
        engine.feed(now_us, data[start:end])
    engine.advance(now_us + 100_000)
    answered = [read_frame(0, one.data).frame.number for one in engine.take_frames()]
    numbers, drops = expectation(vector)
    assert answered == numbers
    assert {name: count for name, count in engine.drops.items() if count} == drops


@pytest.mark.parametrize("vector", vectors("part"))
def test_part_vector(vector: dict[str, Any]) -> None:
    population = Population(CONTRACT, 1, 1)
    population.advance(100_000)
    population.frames()
    population.take(200_000, b"x", bytes.fromhex(vector["bytes"]))
    population.advance(300_000)
    numbers, drops = expectation(vector)
    assert [read_frame(0, data).frame.number for _, data in population.frames()] == numbers
    counters = CODEC.new("read-counters").to_frame(0x10001, 1, 1, 99)
    population.take(400_000, b"x", counters)
    population.advance(500_000)
    ((_, data),) = population.frames()
    told = read_frame(0, data).message.drops
    assert {drop.name: told[drop.number - 1] for drop in CONTRACT.drops if told[drop.number - 1]} == drops


def test_after_a_silence_the_module_begins_with_a_delimiter() -> None:
    driver = Driver(started=False)
    engine = driver.engine
    engine.advance(1_000_000)
    assert engine.take_output()[0] == b"\0"
    blocks = []
    for arrival_us in (1_100_000, 1_299_000, 1_500_000, 2_000_000):
        engine.feed(arrival_us, b"\0" + stuff(driver.make("status")) + b"\0")
        engine.advance(arrival_us + 500)
        blocks.append(engine.take_output())
    assert [block[0] == b"\0" for block in blocks] == [False, False, True, True]
    for block in blocks:
        assert block[-1].endswith(b"\0")
        assert block[-1].count(b"\0") == 1


def test_no_gap_is_lost_between_two_feeds() -> None:
    """A gap is between the bytes; time that passes without bytes is part of it."""
    counted = []
    for gap_ms in (199, 1001):
        driver = Driver()
        data = stuff(driver.make("status")) + b"\0"
        driver.engine.feed(2_000_000, data[:10])
        for step in range(1, 10):
            driver.engine.advance(2_000_000 + 100 * step * gap_ms)
        driver.engine.feed(2_000_000 + 1000 * gap_ms, data[10:])
        counted.append(driver.engine.drops["half-frame"])
    assert counted == [0, 1]
