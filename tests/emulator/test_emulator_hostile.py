"""Whatever peers send, both modules stay up, stay small, and answer a sound request afterwards.

At least 20,000 frames into each: random bytes, damaged frames, sound frames with random kinds and bodies, copies, and
commands in order, so that motions run and latches are set meanwhile. The C module is the sanitized build, so that a
wrong access ends it.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from pathlib import Path

import pytest
from hostile_peer import CODEC, HostilePeer, random_frames
from hypothesis import given, settings
from hypothesis import strategies as st

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.links import Link, MemoryLink, open_link
from protobench.wire import Frame, stuff

FRAMES = 20_000
BATCH = 50
SEEDS = (1, 2)
FIRMWARE = Path(__file__).parents[2] / "emulator" / "firmware" / "build-sanitized" / "module-lockstep"


def new_engine(seed: int = 1) -> ModuleEngine:
    return ModuleEngine(ModuleConfig(), Storage(), random.Random(seed), load_contract())


def memory() -> Link:
    return MemoryLink(new_engine())


def firmware() -> Link:
    if not FIRMWARE.exists():
        pytest.fail(f"{FIRMWARE} is missing; build it with: make firmware")
    return open_link(f"lockstep:{FIRMWARE}")


def answers_soundly(link: Link, address: int, number: int) -> bool:
    """Whether a probe of everyone, or of the address, is answered by a sound frame within a second."""
    body = CODEC.new("probe").to_body()
    frame = CODEC.frames.pack(0x03, body, source=0x1EEEE, destination=address, session=9, number=number)
    link.send(b"\0" + stuff(frame) + b"\0")
    decoder = CODEC.stream_decoder()
    deadline_ns = link.clock.now_ns() + 1_000_000_000
    while (chunk := link.receive(deadline_ns)) is not None:
        for unit in decoder.feed(chunk.data, chunk.time_ns):
            assert isinstance(unit, bytes), f"the module sent what is no frame: {unit}"
            answer = CODEC.frames.unpack(unit)
            assert isinstance(answer, Frame), f"the module sent an unsound frame: {answer}"
            if answer.kind == 0x43 and answer.number == number:
                return True
    return False


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("opener", [memory, firmware], ids=["python", "c-sanitized"])
def test_noise_between_sound_commands(opener: Callable[[], Link], seed: int) -> None:
    print(f"seed {seed}")
    peer = HostilePeer(random.Random(seed))
    with opener() as link:
        for batch in range(FRAMES // BATCH):
            for _ in range(BATCH):
                link.send(peer.bytes_to_send())
                deadline_ns = link.clock.now_ns() + peer.pause_ns()
                while (chunk := link.receive(deadline_ns)) is not None:
                    peer.read(chunk.data, chunk.time_ns)
            if batch % 20 == 0:
                assert answers_soundly(link, 1, batch), f"no answer after {batch * BATCH} frames, seed {seed}"
    for command in ("take-lease", "reset", "energize", "move", "clear-faults"):
        assert peer.results[command, "accepted"] > 20, f"seed {seed}: {peer.results}"
    assert peer.kinds["outcome"] > 50


def test_what_is_kept_for_peers_is_bounded() -> None:
    engine = new_engine()
    frames = random_frames(random.Random(5))
    config = engine.config
    for step in range(5000):
        engine.feed(1000 * step, next(frames))
        engine.take_output()
        assert len(engine.history.sessions) <= config.sessions
        assert all(len(session.entries) <= config.numbers for session in engine.history.sessions.values())
        assert len(engine.outbox._answers) <= config.answers
        assert len(engine.outbox._many) <= config.sessions
        assert len(engine.motions.formed) <= config.outcomes
        assert len(engine.faults.occurrences) <= config.faults + 1


def test_two_runs_with_one_seed_are_the_same_to_the_byte() -> None:
    outputs = []
    for _ in range(2):
        engine, frames, output = new_engine(7), random_frames(random.Random(8)), []
        for step in range(3000):
            engine.feed(700 * step, next(frames))
            output += engine.take_output()
        outputs.append(b"".join(output))
    assert outputs[0] == outputs[1]
    assert len(outputs[0]) > 1000


@settings(max_examples=150)
@given(seed=st.integers(0, 2**32), cuts=st.lists(st.integers(1, 60), min_size=1, max_size=20))
def test_pieces_do_not_matter(seed: int, cuts: list[int]) -> None:
    """The same bytes at the same time, whole or in pieces, bring the same frames."""
    frames = random_frames(random.Random(seed))
    data = b"".join(next(frames) for _ in range(6)) + b"\0"
    whole, pieces = new_engine(), new_engine()
    for engine in (whole, pieces):
        engine.advance(30_000)
        engine.take_output()
    whole.feed(40_000, data)
    place = 0
    while place < len(data):
        size = cuts[place % len(cuts)]
        pieces.feed(40_000, data[place : place + size])
        place += size
    for engine in (whole, pieces):
        engine.advance(300_000)
    assert b"".join(whole.take_output()) == b"".join(pieces.take_output())
