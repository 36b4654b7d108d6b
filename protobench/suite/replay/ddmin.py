"""Delta debugging: the shortest part of a list that still shows something (Zeller and Hildebrandt, 2002, ddmin)."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from itertools import pairwise
from typing import TypeVar

Item = TypeVar("Item")


def ddmin(
    items: Sequence[Item], shows: Callable[[Sequence[Item]], bool], goes_on: Callable[[], bool] = lambda: True
) -> list[Item]:
    """A part of ``items``, in their order, that shows it and of which no single item can be left out.

    ``items`` must show it. ``goes_on`` says whether there is time for another try; without it the shortest part found
    so far is returned.
    """
    found = list(items)
    pieces = 2
    while len(found) > 1 and goes_on():
        bounds = [place * len(found) // pieces for place in range(pieces + 1)]
        parts = [(low, high) for low, high in pairwise(bounds) if low < high]
        subset = _first([found[low:high] for low, high in parts] if pieces > 2 else [], shows, goes_on)
        if subset is not None:
            found, pieces = subset, 2
            continue
        rest = _first([found[:low] + found[high:] for low, high in parts], shows, goes_on)
        if rest is not None:
            found, pieces = rest, max(pieces - 1, 2)
        elif pieces < len(found):
            pieces = min(2 * pieces, len(found))
        else:
            break
    return found


def _first(
    parts: list[list[Item]], shows: Callable[[Sequence[Item]], bool], goes_on: Callable[[], bool]
) -> list[Item] | None:
    """The first part that shows it."""
    for part in parts:
        if not goes_on():
            return None
        if shows(part):
            return part
    return None
