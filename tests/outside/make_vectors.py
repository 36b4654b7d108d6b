"""Writes the contract's vectors: ``python tests/outside/make_vectors.py`` (``--check`` only compares)."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import vector_bodies
import vector_framing
import vector_messages
from vector_tools import SPEC, Area

FOLDER = SPEC / "vectors"


def areas() -> list[Area]:
    """Every file's vectors."""
    return [vector_messages.make(), *vector_bodies.make(), *vector_framing.make()]


def texts() -> dict[Path, str]:
    """File and text of every area; ValueError when two vectors have one id."""
    ids = [vector["id"] for area in areas() for vector in area.vectors]
    twice = sorted({name for name in ids if ids.count(name) > 1})
    if twice:
        raise ValueError(f"two vectors have one id: {', '.join(twice)}")
    return {FOLDER / f"{area.name}.json": json.dumps(area.document(), indent=1) + "\n" for area in areas()}


def main(arguments: list[str]) -> int:
    made = texts()
    stale = [
        path for path, text in made.items() if not path.is_file() or path.read_text(encoding="utf-8") != text
    ]
    surplus = sorted(set(FOLDER.glob("*.json")) - set(made))
    if "--check" in arguments:
        for path in stale + surplus:
            sys.stderr.write(f"{path.name} is not what this script makes\n")
        return 1 if stale + surplus else 0
    FOLDER.mkdir(exist_ok=True)
    for path, text in made.items():
        path.write_text(text, encoding="utf-8")
    for path in surplus:
        path.unlink()
    sys.stdout.write(f"{sum(len(area.vectors) for area in areas())} vectors in {len(made)} files\n")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
