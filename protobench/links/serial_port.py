"""Serial devices and ptys, and the URL forms of pyserial.

None of these counts as loopback: a pty or a forwarded port looks the same whatever is behind it.
"""

from __future__ import annotations

import os
import stat
import time
from pathlib import Path

import serial

from protobench.links.base import DEFAULT_LIMITS, Chunk, Framing, Limits
from protobench.links.errors import (
    BadAddress,
    LinkError,
    NoControlLine,
    NoSuchDevice,
    PeerClosed,
    from_os_error,
)
from protobench.links.realtime import READ_BYTES, DescriptorLink, RealTimeLink

DEFAULT_BAUD = 115_200
BITS_PER_BYTE = 10  # start bit, eight data bits, stop bit
_NAME_ONE = "name a serial device, such as /dev/ttyUSB0, or a pty"
_URL_POLL_S = 0.0005  # pyserial gives its URL forms no common way to wait
_SETTLE_POLL_S = 0.0002


class SerialLink(DescriptorLink):
    """A byte stream over a serial device or a pty: 8 data bits, no parity, one stop bit; locked for us alone.

    A send returns, and is stamped, when the system says that the last byte has left; what arrives meanwhile is kept.
    """

    has_lines = True

    def __init__(
        self,
        name: str,
        device: str,
        baud: int = DEFAULT_BAUD,
        *,
        limits: Limits = DEFAULT_LIMITS,
    ) -> None:
        super().__init__(name, Framing.STREAM, loopback=False, limits=limits)
        asked = f"{name}: open {device!r} at {baud} baud"
        try:
            is_device = stat.S_ISCHR(Path(device).stat().st_mode)
        except OSError as error:
            raise from_os_error(asked, error) from error
        if not is_device:
            raise NoSuchDevice(asked, "no serial device but a file", _NAME_ONE)
        try:
            self._port = serial.Serial(device, baud, timeout=0, exclusive=True)
        except serial.SerialException as error:
            if "configure port" in str(error):
                raise NoSuchDevice(asked, f"no serial device ({error})", _NAME_ONE) from error
            raise from_os_error(asked, error) from error
        except ValueError as error:
            raise BadAddress(name, f"baud {baud}", f"the device refuses this rate ({error})") from error
        self.byte_ns = BITS_PER_BYTE * 1_000_000_000 // baud
        fd = self._port.fileno()
        self._watch(fd, fd)

    def send(self, *units: bytes) -> int:
        super().send(*units)
        if not self.settle(self.clock.now_ns() + int(self.limits.send_s * 1e9)):
            raise self._stalled(f"{sum(map(len, units))} bytes")
        return self.clock.now_ns()

    def settle(self, deadline_ns: int) -> bool:
        self._check_open()
        try:
            while self._port.out_waiting:
                if self.clock.now_ns() >= deadline_ns:
                    return False
                if not self._pull():
                    time.sleep(_SETTLE_POLL_S)
        except OSError as error:
            raise self._end(error) from error
        return True

    def pulse(self, line: str, duration_ms: int) -> None:
        self._check_open()
        _pulse(self.name, self._port, line, duration_ms)

    def _read(self) -> bytes:
        if not self._reading.poll(0):  # an empty read means "nothing there" as well as "gone"
            raise BlockingIOError
        return os.read(self._read_fd, READ_BYTES)

    def _closed_error(self, error: OSError | None) -> LinkError:
        advice = "check that the device is still plugged in, and that no other program reads from it"
        found = f"the far end has hung up (the system says: {error or 'end of file'})"
        return PeerClosed(self.name, found, advice)

    def _close(self) -> None:
        self._port.close()


class SerialUrlLink(RealTimeLink):
    """A byte stream over one of pyserial's URL forms (socket://, rfc2217://, loop://, spy:// and the like).

    pyserial does the reading and writing; arrivals are looked for every half millisecond. While a send waits,
    nothing is read.
    """

    has_lines = True

    def __init__(
        self,
        name: str,
        url: str,
        baud: int = DEFAULT_BAUD,
        *,
        limits: Limits = DEFAULT_LIMITS,
    ) -> None:
        super().__init__(name, Framing.STREAM, loopback=False, limits=limits)
        # rfc2217 refuses a limit on writing; its own connection has one.
        limit_s = None if url.lower().startswith("rfc2217:") else limits.send_s
        try:
            self._port = serial.serial_for_url(url, baud, timeout=0, write_timeout=limit_s, exclusive=True)
        except serial.SerialException as error:
            raise from_os_error(f"{name}: open", error) from error
        except ValueError as error:
            raise BadAddress(name, repr(url), f"pyserial refuses it ({error})") from error

    def send(self, *units: bytes) -> int:
        self._check_open()
        self._check_far_end()
        data = b"".join(units)
        try:
            self._port.write(data)
        except serial.SerialTimeoutException as error:
            raise self._stalled(f"{len(data)} bytes") from error
        except OSError as error:
            raise self._end(error) from error
        return self.clock.now_ns()

    def pulse(self, line: str, duration_ms: int) -> None:
        self._check_open()
        _pulse(self.name, self._port, line, duration_ms)

    def _pull(self) -> bool:
        try:
            data = self._port.read(READ_BYTES)
        except OSError as error:
            self._end(error)
            return False
        if data:
            self._inbox.put(Chunk(self.clock.now_ns(), data))
        return bool(data)

    def _end(self, error: OSError) -> LinkError:
        found = f"the far end has gone ({error})"
        self._ended = PeerClosed(self.name, found, "see why, then open a new link")
        return self._ended

    def _wait(self, timeout_ms: int) -> None:
        time.sleep(min(_URL_POLL_S, timeout_ms / 1000))

    def _close(self) -> None:
        self._port.close()


def _pulse(name: str, port: serial.SerialBase, line: str, duration_ms: int) -> None:
    before = getattr(port, line)
    try:
        setattr(port, line, not before)
        time.sleep(duration_ms / 1000)
        setattr(port, line, before)
    except (OSError, ValueError) as error:
        advice = "use a device with this line, not a pty"
        raise NoControlLine(f"{name}: pulse {line}", f"it cannot be set ({error})", advice) from error
