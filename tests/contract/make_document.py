"""Writes the readable contract: ``python tests/contract/make_document.py``."""

from __future__ import annotations

import sys
from collections.abc import Mapping
from typing import Any

from protobench.contract import load_contract, spec_root
from protobench.contract.document import generate_document
from protobench.wire import load_codec

PATH = spec_root() / "1.0" / "contract.md"


def encode(
    kind: str, fields: Mapping[str, Any], source: int, destination: int, session: int, number: int
) -> bytes:
    """A bare frame of a worked exchange."""
    message = (
        load_codec()
        .kind(kind)
        .new(**{name.replace("class", "class_"): value for name, value in fields.items()})
    )
    return message.to_frame(source, destination, session, number)


def document() -> str:
    """The readable contract."""
    return generate_document(load_contract(), encode)


if __name__ == "__main__":
    PATH.write_text(document(), encoding="utf-8")
    sys.stdout.write(f"{PATH}\n")
