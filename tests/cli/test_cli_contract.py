"""``protobench contract``."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from command import ROOT, invoke, words

from protobench.contract import load_contract

CONTRACT = load_contract()


def test_show_is_the_file_in_the_tree() -> None:
    assert invoke("contract", "show").stdout == (ROOT / "spec/1.0/contract.md").read_text()
    assert invoke("contract", "document", "--check").exit_code == 0


def test_lint_finds_nothing() -> None:
    done = invoke("contract", "lint")
    assert done.exit_code == 0
    assert f"no findings in {len(CONTRACT.clauses)} clauses" in done.stdout


def test_header_is_one() -> None:
    text = invoke("contract", "header").stdout
    assert text.count("#ifndef") == 1
    assert "#endif" in text


def test_vectors_all_and_by_area() -> None:
    everything = invoke("contract", "vectors")
    lines = everything.stdout.splitlines()
    assert len(lines) >= 150
    assert everything.stderr == f"{len(lines)} vectors\n"
    assert len({line.split()[0] for line in lines}) == len(lines)
    some = invoke("contract", "vectors", "stream").stdout.splitlines()
    assert set(some) < set(lines)
    done = invoke("contract", "vectors", "nosuch")
    assert done.exit_code == 2
    assert "there are body, field, frame" in words(done.stderr)


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        ("SEQ-03", ["clause SEQ-03", CONTRACT.clause("SEQ-03").text, "SEQ.copied-move"]),
        ("SEQ.copied-move", ["case SEQ.copied-move", "level: required, class:", "SEQ-03"]),
        (CONTRACT.refusals[0].name, [f"refusal {CONTRACT.refusals[0].name}", "number:"]),
        (CONTRACT.faults[0].name, [f"fault {CONTRACT.faults[0].name}"]),
        ("crc", ["drop reason crc", "number: 5"]),
        ("move", ["move"]),
    ],
)
def test_explain(name: str, expected: list[str]) -> None:
    done = invoke("contract", "explain", name)
    assert done.exit_code == 0
    for text in expected:
        assert text in done.stdout


def test_explain_of_every_clause_refusal_fault_and_drop() -> None:
    names = [clause.id for clause in CONTRACT.clauses]
    for table in (CONTRACT.refusals, CONTRACT.faults, CONTRACT.drops):
        names += [row.name for row in table]
    for name in names:
        done = invoke("contract", "explain", name)
        assert done.exit_code == 0, name
        assert name in done.stdout


def test_an_unknown_name_suggests() -> None:
    done = invoke("contract", "explain", "stale-epocc")
    assert (done.exit_code, done.stdout) == (1, "")
    assert "nothing called 'stale-epocc'; there is stale-epoch" in done.stderr


@pytest.mark.parametrize("command", ["show", "lint", "header", "vectors", "document"])
def test_an_unknown_version_is_wrong_use(command: str) -> None:
    done = invoke("contract", command, "--contract-version", "9.9")
    assert done.exit_code == 2
    assert "'9.9': one of 1.0" in words(done.stderr)


def test_diff_with_itself_and_with_a_breaking_change(tmp_path: Path) -> None:
    old = ROOT / "spec" / "1.0"
    done = invoke("contract", "diff", str(old), str(old))
    assert (done.exit_code, done.stdout) == (0, "compatible\n")
    new = tmp_path / "1.0"
    shutil.copytree(old, new)
    limits = (new / "limits.toml").read_text()
    assert "value = 200" in limits
    (new / "limits.toml").write_text(limits.replace("value = 200", "value = 250", 1))
    done = invoke("contract", "diff", str(old), str(new))
    assert done.exit_code == 1
    assert "200" in done.stdout
    assert "250" in done.stdout
    assert done.stdout.endswith("breaking\n")


def test_diff_with_what_is_no_contract(tmp_path: Path) -> None:
    done = invoke("contract", "diff", str(ROOT / "spec" / "1.0"), str(tmp_path))
    assert done.exit_code == 1
    assert "contract.toml: cannot be read" in done.stderr


def test_the_help_of_every_command_names_an_example_or_its_options() -> None:
    for command in ("check", "emulate", "decode", "contract"):
        done = invoke(command, "--help")
        assert done.exit_code == 0
        assert "Example" in done.stdout or "Commands" in done.stdout
    assert invoke("--version").stdout.startswith("protobench ")
