"""Differences of versions: each classified, with the reason."""

from __future__ import annotations

from pathlib import Path

import pytest
from contract_copy import Copy

from protobench.contract import Contract
from protobench.contract.versions import compare

FLIGHT = '[[capability]]\nname = "flight"\nnumber = 7\ntext = "x"\n'
MOVE_END = '"Permit an unbond that opens the only closed bond; no meaning for other motions." },\n'
IDENTIFY_END = 'required = "always", text = "How long." },\n'
FIELD = '  { key = %s, name = "speed", type = "uint", unit = "1", min = 0, max = 9, required = "%s", text = "x" },\n'
KIND = (
    '[[kind]]\nname = "dance"\ncode = 0x{code:02X}\nclass = "{class_}"\n{more}text = "x"\nfields = []\n\n'
    '[[kind]]\nname = "log"'
)

# file, text, replacement, item, breaking, part of what or why
CASES = [
    ("frame.toml", "depth_max = 3", "depth_max = 4", "body.depth_max", True, "3 became 4"),
    ("frame.toml", "initial = 0xFFFFFFFF", "initial = 0", "check.initial", True, "every frame"),
    ("frame.toml", 'name = "datagram"', 'name = "radio"', "binding.datagram", True, "removed"),
    ("frame.toml", 'name = "datagram"', 'name = "radio"', "binding.radio", False, "added"),
    ("kinds.toml", 'name = "identify"', 'name = "shine"', "identify", True, "kind removed"),
    ("kinds.toml", 'name = "identify"', 'name = "shine"', "shine", True, "code 46 was identify's"),
    ("kinds.toml", "code = 0x2E", "code = 0x30", "identify", True, "code 46 became 48"),
    ("kinds.toml", 'fence = "full"', 'fence = "many"', "reset", True, "fence full became many"),
    (
        "kinds.toml",
        'answer = "description"\nmany = false',
        'answer = "description"\nmany = true',
        "describe",
        False,
        "may go to many",
    ),
    (
        "kinds.toml",
        'answer = "presence"\nmany = true',
        'answer = "presence"\nmany = false',
        "probe",
        True,
        "many True became False",
    ),
    (
        "kinds.toml",
        '[[kind]]\nname = "log"',
        KIND.format(code=0x0B, class_="read", more='answer = "receipt"\n'),
        "dance",
        False,
        "an older module refuses it",
    ),
    (
        "kinds.toml",
        '[[kind]]\nname = "log"',
        KIND.format(code=0x85, class_="event", more=""),
        "dance",
        False,
        "older controller drops",
    ),
    (
        "kinds.toml",
        '[[kind]]\nname = "log"',
        KIND.format(code=0x61, class_="notice", more=""),
        "dance",
        False,
        "older module drops",
    ),
    (
        "kinds.toml",
        MOVE_END,
        MOVE_END + FIELD % (66, "optional"),
        "move.speed",
        True,
        "critical key 66 added",
    ),
    (
        "kinds.toml",
        IDENTIFY_END,
        IDENTIFY_END + FIELD % (3, "always"),
        "identify.speed",
        True,
        "required field added",
    ),
    (
        "kinds.toml",
        '  { key = 64, name = "start_at"',
        FIELD % (5, "optional") + '  { key = 64, name = "start_at"',
        "move.speed",
        False,
        "older peer ignores",
    ),
    (
        "kinds.toml",
        'key = 2, name = "number"',
        'key = 3, name = "number"',
        "cancel.number",
        True,
        "key 2 became 3",
    ),
    (
        "kinds.toml",
        'key = 2, name = "number"',
        'key = 2, name = "which"',
        "cancel.number",
        True,
        "field removed",
    ),
    (
        "kinds.toml",
        'key = 2, name = "number"',
        'key = 2, name = "which"',
        "cancel.which",
        True,
        "key 2 was number's",
    ),
    (
        "kinds.toml",
        "min = 0, max = 2000",
        "min = 0, max = 1000",
        "probe.answer_window",
        True,
        "range narrowed",
    ),
    (
        "kinds.toml",
        "min = 0, max = 2000",
        "min = 0, max = 3000",
        "probe.answer_window",
        False,
        "range widened",
    ),
    (
        "kinds.toml",
        'min = 0, max = 1000, required = "always", text = "Charge',
        'min = 0, max = 2000, required = "always", text = "Charge',
        "status-report.battery",
        True,
        "an older controller cannot take the rest",
    ),
    (
        "kinds.toml",
        "items_min = 1, items_max = 8",
        "items_min = 1, items_max = 6",
        "clear-faults.occurrences",
        True,
        "items_min..items_max 1..8",
    ),
    (
        "kinds.toml",
        'default = 0, text = "Window',
        'default = 5, text = "Window',
        "probe.answer_window",
        True,
        "default 0 became 5",
    ),
    (
        "kinds.toml",
        'unit = "ms", min = 0, max = 2000',
        'unit = "us", min = 0, max = 2000',
        "probe.answer_window",
        True,
        "unit ms became us",
    ),
    (
        "kinds.toml",
        "hop = 4, bond = 5, unbond = 6",
        "hop = 4, bond = 5, unbond = 6, roll = 7",
        "motion.roll",
        True,
        "value added",
    ),
    (
        "kinds.toml",
        "hold = 6, release = 7",
        "hold = 6, release = 7, freeze = 8",
        "assist_op.freeze",
        False,
        "value added",
    ),
    (
        "kinds.toml",
        "hold = 6, release = 7",
        "hold = 6, freeze = 7",
        "assist_op.freeze",
        True,
        "number 7 was release's",
    ),
    ("kinds.toml", "hold = 6, release = 7", "hold = 6", "assist_op.release", True, "value removed"),
    (
        "kinds.toml",
        'name = "told", type = "uint"',
        'name = "heard", type = "uint"',
        "fault_entry",
        True,
        "places changed",
    ),
    ("reasons.toml", "number = 12\n", "number = 13\n", "drop stale-confirm", True, "number 12 became 13"),
    (
        "reasons.toml",
        'name = "stale-confirm"\nnumber = 12',
        'name = "odd-confirm"\nnumber = 12',
        "drop odd-confirm",
        True,
        "was stale-confirm's",
    ),
    (
        "reasons.toml",
        'name = "stale-confirm"\nnumber = 12',
        'name = "odd-confirm"\nnumber = 13',
        "drop odd-confirm",
        False,
        "added",
    ),
    ("reasons.toml", 'carries = ["majors"]', "carries = []", "refusal unsupported-version", True, "carries"),
    (
        "limits.toml",
        "value = 200\n",
        "value = 100\n",
        "half_frame_bridge",
        True,
        "limit changed, min 200 became 100",
    ),
    ("limits.toml", 'name = "stop_time"', 'name = "halt_time"', "stop_time", True, "limit removed"),
    ("limits.toml", 'name = "stop_time"', 'name = "halt_time"', "halt_time", True, "limit added"),
    (
        "states.toml",
        'answer = "not-energized"',
        'answer = "energized"',
        "move in idle/clear/held",
        True,
        "not-energized, then idle/clear/held",
    ),
    (
        "states.toml",
        '"halt", "fault", "lease-end"',
        '"fault", "halt", "lease-end"',
        "order",
        True,
        "a race has another winner",
    ),
    (
        "states.toml",
        '[[displayed]]\nstate = "moving"',
        '[[displayed]]\nstate = "energized"',
        "moving/clear/held",
        True,
        "displayed as moving",
    ),
    ("faults.toml", "code = 15\n", "code = 16\n", "clock-unsteady", True, "code 15 became 16"),
    (
        "faults.toml",
        'name = "clock-unsteady"\ncode = 15',
        'name = "clock-fast"\ncode = 16',
        "clock-fast",
        False,
        "added",
    ),
    (
        "faults.toml",
        'name = "clock-unsteady"\ncode = 15',
        'name = "clock-fast"\ncode = 15',
        "clock-fast",
        True,
        "code 15 was clock-unsteady's",
    ),
    (
        "faults.toml",
        'severity = "notice"',
        'severity = "latching"',
        "bond-weak",
        True,
        "severity notice became latching",
    ),
    (
        "capabilities.toml",
        '[[capability]]\nname = "energy"',
        FLIGHT + '[[capability]]\nname = "energy"',
        "flight",
        False,
        "ignores the bit",
    ),
    ("capabilities.toml", 'name = "energy"', 'name = "power"', "power", True, "number 6 was energy's"),
    ("capabilities.toml", "min = 4\n", "min = 8\n", "size sessions", True, "least number 4 became 8"),
    (
        "clauses.toml",
        "Fewer than 24 bytes",
        "Less than 24 bytes",
        "FRM-03",
        True,
        "a program cannot tell wording from meaning",
    ),
    ("clauses.toml", 'id = "LOD-02"', 'id = "LOD-03"', "LOD-02", True, "clause removed"),
    ("clauses.toml", 'id = "LOD-02"', 'id = "LOD-03"', "LOD-03", True, "an older module was not held to it"),
    ("clauses.toml", 'level = "required"', 'level = "recommended"', "FRM-01", False, "less is asked"),
    (
        "clauses.toml",
        "observable = true",
        "observable = false",
        "FRM-01",
        True,
        "observable True became False",
    ),
]


