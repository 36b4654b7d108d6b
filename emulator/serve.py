"""Serve a population over ZeroMQ in real time."""

from __future__ import annotations

import time
from collections.abc import Callable
from urllib.parse import urlsplit

import zmq

from emulator.population import Population
from protobench.contract import load_contract

PART_SIZE_MAX = 65_536
HIGH_WATER = 10_000
DRAIN_MAX = 1_000  # messages taken before what is due is done
IDLE_MS = 1_000
PORT_LAST = 65_535
PREFIXES = ("zmq+tcp://", "zmq+ipc://")


class ServeError(Exception):
    """What was asked cannot be served; the message says what was asked, what was found and what to do."""


def serve(
    bind: str, modules: int, seed: int, first_address: int = 1, ready: Callable[[str], None] | None = None
) -> None:
    """Serve ``modules`` emulated modules at ``bind`` until interrupted.

    ``ready`` is called with the address bound once requests are taken; port 0 or ``*`` picks a free port. Raises
    ServeError; KeyboardInterrupt goes through after everything is closed.
    """
    if not bind.startswith(PREFIXES):
        raise ServeError(f"{bind!r} cannot be served: it must begin with {' or '.join(PREFIXES)}")
    population = Population(load_contract(), modules, seed, first_address)
    context = zmq.Context()
    socket = context.socket(zmq.ROUTER)
    try:
        socket.setsockopt(zmq.MAXMSGSIZE, PART_SIZE_MAX)
        socket.setsockopt(zmq.SNDHWM, HIGH_WATER)
        socket.setsockopt(zmq.RCVHWM, HIGH_WATER)
        socket.setsockopt(zmq.LINGER, 0)
        bound = _bind(socket, bind)
        if ready is not None:
            ready(bound)
        _run(socket, population)
    finally:
        socket.close(0)
        context.term()


def _bind(socket: zmq.Socket[bytes], bind: str) -> str:
    endpoint = bind.removeprefix("zmq+")
    port = endpoint.rpartition(":")[2]
    if endpoint.startswith("tcp://") and port != "*" and not (port.isdecimal() and int(port) <= PORT_LAST):
        raise ServeError(f"{bind!r} cannot be served: port {port!r} must be a number up to {PORT_LAST}, or *")
    try:
        socket.bind(endpoint)
    except zmq.ZMQError as error:
        found = "the port is in use by another program" if error.errno == zmq.EADDRINUSE else error.strerror
        raise ServeError(f"{bind!r} cannot be served: {found}; choose another address") from None
    if endpoint.startswith("tcp://") and urlsplit(endpoint).netloc.rpartition(":")[2] in ("0", "*"):
        return f"zmq+{socket.getsockopt_string(zmq.LAST_ENDPOINT)}"
    return bind


def _run(socket: zmq.Socket[bytes], population: Population) -> None:
    poller = zmq.Poller()
    poller.register(socket, zmq.POLLIN)
    begin_ns = time.monotonic_ns()
    while True:
        now_us = (time.monotonic_ns() - begin_ns) // 1000
        deadline_us = population.next_deadline_us()
        wait_ms = IDLE_MS if deadline_us is None else min(IDLE_MS, max(0, -((now_us - deadline_us) // 1000)))
        poller.poll(wait_ms)
        for _ in range(DRAIN_MAX):
            try:
                peer, *parts = socket.recv_multipart(zmq.NOBLOCK)
            except zmq.Again:
                break
            now_us = (time.monotonic_ns() - begin_ns) // 1000
            for part in parts:
                population.take(now_us, peer, part)
        population.advance((time.monotonic_ns() - begin_ns) // 1000)
        for peer, data in population.frames():
            _send(socket, peer, data)


def _send(socket: zmq.Socket[bytes], peer: bytes, data: bytes) -> None:
    """A peer that has gone or does not take its frames loses them: the contract expects loss, not a stopped server."""
    try:
        socket.send_multipart((peer, data), zmq.NOBLOCK)
    except (zmq.Again, zmq.ZMQError):
        return
