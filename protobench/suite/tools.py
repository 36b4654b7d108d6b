"""What several cases need: bodies of a given size, check sequences, garbage, and exact counting of drops."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from protobench.judge import Failed, Inconclusive
from protobench.suite.bench import Bench
from protobench.suite.language import canonical

SATURATION = 65535
BINARY_MAX = 32


@contextmanager
def same_groups_after(bench: Bench) -> Iterator[None]:
    """Whatever groups the module is given inside, it is afterwards in those that it was in before."""
    if not bench.facts.has("groups"):
        yield
        return
    before = list(bench.a.read("read-groups")["groups"])
    yield
    bench.end()
    keeper = bench.tester()
    keeper.take_lease()
    keeper.accepted("set-groups", groups=before, clause="ADR-13")
    keeper.accepted("release-lease", clause="LSE-11")


def filler_body(size: int) -> bytes:
    """A canonical map of exactly ``size`` bytes, 1 to 229, of keys that no read knows and all may ignore."""
    rest = size - 1
    values: list[int | bytes] = []
    while rest > 0:
        if rest == 2:
            values.append(0)
            rest -= 2
            continue
        length = min(BINARY_MAX, rest - 3)
        if rest - 3 - length == 1:
            length -= 1
        values.append(b"\xa5" * length)
        rest -= 3 + length
    return (
        canonical({40 + place: value for place, value in enumerate(values)})
        if rest == 0
        else b"\x80" + b"\xff" * (size - 1)
    )


def sound_crc(bench: Bench, data: bytes) -> bytes:
    """The check sequence that matches ``data``."""
    crc: int = bench.language.codec.frames.crc(data)
    return crc.to_bytes(4, "big")


@contextmanager
def expect_drops(bench: Bench, wanted: dict[str, int], clause: str) -> Iterator[None]:
    """What is sent inside must raise exactly these drop counters by these numbers."""
    before, silent_before = bench.counters()
    yield
    after, silent_after = bench.counters()
    if SATURATION in after.values():
        raise Inconclusive("a drop counter is saturated: restart the module to count drops")
    found = {name: after[name] - before[name] for name in after if after[name] != before[name]}
    if found != {name: count for name, count in wanted.items() if count}:
        raise Failed(f"drops must be {wanted or 'none'}; counted were {found or 'none'}", clause=clause)
    if silent_after != silent_before:
        raise Failed(f"silent refusals went from {silent_before} to {silent_after}", clause="FRM-12")


@contextmanager
def expect_silent_refusals(bench: Bench, count: int, clause: str) -> Iterator[None]:
    """What is sent inside must be refused silently exactly ``count`` times."""
    _, before = bench.counters()
    yield
    _, after = bench.counters()
    if after == SATURATION:
        raise Inconclusive("the silent-refusal counter is saturated: restart the module to count")
    if after - before != count:
        raise Failed(f"silent refusals must rise by {count}; they rose by {after - before}", clause=clause)


def garbage_blocks(bench: Bench, count: int) -> Iterator[bytes]:
    """Seeded garbage without delimiters: random bytes, cut, glued and damaged frames."""
    rng = bench.rng
    sound = bench.language.stuff(bench.a.frame("status"))
    for place in range(count):
        match place % 4:
            case 0:
                block = bytes(rng.randrange(1, 256) for _ in range(rng.randrange(1, 300)))
            case 1:
                block = sound[: rng.randrange(1, len(sound))]
            case 2:
                block = sound[rng.randrange(1, len(sound)) :] + sound
            case _:
                changed = bytearray(sound)
                changed[rng.randrange(len(changed))] = rng.randrange(1, 256)
                block = bytes(changed)
                if block == sound:
                    block = sound[:-1]
        yield block
