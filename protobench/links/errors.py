"""What can go wrong with a link.

Every message has three parts: what was asked, what was found, and what to do about it.
"""

# ruff: noqa: N818 - an error is named for what is wrong, as its reader would say it

from __future__ import annotations

import errno
import socket


class LinkError(Exception):
    """A link could not be opened or used. ``asked``, ``found`` and ``advice`` make up the message."""

    def __init__(self, asked: str, found: str, advice: str) -> None:
        super().__init__(asked, found, advice)
        self.asked = asked
        self.found = found
        self.advice = advice

    def __str__(self) -> str:
        return f"{self.asked}: {self.found}; {self.advice}"


class NoSuchDevice(LinkError):
    """The device, program or socket file that the address names does not exist, or is not one."""


class InUse(LinkError):
    """Another program holds the port."""


class NoPermission(LinkError):
    """The system does not let this user open what the address names."""


class NotReachable(LinkError):
    """Nothing answers at the address: nobody listens, unknown host, no route, no handshake."""


class SendStalled(LinkError):
    """The far end did not take what was sent within the limit. A stream may now hold part of a frame."""


class PeerFault(LinkError):
    """The far end broke the rules of the link itself (not of the contract)."""


class NoVirtualTime(LinkError):
    """Virtual time was asked of a link that has only real time."""


class NoControlLine(LinkError):
    """The link has no such control line, or the device does not let it be set."""


class LinkClosed(LinkError):
    """The link was used after its own ``close()``."""

    def __init__(self, name: str) -> None:
        super().__init__(name, "this end has closed the link", "open a new one")


class BadAddress(LinkError):
    """A link address breaks a rule. ``text`` is the whole address, ``part`` what is wrong with it."""

    def __init__(self, text: str, part: str, rule: str) -> None:
        super().__init__(f"link address {text!r}", part, rule)
        self.text = text
        self.part = part
        self.rule = rule

    def __reduce__(self) -> tuple[type[BadAddress], tuple[str, str, str]]:
        return BadAddress, (self.text, self.part, self.rule)


class PeerClosed(LinkError):
    """The far end has gone. For a child process also how it ended and the last it wrote to standard error.

    ``exit_status`` is negative when a signal ended the child, None when unknown or not a child.
    """

    def __init__(
        self,
        asked: str,
        found: str,
        advice: str,
        exit_status: int | None = None,
        stderr_lines: tuple[str, ...] = (),
    ) -> None:
        super().__init__(asked, found, advice)
        self.exit_status = exit_status
        self.stderr_lines = stderr_lines

    def __str__(self) -> str:
        said = "".join(f"\n    {line}" for line in self.stderr_lines)
        return super().__str__() + (f"\n  its last lines on standard error:{said}" if said else "")


_CHECK_NAME = "check the name, and that the device is plugged in or the program built"
_BY_ERRNO: dict[int, tuple[type[LinkError], str, str]] = {
    errno.ENOENT: (NoSuchDevice, "no such device or file", _CHECK_NAME),
    errno.ENODEV: (NoSuchDevice, "no such device", _CHECK_NAME),
    errno.ENXIO: (NoSuchDevice, "no such device", _CHECK_NAME),
    errno.ENOTDIR: (NoSuchDevice, "no such device or file", _CHECK_NAME),
    errno.EACCES: (NoPermission, "permission refused", "give this user the right to open it"),
    errno.EPERM: (NoPermission, "permission refused", "give this user the right to open it"),
    errno.EBUSY: (InUse, "the port is in use by another program", "end the other program, then try again"),
    errno.EAGAIN: (InUse, "the port is in use by another program", "end the other program, then try again"),
    errno.ECONNREFUSED: (NotReachable, "nothing listens there", "start the far end, or check host and port"),
    errno.ETIMEDOUT: (
        NotReachable,
        "no answer in time",
        "check host and port, and that no firewall is between",
    ),
    errno.EHOSTUNREACH: (NotReachable, "the host cannot be reached", "check the host and the network"),
    errno.ENETUNREACH: (NotReachable, "the network cannot be reached", "check the host and the network"),
    errno.ENOEXEC: (NoSuchDevice, "not a program this machine can run", "build it for this machine"),
    errno.EMSGSIZE: (LinkError, "too long for one datagram", "send less than 65,508 bytes at once"),
    errno.EPIPE: (PeerClosed, "the far end has closed the link", "see why it ended, then open a new link"),
    errno.ECONNRESET: (
        PeerClosed,
        "the far end has closed the link",
        "see why it ended, then open a new link",
    ),
    errno.EIO: (PeerClosed, "the far end has hung up", "check that the device is still plugged in"),
}


def from_os_error(asked: str, error: OSError, found: str | None = None) -> LinkError:
    """The link error for a system error, or for the first with a number that it wraps (as pyserial does)."""
    if isinstance(error, socket.gaierror):
        return NotReachable(asked, f"the host name is not known ({error.strerror})", "check the host name")
    number, cause = error.errno, error.__context__
    while number is None and cause is not None:
        number, cause = getattr(cause, "errno", None), cause.__context__
    if number is None and isinstance(error, TimeoutError):
        number = errno.ETIMEDOUT
    kind, text, advice = _BY_ERRNO.get(number or 0, (LinkError, "failed", "see what the system says"))
    return kind(asked, f"{found or text} (the system says: {error})", advice)
