"""Invented exchanges with a module at address 1."""

from __future__ import annotations

from typing import Any

from protobench.evidence.sequence import Builder
from protobench.judge import Exchange
from protobench.suite.language import Language
from protobench.wire import load_codec

CODEC = load_codec()
LANGUAGE = Language(CODEC.contract, CODEC)
A, B, MODULE_ADDRESS = 0x10001, 0x10002, 1
NAMES = {A: "controller A", B: "controller B", 0x1FFFF: "keeper"}
BUILDER = Builder(CODEC, MODULE_ADDRESS, NAMES)


def frame(kind: str, source: int, destination: int = MODULE_ADDRESS, number: int = 1, **fields: Any) -> bytes:
    """A bare frame."""
    header = {"source": source, "destination": destination, "session": 7, "number": number}
    return LANGUAGE.pack(LANGUAGE.code(kind), LANGUAGE.body(kind, fields), **header)


def sent(time_ms: float, data: bytes) -> Exchange:
    """What the bench sent."""
    return Exchange(round(time_ms * 1e6), "->", data, LANGUAGE.read(data).words)


def received(time_ms: float, data: bytes) -> Exchange:
    """What the module sent."""
    return Exchange(round(time_ms * 1e6), "<-", data, LANGUAGE.read(data).words)
