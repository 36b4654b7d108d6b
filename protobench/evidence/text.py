"""Text that a module, a file or a case has a part in, made fit to stand in a document."""

from __future__ import annotations

import re

_NOT_XML = re.compile("[^\\t\\n\\x20-\\ud7ff\\ue000-\\ufffd\\U00010000-\\U0010ffff]")
_TURNS = re.compile("[\\x7f-\\x9f\\u061c\\u200b-\\u200f\\u2028-\\u202e\\u2060-\\u206f\\ufeff]")


def clean(text: str) -> str:
    """With a question mark for each character that XML 1.0 cannot hold (its production 2)."""
    return _NOT_XML.sub("?", text)


def plain(text: str) -> str:
    """Clean, and without what turns the direction of writing or cannot be seen: what stands there can be read."""
    return _TURNS.sub("?", clean(text))


def cut(text: str, length: int) -> str:
    """Plain text on one line, no longer than so many characters."""
    line = " ".join(plain(text).split())
    return line if len(line) <= length else f"{line[: length - 1]}\u2026"


def cut_block(text: str, length: int) -> str:
    """Plain text, lines kept, no longer than so many characters and a word that says what was cut."""
    whole = plain(text)
    return whole if len(whole) <= length else f"{whole[:length]} ... ({len(whole) - length} characters more)"