@pytest.mark.parametrize(("file", "old", "new", "item", "breaking", "words"), CASES)
def test_a_change_is_classified(
    contract: Contract, copy: Copy, file: str, old: str, new: str, item: str, breaking: bool, words: str
) -> None:
    changes = compare(contract, copy.edit(file, old, new).load()).changes
    found = [
        change for change in changes if change.file == file and change.item == item and words in str(change)
    ]
    assert found, [str(change) for change in changes]
    assert all(change.breaking is breaking for change in found)
    assert all(change.why for change in found)


def test_nothing_changed(contract: Contract, copy: Copy) -> None:
    comparison = compare(contract, copy.load())
    assert comparison.changes == ()
    assert comparison.is_compatible
    assert (comparison.old, comparison.new) == ("1.0", "1.0")


def test_prose_is_no_change(contract: Contract, copy: Copy) -> None:
    copy.edit("kinds.toml", "One motion. Ends in exactly", "A motion. It ends in exactly")
    copy.edit("limits.toml", "Four times the receipt limit.", "Enough.").edit(
        "faults.toml", "value: current", "value"
    )
    assert compare(contract, copy.load()).is_compatible


def test_one_breaking_change_makes_the_whole_breaking(contract: Contract, copy: Copy) -> None:
    copy.edit("kinds.toml", "hold = 6, release = 7", "hold = 6, release = 7, freeze = 8")
    copy.edit("limits.toml", "value = 200\n", "value = 100\n")
    comparison = compare(contract, copy.load())
    assert not comparison.is_compatible
    assert len(comparison.changes) == len(comparison.breaking) + 1
    assert str(comparison.breaking[0]).startswith("breaking: limits.toml: half_frame_bridge: limit changed")


