"""What a module keeps through power loss: epoch, address, groups."""

from __future__ import annotations

from dataclasses import dataclass, field


class PowerCut(Exception):  # noqa: N818 - not an error: power failed, on request of the upper tester
    """Power failed during a write; nothing of it was made."""


@dataclass(slots=True)
class Storage:
    """Kept values. ``cut_in`` writes from now power fails; 0 for never."""

    epoch: int = 0
    address: int | None = None
    groups: tuple[int, ...] = ()
    cut_in: int = 0
    writes: int = field(default=0)

    def write(self, **values: object) -> None:
        """Make one write of one or more values, whole or not at all. Raises PowerCut."""
        if self.cut_in:
            self.cut_in -= 1
            if not self.cut_in:
                raise PowerCut
        self.writes += 1
        for name, value in values.items():
            setattr(self, name, value)
