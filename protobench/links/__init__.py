"""The ways to a module: one interface, ``Link``, in virtual or real time. ``open_link`` takes text."""

from protobench.links.address import is_here, is_virtual, open_link, parse_address
from protobench.links.base import Chunk, Clock, Discarded, Framing, Limits, Link, MonotonicClock, VirtualClock
from protobench.links.errors import (
    BadAddress,
    InUse,
    LinkClosed,
    LinkError,
    NoControlLine,
    NoPermission,
    NoSuchDevice,
    NotReachable,
    NoVirtualTime,
    PeerClosed,
    PeerFault,
    SendStalled,
)
from protobench.links.impaired import Action, Direction, ImpairedLink, Impairment, LogEntry
from protobench.links.lockstep import LockstepLink
from protobench.links.memory import MemoryLink, Peer

__all__ = [
    "Action",
    "BadAddress",
    "Chunk",
    "Clock",
    "Direction",
    "Discarded",
    "Framing",
    "ImpairedLink",
    "Impairment",
    "InUse",
    "Limits",
    "Link",
    "LinkClosed",
    "LinkError",
    "LockstepLink",
    "LogEntry",
    "MemoryLink",
    "MonotonicClock",
    "NoControlLine",
    "NoPermission",
    "NoSuchDevice",
    "NoVirtualTime",
    "NotReachable",
    "Peer",
    "PeerClosed",
    "PeerFault",
    "SendStalled",
    "VirtualClock",
    "is_here",
    "is_virtual",
    "open_link",
    "parse_address",
]
