"""One pair of bench link and far end for every kind of link."""

from __future__ import annotations

import random
from contextlib import ExitStack

import pytest
from far_ends import EchoPeer, PtyEcho, TcpEcho, UdpEcho, ZmqEcho, program
from pairs import LIMITS

from protobench.links import ImpairedLink, MemoryLink, open_link


@pytest.fixture
def connect(tmp_path):
    """connect(kind, limits=...) -> an open link with an echo at its far end; all is closed after the test."""
    with ExitStack() as stack:

        def start(far_end):
            stack.callback(far_end.stop)
            return far_end

        def connect(kind, limits=LIMITS):
            impaired = kind.startswith("impaired ")
            kind = kind.removeprefix("impaired ")
            if kind == "memory":
                link = MemoryLink(EchoPeer(), limits=limits)
            else:
                link = open_link(address(kind), rng=random.Random(1), limits=limits)
            if impaired:
                link = ImpairedLink(link, [], seed=1)
            return stack.enter_context(link)

        def address(kind):
            make = {
                "run": lambda: program("stdio"),
                "lockstep": lambda: program("lockstep"),
                "tcp": lambda: f"//127.0.0.1:{start(TcpEcho()).port}",
                "udp": lambda: f"//127.0.0.1:{start(UdpEcho()).port}",
                "zmq+tcp": lambda: start(ZmqEcho("tcp://127.0.0.1:*")).endpoint.removeprefix("tcp:"),
                "zmq+ipc": lambda: start(ZmqEcho(f"ipc://{tmp_path}/s")).endpoint.removeprefix("ipc:"),
                "serial": lambda: f"{start(PtyEcho()).path}?baud=115200",
                "serial-socket": lambda: f"socket://127.0.0.1:{start(TcpEcho()).port}",
            }
            return f"{kind.removesuffix('-socket')}:{make[kind]()}"

        yield connect
