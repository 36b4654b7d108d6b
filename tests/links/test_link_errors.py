"""Everything that can go wrong on opening, and what hostile far ends do: each has its error, in words."""

from __future__ import annotations

import os
import pickle
import random
import socket
import time
from contextlib import contextmanager
from pathlib import Path

import pytest
import zmq
from far_ends import QUIT, PtyEcho, ZmqEcho, program
from hypothesis import given
from hypothesis import strategies as st
from pairs import LIMITS

from protobench.links import (
    BadAddress,
    InUse,
    Limits,
    LinkError,
    NoControlLine,
    NoPermission,
    NoSuchDevice,
    NotReachable,
    NoVirtualTime,
    PeerClosed,
    SendStalled,
    is_here,
    is_virtual,
    open_link,
    parse_address,
)
from protobench.links.sockets import is_loopback

MS = 1_000_000


def free_port(kind=socket.SOCK_STREAM):
    with socket.socket(socket.AF_INET, kind) as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


def receive(link, count, patience_ns=2_000 * MS):
    """So many chunks; fails when they do not come."""
    deadline_ns = link.clock.now_ns() + patience_ns
    chunks = [link.receive(deadline_ns) for _ in range(count)]
    assert None not in chunks
    return [chunk.data for chunk in chunks]


@contextmanager
def without_root():
    """As a user whom file permissions bind."""
    if os.geteuid() != 0:
        yield
        return
    os.seteuid(65534)
    try:
        yield
    finally:
        os.seteuid(0)


@pytest.fixture
def pty_path():
    far_end = PtyEcho()
    yield far_end.path
    far_end.stop()


@pytest.fixture
def router():
    """Starts ROUTERs at loopback endpoints, and stops them."""
    far_ends = []

    def start(endpoint="tcp://127.0.0.1:*"):
        far_ends.append(ZmqEcho(endpoint))
        return far_ends[-1]

    yield start
    for far_end in far_ends:
        far_end.stop()


BAD_ADDRESSES = {
    "": "its beginning: must be one of run:, lockstep:, tcp://",
    "http://127.0.0.1:80": "its beginning: must be one of",
    "/dev/ttyUSB0": "its beginning: must be one of",
    "tcp:127.0.0.1:80": "its beginning: must be one of",
    "memory:": "given to MemoryLink",
    "run:": "must name a program",
    "run:''": "must name a program",
    "run:./module 'half": "must be a command as in a shell",
    "lockstep:  ": "must name a program",
    "run:a\0b": "printable characters only",
    "tcp://a\nb:1": "printable characters only",
    "tcp://": "must be HOST:PORT",
    "tcp://localhost": "must be HOST:PORT",
    "tcp://:5570": "must be HOST:PORT",
    "tcp://localhost:": "port '': must be a whole number from 1 to 65535",
    "tcp://localhost:0": "port '0': must be a whole number from 1 to 65535",
    "udp://localhost:65536": "port '65536'",
    "udp://localhost:-1": "port '-1'",
    "tcp://localhost:1e3": "port '1e3'",
    "tcp://localhost:٣": "port '٣'",
    "tcp://localhost:80/path": "port '80/path'",
    "tcp://user@host:80": "must be HOST:PORT",
    "tcp://::1:80": "IPv6 address in square brackets",
    "zmq+tcp://127.0.0.1": "must be HOST:PORT",
    "zmq+ipc://": "path of 0 bytes: must have 1 to 107 bytes",
    "zmq+ipc:///" + "x" * 107: "path of 108 bytes",
    "serial:": "must name a device",
    "serial:?baud=9600": "must name a device",
    "serial:/dev/ttyUSB0?baud=fast": "baud 'fast': must be a whole number from 50 to 12000000",
    "serial:/dev/ttyUSB0?baud=": "baud ''",
    "serial:/dev/ttyUSB0?baud=9600&baud=19200": "may give baud once",
    "serial:/dev/ttyUSB0?parity=even": "'parity=even': is no option of a serial device",
}


@pytest.mark.parametrize("text", BAD_ADDRESSES)
def test_a_bad_address_is_refused_with_the_text_the_part_and_the_rule(text):
    with pytest.raises(BadAddress) as caught:
        parse_address(text)
    assert str(caught.value).startswith(f"link address {text!r}: ")
    assert BAD_ADDRESSES[text] in str(caught.value).replace("; ", ": ")


@given(
    st.sampled_from(
        ["", "run:", "lockstep:", "tcp://", "udp://", "zmq+tcp://", "zmq+ipc://", "serial:", "memory:"]
    ),
    st.text() | st.text("0123456789.:[]/?&=%@ba'ud\\ ", max_size=30),
)
def test_any_text_is_an_address_or_refused(prefix, rest):
    try:
        opener = parse_address(prefix + rest)
    except BadAddress as error:
        assert error.text == prefix + rest
    else:
        assert callable(opener)


