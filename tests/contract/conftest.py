"""What the contract tests share."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest
from contract_copy import Copy

from protobench.contract import Contract, load_contract


@pytest.fixture(scope="session")
def contract() -> Contract:
    return load_contract()


@pytest.fixture
def copy(tmp_path: Path) -> Copy:
    return Copy(tmp_path)


@pytest.fixture
def make_copy(tmp_path: Path) -> Callable[[str], Copy]:
    return lambda version: Copy(tmp_path, version)
