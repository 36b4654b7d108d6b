"""Virtual time: modules in memory and in lockstep children, sound and broken."""

from __future__ import annotations

import os
import re
import shutil
import struct
import subprocess
import time
from pathlib import Path

import pytest
from far_ends import EchoPeer, program
from pairs import LIMITS

import protobench.links
from protobench.links import MemoryLink, PeerClosed, PeerFault, VirtualClock, open_link

LOCKSTEP_PAGE = Path(protobench.links.__file__).parent / "lockstep.md"
MODULE_IN_C = """
#include <stdio.h>
#include <stdint.h>
#include <string.h>
#define OUTPUT_MAX 70000
static uint8_t out[OUTPUT_MAX]; static size_t held; static uint64_t due = 500000;
static void module_advance(uint64_t now_us) {
    if (due <= now_us) { memcpy(out + held, "\\x03\\xaa\\xbb", 4); held += 4; due = UINT64_MAX; } }
static void module_feed(uint64_t now_us, const uint8_t *p, size_t n) {
    if (due < now_us) module_advance(now_us);
    memcpy(out + held, p, n); held += n; }
static uint64_t module_deadline(void) { return due; }
static size_t module_output(uint8_t *to, size_t max) {
    size_t n = held < max ? held : max; memcpy(to, out, n); held = 0; return n; }
"""


def drain(link, until_us):
    chunks = []
    while (chunk := link.receive(until_us * 1000)) is not None:
        chunks.append((chunk.time_ns, chunk.data))
    return chunks


@pytest.fixture(params=["memory", "lockstep"])
def delayed_echo(request):
    """A link to an echo that answers after 250 us."""
    if request.param == "memory":
        link = MemoryLink(EchoPeer(delay_us=250))
    else:
        link = open_link(f"lockstep:{program('lockstep', 'delay-250')}", virtual=True, limits=LIMITS)
    with link:
        yield link


def test_time_jumps_to_the_deadlines_of_the_peer_and_no_further(delayed_echo):
    link = delayed_echo
    assert link.virtual
    assert link.loopback
    assert link.receive(1_000_000) is None
    assert link.clock.now_ns() == 1_000_000
    assert link.send(b"a\0") == 1_000_000
    assert link.receive(1_249_999) is None
    assert link.clock.now_ns() == 1_249_999
    assert link.send(b"b\0") == 1_249_999
    assert drain(link, 5_000) == [(1_250_000, b"a\0"), (1_499_000, b"b\0")]
    assert link.clock.now_ns() == 5_000_000


def test_an_hour_of_virtual_time_takes_no_real_time(delayed_echo):
    started = time.monotonic()
    assert delayed_echo.receive(3_600 * 10**9) is None
    assert time.monotonic() - started < 1
    assert delayed_echo.clock.now_ns() == 3_600 * 10**9


def test_a_feed_comes_after_earlier_deadlines_when_another_link_moved_the_clock():
    clock = VirtualClock()
    peer = EchoPeer(delay_us=250)
    first, second = MemoryLink(peer, clock), MemoryLink(EchoPeer(), clock)
    first.send(b"a\0")
    assert second.receive(1_000_000) is None
    first.send(b"b\0")
    assert peer.log == [("feed", 0, b"a\0"), ("advance", 250, b""), ("feed", 1000, b"b\0")]
    assert drain(first, 2_000) == [(250_000, b"a\0"), (1_250_000, b"b\0")]


def test_a_deadline_equal_to_the_time_of_a_feed_is_left_to_the_peer_to_order():
    peer = EchoPeer(delay_us=250)
    link = MemoryLink(peer, VirtualClock())
    link.send(b"a\0")
    link.clock.jump_to(250_000)
    link.send(b"b\0")
    assert [entry[:2] for entry in peer.log] == [("feed", 0), ("feed", 250)]


def test_a_virtual_clock_does_not_go_back():
    clock = VirtualClock(5)
    clock.jump_to(3)
    assert clock.now_ns() == 5
    clock.jump_to(9)
    assert clock.now_ns() == 9


class _Stuck(EchoPeer):
    """Wants to act at the same time again and again, with or without saying something."""

    def __init__(self, says):
        super().__init__()
        self._says = says

    def advance(self, now_us):
        self._output += self._says

    def next_deadline_us(self):
        return 7


@pytest.mark.parametrize("says", [[], [b"again\0"]])
def test_a_deadline_that_never_moves_on_is_an_error_and_no_hang(says):
    link = MemoryLink(_Stuck(says))
    with pytest.raises(PeerFault, match=r"not later .* 10000 times"):
        drain(link, 1_000)


def test_the_same_module_in_memory_and_as_a_program_yields_the_same_bytes_at_the_same_times():
    histories = []
    for link in (  # one chunk for each answer from memory, one for each record from the program
        MemoryLink(EchoPeer(delay_us=250)),
        open_link(f"lockstep:{program('lockstep', 'delay-250')}", limits=LIMITS),
    ):
        with link:
            history = {}
            for number in range(50):
                link.send(b"unit %d\0" % number)
                for time_ns, data in drain(link, number * 97 if number < 49 else 10_000):
                    history[time_ns] = history.get(time_ns, b"") + data
            histories.append(history)
    assert histories[0] == histories[1]
    assert b"".join(histories[0].values()) == b"".join(b"unit %d\0" % number for number in range(50))