def test_clauses_for_a_new_capability_bind_no_older_module(contract: Contract, copy: Copy) -> None:
    copy.edit(
        "capabilities.toml", '[[capability]]\nname = "energy"', FLIGHT + '[[capability]]\nname = "energy"'
    )
    clause = (
        '[[clause]]\nid = "LOD-03"\narea = "LOD"\nlevel = "required"\nsubject = "module"\nobservable = true\n'
    )
    path = copy.folder / "clauses.toml"
    path.write_text(path.read_text() + "\n" + clause + 'needs = "flight"\ntext = "It flies."\n')
    comparison = compare(contract, copy.load())
    assert comparison.is_compatible
    assert {change.item for change in comparison.changes} == {"flight", "LOD-03"}


@pytest.mark.parametrize(
    ("table", "what"), [("drop", "order of checking changed"), ("refusal", "order of judging changed")]
)
def test_the_order_of_reasons_matters(contract: Contract, copy: Copy, table: str, what: str) -> None:
    path = copy.folder / "reasons.toml"
    rows = path.read_text().split(f"[[{table}]]")
    rows[1], rows[2] = rows[2], rows[1]
    path.write_text(f"[[{table}]]".join(rows))
    assert what in [change.what for change in compare(contract, copy.load()).breaking]


def test_inputs_states_enumerations_and_records_come_and_go(contract: Contract, copy: Copy) -> None:
    copy.edit(
        "states.toml",
        '[[input]]\nname = "status"',
        '[[input]]\nname = "nudge"\nclass = "internal"\ntext = "x"\n'
        '[[transition]]\ninput = "nudge"\nanswer = "none"\n[[input]]\nname = "status"',
    )
    copy.edit(
        "kinds.toml",
        "[record.face]",
        '[enum.hue]\ntext = "x"\nvalues = { red = 1 }\n[record.spot]\ntext = "x"\nfields = []\n[record.face]',
    )
    later = copy.load()
    there = {(change.item, change.what): change.breaking for change in compare(contract, later).changes}
    back = {(change.item, change.what): change.breaking for change in compare(later, contract).changes}
    assert there == {
        ("nudge", "input added"): False,
        ("hue", "enumeration added"): False,
        ("spot", "record added"): False,
    }
    assert back == {
        ("nudge", "input removed"): True,
        ("hue", "enumeration removed"): True,
        ("spot", "record removed"): True,
    }


def test_a_state_that_is_excluded_is_removed(contract: Contract, copy: Copy) -> None:
    copy.edit(
        "states.toml",
        '[[excluded]]\nactivity = "starting"\nlease = "held"',
        '[[excluded]]\nactivity = "starting"\nlease = "held"\n[[excluded]]\nactivity = "starting"\nfault = true',
    )
    for name in ("restart-faulty", "fault"):
        path = copy.folder / "states.toml"
        path.write_text(
            path.read_text().replace(
                f'input = "{name}"\nanswer = "none"\nnext_activity = "starting"\nnext_halt = true\n'
                "next_fault = true",
                f'input = "{name}"\nanswer = "none"',
            )
        )
    copy.edit(
        "states.toml",
        'input = "fault"\nactivity = ["starting", "idle", "moving"]\nanswer = "none"\nnext_fault = true',
        'input = "fault"\nactivity = "starting"\nanswer = "none"\n[[transition]]\ninput = "fault"\n'
        'activity = ["idle", "moving"]\nanswer = "none"\nnext_fault = true',
    )
    changes = compare(contract, copy.load()).changes
    assert ("starting/halt+fault/free", "state removed") in [(change.item, change.what) for change in changes]


def test_another_major_is_breaking_in_its_frame(contract: Contract, tmp_path: Path) -> None:
    (change,) = compare(contract, Copy(tmp_path, "2.0").load()).changes
    assert (change.item, change.what, change.breaking) == ("layout.version", "1 became 2", True)
