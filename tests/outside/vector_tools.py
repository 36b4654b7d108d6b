"""What the vectors are made with. Nothing here uses this project's own encoders: the check sequence comes from
google-crc32c, bodies from u-msgpack-python or are written byte by byte, COBS is written below from its description
(S. Cheshire, M. Baker, "Consistent Overhead Byte Stuffing", IEEE/ACM Transactions on Networking 7(2), 1999), and
numbers of kinds and keys are read straight from the contract's tables."""

from __future__ import annotations

import re
import struct
import tomllib
from pathlib import Path
from typing import Any

import google_crc32c
import umsgpack

SPEC = Path(__file__).resolve().parents[2] / "spec" / "1.0"
TABLES = tomllib.loads((SPEC / "kinds.toml").read_text(encoding="utf-8"))
CODES: dict[str, int] = {kind["name"]: kind["code"] for kind in TABLES["kind"]}
KEYS: dict[str, dict[str, int]] = {
    kind["name"]: {field["name"]: field["key"] for field in kind["fields"]} for kind in TABLES["kind"]
}

MODULE = 0x0000_0001
CONTROLLER = 0x0001_0001
GROUP = 0xF000_0007
ANY_CONTROLLER = 0xFFFF_FFFE
BROADCAST = 0xFFFF_FFFF
SESSION = 0x5EED_0001
FENCE = {"epoch": 3, "lease": 1}
FENCE_KEYS = {0: 3, 1: 1}


def cobs(data: bytes) -> bytes:
    """Stuff: each zero byte, and one imagined after the end, is replaced by the distance to it.

    A run of 254 bytes without a zero gets the code 255 and stands for no zero.
    """
    out = bytearray()
    run = bytearray()
    for byte in data + b"\0":
        if byte:
            run.append(byte)
            if len(run) < 254:
                continue
            out += b"\xff" + run
        else:
            out.append(len(run) + 1)
            out += run
        run.clear()
    return bytes(out)


def uncobs(block: bytes) -> bytes | None:
    """Unstuff; None when the block is not COBS."""
    out = bytearray()
    at = 0
    while at < len(block):
        code = block[at]
        run = block[at + 1 : at + code]
        if code == 0 or len(run) != code - 1 or 0 in run:
            return None
        out += run
        at += code
        if code < 255 and at < len(block):
            out.append(0)
    return bytes(out)


def pack(value: Any) -> bytes:
    """Shortest encoding of a value; keys of a map in the order given."""
    return umsgpack.packb(value)


def body(kind: str, **fields: Any) -> bytes:
    """Canonical body of a kind, fields by name."""
    keys = KEYS[kind]
    return pack({keys[name]: fields[name] for name in sorted(fields, key=keys.__getitem__)})


def frame(
    kind: str | int,
    content: bytes = b"\x80",
    *,
    version: int = 1,
    flags: int = 0,
    length: int | None = None,
    source: int = CONTROLLER,
    destination: int = MODULE,
    session: int = SESSION,
    number: int = 1,
) -> bytes:
    """A bare frame with a good check sequence around any content."""
    code = CODES[kind] if isinstance(kind, str) else kind
    size = len(content) if length is None else length
    head = struct.pack(">BBBBIIII", version, code, flags, size, source, destination, session, number)
    return head + content + struct.pack(">I", google_crc32c.value(head + content))


def as_json(value: Any) -> Any:
    """Bytes as hexadecimal digits, rows as lists."""
    if isinstance(value, bytes):
        return value.hex()
    if isinstance(value, list | tuple):
        return [as_json(item) for item in value]
    return value


def meaning(bare: bytes, kind: str, fields: dict[str, Any]) -> dict[str, Any]:
    """What a frame says: its header as it was asked for, and the fields that stand in its body."""
    names = ("source", "destination", "session", "number")
    return {
        "message": {
            "kind": kind,
            **dict(zip(names, struct.unpack(">IIII", bare[4:20]), strict=True)),
            "fields": {name: as_json(value) for name, value in fields.items()},
        }
    }


def drop(reason: str) -> dict[str, Any]:
    return {"drop": reason}


def refusal(reason: str, key: int | None = None) -> dict[str, Any]:
    return {"refusal": reason} if key is None else {"refusal": reason, "key": key}


HALTED = {"halt": "executed"}


class Area:
    """The vectors of one file."""

    def __init__(self, name: str, about: str) -> None:
        self.name = name
        self.about = about
        self.vectors: list[dict[str, Any]] = []

    def add(
        self,
        slug: str,
        purpose: str,
        data: bytes,
        *expect: dict[str, Any],
        link: str = "datagram",
        receiver: str = "module",
        **more: Any,
    ) -> None:
        """Add a vector; ``more``: gaps_ms (pairs of offset and pause), context."""
        plain = re.sub(r"[^a-z0-9]+", "-", slug.replace("--", "-minus-").lower()).strip("-")
        vector = {"id": f"{self.name}-{plain}", "purpose": purpose, "link": link, "receiver": receiver}
        vector |= {"bytes": data.hex(), **more, "expect": list(expect)}
        self.vectors.append(vector)

    def message(self, slug: str, purpose: str, kind: str, fields: dict[str, Any], **header: Any) -> None:
        """Add a frame that is taken as what it says; requests and confirm by a module, the rest by a reader."""
        receiver = "module" if CODES[kind] < 0x40 or kind == "confirm" else "controller"
        if receiver == "controller":
            header = {"source": MODULE, "destination": CONTROLLER, **header}
        bare = frame(kind, body(kind, **fields), **header)
        self.add(slug, purpose, bare, meaning(bare, kind, fields), receiver=receiver)

    def refused(
        self, slug: str, purpose: str, kind: str | int, content: bytes, reason: str, key: int | None = None
    ) -> None:
        """Add a unicast request that is refused for its form or a value."""
        self.add(slug, purpose, frame(kind, content), refusal(reason, key))

    def document(self) -> dict[str, Any]:
        return {
            "contract": "1.0",
            "area": self.name,
            "about": self.about,
            "source": (
                "Made by tests/outside/make_vectors.py with google-crc32c and u-msgpack-python, and COBS written from "
                "its published description; expectations written by hand from the contract's tables."
            ),
            "context": {"address": MODULE, "groups": [GROUP]},
            "vectors": self.vectors,
        }