BROKEN = {
    "exit-3": (PeerClosed, r"exit status 3; .*\n.*standard error:\n    far end: going, status 3"),
    "abort": (PeerClosed, r"ended by signal SIGABRT"),
    "silent": (PeerFault, r"did not answer the record within 0\.4 s.*\n    far end: will say nothing"),
    "half": (PeerFault, r"did not answer the record within 0\.4 s"),
    "text": (PeerFault, r"claims 1214606444 bytes of output .*text to standard error"),
    "huge": (PeerFault, r"claims 1048577 bytes of output \(the limit is 1048576\)"),
    "past": (PeerFault, r"deadline 999 us, which is in the past"),
    "stuck": (PeerFault, r"not later \(1000 us\) 10000 times"),
    "twice": (PeerFault, r"followed by 14 bytes too many"),
}


@pytest.mark.parametrize("behaviour", BROKEN)
def test_a_broken_child_is_reported_and_ended(behaviour):
    kind, message = BROKEN[behaviour]
    with open_link(f"lockstep:{program('lockstep', behaviour)}", limits=LIMITS) as link:
        link.receive(1_000_000)
        started = time.monotonic()
        with pytest.raises(kind) as caught:  # noqa: PT012 - a stuck child shows only when time is to pass
            link.send(b"x\0")
            link.receive(2_000_000)
        assert time.monotonic() - started < 1.9
        assert re.search(message, str(caught.value)), str(caught.value)
        assert "at 1000 us" in str(caught.value)
        if behaviour == "exit-3":
            assert caught.value.exit_status == 3
            assert caught.value.stderr_lines[-1] == "far end: going, status 3"
        with pytest.raises(kind):  # noqa: PT012 - the same again, at once
            link.send(b"y\0")
            link.receive(2_000_000)
        child = link._lockstep_peer._child
    assert child._process.returncode is not None, "the child was left running"


@pytest.mark.parametrize("behaviour", ["dribble", "chatty"])
def test_an_odd_but_sound_child_is_served(behaviour):
    """Replies in small pieces, and 200,000 bytes on standard error with each."""
    with open_link(f"lockstep:{program('lockstep', behaviour)}", limits=LIMITS) as link:
        for number in range(1, 5):
            link.send(b"unit %d\0" % number)
            assert link.receive(number * 1000).data == b"unit %d\0" % number


def test_more_than_a_record_holds_is_fed_in_several():
    with open_link(f"lockstep:{program('lockstep')}") as link:
        data = bytes(range(256)) * 1000
        link.send(data)
        assert b"".join(data for _, data in drain(link, 1)) == data


def test_a_child_that_ends_at_once_or_is_silent_at_once_fails_the_opening():
    with pytest.raises(PeerClosed, match="exit status 0"):
        open_link("lockstep:true")
    with pytest.raises(PeerFault, match="advance at 0 us: the program did not answer"):
        open_link("lockstep:sleep 60", limits=LIMITS)


def test_a_child_that_no_longer_reads_is_reported_too():
    with (
        open_link(f"lockstep:{program('lockstep', 'deaf')}", limits=LIMITS) as link,
        pytest.raises(PeerFault, match="feed of 65535 bytes at 0 us: the program did not read the record"),
    ):
        link.send(bytes(1 << 20))


def test_the_child_ends_by_itself_at_the_end_of_its_input():
    link = open_link(f"lockstep:{program('lockstep')}", limits=LIMITS)
    link.close()
    assert link._lockstep_peer._child._process.returncode == 0


@pytest.fixture(scope="module")
def c_module(tmp_path_factory):
    """The skeleton of lockstep.md, compiled with a small module around it."""
    if shutil.which("gcc") is None:
        pytest.skip("gcc is not installed")
    folder = tmp_path_factory.mktemp("c")
    (skeleton,) = re.findall(r"```c\n(.*?)```", LOCKSTEP_PAGE.read_text(), re.DOTALL)
    (folder / "module.c").write_text(MODULE_IN_C + skeleton)
    command = [
        "gcc",
        "-std=c99",
        "-O2",
        "-Wall",
        "-Wextra",
        "-Werror",
        "-o",
        folder / "module",
        folder / "module.c",
    ]
    subprocess.run(command, check=True)
    return folder / "module"


def test_the_skeleton_on_the_page_is_a_sound_child(c_module):
    with open_link(f"lockstep:{c_module}", virtual=True) as link:
        assert drain(link, 600_000) == [(500_000_000, b"\x03\xaa\xbb\0")]
        link.send(b"\x01\0")
        assert drain(link, 600_000) == [(600_000_000, b"\x01\0")]
        link.close()
        assert link._lockstep_peer._child._process.returncode == 0


def test_the_example_on_the_page_is_what_the_program_answers(c_module):
    rows = re.findall(r"^\| (`[0-9A-F` ]+`) \| (`[0-9A-F` ]+`) \|$", LOCKSTEP_PAGE.read_text(), re.MULTILINE)
    records, replies = ([bytes.fromhex(re.sub("[` ]", "", row[column])) for row in rows] for column in (0, 1))
    # The small module echoes; the one of the example does not.
    replies[2] = struct.pack(">I", 2) + b"\x01\0" + replies[2][4:]
    assert len(rows) == 3
    run = subprocess.run([c_module], input=b"".join(records), capture_output=True, check=True, timeout=5)
    assert run.stdout == b"".join(replies)


def test_the_bench_has_its_processors_back_after_each_record(c_module):
    """While it waits for a child it shares the child's processor, which is quicker; not any longer."""
    cpus = os.sched_getaffinity(0)
    with open_link(f"lockstep:{c_module}") as link:
        for _ in range(100):
            link.send(b"unit\0")
            link.receive(0)
            assert os.sched_getaffinity(0) == cpus
