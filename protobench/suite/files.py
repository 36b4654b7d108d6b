"""Reading what people write beside a run, in TOML: every mistake at once, each with file, place, value and rule."""

from __future__ import annotations

import difflib
import tomllib
import typing
from collections.abc import Collection, Iterable, Mapping, Sequence
from datetime import date
from pathlib import Path
from typing import Any, TypeVar

import pydantic as pd

from protobench.contract.base import Model
from protobench.contract.load import plain_rule, tuples
from protobench.contract.problems import Problem

FILE_SIZE_MAX = 1_000_000
_WANTED = {
    "tuple_type": "a list",
    "model_type": "a table",
    "dict_type": "a table",
    "string_type": "text",
    "string_too_short": "text, and not empty",
    "int_type": "a whole number",
    "bool_type": "true or false",
    "date_type": "a date such as 2027-01-31",
}
AnyModel = TypeVar("AnyModel", bound=Model)


class FileError(ValueError):
    """A file that cannot be used. ``problems`` holds everything that is wrong with it, never nothing."""

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems: Sequence[Problem] = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


def read_toml(path: Path, model: type[AnyModel]) -> AnyModel:
    """Return the file as its model. Raises FileError with all that is wrong."""
    try:
        if path.stat().st_size > FILE_SIZE_MAX:
            raise ValueError(f"longer than {FILE_SIZE_MAX} bytes")
        data = tomllib.loads(path.read_text(encoding="utf-8"))
        return model.model_validate(tuples(data))
    except pd.ValidationError as error:
        raise FileError(
            Problem(str(path), tuple(part for part in entry["loc"] if part != "[key]"), _rule(model, entry))
            for entry in error.errors(include_url=False)
        ) from None
    except OSError as error:
        raise FileError([Problem(str(path), (), f"cannot be read: {error.strerror}")]) from None
    except (ValueError, RecursionError) as error:
        raise FileError([Problem(str(path), (), f"is not TOML: {error}")]) from None


def near(word: str, known: Collection[str], otherwise: str = "") -> str:
    """A hint to append: the known name that ``word`` is likely to be a slip of.

    Without one all names when they are few, or ``otherwise``.
    """
    folded = {name.lower(): name for name in known}
    found = difflib.get_close_matches(word.lower(), folded, n=1, cutoff=0.6)
    if found:
        return f"; did you mean {folded[found[0]]!r}?"
    return f"; known: {', '.join(known)}" if 0 < len(known) <= 32 else otherwise


def _rule(model: type[Model], entry: Any) -> str:
    if entry["type"] == "extra_forbidden":
        return f"unknown key{near(str(entry['loc'][-1]), _fields_at(model, entry['loc'][:-1]))}"
    if entry["type"] == "missing":
        return "is missing"
    if entry["type"] in _WANTED:
        value = entry["input"]
        found = f"; found {value!r}" if isinstance(value, str | int | float | date) else ""
        return f"must be {_WANTED[entry['type']]}{found}"
    if entry["type"] == "value_error":
        return str(entry["msg"]).removeprefix("Value error, ")
    return plain_rule(entry)


def _fields_at(model: type[Model], path: Sequence[str | int]) -> list[str]:
    """Names of the fields of the table at ``path``; none where the path leads out of the models."""
    here: Any = model
    for part in path:
        if isinstance(here, type) and issubclass(here, Model) and part in _by_key(here):
            here = _inner(_by_key(here)[str(part)].annotation)
    return list(_by_key(here)) if isinstance(here, type) and issubclass(here, Model) else []


def _by_key(model: type[Model]) -> Mapping[str, Any]:
    return {field.alias or name: field for name, field in model.model_fields.items()}


def _inner(annotation: Any) -> Any:
    """The model inside an annotation such as ``tuple[M, ...]``, ``dict[str, M]`` or ``M | None``."""
    if isinstance(annotation, type) and issubclass(annotation, Model):
        return annotation
    for argument in typing.get_args(annotation):
        found = _inner(argument)
        if found is not None:
            return found
    return None
