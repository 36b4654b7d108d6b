"""From the files of a version to a ``Contract``."""

from __future__ import annotations

import functools
import tomllib
from pathlib import Path
from typing import Any

import pydantic as pd

from protobench.contract.base import Model
from protobench.contract.frame import FrameFile
from protobench.contract.kinds import KindsFile
from protobench.contract.model import Contract, Files
from protobench.contract.problems import ContractError, Problem
from protobench.contract.references import reference_problems
from protobench.contract.states import StatesFile
from protobench.contract.tables import (
    CapabilitiesFile,
    ClausesFile,
    ErrorsFile,
    FaultsFile,
    IndexFile,
    LimitsFile,
    NotesFile,
    ReasonsFile,
)

MODELS: dict[str, type[Model]] = {
    "contract": IndexFile,
    "frame": FrameFile,
    "limits": LimitsFile,
    "kinds": KindsFile,
    "reasons": ReasonsFile,
    "states": StatesFile,
    "faults": FaultsFile,
    "capabilities": CapabilitiesFile,
    "clauses": ClausesFile,
    "errors": ErrorsFile,
    "notes": NotesFile,
}
FILE_SIZE_MAX = 1_000_000
_PACKAGE = Path(__file__).resolve().parent.parent


def spec_root() -> Path:
    """Return the folder that holds a folder for each version.

    In a source tree that is ``spec/`` beside the package, else the copy inside the installed package.
    """
    beside = _PACKAGE.parent / "spec"
    return beside if (beside / "1.0" / "contract.toml").is_file() else _PACKAGE / "_spec"


def load_contract(version: str = "1.0", root: Path | None = None) -> Contract:
    """Return a version of the contract. Raises ContractError with every problem found, each with file, path and rule.

    ``root``: folder with a folder for each version. Without it the contract's own ``spec_root()`` is read, once,
    and the same object is returned each time.
    """
    return _load_own(version) if root is None else _load(root.resolve() / version)


@functools.cache
def _load_own(version: str) -> Contract:
    return _load(spec_root() / version)


def _load(folder: Path) -> Contract:
    problems: list[Problem] = []
    read = {name: _read(folder, name, model, problems) for name, model in MODELS.items()}
    if problems:
        raise ContractError(problems)
    files = Files(**read)
    problems = reference_problems(files)
    about = files.contract.contract
    if folder.name != f"{about.major}.{about.minor}":
        rule = f"version {about.major}.{about.minor} stands in a folder named {folder.name!r}"
        problems.append(Problem("contract.toml", ("contract",), rule))
    if problems:
        raise ContractError(problems)
    return Contract(files)


def _read(folder: Path, name: str, model: type[Model], problems: list[Problem]) -> Any:
    """Return a file as its model; None, with what is wrong added to ``problems``."""
    file = f"{name}.toml"
    path = folder / file
    try:
        if path.stat().st_size > FILE_SIZE_MAX:
            raise ValueError(f"longer than {FILE_SIZE_MAX} bytes")
        data = tomllib.loads(path.read_text(encoding="utf-8"))
        return model.model_validate(tuples(data))
    except pd.ValidationError as error:
        problems += [Problem(file, entry["loc"], plain_rule(entry)) for entry in error.errors(include_url=False)]
    except OSError as error:
        problems.append(Problem(file, (), f"cannot be read from {folder}: {error.strerror}"))
    except (ValueError, RecursionError) as error:
        problems.append(Problem(file, (), f"is not TOML: {error}"))
    return None


def plain_rule(entry: Any) -> str:
    """Return one error of pydantic as a rule, with the value that breaks it."""
    value = entry["input"]
    rule = str(entry["msg"]).removeprefix("Value error, ")
    return f"{rule}; found {value!r}" if isinstance(value, str | int | float | bool) else rule


def tuples(data: Any) -> Any:
    """Return data with tuples for its lists, so that what is loaded cannot change."""
    if isinstance(data, list):
        return tuple(tuples(item) for item in data)
    if isinstance(data, dict):
        return {key: tuples(value) for key, value in data.items()}
    return data
