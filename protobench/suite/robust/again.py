"""A failed sequence as a file, so that it alone can be played again."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from protobench.contract import load_contract
from protobench.suite.robust.steps import Step, read_step

FORM = 1
SIZE_MAX = 1_000_000
STEPS_MAX = 1000


def write_again(path: Path, steps: Sequence[Step], **told: Any) -> None:
    """Write a sequence with what is told of it."""
    lines = ",\n  ".join(json.dumps(list(step)) for step in steps)
    head = "".join(f" {json.dumps(name)}: {json.dumps(value)},\n" for name, value in told.items())
    path.write_text(f'{{\n "form": {FORM},\n{head} "steps": [\n  {lines}\n ]\n}}\n', encoding="utf-8")


def read_again(path: Path) -> list[Step]:
    """The sequence of a file; ValueError says what is wrong with it."""
    try:
        with path.open(encoding="utf-8") as stream:
            text = stream.read(SIZE_MAX + 1)
        if len(text) > SIZE_MAX:
            raise ValueError(f"longer than {SIZE_MAX} characters")
        data = json.loads(text)
    except (OSError, ValueError, RecursionError) as error:
        raise ValueError(f"{path}: {error}") from None
    if not isinstance(data, dict) or data.get("form") != FORM or not isinstance(data.get("steps"), list):
        raise ValueError(f"{path}: not a sequence of form {FORM} with a list of steps")
    if not 0 < len(data["steps"]) <= STEPS_MAX:
        raise ValueError(f"{path}: steps: {len(data['steps'])}; there must be 1 to {STEPS_MAX}")
    try:
        contract = load_contract()
        return [read_step(row, contract) for row in data["steps"]]
    except ValueError as error:
        raise ValueError(f"{path}: {error}") from None
