"""Copies of the contract, to break."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from protobench.contract import Contract, ContractError, Problem, load_contract, spec_root


class Copy:
    """A copy of version 1.0, under any version number, that can be edited."""

    def __init__(self, root: Path, version: str = "1.0") -> None:
        self.root = root
        self.version = version
        self.folder = root / version
        shutil.copytree(spec_root() / "1.0", self.folder)
        if version != "1.0":
            major, minor = version.split(".")
            self.edit("contract.toml", "major = 1\nminor = 0", f"major = {major}\nminor = {minor}")
            self.edit("contract.toml", "majors_supported = [1]", f"majors_supported = [{major}]")
            self.edit("frame.toml", "\nversion = 1\n", f"\nversion = {major}\n")

    def edit(self, file: str, old: str, new: str) -> Copy:
        """Replace the first occurrence of ``old``, which must be there."""
        path = self.folder / file
        text = path.read_text(encoding="utf-8")
        assert old in text, f"{file} has no {old!r}"
        path.write_text(text.replace(old, new, 1), encoding="utf-8")
        return self

    def load(self) -> Contract:
        return load_contract(self.version, self.root)

    def problems(self) -> tuple[Problem, ...]:
        """What keeps the copy from loading."""
        with pytest.raises(ContractError) as caught:
            self.load()
        assert str(caught.value).splitlines() == [str(problem) for problem in caught.value.problems]
        return tuple(caught.value.problems)
