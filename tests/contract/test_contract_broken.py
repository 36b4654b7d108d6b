"""Broken files: each problem names file, path and rule, and all of them are told."""

from __future__ import annotations

import pytest
from contract_copy import Copy

from protobench.contract.problems import Path

BROKEN = [
    # (file, text, replacement, path of the problem, part of the rule); None stands for any place in a table
    ("kinds.toml", "code = 0x27", 'code = "x"', ("kind", None, "code"), "integer"),
    ("kinds.toml", "code = 0x27", "code = 0x26", ("kind", None, "code"), "38 is used already, by kind["),
    (
        "kinds.toml",
        "code = 0x27",
        "code = 0x47",
        ("kind", None, "code"),
        "lies in the range 'answer', the kind is a command",
    ),
    ("kinds.toml", 'name = "move"\n', 'name = "energize"\n', ("kind", None, "name"), "used already"),
    (
        "kinds.toml",
        'answer = "description"',
        'answer = "moving"',
        ("kind", None, "answer"),
        "no answer 'moving'",
    ),
    ("kinds.toml", 'needs = "groups"', 'needs = "wings"', ("kind", None, "needs"), "no capability 'wings'"),
    ("kinds.toml", 'fence = "none"\n', "", ("kind", None), "halt: a command has a fence"),
    (
        "kinds.toml",
        'answer = "status-report"\n',
        "",
        ("kind", None),
        "status: a read or a command has an answer",
    ),
    (
        "kinds.toml",
        "min = 0, max = 2000",
        "min = 3000, max = 2000",
        ("kind", None, "fields", 0),
        "min 3000 is above max 2000",
    ),
    ("kinds.toml", "min = 0, max = 2000", "min = -1, max = 2000", ("kind", None, "fields", 0), "below 0"),
    (
        "kinds.toml",
        'default = 0, text = "Window',
        'default = 2001, text = "Window',
        ("kind", None, "fields", 0),
        "outside 0..2000",
    ),
    (
        "kinds.toml",
        'unit = "ms", min = 0, max = 2000',
        "min = 0, max = 2000",
        ("kind", None, "fields", 0),
        "uint needs unit",
    ),
    (
        "kinds.toml",
        'type = "bool", required = "optional"',
        'type = "bool", size = 3, required = "optional"',
        ("kind", None, "fields", 6),
        "type bool has no size",
    ),
    ("kinds.toml", "default = false", "default = 0", ("kind", None, "fields", 6), "default 0 is no bool"),
    (
        "kinds.toml",
        'key = 65, name = "allow_last_bond"',
        'key = 64, name = "allow_last_bond"',
        ("kind", None),
        "two fields have the key 64",
    ),
    (
        "kinds.toml",
        'record = "face"',
        'record = "side"',
        ("kind", None, "fields", 17, "record"),
        "no record 'side'",
    ),
    (
        "kinds.toml",
        'enum = "assist_op"',
        'enum = "verb"',
        ("kind", None, "fields", 1, "enum"),
        "no enumeration 'verb'",
    ),
    (
        "kinds.toml",
        "done = 1, failed = 2",
        "done = 2, failed = 2",
        ("enum", "outcome", "values"),
        "both have the number 2",
    ),
    (
        "kinds.toml",
        "[enum.result]",
        '[enum.refusal]\ntext = "x"\nvalues = { a = 1 }\n[enum.result]',
        ("enum", "refusal"),
        "reasons.toml",
    ),
    (
        "frame.toml",
        "header_size = 20",
        "header_size = 21",
        ("layout",),
        "header_size is 21; the other sizes give 20",
    ),
    (
        "frame.toml",
        "offset = 4\n",
        "offset = 5\n",
        ("layout",),
        "source stands at 5; the one before it ends at 4",
    ),
    ("frame.toml", "body_size_max = 213", "body_size_max = 229", ("layout",), "the other sizes give 213"),
    (
        "frame.toml",
        "answer = [0x40, 0x5F]",
        "answer = [0x41, 0x5F]",
        ("kind_ranges",),
        "answer is 65..95; it must begin at 64",
    ),
    (
        "frame.toml",
        "private = [0xF0, 0xFF]",
        "private = [0xF0, 0xFE]",
        ("kind_ranges",),
        "the ranges end at 254",
    ),
    ("frame.toml", "group_last = 0xFFFFFFFD", "group_last = 0xFFFFFFFF", ("addresses",), "must rise"),
    ("frame.toml", "private_first = 120", "private_first = 60", ("body",), "must rise in this order"),
    ("frame.toml", "\nversion = 1", "\nversion = 2", ("layout", "version"), "is not the contract's major 1"),
    (
        "contract.toml",
        "majors_supported = [1]",
        "majors_supported = [2]",
        ("contract", "majors_supported"),
        "own major 1",
    ),
    (
        "contract.toml",
        'name = "faults.toml"',
        'name = "fears.toml"',
        ("file", None, "name"),
        "'fears.toml' is not a file",
    ),
    ("contract.toml", "minor = 0", "minor = 1", ("contract",), "version 1.1 stands in a folder named '1.0'"),
    (
        "limits.toml",
        "value = 200\n",
        "value = 200\nmin = 1\n",
        ("limit", None),
        "either a value, or min and max",
    ),
    (
        "limits.toml",
        "min = 500\nmax = 30000",
        "min = 500\nmax = 300",
        ("limit", None),
        "min 500 is above max 300",
    ),
    (
        "limits.toml",
        'name = "stop_time"',
        'name = "outcome_time"',
        ("limit", None, "name"),
        "used already, by limit[1]",
    ),
    ("reasons.toml", "number = 12\n", "number = 11\n", ("drop", None, "number"), "11 is used already"),
    (
        "reasons.toml",
        'number = 9\nstage = "fence"',
        'number = 8\nstage = "fence"',
        ("refusal", None, "number"),
        "8 is used already, by stale-epoch",
    ),
    (
        "reasons.toml",
        'number = 6\nstage = "form"\nrow = "critical',
        'number = 60\nstage = "form"\nrow = "critical',
        ("refusal", None, "number"),
        "not-understood has the number 60 here and 6 before",
    ),
    (
        "reasons.toml",
        'row = "critical-key"',
        'row = "flags"',
        ("refusal", None),
        "not-understood has a row 'flags' already",
    ),
    (
        "reasons.toml",
        'carries = ["majors"]',
        'carries = ["minors"]',
        ("refusal", None, "carries", 0),
        "no field 'minors'",
    ),
    ("faults.toml", "code = 2\n", "code = 1\n", ("fault", None, "code"), "1 is used already"),
    ("faults.toml", "code = 2\n", "code = 0x8000\n", ("fault", None, "code"), "less than 32768"),
    (
        "faults.toml",
        'class = "bond"',
        'class = "glue"',
        ("fault", None, "class"),
        "fault_class has no value 'glue'",
    ),
    (
        "faults.toml",
        'severity = "notice"',
        'severity = "mild"',
        ("fault", None, "severity"),
        "severity has no value 'mild'",
    ),
    (
        "capabilities.toml",
        "number = 1\n",
        "number = 0\n",
        ("capability", None, "number"),
        "0 is used already",
    ),
    (
        "capabilities.toml",
        'name = "bonds"',
        'name = "queue"',
        ("item", None, "name"),
        "'queue' is a capability already",
    ),
    (
        "capabilities.toml",
        "capabilities = []",
        'capabilities = ["wings"]',
        ("profile", "capabilities", 0),
        "'wings'",
    ),
    ("clauses.toml", 'id = "FRM-02"', 'id = "FRM-01"', ("clause", None, "id"), "used already, by clause[0]"),
    (
        "clauses.toml",
        'id = "FRM-02"',
        'id = "BDY-99"',
        ("clause", None, "id"),
        "does not begin with its area FRM",
    ),
    ("clauses.toml", 'area = "FRM"', 'area = "XXX"', ("clause", None, "area"), "no area 'XXX'"),
    (
        "clauses.toml",
        'needs = "groups"',
        'needs = "groups or queue"',
        ("clause", None, "needs"),
        "'and' is wanted",
    ),
    (
        "clauses.toml",
        'needs = "groups"',
        'needs = "wings"',
        ("clause", None, "needs"),
        "unknown name 'wings'",
    ),
    (
        "errors.toml",
        'number = ["SEQ"], epoch',
        'number = ["XYZ"], epoch',
        ("error", None, "answered_by", "number", 0),
        "'XYZ'",
    ),
    (
        "errors.toml",
        '{ number = ["SEQ"], epoch',
        '{ luck = ["SEQ"], epoch',
        ("error", None, "answered_by", "luck"),
        "'luck'",
    ),
    ("errors.toml", "open = ", "text2 = ", ("error", None, "text2"), "Extra"),
    (
        "notes.toml",
        'kind = "confirm"',
        'kind = "agree"',
        ("chart", None, "step", 5, "kind"),
        "no kind 'agree'",
    ),
    (
        "notes.toml",
        'from = "module"',
        'from = "controller"',
        ("chart", None, "step", 1, "from"),
        "a receipt comes from a module",
    ),
    (
        "notes.toml",
        "fields = { result = 0 }",
        "fields = { colour = 0 }",
        ("chart", None, "step", 1, "fields", "colour"),
        "no field",
    ),
    (
        "notes.toml",
        "fields = { epoch = 3, event = 1 }",
        "fields = { epoch = 3 }",
        ("chart", None, "step", 5, "fields"),
        "needs event",
    ),
    ("states.toml", 'input = "cancel"', 'input = "calm"', ("transition", None, "input"), "no input 'calm'"),
    (
        "states.toml",
        'answer = "fault-latched"',
        'answer = "sulking"',
        ("transition", None, "answer"),
        "neither a refusal nor",
    ),
    (
        "states.toml",
        'state = "stopping"',
        'state = "dozing"',
        ("displayed", None, "state"),
        "no displayed state 'dozing'",
    ),
]


