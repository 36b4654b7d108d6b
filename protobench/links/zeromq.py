"""ZeroMQ: the bench is a DEALER that connects, the far end a ROUTER that binds; each part is one unit."""

from __future__ import annotations

import errno
import os
import random
from pathlib import Path

import zmq
from zmq.utils.monitor import parse_monitor_message

from protobench.links.base import DEFAULT_LIMITS, Chunk, Framing, Limits
from protobench.links.errors import BadAddress, NotReachable, PeerClosed, from_os_error
from protobench.links.realtime import RealTimeLink

PART_LIMIT_BYTES = 1 << 16
ROUTING_ID_BYTES = 8
_HIGH_WATER_MESSAGES = 1000
_LINGER_MS = 200  # time for the last message to leave when the link is closed
_GONE = (
    zmq.EVENT_CLOSED
    | zmq.EVENT_DISCONNECTED
    | zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL
    | zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL
    | zmq.EVENT_HANDSHAKE_FAILED_AUTH
)


class ZmqLink(RealTimeLink):
    """Message parts to and from a ROUTER at ``endpoint`` (``tcp://NUMERIC_HOST:PORT`` or ``ipc://PATH``).

    Opening waits for the handshake. The link never connects a second time and never keeps a message for a far
    end that is not there: a module that comes up later must not find old requests waiting. The routing id is
    random: from ``rng``, or from the system. Raises NotReachable, NoSuchDevice, NoPermission, BadAddress.
    """

    def __init__(
        self,
        name: str,
        endpoint: str,
        *,
        loopback: bool,
        rng: random.Random | None = None,
        limits: Limits = DEFAULT_LIMITS,
    ) -> None:
        super().__init__(name, Framing.PART, loopback=loopback, limits=limits)
        self.routing_id = _make_routing_id(rng)
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.DEALER)
        self._monitor = self._socket.get_monitor_socket(_GONE | zmq.EVENT_HANDSHAKE_SUCCEEDED)
        self._poller = zmq.Poller()
        self._poller.register(self._socket, zmq.POLLIN)
        self._poller.register(self._monitor, zmq.POLLIN)
        try:
            self._configure()
            _check_socket_file(name, endpoint)
            self._connect(endpoint)
        except BaseException:
            self.close()
            raise

    def _configure(self) -> None:
        open_limit_ms = max(1, int(self.limits.open_s * 1000))
        self._socket.setsockopt(zmq.ROUTING_ID, self.routing_id)
        options = {
            zmq.IMMEDIATE: 1,
            zmq.RECONNECT_IVL: -1,
            zmq.HANDSHAKE_IVL: open_limit_ms,
            zmq.CONNECT_TIMEOUT: open_limit_ms,
            zmq.MAXMSGSIZE: PART_LIMIT_BYTES,
            zmq.SNDHWM: _HIGH_WATER_MESSAGES,
            zmq.RCVHWM: _HIGH_WATER_MESSAGES,
            zmq.LINGER: _LINGER_MS,
            zmq.IPV6: 1,
        }
        for option, value in options.items():
            self._socket.setsockopt(option, value)

    def _connect(self, endpoint: str) -> None:
        try:
            self._socket.connect(endpoint)
        except zmq.ZMQError as error:
            raise BadAddress(self.name, endpoint, f"ZeroMQ refuses it ({error})") from error
        event = self._next_event() if self._monitor.poll(int(self.limits.open_s * 1000)) else 0
        if event != zmq.EVENT_HANDSHAKE_SUCCEEDED:
            refused = event == zmq.EVENT_CLOSED
            found = "nothing listens there" if refused else "what listens there does not speak ZeroMQ"
            advice = "start the far end (a ROUTER socket that binds), or check the address"
            raise NotReachable(f"{self.name}: connect", found, advice)

    def send(self, *units: bytes) -> int:
        self._check_open()
        if units:
            give_up_ns = self.clock.now_ns() + int(self.limits.send_s * 1e9)
            while not self._try_send(units):
                self._see_whether_gone()
                self._check_far_end()
                if self.clock.now_ns() >= give_up_ns:
                    raise self._stalled(f"a message of {len(units)} parts")
                self._socket.poll(20, zmq.POLLOUT)  # wakes now and then to see whether the far end has gone
        return self.clock.now_ns()

    def _try_send(self, units: tuple[bytes, ...]) -> bool:
        try:
            self._socket.send_multipart(units, zmq.NOBLOCK)
        except zmq.Again:
            return False
        return True

    def _pull(self) -> bool:
        if self._receive_parts():
            return True
        self._see_whether_gone()
        return self._ended is not None and self._receive_parts()  # what came just before the end

    def _receive_parts(self) -> bool:
        """Take one message, part by part, so that one of very many parts is bounded by the inbox."""
        try:
            part = self._socket.recv(zmq.NOBLOCK)
        except zmq.Again:
            return False
        now_ns = self.clock.now_ns()
        self._inbox.put(Chunk(now_ns, part))
        while self._socket.getsockopt(zmq.RCVMORE):
            self._inbox.put(Chunk(now_ns, self._socket.recv(zmq.NOBLOCK)))
        return True

    def _see_whether_gone(self) -> None:
        while self._ended is None and int(self._monitor.get(zmq.EVENTS)) & zmq.POLLIN:
            if self._next_event() & _GONE:
                self._ended = PeerClosed(
                    self.name,
                    f"the far end has closed the link, or sent a part of more than {PART_LIMIT_BYTES} bytes",
                    "see why, then open a new link",
                )

    def _next_event(self) -> int:
        return int(parse_monitor_message(self._monitor.recv_multipart())["event"])

    def _wait(self, timeout_ms: int) -> None:
        self._poller.poll(timeout_ms)

    def _close(self) -> None:
        self._socket.disable_monitor()
        self._monitor.close(linger=0)
        self._socket.close()
        self._context.term()


def _make_routing_id(rng: random.Random | None) -> bytes:
    """Random bytes; ZeroMQ keeps ids that begin with a zero byte for itself."""
    raw = rng.randbytes(ROUTING_ID_BYTES) if rng is not None else os.urandom(ROUTING_ID_BYTES)
    return bytes([raw[0] or 1]) + raw[1:]


def _check_socket_file(name: str, endpoint: str) -> None:
    """ZeroMQ does not say why a local socket cannot be opened, so look before."""
    scheme, _, path = endpoint.partition("://")
    if scheme != "ipc" or path.startswith("@"):  # "@": a Linux name that is no file
        return
    try:
        Path(path).stat()
        if not os.access(path, os.W_OK, effective_ids=True):
            raise PermissionError(errno.EACCES, "no right to write to it", path)
    except OSError as error:
        raise from_os_error(f"{name}: connect", error) from error
