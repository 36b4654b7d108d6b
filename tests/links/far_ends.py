"""Far ends for links: an echo that obeys three commands, over every kind of link.

What is sent comes back. ``QUIT`` makes the far end close, ``FLOOD`` makes it write without end (or, in
virtual time, over UDP and over ZeroMQ, very much), ``DEAF`` makes it stop reading. As a program:
``far_ends.py stdio|lockstep [BEHAVIOUR]``.
"""

from __future__ import annotations

import contextlib
import os
import select
import shlex
import signal
import socket
import struct
import sys
import threading
import time
import tty

PROGRAM = f"{shlex.quote(sys.executable)} -S {shlex.quote(__file__)}"

QUIT, FLOOD, DEAF = b"\xf1QUIT\x00", b"\xf2FLOOD\x00", b"\xf3DEAF\x00"
BLOCK = bytes(range(1, 256)) * 257  # 65,535 bytes without a delimiter
NO_DEADLINE = (1 << 64) - 1


def program(mode: str, behaviour: str = "") -> str:
    """The address, without its prefix, of this file as a program."""
    return f"{PROGRAM} {mode} {behaviour}".rstrip()


class StreamEcho:
    """The behaviour on a stream, over two functions that block."""

    def __init__(self, read, write, stopped):
        self._read, self._write, self._stopped = read, write, stopped

    def run(self):
        while True:
            data = self._read()
            if not data or QUIT in data:
                return
            if DEAF in data:
                self._stopped.wait(60)
            while FLOOD in data:
                self._write(BLOCK)
            self._write(data)


class _Thread:
    """Runs ``serve`` in a thread; ``stop`` ends it by closing what it blocks on."""

    def __init__(self, serve):
        self.stopped = threading.Event()
        self._thread = threading.Thread(target=self._guard, args=(serve,), daemon=True)
        self._thread.start()

    def _guard(self, serve):
        with contextlib.suppress(OSError):  # the bench has gone, or the test has closed our end
            serve(self.stopped)

    def join(self):
        self.stopped.set()
        self._thread.join(2)
        assert not self._thread.is_alive(), "the far end hangs"


class TcpEcho:
    """Accepts one connection."""

    def __init__(self):
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.port = self._listener.getsockname()[1]
        self._connection = None
        self._thread = _Thread(self._serve)

    def _serve(self, stopped):
        self._connection, _ = self._listener.accept()
        with self._connection as connection:
            self._connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            StreamEcho(lambda: connection.recv(1 << 16), connection.sendall, stopped).run()

    def stop(self):
        for each in (self._listener, self._connection):
            if each is not None:
                with contextlib.suppress(OSError):
                    each.shutdown(socket.SHUT_RDWR)
                each.close()
        self._thread.join()


class UdpEcho:
    """Answers each datagram to its sender; 2,000 long ones at ``FLOOD``."""

    def __init__(self):
        self._socket = socket.socket(socket.AF_INET, socket.SOCK_DGRAM)
        self._socket.bind(("127.0.0.1", 0))
        self.port = self._socket.getsockname()[1]
        self._thread = _Thread(self._serve)

    def _serve(self, stopped):
        with self._socket:
            while True:
                data, sender = self._socket.recvfrom(1 << 16)
                if data in (QUIT, b"stop"):
                    return
                if data == FLOOD:
                    for _ in range(2_000):
                        self._socket.sendto(BLOCK[:8000], sender)
                self._socket.sendto(data, sender)

    def stop(self):
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as stopper:
            stopper.sendto(b"stop", ("127.0.0.1", self.port))
        self._thread.join()


class PtyEcho:
    """A pty: ``path`` is the bench's side; it stays open here until QUIT, as a device stays plugged in."""

    def __init__(self):
        self._master, self._slave = os.openpty()
        tty.setraw(self._slave)
        self.path = os.ttyname(self._slave)
        self._stop_r, self._stop_w = os.pipe()
        self._thread = _Thread(self._serve)

    def _serve(self, stopped):
        try:
            StreamEcho(self._read, self._write, stopped).run()
        finally:
            os.close(self._slave)
            os.close(self._master)

    def _wait(self, reading, writing):
        ready, _, _ = select.select([self._stop_r, *reading], writing, [])
        return self._stop_r not in ready

    def _read(self):
        return os.read(self._master, 1 << 16) if self._wait([self._master], []) else b""

    def _write(self, data):
        os.set_blocking(self._master, False)
        while data:
            if not self._wait([], [self._master]):
                raise OSError("stopped")
            with contextlib.suppress(BlockingIOError):
                data = data[os.write(self._master, data) :]

    def stop(self):
        os.write(self._stop_w, b"x")
        self._thread.join()
        os.close(self._stop_r)
        os.close(self._stop_w)


