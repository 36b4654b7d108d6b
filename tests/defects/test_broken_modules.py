"""Every deliberately broken Python module is found by the case that claims to find it; the sound one by none."""

from __future__ import annotations

import pytest
from broken_modules import BROKEN, SEED, BrokenModule

from protobench.contract import load_contract
from protobench.suite.options import RunOptions
from protobench.suite.run import list_cases, run_suite


@pytest.mark.parametrize("module", BROKEN, ids=lambda module: module.name)
def test_found_by_its_case(module: BrokenModule) -> None:
    (record,) = run_suite(RunOptions(opener=module.link, only=module.case, seed=SEED)).cases
    assert record.verdict == "fail", f"{module.text} {record.id} said {record.verdict}: {record.reason}"
    assert record.detail
    assert record.id in record.replay


@pytest.mark.parametrize("module", BROKEN, ids=lambda module: module.name)
def test_its_case_covers_what_it_breaks(module: BrokenModule) -> None:
    (info,) = [info for info in list_cases() if info.id == module.case]
    assert module.clause in info.clauses
    assert load_contract().clause(module.clause).observable


def test_there_are_enough_and_each_has_a_name_of_its_own() -> None:
    assert len({module.name for module in BROKEN}) == len(BROKEN) >= 25


def test_the_unbroken_module_is_not_found_by_any_of_their_cases() -> None:
    for case in sorted({module.case for module in BROKEN}):
        (record,) = run_suite(RunOptions(only=case, seed=SEED)).cases
        assert record.verdict == "pass", f"{case}: {record.reason}"