@pytest.mark.parametrize(
    ("text", "here"),
    [
        ("run:./module", True),
        ("lockstep:./module", True),
        ("zmq+ipc:///nowhere", True),
        ("tcp://127.0.0.1:1", True),
        ("tcp://localhost:1", True),
        ("udp://127.8.9.10:1", True),
        ("zmq+tcp://[::1]:1", True),
        ("tcp://[::ffff:127.0.0.1]:1", True),
        ("tcp://192.0.2.1:1", False),  # RFC 5737: for documentation, nobody's
        ("udp://[2001:db8::1]:1", False),  # RFC 3849: likewise
        ("zmq+tcp://192.0.2.1:1", False),
        ("tcp://[::ffff:192.0.2.1]:1", False),
        ("tcp://nobody.invalid:1", False),  # RFC 6761: never a name
        ("serial:/dev/nowhere", False),
        ("serial:loop://", False),
    ],
)
def test_what_is_here_is_known_without_opening_it(text, here):
    assert is_here(text) is here


@pytest.mark.parametrize("text", ["tcp://127.0.0.1", "serial:", "pigeon:", "run:"])
def test_what_is_no_address_is_nowhere(text):
    with pytest.raises(BadAddress):
        is_here(text)


@pytest.mark.parametrize(
    "text",
    [
        "run:./module",
        "tcp://127.0.0.1:1",
        "udp://127.0.0.1:1",
        "zmq+tcp://127.0.0.1:1",
        "zmq+ipc:///nowhere",
        "serial:/dev/nowhere",
        "serial:loop://",
    ],
)
def test_virtual_time_is_refused_where_there_is_none_and_nothing_is_opened(text):
    assert not is_virtual(text)
    with pytest.raises(NoVirtualTime, match="a clock that the bench cannot stop"):
        open_link(text, virtual=True)


@pytest.mark.parametrize(
    ("text", "kind", "found"),
    [
        ("serial:/dev/no-such-port", NoSuchDevice, "no such device or file"),
        (f"serial:{__file__}", NoSuchDevice, "no serial device but a file"),
        ("serial:/dev/null", NoSuchDevice, "no serial device"),
        ("serial:nonsense://x", BadAddress, "pyserial refuses it"),
        ("serial:socket://127.0.0.1:PORT", NotReachable, "nothing listens there"),
        ("run:./no-such-program", NoSuchDevice, "no such device or file"),
        ("lockstep:./no-such-program", NoSuchDevice, "no such device or file"),
        (f"run:{__file__}", NoPermission, "permission refused"),
        ("tcp://127.0.0.1:PORT", NotReachable, "nothing listens there"),
        ("tcp://[::1]:PORT", NotReachable, ""),
        ("udp://" + "x" * 64 + ".invalid:1", NotReachable, "not a host name"),
        ("udp://127.255.255.255:9", NoPermission, "permission refused"),
        ("zmq+tcp://127.0.0.1:PORT", NotReachable, "nothing listens there"),
        ("zmq+ipc:///no/such/socket", NoSuchDevice, "no such device or file"),
    ],
)
def test_what_cannot_be_opened_says_what_was_asked_what_was_found_and_what_to_do(text, kind, found):
    text = text.replace("PORT", str(free_port()))
    started = time.monotonic()
    with pytest.raises(kind) as caught:
        open_link(text, limits=LIMITS)
    assert type(caught.value) is kind
    assert text in str(caught.value)
    assert found in caught.value.found or found in caught.value.advice
    assert caught.value.advice
    assert time.monotonic() - started < 1.9


def test_a_serial_port_held_by_another_is_in_use(pty_path):
    with open_link(f"serial:{pty_path}"), pytest.raises(InUse, match="the port is in use by another program"):
        open_link(f"serial:{pty_path}")
    open_link(f"serial:{pty_path}").close()


def test_a_serial_port_without_the_right_to_it(pty_path):
    Path(pty_path).chmod(0o600 if os.geteuid() == 0 else 0)
    with without_root(), pytest.raises(NoPermission, match="permission refused"):
        open_link(f"serial:{pty_path}")


def test_a_local_socket_without_the_right_to_it(tmp_path, router):
    path = tmp_path / "s"
    router(f"ipc://{path}")
    for folder in (path, *path.parents[:3]):
        folder.chmod(0o755)
    path.chmod(0o600 if os.geteuid() == 0 else 0)
    with without_root(), pytest.raises(NoPermission, match="permission refused"):
        open_link(f"zmq+ipc://{path}")