class ZmqEcho:
    """A ROUTER that sends each message back as it came; 20,000 at ``FLOOD``."""

    def __init__(self, endpoint):
        import zmq

        self._zmq = zmq
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.ROUTER)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.bind(endpoint)
        self.endpoint = self._socket.getsockopt(zmq.LAST_ENDPOINT).decode()
        self.routing_ids = set()
        self._thread = _Thread(self._serve)

    def _serve(self, stopped):
        while not stopped.is_set():
            if not self._socket.poll(20):
                continue
            sender, *parts = self._socket.recv_multipart()
            self.routing_ids.add(sender)
            if QUIT in parts:
                break
            for _ in range(20_000 if FLOOD in parts else 1):
                self._socket.send_multipart([sender, *parts])
        self._socket.close()

    def stop(self):
        self._thread.join()
        self._context.term()


class EchoPeer:
    """The echo as a module in memory: answers ``delay_us`` after what it was fed."""

    def __init__(self, delay_us=0):
        self._delay_us = delay_us
        self._due = []
        self._output = []
        self.log = []

    def feed(self, now_us, data):
        self.log.append(("feed", now_us, data))
        if data == FLOOD:
            self._output += [BLOCK] * 15  # just under what a lockstep reply may hold
        if self._delay_us:
            self._due.append((now_us + self._delay_us, data))
        else:
            self._output.append(data)

    def advance(self, now_us):
        self.log.append(("advance", now_us, b""))
        while self._due and self._due[0][0] <= now_us:
            self._output.append(self._due.pop(0)[1])

    def next_deadline_us(self):
        return self._due[0][0] if self._due else None

    def take_output(self):
        output, self._output = self._output, []
        return output


def say(text):
    os.write(2, f"far end: {text}\n".encode())


def serve_stdio(behaviour):
    say("up")
    say("\x1b[31mred")
    if behaviour == "silent":
        time.sleep(60)
    if behaviour == "chatty":  # more than a pipe holds
        os.write(2, b"x" * 200_000 + b"\n")

    def write(data):
        while data:
            data = data[os.write(1, data) :]

    StreamEcho(lambda: os.read(0, 1 << 16), write, threading.Event()).run()
    if behaviour == "exit-3":
        say("going, status 3")
        sys.exit(3)
    if behaviour == "abort":
        os.kill(os.getpid(), signal.SIGABRT)


def serve_lockstep(behaviour):  # noqa: C901, PLR0912, PLR0915 - one way of being broken after another
    def get(count):
        data = sys.stdin.buffer.read(count)
        if len(data) < count:
            sys.exit(0)
        return data

    peer = EchoPeer(int(behaviour.removeprefix("delay-")) if behaviour.startswith("delay-") else 0)
    records = 0
    while True:
        op, now_us, length = struct.unpack(">BQH", get(11))
        data = get(length)
        records += 1
        if op == 1:
            peer.feed(now_us, data)
        else:
            peer.advance(now_us)
        output = b"".join(peer.take_output())
        deadline = peer.next_deadline_us()
        reply = struct.pack(">I", len(output)) + output
        reply += struct.pack(">Q", NO_DEADLINE if deadline is None else deadline)
        if QUIT in data or (records > 1 and behaviour == "exit-3"):
            say("going, status 3")
            sys.exit(3)
        if records > 1:
            match behaviour:
                case "abort":
                    os.kill(os.getpid(), signal.SIGABRT)
                case "silent":
                    say("will say nothing")
                    time.sleep(60)
                case "half":
                    os.write(1, reply[:7])
                    time.sleep(60)
                case "text":
                    reply = b"Hello, I am a module\n" + reply
                case "huge":
                    reply = struct.pack(">I", (1 << 20) + 1) + reply[4:]
                case "past":
                    reply = struct.pack(">IQ", 0, now_us - 1)
                case "stuck":
                    reply = struct.pack(">IQ", 0, now_us)
                case "twice":
                    reply += reply
                case "chatty":
                    os.write(2, b"x" * 200_000)
        for start in range(0, len(reply), 5 if behaviour == "dribble" else len(reply)):
            os.write(1, reply[start : start + 5] if behaviour == "dribble" else reply)
        if behaviour == "deaf":
            time.sleep(60)


if __name__ == "__main__":
    {"stdio": serve_stdio, "lockstep": serve_lockstep}[sys.argv[1]](sys.argv[2] if len(sys.argv) > 2 else "")
