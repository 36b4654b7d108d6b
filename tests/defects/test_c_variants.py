"""Deliberately broken C modules: each is found by the case that claims to find it, and says the clause it breaks.

Each is one small change in the firmware's core, chosen when the program starts; c_variants.toml lists them.
"""

from __future__ import annotations

import subprocess
import tomllib
from pathlib import Path
from typing import NamedTuple

import pytest

from protobench.contract import load_contract
from protobench.suite.options import RunOptions
from protobench.suite.run import list_cases, run_suite

FIRMWARE = Path(__file__).parents[2] / "emulator" / "firmware"
PROGRAM = FIRMWARE / "build-variants" / "module-lockstep"
SEED = 7


class Variant(NamedTuple):
    """One broken module. ``case``: the case that finds it; ``clause``: what it breaks; ``catch``: what it takes."""

    name: str
    text: str
    clause: str
    case: str
    catch: str


CATCHES = ("one stimulus", "sequence", "timing", "after many", "statistics")
VARIANTS = [
    Variant(**entry)
    for entry in tomllib.loads((Path(__file__).parent / "c_variants.toml").read_text())["variant"]
]


@pytest.fixture(scope="session")
def program() -> Path:
    if not PROGRAM.exists():
        pytest.fail(f"{PROGRAM} is missing; build it with: make firmware")
    return PROGRAM


@pytest.mark.parametrize("variant", VARIANTS, ids=lambda variant: variant.name)
def test_found_by_its_case(variant: Variant, program: Path) -> None:
    options = RunOptions(link=f"lockstep:{program} --variant {variant.name}", only=variant.case, seed=SEED)
    (record,) = run_suite(options).cases
    assert record.verdict == "fail", f"{variant.text}: {record.id} said {record.verdict}, {record.reason}"
    assert record.replay


@pytest.mark.parametrize("variant", VARIANTS, ids=lambda variant: variant.name)
def test_its_case_covers_what_it_breaks(variant: Variant) -> None:
    (info,) = [info for info in list_cases() if info.id == variant.case]
    assert variant.clause in info.clauses
    assert load_contract().clause(variant.clause).observable
    assert variant.catch in CATCHES


def test_every_clause_that_can_be_seen_is_broken_by_one() -> None:
    visible = {
        clause.id for clause in load_contract().clauses if clause.observable and clause.subject == "module"
    }
    assert visible - {variant.clause for variant in VARIANTS} == set()


def test_an_unknown_name_is_refused(program: Path) -> None:
    tried = subprocess.run(
        [program, "--variant", "sound"], check=False, capture_output=True, text=True, timeout=10
    )
    assert tried.returncode == 2
    assert "--variant sound: no such variant" in tried.stderr


def test_the_program_knows_exactly_these_variants(program: Path) -> None:
    told = subprocess.run([program, "--variants"], capture_output=True, text=True, check=True, timeout=10)
    assert told.stdout.split() == [variant.name for variant in VARIANTS]


def test_without_a_variant_nothing_is_found(program: Path) -> None:
    record = run_suite(RunOptions(link=f"lockstep:{program}", seed=SEED))
    assert [case.id for case in record.cases if case.verdict not in ("pass", "not_applicable")] == []
