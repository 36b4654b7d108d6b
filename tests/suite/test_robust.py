"""Generated sequences: the same for a seed, bounded, never accusing sound modules, finding broken ones, made short."""

from __future__ import annotations

import random
from pathlib import Path

import pytest
from judging import firmware
from sound_configs import CONFIGS

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.links import Link, MemoryLink
from protobench.suite.options import RunOptions
from protobench.suite.robust.again import read_again, write_again
from protobench.suite.robust.campaign import Campaign
from protobench.suite.robust.steps import ACTS, STEPS_MOST, Grammar, Step
from protobench.suite.session import Session

SEED = 20262
VARIANTS = firmware("module-lockstep", "build-variants")


def python_module(name: str = "") -> Link:
    config = CONFIGS[name] if name else ModuleConfig()
    return MemoryLink(ModuleEngine(config, Storage(), random.Random(SEED), load_contract()))


def played(options: RunOptions, count: int) -> Campaign:
    with Session(options) as session:
        campaign = Campaign(session, SEED)
        campaign.run(iter(range(count)), None)
    return campaign


def expect_sound(campaign: Campaign) -> None:
    words = [f"sequence {one.index}: {one.record.reason}\n{one.record.detail}" for one in campaign.failures]
    assert not words, f"seed {SEED}\n" + "\n".join(words)


def test_the_python_module_is_not_accused() -> None:
    campaign = played(RunOptions(opener=python_module, seed=SEED), 60)
    expect_sound(campaign)
    tally = campaign.tally
    assert tally.sequences == 60
    assert tally.reasons["accepted"] > tally.reasons.total() / 3
    assert tally.judged > tally.steps * 0.8
    wanted = {
        "halted",
        "not-holder",
        "lease-held",
        "malformed",
        "busy",
        "moving",
        "stale-epoch",
        "late",
        "conflict",
    }
    assert wanted <= set(tally.reasons)
    assert {"crc", "stuffing", "too-short", "length", "other-address", "bad-source"} <= set(+tally.drops)


def test_the_c_module_is_not_accused() -> None:
    expect_sound(played(RunOptions(link=f"lockstep:{firmware('module-lockstep')}", seed=SEED), 60))


@pytest.mark.parametrize("name", ["smallest", "slow", "turnaround", "only-bonds", "without-assist", "tight"])
def test_other_sound_modules_are_not_accused(name: str) -> None:
    expect_sound(played(RunOptions(opener=lambda: python_module(name), seed=SEED), 25))


def test_a_seed_gives_the_same_frames() -> None:
    def frames() -> list[bytes]:
        with Session(RunOptions(opener=python_module, seed=SEED)) as session:
            campaign = Campaign(session, SEED)
            found: list[bytes] = []
            grammar = Grammar(session.contract, session.bench.facts)
            for index in range(5):
                campaign.play(grammar.sequence(SEED, index), index)
                found += [event.data for event in session.bench.port.events]
            return found

    first = frames()
    assert len(first) > 100
    assert first == frames()


def test_sequences_are_bounded_and_differ() -> None:
    with Session(RunOptions(opener=python_module)) as session:
        grammar = Grammar(session.contract, session.bench.facts)
    sequences = [grammar.sequence(SEED, index) for index in range(200)]
    assert max(map(len, sequences)) <= STEPS_MOST
    assert len({tuple(steps) for steps in sequences}) == 200
    assert {step.act for steps in sequences for step in steps} == set(ACTS)


@pytest.mark.parametrize("variant", ["anyone-commands", "status-hides-motion"])
def test_a_broken_module_is_found_and_the_sequence_made_short(variant: str) -> None:
    campaign = played(RunOptions(link=f"lockstep:{VARIANTS} --variant {variant}", seed=SEED), 60)
    assert campaign.failures
    failure = min(campaign.failures, key=lambda one: len(one.steps))
    assert len(failure.steps) <= failure.drawn
    assert failure.record.broken
    assert failure.record.detail


# ------------------------------------------------------------ files


STEPS = [Step("ready", 0, "", "", 5), Step("twist", 2, "move", "flags", 2**32 - 1)]


def test_a_sequence_survives_its_file(tmp_path: Path) -> None:
    path = tmp_path / "sequence.json"
    write_again(path, STEPS, clause="ACK-01", reason='no "answer"')
    assert read_again(path) == STEPS


@pytest.mark.parametrize(
    ("text", "rule"),
    [
        ("", "Expecting value"),
        ("[]", "not a sequence of form 1"),
        ('{"form": 2, "steps": []}', "not a sequence of form 1"),
        ('{"form": 1, "steps": []}', "there must be 1 to 1000"),
        ('{"form": 1, "steps": [["ready", 0]]}', "a list of act, controller, kind, way and draw"),
        ('{"form": 1, "steps": [["ready", true, "", "", 1]]}', "True must be int"),
        ('{"form": 1, "steps": [["leap", 0, "", "", 1]]}', "no such act"),
        ('{"form": 1, "steps": [["ready", 9, "", "", 1]]}', "no such act or controller"),
        ('{"form": 1, "steps": [["sound", 0, "fly", "", 1]]}', "no such kind"),
        ('{"form": 1, "steps": [["twist", 0, "move", "fly", 1]]}', "no such way"),
        ("[" * 5000, "recursion"),
    ],
)
def test_a_file_that_is_no_sequence(text: str, rule: str, tmp_path: Path) -> None:
    path = tmp_path / "sequence.json"
    path.write_text(text)
    with pytest.raises(ValueError, match=rule):
        read_again(path)
