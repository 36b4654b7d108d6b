"""Link addresses: text to link.

    run:COMMAND [ARGS]            a program in real time, on its standard input and output
    lockstep:COMMAND [ARGS]       a program in virtual time (lockstep.md)
    tcp://HOST:PORT               a byte stream
    udp://HOST:PORT               a frame a datagram
    zmq+tcp://HOST:PORT           ZeroMQ, a frame a message part
    zmq+ipc://PATH                the same over a local socket file
    serial:DEVICE[?baud=115200]   a serial device or a pty; also serial:URL for the URL forms of pyserial

A module that lives in this process has no address: give it to ``MemoryLink`` directly.
"""

from __future__ import annotations

import os
import random
import re
import shlex
import socket
from collections.abc import Callable
from functools import partial
from typing import NamedTuple

from protobench.links.base import DEFAULT_LIMITS, Limits, Link
from protobench.links.errors import BadAddress, LinkError, NoVirtualTime
from protobench.links.lockstep import LockstepLink
from protobench.links.process import ProcessLink
from protobench.links.serial_port import DEFAULT_BAUD, SerialLink, SerialUrlLink
from protobench.links.sockets import TcpLink, UdpLink, is_loopback, resolve
from protobench.links.zeromq import ZmqLink

Opener = Callable[[], Link]

_BAUD_MIN, _BAUD_MAX = 50, 12_000_000
_IPC_PATH_LIMIT_BYTES = 107  # what the system has room for
_HOST_PORT = re.compile(
    r"(?:\[(?P<v6>[0-9A-Fa-f:.]+(?:%\w+)?)\]|(?P<host>[^\[\]:/?#@\s]+)):(?P<port>[^:\[\]]*)"
)


def open_link(
    text: str, *, virtual: bool = False, rng: random.Random | None = None, limits: Limits = DEFAULT_LIMITS
) -> Link:
    """Open the link that ``text`` names. ``rng`` gives the ZeroMQ routing id; without it the system does.

    ``virtual`` insists on virtual time. Raises BadAddress, NoVirtualTime, and what the link raises on being
    opened: NoSuchDevice, InUse, NoPermission, NotReachable, PeerClosed.
    """
    opener = parse_address(text, rng=rng, limits=limits)
    if virtual and not is_virtual(text):
        raise NoVirtualTime(
            f"open {text!r} in virtual time",
            "the far end of this link runs by a clock that the bench cannot stop",
            "use a lockstep: link or a module in memory, or leave virtual time out",
        )
    return opener()


def is_virtual(text: str) -> bool:
    """Whether the link that ``text`` names runs in virtual time."""
    return text.startswith("lockstep:")


def is_here(text: str) -> bool:
    """Whether the far end that ``text`` names is certainly on this machine and no device; opens nothing.

    A host counts when every address its name has is loopback; a name that is not known does not. Raises BadAddress.
    """
    parse_address(text)
    for prefix in _HOSTS:
        if text.startswith(prefix):
            host, port = _host_port(_Address(text, text[len(prefix) :], None, DEFAULT_LIMITS))
            try:
                return all(is_loopback(ip) for _, ip in resolve(text, host, port, socket.SOCK_STREAM))
            except LinkError:
                return False
    return not text.startswith("serial:")


def parse_address(text: str, *, rng: random.Random | None = None, limits: Limits = DEFAULT_LIMITS) -> Opener:
    """Check a link address without opening anything; what is returned opens it. Raises BadAddress."""
    if not text.isprintable():
        raise BadAddress(text, "the text", "may hold printable characters only")
    for prefix, parse in _PARSERS.items():
        if text.startswith(prefix):
            return parse(_Address(text, text[len(prefix) :], rng, limits))
    known = [prefix for prefix, parse in _PARSERS.items() if parse is not _parse_memory]
    raise BadAddress(text, "its beginning", f"must be one of {', '.join(known)}")


class _Address(NamedTuple):
    """The whole text, what stands after its prefix, and what else a link is made with."""

    text: str
    rest: str
    rng: random.Random | None
    limits: Limits