def fits(path: Path, pattern: tuple[str | int | None, ...]) -> bool:
    if len(path) != len(pattern):
        return False
    return all(isinstance(a, int) if b is None else a == b for a, b in zip(path, pattern, strict=True))


@pytest.mark.parametrize(("file", "old", "new", "path", "rule"), BROKEN)
def test_a_problem_names_file_path_and_rule(
    copy: Copy, file: str, old: str, new: str, path: tuple[str | int | None, ...], rule: str
) -> None:
    problems = copy.edit(file, old, new).problems()
    found = [problem for problem in problems if problem.file == file and fits(problem.path, path)]
    assert found, f"expected {path}, found {[problem.path for problem in problems]}"
    assert any(rule in problem.rule for problem in found), [problem.rule for problem in found]


def test_every_problem_of_every_file_is_told(copy: Copy) -> None:
    copy.edit("kinds.toml", "code = 0x27", "code = -1").edit("kinds.toml", 'unit = "ms"', "unit = 1")
    copy.edit("limits.toml", 'unit = "ms"', 'unit = "fortnight"').edit("faults.toml", "[[fault]]", "[[fault")
    problems = copy.problems()
    assert [problem.file for problem in problems] == [
        "limits.toml",
        "kinds.toml",
        "kinds.toml",
        "faults.toml",
    ]
    assert str(problems[1]).startswith("kinds.toml: kind[2].fields[0].unit: ")


