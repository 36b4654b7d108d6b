"""Impairments: exactly what was planned happens, to the byte and the nanosecond, each time for one seed."""

from __future__ import annotations

import time

import pytest
from far_ends import QUIT, EchoPeer
from hypothesis import given
from hypothesis import strategies as st

from protobench.links import Action, Direction, ImpairedLink, Impairment, MemoryLink, PeerClosed

IN, OUT = Direction.IN, Direction.OUT
MS = 1_000_000
UNITS = [b"unit %d\0" % number for number in range(6)]


def frames(*indices):
    return frozenset(indices)


def run(plan, units=UNITS, seed=1, pause_us=1_000, until_us=100_000, delay_us=0):
    """Send the units, a pause apart, to an echo. What it was fed, what came back (times in us), the log."""
    peer = EchoPeer(delay_us)
    link = ImpairedLink(MemoryLink(peer), plan, seed)
    came = []
    for number, unit in enumerate(units):
        link.send(unit)
        came += drain(link, (number + 1) * pause_us)
    came += drain(link, until_us)
    fed = [(now_us, data) for what, now_us, data in peer.log if what == "feed"]
    return fed, came, list(link.log)


def drain(link, until_us):
    chunks = []
    while (chunk := link.receive(until_us * 1000)) is not None:
        chunks.append((chunk.time_ns // 1000, chunk.data))
    return chunks


def rule(action, direction, **options):
    return Impairment(action=action, direction=direction, **options)


def test_without_a_plan_nothing_happens():
    fed, came, log = run([])
    assert fed == came == [(number * 1000, unit) for number, unit in enumerate(UNITS)]
    assert log == []


@pytest.mark.parametrize("direction", [IN, OUT])
def test_drop(direction):
    fed, came, log = run([rule(Action.DROP, direction, frames=frames(0, 3))])
    kept = [(number * 1000, unit) for number, unit in enumerate(UNITS) if number not in (0, 3)]
    assert came == kept
    assert fed == (kept if direction is OUT else [(n * 1000, unit) for n, unit in enumerate(UNITS)])
    assert [(entry.direction, entry.index, entry.action) for entry in log] == [
        (direction, 0, Action.DROP),
        (direction, 3, Action.DROP),
    ]
    assert [entry.time_ns for entry in log] == [0, 3 * MS]


def test_delay_lets_others_overtake():
    fed, came, log = run([rule(Action.DELAY, OUT, frames=frames(1), delay_ns=2_500_000)])
    assert fed == came
    assert fed == [
        (0, UNITS[0]),
        (2000, UNITS[2]),
        (3000, UNITS[3]),
        (3500, UNITS[1]),
        (4000, UNITS[4]),
        (5000, UNITS[5]),
    ]
    assert log[0].detail == "delayed by 2500000 ns"


def test_delay_inwards_is_stamped_when_it_arrives():
    _, came, _ = run(
        [rule(Action.DELAY, IN, frames=frames(0), delay_ns=700_000)], units=UNITS[:1], delay_us=50
    )
    assert came == [(750, UNITS[0])]


def test_repeat():
    fed, _, _ = run([rule(Action.REPEAT, OUT, frames=frames(1), count=2, delay_ns=300_000)], units=UNITS[:3])
    assert fed == [(0, UNITS[0]), (1000, UNITS[1]), (1300, UNITS[1]), (1600, UNITS[1]), (2000, UNITS[2])]


def test_repeat_at_once():
    fed, _, _ = run([rule(Action.REPEAT, OUT, frames=frames(0))], units=UNITS[:1])
    assert b"".join(data for _, data in fed) == UNITS[0] * 2


def test_reorder_waits_for_so_many_others():
    fed, _, _ = run([rule(Action.REORDER, OUT, frames=frames(1), count=2, delay_ns=10 * MS)])
    assert b"".join(data for _, data in fed) == b"".join(UNITS[number] for number in (0, 2, 3, 1, 4, 5))
    assert fed[2][0] == 3000


def test_reorder_gives_up_waiting():
    fed, _, _ = run([rule(Action.REORDER, OUT, frames=frames(5), count=1, delay_ns=10 * MS)])
    assert fed[-1] == (15_000, UNITS[5])


def test_corrupt_flips_so_many_bits_and_no_delimiter():
    unit = b"\0\0" + bytes(range(1, 100)) + b"\0"
    fed, _, log = run([rule(Action.CORRUPT, OUT, count=5)], units=[unit])
    ((_, data),) = fed
    flipped = [(place, a ^ b) for place, (a, b) in enumerate(zip(data, unit, strict=True)) if a != b]
    assert sum(bits.bit_count() for _, bits in flipped) == 5
    assert all(2 <= place < 101 for place, _ in flipped)
    told = log[0].detail.removeprefix("flipped byte.bit ").split(", ")
    assert sum(1 << (7 - int(each.split(".")[1])) << 8 * int(each.split(".")[0]) for each in told) == sum(
        bits << 8 * place for place, bits in flipped
    )


def test_hold_half_a_frame_and_all_that_follows():
    plan = [rule(Action.HOLD, OUT, frames=frames(1), split=3, delay_ns=1_500_000)]
    fed, _, _ = run(plan, units=UNITS[:4])
    assert fed == [(0, UNITS[0]), (1000, b"uni"), (2500, b"t 1\0" + UNITS[2]), (3000, UNITS[3])]


def test_hold_keeps_an_earlier_delayed_unit_out_of_the_gap():
    plan = [
        rule(Action.DELAY, IN, frames=frames(0), delay_ns=1_200_000),
        rule(Action.HOLD, IN, frames=frames(1), delay_ns=1_000_000),
    ]
    _, came, _ = run(plan, units=UNITS[:2])
    assert came == [(1000, b"uni"), (2000, b"t 1\0"), (2000, UNITS[0])]


def test_where_chooses_by_content():
    fed, _, _ = run([rule(Action.DROP, OUT, where=lambda index, unit: index < 4 and unit[5] % 2 == 0)])
    assert [data for _, data in fed] == [UNITS[1], UNITS[3], UNITS[4], UNITS[5]]


def test_rules_apply_in_order():
    plan = [rule(Action.REPEAT, OUT, delay_ns=500_000), rule(Action.DELAY, OUT, delay_ns=100_000)]
    fed, _, log = run(plan, units=UNITS[:1])
    assert fed == [(100, UNITS[0]), (600, UNITS[0])]
    assert [entry.action for entry in log] == [Action.REPEAT, Action.DELAY]


CHANCES = [
    rule(Action.DROP, OUT, probability=0.2),
    rule(Action.REPEAT, OUT, probability=0.2, delay_ns=300_000),
    rule(Action.CORRUPT, IN, probability=0.3, count=2),
    rule(Action.DELAY, IN, probability=0.3, delay_ns=1_700_000),
    rule(Action.REORDER, IN, probability=0.2, count=2, delay_ns=5 * MS),
    rule(Action.HOLD, IN, probability=0.2, delay_ns=2 * MS),
]
MANY = [b"unit %d\0" % number for number in range(300)]


def test_a_seed_repeats_everything_and_another_does_not():
    first, again, other = (run(CHANCES, MANY, seed, until_us=400_000) for seed in (11, 11, 12))
    assert first == again
    assert first != other
    assert {entry.action for entry in first[2]} == set(Action)


def test_the_fate_of_a_unit_does_not_hang_on_when_it_passes():
    _, _, quick = run(CHANCES[:2], MANY, pause_us=10)
    _, _, slow = run(CHANCES[:2], MANY, pause_us=5_000, until_us=2_000_000)
    assert [(entry.index, entry.action, entry.detail) for entry in quick] == [
        (entry.index, entry.action, entry.detail) for entry in slow
    ]


def test_probability_is_kept():
    _, _, log = run([rule(Action.DROP, OUT, probability=0.25)], MANY * 10, seed=3, until_us=4_000_000)
    assert 650 < len(log) < 850  # 750 expected of 3000, standard deviation 24


@given(
    st.lists(
        st.binary(min_size=1, max_size=40).map(lambda data: data.replace(b"\0", b"\1") + b"\0"), max_size=20
    ),
    st.integers(1, 50),
    st.integers(0, 2**32),
)
def test_however_a_stream_is_cut_its_units_are_the_same(units, size, seed):
    stream = b"\0".join(units)  # fill before every unit but the first
    plan = [rule(Action.DROP, OUT, probability=0.5)]
    whole = run(plan, [stream], seed)
    cut = run(plan, [stream[start : start + size] for start in range(0, len(stream), size)], seed, pause_us=0)
    assert b"".join(data for _, data in whole[0]) == b"".join(data for _, data in cut[0])
    assert [entry.index for entry in whole[2]] == [entry.index for entry in cut[2]]


def test_a_tail_without_a_delimiter_is_kept_until_it_has_one_or_is_settled():
    peer = EchoPeer()
    link = ImpairedLink(MemoryLink(peer), [], seed=1)
    link.send(b"half")
    assert link.receive(1 * MS) is None
    link.send(b" whole\0tail")
    assert link.receive(2 * MS).data == b"half whole\0"
    assert link.settle(3 * MS)
    assert link.receive(3 * MS) is None, "the tail that came back is kept until it has a delimiter"
    assert [data for _, _, data in peer.log] == [b"half whole\0", b"tail"]


def test_settle_waits_for_what_is_delayed_and_tells_when_it_may_not():
    plan = [rule(Action.DELAY, OUT, delay_ns=5 * MS)]
    peer = EchoPeer()
    link = ImpairedLink(MemoryLink(peer), plan, seed=1)
    link.send(b"x\0")
    assert not link.settle(4 * MS)
    assert peer.log == []
    assert link.settle(10 * MS)
    assert link.clock.now_ns() == 5 * MS
    assert peer.log == [("feed", 5_000, b"x\0")]
    assert link.receive(10 * MS).data == b"x\0"


def test_an_endless_tail_and_endless_delay_are_bounded():
    link = ImpairedLink(MemoryLink(EchoPeer()), [rule(Action.DELAY, OUT, delay_ns=3600 * 10**9)], seed=1)
    for _ in range(200):
        link.send(b"\1" * 65_000)
    for _ in range(100):
        link.send(bytes(65_000))
    assert link.discarded.bytes > 4 << 20
    assert link._out._held_bytes <= 4 << 20
    assert len(link._out._units._tail) + link._out._units._fill <= 1 << 17


def test_the_log_is_bounded():
    link = ImpairedLink(MemoryLink(EchoPeer()), [rule(Action.DROP, OUT)], seed=1)
    assert link.log.maxlen == 100_000


@pytest.mark.parametrize("kind", ["udp", "zmq+tcp"])
def test_units_of_other_links_are_datagrams_and_parts(connect, kind):
    link = ImpairedLink(connect(kind), [rule(Action.DROP, OUT, frames=frames(1))], seed=1)
    link.send(b"a\0b", b"\0", b"")
    deadline_ns = link.clock.now_ns() + 2_000 * MS
    assert [link.receive(deadline_ns).data for _ in range(2)] == [b"a\0b", b""]
    assert link.receive(link.clock.now_ns() + 20 * MS) is None
    with pytest.raises(ValueError, match="is no stream"):
        ImpairedLink(link.inner, [rule(Action.HOLD, OUT, delay_ns=1)], seed=1)


def test_delays_are_kept_in_real_time(connect):
    link = ImpairedLink(connect("tcp"), [rule(Action.DELAY, IN, delay_ns=30 * MS)], seed=1)
    started = time.monotonic_ns()
    link.send(b"x\0")
    chunk = link.receive(started + 2_000 * MS)
    assert chunk.data == b"x\0"
    assert 30 * MS <= chunk.time_ns - started < 60 * MS
    assert 30 * MS <= time.monotonic_ns() - started < 80 * MS


def test_what_is_in_the_line_when_the_far_end_goes_arrives_before_the_end_is_told(connect):
    plan = [rule(Action.DELAY, IN, frames=frames(0), delay_ns=3600 * 10**9)]
    link = ImpairedLink(connect("tcp"), plan, seed=1)
    link.send(b"late\0", b"tail")
    link.settle(link.clock.now_ns())
    assert link.receive(link.clock.now_ns() + 50 * MS) is None
    link.send(b"\0" + QUIT)
    deadline_ns = link.clock.now_ns() + 2_000 * MS
    assert [link.receive(deadline_ns).data for _ in range(2)] == [b"tail", b"late\0"]
    with pytest.raises(PeerClosed):
        link.receive(deadline_ns)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"action": Action.DROP, "probability": 1.5}, "drop: probability 1.5 must lie from 0 to 1"),
        ({"action": Action.DELAY}, "delay: delay_ns 0 is too short"),
        ({"action": Action.HOLD, "delay_ns": 1, "split": 0}, "hold: split 0 must be at least 1"),
        ({"action": Action.REPEAT, "count": 0}, "repeat: count 0 must be at least 1"),
        ({"action": Action.REPEAT, "delay_ns": -1}, "repeat: delay_ns -1 is too short"),
    ],
)
def test_a_rule_that_makes_no_sense_is_refused(options, message):
    with pytest.raises(ValueError, match=message):
        Impairment(direction=OUT, **options)
