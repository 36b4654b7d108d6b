"""TCP (a byte stream) and UDP (one unit a datagram)."""

from __future__ import annotations

import errno
import ipaddress
import socket
import sys
from abc import abstractmethod

from protobench.links.base import DEFAULT_LIMITS, Chunk, Discarded, Framing, Limits
from protobench.links.errors import LinkError, NotReachable, PeerClosed, from_os_error
from protobench.links.realtime import READ_BYTES, DescriptorLink

_UDP_BUFFER_BYTES = 1 << 20
_SO_RXQ_OVFL = 40 if sys.platform == "linux" else None  # Linux counts what it loses to a full buffer


def is_loopback(address: str) -> bool:
    """Whether a numeric IP address is this machine's loopback."""
    ip = ipaddress.ip_address(address.partition("%")[0])
    mapped = ip.ipv4_mapped if isinstance(ip, ipaddress.IPv6Address) else None
    return (mapped or ip).is_loopback


def resolve(
    name: str, host: str, port: int, kind: socket.SocketKind
) -> list[tuple[socket.AddressFamily, str]]:
    """The numeric addresses of a host, IPv4 first. Raises NotReachable when the name is not known."""
    asked = f"{name}: find the host {host!r}"
    try:
        found = socket.getaddrinfo(host, port, type=kind)
    except OSError as error:
        raise from_os_error(asked, error) from error
    except UnicodeError as error:
        raise NotReachable(asked, f"not a host name ({error})", "check the host name") from error
    addresses = [(family, str(address[0])) for family, _, _, _, address in found]
    return sorted(addresses, key=lambda address: address[0] is not socket.AF_INET)


class _SocketLink(DescriptorLink):
    """What TCP and UDP share: a connected, non-blocking socket."""

    _kind: socket.SocketKind
    _framing: Framing

    def __init__(self, name: str, host: str, port: int, *, limits: Limits = DEFAULT_LIMITS) -> None:
        super().__init__(name, self._framing, loopback=False, limits=limits)
        for family, address in resolve(name, host, port, self._kind):
            try:
                self._socket = self._connect(family, (address, port))
            except OSError as error:
                refusal = from_os_error(f"{name}: connect", error)
                continue
            self.loopback = is_loopback(address)
            break
        else:
            raise refusal
        self._watch(self._socket.fileno(), self._socket.fileno())

    def _connect(self, family: socket.AddressFamily, address: tuple[str, int]) -> socket.socket:
        connection = socket.socket(family, self._kind)
        try:
            self._configure(connection)
            connection.settimeout(self.limits.open_s)
            connection.connect(address)
            if connection.getsockname() == connection.getpeername():  # TCP can meet itself on a free port
                raise ConnectionRefusedError(errno.ECONNREFUSED, "the socket met itself")
            connection.setblocking(False)
        except BaseException:
            connection.close()
            raise
        return connection

    @abstractmethod
    def _configure(self, connection: socket.socket) -> None: ...

    def _read(self) -> bytes:
        return self._socket.recv(READ_BYTES)

    def _write(self, data: memoryview) -> int:
        return self._socket.send(data)

    def _close(self) -> None:
        self._socket.close()


class TcpLink(_SocketLink):
    """A byte stream over TCP, without the delay that joins small segments."""

    _kind = socket.SOCK_STREAM
    _framing = Framing.STREAM

    def _configure(self, connection: socket.socket) -> None:
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)


class UdpLink(_SocketLink):
    """One unit a datagram. That nobody listens shows only after a send, and may pass: it raises once."""

    _kind = socket.SOCK_DGRAM
    _framing = Framing.DATAGRAM
    _lost_datagrams = 0

    @property
    def discarded(self) -> Discarded:
        chunks, size = self._inbox.discarded
        return Discarded(chunks + self._lost_datagrams, size)

    def send(self, *units: bytes) -> int:
        self._check_open()
        for unit in units:
            self._send_one(unit)
        return self.clock.now_ns()

    def _send_one(self, unit: bytes) -> None:
        give_up_ns = self.clock.now_ns() + int(self.limits.send_s * 1e9)
        while True:
            try:
                self._socket.send(unit)
                return
            except BlockingIOError:
                self._wait_for_room(give_up_ns, f"a datagram of {len(unit)} bytes")
            except OSError as error:
                raise self._closed_error(error) from error

    def _configure(self, connection: socket.socket) -> None:
        connection.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, _UDP_BUFFER_BYTES)
        if _SO_RXQ_OVFL is not None:
            connection.setsockopt(socket.SOL_SOCKET, _SO_RXQ_OVFL, 1)

    def _pull(self) -> bool:
        try:
            data, ancillary, _, _ = self._socket.recvmsg(READ_BYTES, 64)
        except BlockingIOError:
            return False
        except OSError as error:
            raise self._closed_error(error) from error
        for level, kind, value in ancillary:
            if level == socket.SOL_SOCKET and kind == _SO_RXQ_OVFL:
                self._lost_datagrams = int.from_bytes(value[:4], sys.byteorder)
        self._inbox.put(Chunk(self.clock.now_ns(), data))
        return True

    def _closed_error(self, error: OSError | None) -> LinkError:
        if isinstance(error, ConnectionRefusedError):
            found = f"nothing listens there (the system says: {error})"
            return PeerClosed(self.name, found, "start the far end, or check the port")
        return super()._closed_error(error)