def test_loopback_is_told_from_the_rest(connect):
    for kind in ("memory", "lockstep", "run", "tcp", "udp", "zmq+tcp", "zmq+ipc"):
        assert connect(kind).loopback, kind
    for kind in ("serial", "serial-socket"):
        assert not connect(kind).loopback, kind


@pytest.mark.parametrize(
    ("address", "loopback"),
    [
        ("127.0.0.1", True),
        ("127.9.9.9", True),
        ("::1", True),
        ("::ffff:127.0.0.1", True),
        ("0.0.0.0", False),
        ("192.0.2.1", False),
        ("::ffff:192.0.2.1", False),
        ("fe80::1%eth0", False),
    ],
)
def test_loopback_addresses(address, loopback):
    assert is_loopback(address) is loopback


@pytest.mark.parametrize("scheme", ["tcp", "udp", "zmq+tcp"])
def test_an_unknown_host_is_told_as_such(monkeypatch, scheme):
    def unknown(*_args, **_options):
        raise socket.gaierror(socket.EAI_NONAME, "Name or service not known")

    monkeypatch.setattr(socket, "getaddrinfo", unknown)
    with pytest.raises(NotReachable, match="find the host 'nowhere': the host name is not known"):
        open_link(f"{scheme}://nowhere:1")


def test_pyserial_loop_form():
    with open_link("serial:loop://?baud=115200", limits=LIMITS) as link:
        link.send(b"round\0")
        assert b"".join(receive(link, 1)) == b"round\0"
        assert link.receive(link.clock.now_ns() + 3 * MS) is None


def test_a_child_that_ends_tells_its_status_and_its_last_words():
    with open_link(f"run:{program('stdio', 'exit-3')}") as link:
        link.send(QUIT)
        with pytest.raises(PeerClosed, match="exit status 3") as caught:
            link.receive(link.clock.now_ns() + 2_000 * MS)
    assert caught.value.exit_status == 3
    assert caught.value.stderr_lines == ("far end: up", "far end: \ufffd[31mred", "far end: going, status 3")
    assert "\n    far end: going, status 3" in str(caught.value)


def test_a_child_ended_by_a_signal_tells_which():
    with open_link(f"run:{program('stdio', 'abort')}") as link:
        link.send(QUIT)
        with pytest.raises(PeerClosed, match="SIGABRT") as caught:
            link.receive(link.clock.now_ns() + 2_000 * MS)
    assert caught.value.exit_status == -6


def test_a_child_that_writes_much_on_standard_error_is_read_and_bounded():
    with open_link(f"run:{program('stdio', 'chatty')}") as link:
        link.send(b"x\0")
        assert receive(link, 1) == [b"x\0"]
        assert len("".join(link._child.stderr_lines())) <= 4096


def test_a_child_that_ignores_the_end_of_its_input_is_ended():
    link = open_link(f"run:{program('stdio', 'silent')}")
    started = time.monotonic()
    link.close()
    assert time.monotonic() - started < 1.5
    assert link._child._process.returncode == -9


def test_a_datagram_too_long_is_refused(connect):
    link = connect("udp")
    with pytest.raises(LinkError, match="too long for one datagram"):
        link.send(bytes(65_508))
    link.send(b"x")
    assert receive(link, 1) == [b"x"]


def test_udp_where_nobody_listens_says_so_and_may_recover():
    port = free_port(socket.SOCK_DGRAM)
    with open_link(f"udp://127.0.0.1:{port}") as link:
        link.send(b"x")
        with pytest.raises(PeerClosed, match="nothing listens there"):
            link.receive(link.clock.now_ns() + 1_000 * MS)
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as far_end:
            far_end.bind(("127.0.0.1", port))
            link.send(b"y")
            assert far_end.recv(10) == b"y"


def test_a_tcp_server_that_is_no_zeromq_is_told_apart():
    with socket.create_server(("127.0.0.1", 0)) as listener:
        text = f"zmq+tcp://127.0.0.1:{listener.getsockname()[1]}"
        with pytest.raises(NotReachable, match="does not speak ZeroMQ"):
            open_link(text, limits=Limits(open_s=0.3))


def test_the_routing_id_comes_from_the_generator_and_never_begins_with_zero(router):
    far_end = router()
    text = f"zmq+{far_end.endpoint}"
    ids = []
    for _ in range(2):
        with open_link(text, rng=random.Random(5)) as link:
            link.send(b"x")
            receive(link, 1)
            ids.append(link.routing_id)
    assert ids == [random.Random(5).randbytes(8)] * 2
    assert far_end.routing_ids == {ids[0]}

    class Zeros(random.Random):
        def randbytes(self, n):
            return bytes(n)

    with open_link(text, rng=Zeros()) as link:
        assert link.routing_id == b"\1" + bytes(7)
    with open_link(text) as one, open_link(text) as two:
        assert one.routing_id != two.routing_id


