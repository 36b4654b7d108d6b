"""What a module keeps through power loss: epoch, address, groups; in memory, or in a file that outlives the process."""

from __future__ import annotations

import os
import zlib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

from emulator.config import GROUPS_MAX, UNICAST_LAST

SUFFIXES = (".a", ".b")
COPY_SIZE_MAX = 4096


class PowerCut(Exception):  # noqa: N818 - not an error: power failed, on request of the upper tester
    """Power failed during a write; nothing of it was made."""


class WriteFailed(Exception):  # noqa: N818 - the module's fault, named as the contract names it
    """A write could not be made; what was kept before is kept still."""


class StorageError(ValueError):
    """Kept values that cannot be used; the message names the files, what was found and what to do."""


class Kept(BaseModel):
    """One copy in a file; ``serial`` tells which copy is newer."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True)
    epoch: int = Field(ge=0, lt=1 << 32)
    address: Annotated[int, Field(ge=1, le=UNICAST_LAST)] | None
    groups: tuple[Annotated[int, Field(gt=UNICAST_LAST, lt=1 << 32)], ...] = Field(max_length=GROUPS_MAX)
    serial: int = Field(ge=0)


@dataclass(slots=True)
class Storage:
    """Kept values. ``cut_in`` writes from now power fails; 0 for never."""

    epoch: int = 0
    address: int | None = None
    groups: tuple[int, ...] = ()
    cut_in: int = 0
    writes: int = field(default=0)

    def write(self, **values: object) -> None:
        """Make one write of one or more values, whole or not at all. Raises PowerCut or WriteFailed."""
        if self.cut_in:
            self.cut_in -= 1
            if not self.cut_in:
                raise PowerCut
        kept = {"epoch": self.epoch, "address": self.address, "groups": self.groups}
        self._keep({**kept, **values})
        self.writes += 1
        for name, value in values.items():
            setattr(self, name, value)

    def _keep(self, values: dict[str, object]) -> None:
        """Make the values outlast this object. Memory has nothing to do here."""


@dataclass(slots=True)
class FileStorage(Storage):
    """Two copies beside ``path``, each with a check value; the newer sound one counts, the other is written next."""

    path: Path = field(default_factory=Path)
    serial: int = 0

    @classmethod
    def open(cls, path: Path) -> FileStorage:
        """Read what is kept at ``path``; nothing there is a new module. Raises StorageError."""
        copies = [path.with_name(path.name + suffix) for suffix in SUFFIXES]
        found = [copy for copy in copies if copy.exists()]
        sound = [kept for kept in (_read(copy) for copy in found) if kept is not None]
        if found and not sound:
            names = " and ".join(str(copy) for copy in found)
            raise StorageError(f"{names}: no sound copy of what the module kept; remove them to begin anew")
        if not sound:
            return cls(path=path)
        newest = max(sound, key=lambda kept: kept.serial)
        return cls(newest.epoch, newest.address, newest.groups, path=path, serial=newest.serial)

    def _keep(self, values: dict[str, object]) -> None:
        serial = self.serial + 1
        text = Kept.model_validate({**values, "serial": serial}).model_dump_json()
        copy = self.path.with_name(self.path.name + SUFFIXES[serial % len(SUFFIXES)])
        try:
            with copy.open("w", encoding="ascii") as file:
                file.write(f"{zlib.crc32(text.encode()):08x} {text}\n")
                file.flush()
                os.fsync(file.fileno())
        except OSError as error:
            raise WriteFailed(f"{copy}: {error.strerror}") from None
        self.serial = serial


def _read(copy: Path) -> Kept | None:
    """One copy, or None where it is not sound."""
    try:
        with copy.open("rb") as file:
            check, _, text = file.read(COPY_SIZE_MAX).rstrip(b"\n").partition(b" ")
        if check != b"%08x" % zlib.crc32(text):
            return None
        return Kept.model_validate_json(text)
    except (OSError, ValueError):
        return None
