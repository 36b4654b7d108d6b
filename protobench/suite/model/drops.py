"""Under which reason a frame that was sent must be counted as dropped."""

from __future__ import annotations

from typing import TYPE_CHECKING

from protobench.wire import Dropped

if TYPE_CHECKING:
    from protobench.suite.model.model import Model
    from protobench.suite.model.request import Request

UNSURE = "unsure"
NOT_FOLLOWED = ("stale-confirm", "no-room")  # reasons that depend on more than the frame
REQUESTS = ("read", "command", "command_private")


def drop_reason(model: Model, data: bytes) -> str:
    """The reason, empty for a frame that is taken, UNSURE where that depends on groups that are not known."""
    request = model.reader.read(data)
    if request is None:
        unpacked = model.language.unpack(data)
        return unpacked.reason if isinstance(unpacked, Dropped) else UNSURE
    outside = _not_for_it(model, request)
    if outside or request.name == "halt":
        return outside
    source = request.frame.source
    is_known_notice = request.name == "confirm" and request.frame.version == 1
    has_length = request.frame.version == 1 and request.bad_length
    tests = (  # in the order of the drop table
        ("own-source", source == model.address),
        ("bad-source", not model.contract.addresses.is_unicast(source)),
        ("not-a-request", request.class_ not in REQUESTS and not is_known_notice),
        ("length", has_length),
    )
    return next((reason for reason, holds in tests if holds), "")


def _not_for_it(model: Model, request: Request) -> str:
    """Empty when the destination includes the module."""
    destination = request.frame.destination
    if destination in (model.address, model.contract.addresses.broadcast):
        return ""
    groups = {world.groups for world in model.worlds or ()} if request.many else {frozenset[int]()}
    if len(groups) != 1 or None in groups:
        return UNSURE
    return "" if destination in (groups.pop() or ()) else "other-address"