def test_zeromq_parts_stay_parts_empty_and_many(router):
    with open_link(f"zmq+{router().endpoint}") as link:
        parts = [b"", b"a", b"", b"x" * 65_536, b""]
        link.send(*parts)
        assert receive(link, 5) == parts
        many = [b"%d" % number for number in range(5_000)]
        link.send(*many)
        assert receive(link, 5_000) == many


def test_a_zeromq_part_too_long_ends_the_link_and_harms_nothing():
    with zmq.Context() as context, context.socket(zmq.ROUTER) as far_end:
        port = far_end.bind_to_random_port("tcp://127.0.0.1")
        with open_link(f"zmq+tcp://127.0.0.1:{port}", limits=LIMITS) as link:
            link.send(b"hello")
            sender, _ = far_end.recv_multipart()
            far_end.send_multipart([sender, b"good"])
            assert receive(link, 1) == [b"good"]  # what waits in the library may go down with the link
            far_end.send_multipart([sender, bytes(65_537)])
            with pytest.raises(PeerClosed, match="part of more than 65536 bytes"):
                link.receive(link.clock.now_ns() + 2_000 * MS)


def test_a_zeromq_message_of_very_many_parts_is_bounded():
    with zmq.Context() as context, context.socket(zmq.ROUTER) as far_end:
        port = far_end.bind_to_random_port("tcp://127.0.0.1")
        with open_link(f"zmq+tcp://127.0.0.1:{port}", limits=Limits(inbox_bytes=10_000)) as link:
            link.send(b"hello")
            sender, _ = far_end.recv_multipart()
            far_end.send_multipart([sender, *[b""] * 5_000])
            far_end.send_multipart([sender, b"after"])
            received = receive(link, 10_000 // 64)
            assert received == [b""] * (10_000 // 64)
            assert receive(link, 1) == [b"after"]
            assert link.discarded.chunks == 5_000 - 10_000 // 64


def test_a_zeromq_far_end_that_takes_nothing_stalls_a_send_for_a_bounded_time():
    with zmq.Context() as context, context.socket(zmq.ROUTER) as far_end:
        far_end.setsockopt(zmq.RCVHWM, 1)
        port = far_end.bind_to_random_port("tcp://127.0.0.1")
        with open_link(f"zmq+tcp://127.0.0.1:{port}", limits=LIMITS) as link:
            started = time.monotonic()
            with pytest.raises(SendStalled, match=r"within 0\.4 s"):  # noqa: PT012 - much is buffered
                for _ in range(5_000):
                    link.send(bytes(60_000))
            assert time.monotonic() - started < 1.9


def test_a_zeromq_far_end_that_has_gone_is_not_waited_for(router):
    far_end = router()
    with open_link(f"zmq+{far_end.endpoint}", limits=LIMITS) as link:
        link.send(QUIT)
        time.sleep(0.2)
        started = time.monotonic()
        with pytest.raises(PeerClosed):
            link.send(b"x")
        assert time.monotonic() - started < 0.3


def test_errors_survive_being_pickled():
    for error in (BadAddress("t", "p", "r"), NotReachable("a", "f", "v"), PeerClosed("a", "f", "v")):
        copy = pickle.loads(pickle.dumps(error))
        assert (type(copy), str(copy)) == (type(error), str(error))


@pytest.mark.parametrize("line", ["dtr", "rts"])
def test_a_control_line_is_turned_over_and_back(line, monkeypatch):
    """pyserial's loop:// joins RTS to CTS and DTR to DSR, which shows what the line was."""
    seen = []
    with open_link("serial:loop://") as link:
        port = link._port
        before = getattr(port, line)

        def sleep(seconds):
            seen.append((seconds, port.cts if line == "rts" else port.dsr, getattr(port, line)))

        monkeypatch.setattr("protobench.links.serial_port.time.sleep", sleep)
        link.pulse(line, 250)
        monkeypatch.undo()
        assert seen == [(0.25, not before, not before)]
        assert getattr(port, line) == before


def test_a_pty_has_no_control_lines():
    ours, theirs = os.openpty()
    try:
        with (
            open_link(f"serial:{os.ttyname(theirs)}") as link,
            pytest.raises(NoControlLine, match="use a device"),
        ):
            link.pulse("dtr", 1)
    finally:
        os.close(ours)
        os.close(theirs)


def test_other_links_have_no_control_lines():
    with (
        open_link("run:cat") as link,
        pytest.raises(NoControlLine, match="run:cat: pulse rts: this link has no"),
    ):
        link.pulse("rts", 1)