def test_every_reference_is_checked_at_once(copy: Copy) -> None:
    copy.edit("kinds.toml", 'enum = "assist_op"', 'enum = "verb"').edit(
        "clauses.toml", 'area = "FRM"', 'area = "XXX"'
    )
    assert {problem.file for problem in copy.problems()} == {"kinds.toml", "clauses.toml"}


@pytest.mark.parametrize(
    ("content", "rule"),
    [
        (b"\xff\xfe", "is not TOML"),
        (b"[[fault", "is not TOML"),
        (b"x = " + b"[" * 5000, "is not TOML"),
        (b"", "Field required"),
    ],
)
def test_a_file_that_is_no_toml(copy: Copy, content: bytes, rule: str) -> None:
    (copy.folder / "faults.toml").write_bytes(content)
    (problem,) = copy.problems()
    assert problem.file == "faults.toml"
    assert rule in problem.rule


def test_a_file_that_is_far_too_long(copy: Copy) -> None:
    (copy.folder / "faults.toml").write_bytes(b"#" * 1_000_001)
    (problem,) = copy.problems()
    assert problem.rule == "is not TOML: longer than 1000000 bytes"


def test_a_missing_file(copy: Copy) -> None:
    (copy.folder / "notes.toml").unlink()
    (problem,) = copy.problems()
    assert problem.place == "notes.toml"
    assert "cannot be read" in problem.rule