def _parse_memory(address: _Address) -> Opener:
    raise BadAddress(
        address.text, "'memory:'", "names no link by itself; a module in this process is given to MemoryLink"
    )


def _parse_command(address: _Address) -> Opener:
    try:
        argv = shlex.split(address.rest)
    except ValueError as error:
        raise BadAddress(
            address.text, repr(address.rest), f"must be a command as in a shell ({error})"
        ) from error
    if not argv or not argv[0]:
        raise BadAddress(address.text, repr(address.rest), "must name a program to run")
    kind = LockstepLink if is_virtual(address.text) else ProcessLink
    return partial(kind, address.text, argv, limits=address.limits)


def _parse_tcp(address: _Address) -> Opener:
    return partial(TcpLink, address.text, *_host_port(address), limits=address.limits)


def _parse_udp(address: _Address) -> Opener:
    return partial(UdpLink, address.text, *_host_port(address), limits=address.limits)


def _parse_zmq_tcp(address: _Address) -> Opener:
    return partial(_open_zmq_tcp, address, *_host_port(address))


def _open_zmq_tcp(address: _Address, host: str, port: int) -> Link:
    _, ip = resolve(address.text, host, port, socket.SOCK_STREAM)[0]
    endpoint = f"tcp://[{ip}]:{port}" if ":" in ip else f"tcp://{ip}:{port}"
    return ZmqLink(address.text, endpoint, loopback=is_loopback(ip), rng=address.rng, limits=address.limits)


def _parse_zmq_ipc(address: _Address) -> Opener:
    size = len(os.fsencode(address.rest))
    if not 1 <= size <= _IPC_PATH_LIMIT_BYTES:
        raise BadAddress(
            address.text, f"path of {size} bytes", f"must have 1 to {_IPC_PATH_LIMIT_BYTES} bytes"
        )
    endpoint = f"ipc://{address.rest}"
    return partial(ZmqLink, address.text, endpoint, loopback=True, rng=address.rng, limits=address.limits)


def _parse_serial(address: _Address) -> Opener:
    text = address.text
    device, _, query = address.rest.partition("?")
    options = [option for option in query.split("&") if option]
    rates = [option.removeprefix("baud=") for option in options if option.startswith("baud=")]
    others = [option for option in options if not option.startswith("baud=")]
    if not device:
        raise BadAddress(text, repr(address.rest), "must name a device such as /dev/ttyUSB0")
    if len(rates) > 1:
        raise BadAddress(text, repr(query), "may give baud once")
    baud = _number(text, "baud", rates[0], _BAUD_MIN, _BAUD_MAX) if rates else DEFAULT_BAUD
    if "://" in device:
        url = f"{device}?{'&'.join(others)}" if others else device
        return partial(SerialUrlLink, text, url, baud, limits=address.limits)
    if others:
        raise BadAddress(text, repr(others[0]), "is no option of a serial device; there is only baud=RATE")
    return partial(SerialLink, text, device, baud, limits=address.limits)


def _host_port(address: _Address) -> tuple[str, int]:
    match = _HOST_PORT.fullmatch(address.rest)
    if match is None:
        raise BadAddress(
            address.text, repr(address.rest), "must be HOST:PORT, an IPv6 address in square brackets"
        )
    return match["v6"] or match["host"], _number(address.text, "port", match["port"], 1, 65_535)


def _number(text: str, what: str, digits: str, low: int, high: int) -> int:
    if not re.fullmatch(r"[0-9]{1,9}", digits) or not low <= int(digits) <= high:
        raise BadAddress(text, f"{what} {digits!r}", f"must be a whole number from {low} to {high}")
    return int(digits)


_HOSTS = ("tcp://", "udp://", "zmq+tcp://")
_PARSERS: dict[str, Callable[[_Address], Opener]] = {
    "run:": _parse_command,
    "lockstep:": _parse_command,
    "tcp://": _parse_tcp,
    "udp://": _parse_udp,
    "zmq+tcp://": _parse_zmq_tcp,
    "zmq+ipc://": _parse_zmq_ipc,
    "serial:": _parse_serial,
    "memory:": _parse_memory,
}
