"""The C header: compiles as strict C99, and what a C program reads from it is what the contract says."""

from __future__ import annotations

import shutil
import subprocess
import sys

import pytest
from contract_copy import Copy

from protobench.contract import DECLARED, Contract, load_contract
from protobench.contract.header import ANSWERS_BEYOND, LINE_LENGTH_MAX, generate_header

FLAGS = ["-std=c99", "-Wall", "-Wextra", "-Wpedantic", "-Werror"]

# Every table through one macro each; a line of text for each row.
PROGRAM = r"""
#include <stdio.h>
#include "contract.h"
#define KIND(NAME, code, CLASS, answer, many, FENCE, needs) \
    printf("kind " #NAME " %d " #CLASS " %d %d " #FENCE " %d\n", code, answer, many, needs);
#define FIELD(key, TYPE, REQUIRED, low, high, items_min, items_max) \
    printf("field %d " #TYPE " " #REQUIRED " %lld %lld %d %d\n", key, low, high, items_min, items_max);
#define FAULT(NAME, code, class, severity) printf("fault " #NAME " %d %d %d\n", code, class, severity);
#define STEP(NAME, a, h, f, l, answer, na, nh, nf, nl) \
    printf("step " #NAME " %d %d %d %d %d %d %d %d %d\n", a, h, f, l, answer, na, nh, nf, nl);
#define SHOWN(a, h, f, state) printf("shown %d %d %d %d\n", a, h, f, state);
int main(void)
{
    PB_KIND_TABLE(KIND)
    PB_FIELDS_MOVE(FIELD)
    PB_FIELDS_DESCRIBE(FIELD)
    PB_FIELDS_ASSIGN_ADDRESS(FIELD)
    PB_FIELDS_LOG(FIELD)
    PB_FAULT_TABLE(FAULT)
    PB_TRANSITIONS(STEP)
    PB_DISPLAYED(SHOWN)
    printf("number %llu\n", (unsigned long long)PB_LIMIT_CLOCK_WRAP);
    printf("number %llu\n", (unsigned long long)PB_ADDRESS_BROADCAST);
    printf("number %llu\n", (unsigned long long)PB_CRC_POLYNOMIAL);
    printf("number %d\n", PB_KEY_MOVE_ALLOW_LAST_BOND + PB_PLACE_FAULT_ENTRY_TOLD + PB_PLACES_FACE);
    return 0;
}
"""


@pytest.fixture(scope="module")
def printed(tmp_path_factory: pytest.TempPathFactory) -> list[str]:
    """What the C program prints."""
    compiler = shutil.which("gcc")
    if compiler is None:
        pytest.skip("gcc is not installed")
    folder = tmp_path_factory.mktemp("header")
    (folder / "contract.h").write_text(generate_header(load_contract()))
    (folder / "program.c").write_text(PROGRAM)
    command = [compiler, *FLAGS, "program.c", "-o", "program"]
    subprocess.run(command, cwd=folder, check=True, timeout=120)
    done = subprocess.run([folder / "program"], capture_output=True, text=True, check=True, timeout=60)
    return done.stdout.splitlines()


def test_kinds(contract: Contract, printed: list[str]) -> None:
    rows = [line for line in printed if line.startswith("kind ")]
    assert len(rows) == sum(kind.is_request for kind in contract.kinds)
    assert "kind MOVE 39 COMMAND 64 0 FULL -1" in rows
    assert "kind HALT 32 COMMAND 80 1 NONE -1" in rows
    assert "kind READ_TRUTH 10 READ 74 0 NONE 5" in rows


def test_fields(printed: list[str]) -> None:
    rows = [line for line in printed if line.startswith("field ")]
    assert rows[2:] == [
        "field 2 ENUM ALWAYS 1 6 0 0",
        "field 3 INT OPTIONAL -2147483648 2147483647 0 0",
        "field 4 UINT OPTIONAL 0 15 0 0",
        "field 64 UINT OPTIONAL 0 4294967295 0 0",
        "field 65 BOOL OPTIONAL 0 0 0 0",
        "field 0 UINT ALWAYS 0 4294967295 0 0",
        "field 1 UINT UNICAST 0 4294967295 0 0",
        "field 2 BYTES ALWAYS 0 0 8 8",
        "field 3 UINT ALWAYS 1 4026531839 0 0",
        "field 4 UINT OPTIONAL 0 2000 0 0",
        "field 0 TEXT ALWAYS 0 0 0 32",
    ]


