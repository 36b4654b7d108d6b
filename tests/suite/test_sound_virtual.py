"""Sound modules pass everything that applies, in virtual time: the Python one in every profile, the C one in both."""

from __future__ import annotations

import random

import pytest
from judging import SEED, expect_sound, firmware, judge
from slow_line import SlowLine
from sound_configs import CONFIGS
from sound_engines import ENGINES

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.links import MemoryLink
from protobench.suite.options import RunOptions
from protobench.suite.run import list_cases
from protobench.suite.session import Session


def test_embedded_module() -> None:
    record = judge()
    expect_sound(record)
    assert record.environment["time"] == "virtual"


@pytest.mark.parametrize("name", CONFIGS)
def test_python_module(name: str) -> None:
    def opener() -> MemoryLink:
        return MemoryLink(ModuleEngine(CONFIGS[name], Storage(), random.Random(SEED), load_contract()))

    expect_sound(judge(opener=opener))


@pytest.mark.parametrize("name", ENGINES)
def test_python_module_that_takes_other_freedoms(name: str) -> None:
    def opener() -> MemoryLink:
        return MemoryLink(ENGINES[name](ModuleConfig(), Storage(), random.Random(SEED), load_contract()))

    expect_sound(judge(opener=opener))


@pytest.mark.parametrize("seed", [1, 2])
def test_the_order_of_the_cases_does_not_matter(seed: int) -> None:
    """One module judged twice without a restart between, in two other orders."""
    engine = ModuleEngine(ModuleConfig(), Storage(), random.Random(seed), load_contract())
    cases = list_cases()
    with Session(RunOptions(opener=lambda: MemoryLink(engine), seed=seed)) as session:
        for round_ in range(2):
            random.Random(10 * seed + round_).shuffle(cases)
            records = [session.judge(info) for info in cases]
            bad = [one for one in records if one.verdict not in ("pass", "not_applicable")]
            assert not bad, f"seed {seed}, round {round_}: {bad[0].id} {bad[0].verdict}: {bad[0].reason}"


def test_behind_a_serial_line() -> None:
    """At 115,200 baud, where a frame may wait behind another; the areas that judge times."""

    def opener() -> SlowLine:
        engine = ModuleEngine(ModuleConfig(), Storage(), random.Random(SEED), load_contract())
        return SlowLine(engine, byte_us=87)

    expect_sound(judge(opener=opener, only="ACK or HLT or MOT or FLT or TIM"))


@pytest.mark.parametrize("build", ["build", "build-sanitized"])
@pytest.mark.parametrize("program", ["module-lockstep", "module-smallest-lockstep"])
def test_c_module(program: str, build: str) -> None:
    record = judge(f"lockstep:{firmware(program, build)}")
    expect_sound(record)
    assert record.environment["time"] == "virtual"


def test_the_smallest_profile_is_judged_by_fewer_cases() -> None:
    small = judge(f"lockstep:{firmware('module-smallest-lockstep')}")
    whole = judge(f"lockstep:{firmware('module-lockstep')}")
    assert small.count("not_applicable") > whole.count("not_applicable")