def test_faults(contract: Contract, printed: list[str]) -> None:
    rows = [line for line in printed if line.startswith("fault ")]
    assert len(rows) == len(contract.faults)
    assert "fault BROWN_OUT 6 3 1" in rows
    assert "fault LIST_OVERFLOW 14 7 0" in rows


def test_state_table(contract: Contract, printed: list[str]) -> None:
    activities = {**contract.enum_values("activity"), DECLARED: 0}
    answers = {**contract.enum_values("refusal"), **ANSWERS_BEYOND, "accepted": 0}
    wanted = set()
    for (state, name), cell in contract.states.cells.items():
        before = (activities[state.activity], int(state.halt), int(state.fault), int(state.lease == "held"))
        after = cell.after
        numbers = (
            *before,
            answers[cell.answer],
            activities[after.activity],
            int(after.halt),
            int(after.fault),
        )
        plain = " ".join(map(str, (*numbers, int(after.lease == "held"))))
        wanted.add(f"step {name.upper().replace('-', '_')} {plain}")
    rows = [line for line in printed if line.startswith("step ")]
    assert len(rows) == len(wanted)
    assert set(rows) == wanted


def test_displayed_states(contract: Contract, printed: list[str]) -> None:
    activities, states = contract.enum_values("activity"), contract.enum_values("state")
    wanted = {
        f"shown {activities[s.activity]} {int(s.halt)} {int(s.fault)} {states[contract.states.displayed(s)]}"
        for s in contract.states.states
    }
    rows = [line for line in printed if line.startswith("shown ")]
    assert len(rows) == len(wanted)
    assert set(rows) == wanted


def test_numbers(contract: Contract, printed: list[str]) -> None:
    rows = [int(line.split()[1]) for line in printed if line.startswith("number ")]
    assert rows == [2**32, 0xFFFFFFFF, contract.frame.check.polynomial, 65 + 9 + 3]


def test_every_name_and_number_is_there(contract: Contract) -> None:
    header = generate_header(contract)
    for kind in contract.kinds:
        name = kind.name.upper().replace("-", "_")
        assert f"#define PB_KIND_{name} {kind.code}\n" in header
        for field in kind.fields:
            assert f"#define PB_KEY_{name}_{field.name.upper()} {field.key}\n" in header
    for drop in contract.drops:
        assert f"#define PB_DROP_{drop.name.upper().replace('-', '_')} {drop.number}\n" in header
    for row in contract.refusals:
        assert f"#define PB_REFUSAL_{row.name.upper().replace('-', '_')} {row.number}\n" in header


def test_the_same_each_time_and_short_lines(contract: Contract) -> None:
    header = generate_header(contract)
    assert header == generate_header(contract)
    assert header.isascii()
    assert max(len(line) for line in header.replace("\\\n", "").splitlines()) <= LINE_LENGTH_MAX


@pytest.mark.parametrize(
    ("old", "new", "rule"),
    [
        (
            "[enum.nature]",
            '[enum.restart]\ntext = "x"\nvalues = { cause-watchdog = 9 }\n[enum.nature]',
            "PB_RESTART_CAUSE_WATCHDOG",
        ),
        ("bond = 5, unbond = 6", "bond = 5, unbond = 7", "the numbers of motion have a gap"),
    ],
)
def test_what_c_cannot_say_is_told(copy: Copy, old: str, new: str, rule: str) -> None:
    copy.edit("kinds.toml", old, new)
    with pytest.raises(ValueError, match=rule):
        generate_header(copy.load())


def test_a_displayed_state_that_depends_on_the_lease_is_told(copy: Copy) -> None:
    copy.edit(
        "states.toml",
        '[[displayed]]\nstate = "idle"',
        '[[displayed]]\nstate = "halted"\nlease = "free"\n[[displayed]]\nstate = "idle"',
    )
    with pytest.raises(ValueError, match="depends on the lease"):
        generate_header(copy.load())


def test_it_runs_by_itself(contract: Contract) -> None:

    command = [sys.executable, "-m", "protobench.cli", "contract", "header"]
    done = subprocess.run(command, capture_output=True, text=True, check=True, timeout=60)
    assert done.stdout == generate_header(contract)
