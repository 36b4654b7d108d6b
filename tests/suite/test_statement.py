"""The conformance statement: the form, reading it, both reviews, choosing cases by it. All suppliers are invented."""

from __future__ import annotations

import random
import re
import tomllib
from functools import cache, partial
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sound_configs import CONFIGS

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.judge import NotApplicable
from protobench.links import MemoryLink
from protobench.suite.case import CaseInfo
from protobench.suite.facts import Facts
from protobench.suite.files import FileError
from protobench.suite.options import RunOptions
from protobench.suite.run import StatementDiffers, run_suite
from protobench.suite.session import Session
from protobench.suite.statement import Statement, load_statement
from protobench.suite.statement_form import write_form
from protobench.suite.statement_items import Item, item_tables
from protobench.suite.statement_review import Finding, compare, review
from protobench.suite.statement_select import FOLLOWS_FROM, why_not, with_item

CONTRACT = load_contract()
SPEC = Path(__file__).parents[2] / "spec" / "1.0"
SUITE = Path(__file__).parents[2] / "protobench" / "suite"
TABLES = ("module", "sizes", "times")
ITEMS = [(table, item) for table in TABLES for item in item_tables(CONTRACT)[table]]
MOTION_ITEMS = item_tables(CONTRACT)["motion"]


@cache
def spec(name: str) -> dict[str, Any]:
    return tomllib.loads((SPEC / f"{name}.toml").read_text())


def spec_fields(kind: str) -> dict[str, dict[str, Any]]:
    (row,) = [row for row in spec("kinds")["kind"] if row["name"] == kind]
    return {field["name"]: field for field in row["fields"]}


def link_to(config: ModuleConfig) -> MemoryLink:
    return MemoryLink(ModuleEngine(config, Storage(), random.Random(1), CONTRACT))


@cache
def asked(name: str | None = None) -> tuple[int, Facts]:
    """Address and facts of a sound module of the emulator."""
    config = ModuleConfig() if name is None else CONFIGS[name]
    session = Session(RunOptions(opener=lambda: link_to(config), reads_only=True))
    session.close()
    return session.bench.address, session.bench.facts


def stated(tmp_path: Path, text: str) -> Statement:
    path = tmp_path / "ics.toml"
    path.write_text(text)
    return load_statement(path, CONTRACT)


def lines(findings: list[Finding]) -> list[str]:
    return [str(finding) for finding in findings]


# ---------------------------------------------------------------- the form and the contract's data


def test_every_field_of_a_description_is_an_item_once() -> None:
    items = [item.name for table, item in ITEMS if item.described and item.name != "address"]
    assert sorted([*items, "capabilities", "motions", "epoch", "lease"]) == sorted(spec_fields("description"))
    assert [item.name for item in MOTION_ITEMS] == [
        name for name in spec_fields("motion-description") if name != "motion"
    ]


def test_ranges_are_those_of_the_contract() -> None:
    fields = spec_fields("description") | spec_fields("motion-description")
    sizes = {row["name"]: row["min"] for row in spec("capabilities")["size"]}
    for item in [item for _, item in ITEMS] + list(MOTION_ITEMS):
        if item.name in fields and item.type in ("uint", "int"):
            field = fields[item.name]
            assert (item.low, item.high) == (
                max(field["min"], sizes.get(item.name, field["min"])),
                field["max"],
            )
        elif item.name in sizes:
            assert (item.low, item.described) == (sizes[item.name], False)
    assert {item.name for _, item in ITEMS} >= set(sizes)


@pytest.mark.parametrize(
    ("item", "limit"),
    [("receipt_ms", "receipt_time"), ("starting_ms", "starting_time"), ("stop_ms", "stop_time")],
)
def test_a_time_is_bounded_by_its_limit(item: str, limit: str) -> None:
    (row,) = [row for row in spec("limits")["limit"] if row["name"] == limit]
    (found,) = [known for _, known in ITEMS if known.name == item]
    assert (found.high, found.limit) == (row["max"], limit)
    assert item in row["text"] or item == "receipt_ms"


def test_the_empty_form_states_the_version_and_nothing_else(tmp_path: Path) -> None:
    statement = stated(tmp_path, write_form(CONTRACT))
    assert {name: value for name, value in statement.said.items() if value} == {"contract": "1.0"}
    assert review(statement, CONTRACT) == []
    assert compare(statement, CONTRACT, *asked()) == []


def test_the_empty_form_has_every_item_and_no_line_that_is_too_long() -> None:
    form = write_form(CONTRACT)
    names = re.findall(r"^#([a-z_-]+) = ", form, re.MULTILINE)
    for _, item in ITEMS:
        assert names.count(item.name) == 1
    assert {kind["name"] for kind in spec("kinds")["kind"] if "answer" in kind} <= set(names)
    assert max(map(len, form.splitlines())) <= 110


def test_every_line_of_the_form_can_be_filled_in(tmp_path: Path) -> None:
    """With its examples instead of values the form is TOML, and has no key that a statement does not."""
    text = re.sub(r"^#(?=[a-z_\-]+ = |\[)", "", write_form(CONTRACT), flags=re.MULTILINE)
    with pytest.raises(FileError) as caught:
        stated(tmp_path, text)
    rules = [problem.rule for problem in caught.value.problems]
    assert rules
    assert all("found ''" in rule for rule in rules)


@pytest.mark.parametrize("name", CONFIGS)
def test_a_filled_form_is_found_right(tmp_path: Path, name: str) -> None:
    address, facts = asked(name)
    statement = stated(tmp_path, write_form(CONTRACT, address, facts))
    assert lines(review(statement, CONTRACT)) == []
    assert lines(compare(statement, CONTRACT, address, facts)) == []
    for table, item in ITEMS:
        assert (item.name in statement.table(table)) == item.described
    for told in statement.table("motion").values():
        assert list(told) == [item.name for item in MOTION_ITEMS]
    assert list(statement.table("motion")) == list(facts.motions)


def test_a_motion_that_is_not_described_is_left_empty(tmp_path: Path) -> None:
    address, facts = asked()
    mute = Facts(facts.description, {k: v for k, v in facts.motions.items() if k != "hinge"}, facts.items)
    form = write_form(CONTRACT, address, mute)
    assert "[motion.hinge]\n# The module declares this motion and did not describe it." in form
    assert lines(compare(stated(tmp_path, form), CONTRACT, address, mute)) == [
        "motion.hinge: the module declares it and does not describe it (DSC-02)"
    ]


# ---------------------------------------------------------------- reading


@pytest.mark.parametrize("text", ["", 'capabilities = ["queue"]\n', 'motions = ["pivot", "bond"]\n'])
def test_a_statement_may_be_short(tmp_path: Path, text: str) -> None:
    statement = stated(tmp_path, text)
    assert review(statement, CONTRACT) == []
    assert statement.capabilities == (("queue",) if "queue" in text else None)
    assert statement.motions == (("pivot", "bond") if "pivot" in text else None)


WRONG = [
    ('capabilities = ["queu"]', "capabilities[0]: 'queu' is no capability of the contract; did you mean 'queue'?"),
    ('motions = ["pivot", "Hope"]', "motions[1]: 'Hope' is no motion of the contract; did you mean 'hop'?"),
    ("[motion.pivvot]", "motion.pivvot: 'pivvot' is no motion of the contract; did you mean 'pivot'?"),
    ("[motion.hop]\nlongest = 3", "motion.hop.longest: unknown key; did you mean 'longest_ms'?"),
    ("[size]", "size: unknown key; did you mean 'sizes'?"),
    ("[sizes]\nqueue = true", "sizes.queue: must be a whole number; found True"),
    ("[sizes]\nqueue = 1.5", "sizes.queue: must be a whole number; found 1.5"),
    ("sizes = 3", "sizes: must be a table; found 3"),
    ("[module]\nbuild = 3", "module.build: must be text; found 3"),
    ("[requests]\nhalte = true", "requests.halte: 'halte' is no request of the contract; did you mean 'halt'?"),
    ("[requests]\nreceipt = true", "requests.receipt: 'receipt' is no request of the contract"),
    ('[requests]\nhalt = "yes"', "requests.halt: must be true or false; found 'yes'"),
    ('[clauses]\nnot_kept = ["HLT-99"]', "clauses.not_kept[0]: 'HLT-99' is no clause of the contract; did you mean"),
    ("[testing.restart]", "testing.restart: exactly one of command, line, operator is wanted; found none of them"),
    (
        '[testing.restart]\ncommand = "x"\nline = "dtr"',
        "testing.restart: exactly one of command, line, operator is wanted; found command and line",
    ),
    ('[testing.restart]\nline = "cts"', "testing.restart.line: Input should be 'dtr' or 'rts'; found 'cts'"),
    ("[testing]\nloss_permille = 1001", "testing.loss_permille: Input should be less than or equal to 1000"),
    ('[testing.restart]\ncommand = "a \'b"', "testing.restart.command: must be a command as in a shell (No"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "line"), WRONG, ids=[text for text, _ in WRONG])
def test_what_cannot_be_read_is_named(tmp_path: Path, text: str, line: str) -> None:
    with pytest.raises(FileError) as caught:
        stated(tmp_path, text)
    (found,) = str(caught.value).splitlines()
    assert found.startswith(f"{tmp_path / 'ics.toml'}: {line}")


def test_everything_that_cannot_be_read_is_named_at_once(tmp_path: Path) -> None:
    with pytest.raises(FileError) as caught:
        stated(tmp_path, 'motions = ["fly", "swim"]\n[sizes]\nqueue = "x"\nsesions = 1\n[modul]\n')
    places = [problem.path for problem in caught.value.problems]
    assert places == [("motions", 0), ("motions", 1), ("sizes", "queue"), ("sizes", "sesions"), ("modul",)]


@given(
    st.recursive(
        st.integers() | st.text() | st.booleans() | st.none(), lambda inner: st.lists(inner, max_size=3)
    )
)
def test_whatever_stands_there_is_read_or_refused(
    tmp_path_factory: pytest.TempPathFactory, value: Any
) -> None:
    path = tmp_path_factory.mktemp("ics") / "ics.toml"
    for place in (
        "capabilities",
        "motions",
        "module",
        "sizes.queue",
        "motion.pivot.no_return_ms",
        "testing.restart",
    ):
        path.write_bytes(f"{place} = {value!r}\n".encode("utf-8", "surrogatepass"))
        try:
            statement = load_statement(path, CONTRACT)
        except FileError as error:
            assert all(problem.file == str(path) for problem in error.problems)
        else:
            review(statement, CONTRACT)


# ---------------------------------------------------------------- static review

BROKEN = [
    ('contract = "2.0"', 'contract = "2.0": this is a bench for version 1.0'),
    ('profile = "small"', "profile = \"small\": the contract has the profile 'smallest' only"),
    ('profile = "smallest"\ncapabilities = ["queue"]', "contradicts capabilities, which has queue: The smallest"),
    ('motions = ["hop", "hop"]', "motions: hop is named twice"),
    ("motions = []", "motions = []: a module has at least one motion (DSC-01)"),
    ('motions = ["hop"]\n[motion.slide]', "motion.slide: contradicts motions, which has no slide (DSC-01)"),
    ("[module]\naddress = 0", "module.address = 0: must be 1..4026531839"),
    ("[module]\nmajors = [2]", "module.majors = [2]: major 1 is required (DSC-01)"),
    ("[module]\nmajors = [2, 1]", "module.majors = [2, 1]: must ascend (DSC-01)"),
    ("[module]\nmajors = [0, 1]", "module.majors = [0, 1]: must be at most 8 numbers, each 1..255 (DSC-01)"),
    ("[module]\nminor = 1", "module.minor = 1: this contract is 1.0 (DSC-01)"),
    ('[module]\nhardware_id = "0000000000000000"', "zeros are not unique (DSC-01)"),
    ('[module]\nhardware_id = "12"', 'hardware_id = "12": must be 8 bytes, as 16 hexadecimal digits (DSC-01)'),
    ('[module]\nbuild = "00112233445566zz"', "must be 8 bytes, as 16 hexadecimal digits (DSC-01)"),
    ('[module]\nnature = "toy"', 'module.nature = "toy": must be one of physical, emulated (DSC-01)'),
    ("[module]\nfaces = 7", "module.faces = 7: must be 0..6 (DSC-01)"),
    ("[sizes]\nsessions = 3", "sizes.sessions = 3: must be 4..255 (DSC-06)"),
    ("[sizes]\nanswers = 3", "sizes.answers = 3: must be 4 or more (DSC-06)"),
    ("[times]\nstop_ms = 501", "times.stop_ms = 501: must be 0..500 ms, the limit stop_time (DSC-06)"),
    ("[times]\nreceipt_ms = 0", "times.receipt_ms = 0: must be 1..50 ms, the limit receipt_time (DSC-06)"),
    ("[times]\nreceipt_ms = 5\nturnaround_us = 5001", "contradicts receipt_ms = 5: no answer can come in time"),
    ('capabilities = ["queue"]\n[sizes]\nqueue = 0', "queue = 0: contradicts capabilities, which has queue (DSC-01)"),
    ("capabilities = []\n[sizes]\ngroups = 1", "contradicts capabilities, which does not have groups (DSC-01)"),
    ("capabilities = []\n[sizes]\nscheduled = 1", "contradicts capabilities, which does not have schedule (DSC-01)"),
    ("[motion.hop]\nlongest_ms = 10001", "must be 1..10000 ms, the limit motion_time_longest (DSC-06)"),
    ("[motion.hop]\ntypical_ms = 9\nlongest_ms = 8", "typical_ms = 9: contradicts longest_ms = 8: it is more (DSC-02)"),
    ("[motion.hop]\nno_return_ms = 9\nlongest_ms = 8", "contradicts longest_ms = 8: it is more (DSC-02)"),
    ("[motion.hop]\nmagnitude_min = 1\nmagnitude_max = 0", "contradicts magnitude_max = 0: it is more (DSC-02)"),
    ("[motion.bond]\nmagnitude_max = 1", "magnitude_max = 1: bond has no magnitude; it must be 0 (DSC-02)"),
    ('[motion.hop]\nhalt_category = "cat-3"', "must be one of cat-0, cat-1, cat-2 (DSC-02)"),
    ("[requests]\nhalt = false", "requests.halt = false: is required of every module"),
    ("capabilities = []\n[requests]\nidentify = true", "which does not have identify (DSC-04)"),
    ('capabilities = ["assist"]\n[requests]\nassist = false', "contradicts capabilities, which has assist (DSC-04)"),
    ('[clauses]\nnot_kept = ["SEQ-03"]', "clauses.not_kept: SEQ-03 is required: A number not newer that is stored"),
    ('capabilities = ["assist"]\n[testing]\nassist = false', "assist = false: contradicts capabilities, which has"),
    ("capabilities = []\n[testing]\nassist = true", "contradicts capabilities, which does not have assist (DSC-01)"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "line"), BROKEN, ids=[text for text, _ in BROKEN])
def test_what_the_contract_does_not_allow_is_found(tmp_path: Path, text: str, line: str) -> None:
    (found,) = lines(review(stated(tmp_path, text), CONTRACT))
    assert line in found


@pytest.mark.parametrize(
    "text",
    [
        'capabilities = []\n[clauses]\nnot_kept = ["TEL-01"]',  # binds those with telemetry only
        "[requests]\nidentify = false",
        'profile = "smallest"\ncapabilities = []\nmotions = ["hop"]',
        "capabilities = []\n[sizes]\nqueue = 0\ngroups = 0\nscheduled = 0",
        "[motion.slide]\nmagnitude_min = -5\nmagnitude_max = -1",
        '[testing.restart]\noperator = "Take the cell out and put it in again."\ntakes_ms = 60000',
    ],
)
def test_what_the_contract_leaves_open_is_not_found(tmp_path: Path, text: str) -> None:
    if "TEL-01" in text:
        (clause,) = [row for row in spec("clauses")["clause"] if row.get("needs") == "telemetry"][:1]
        text = text.replace("TEL-01", clause["id"])
    assert lines(review(stated(tmp_path, text), CONTRACT)) == []


NUMBERS = [(table, item) for table, item in ITEMS if item.type == "uint" and item.name != "minor"]
NUMBERS += [("motion.slide", item) for item in MOTION_ITEMS if item.type in ("uint", "int")]


@given(st.sampled_from(NUMBERS), st.integers(-(2**63), 2**63 - 1) | st.integers(-2, 12_000))
def test_a_number_is_found_wrong_outside_its_range_and_only_there(
    place: tuple[str, Item], value: int
) -> None:
    table, item = place
    head, _, motion = table.partition(".")
    told: dict[str, Any] = {item.name: value}
    statement = Statement("ics.toml", "", {head: {motion: told} if motion else told})
    outside = value < (item.low or 0) if item.high is None else not (item.low or 0) <= value <= item.high
    found = [finding.field for finding in review(statement, CONTRACT)]
    assert found == ([f"{table}.{item.name}"] if outside else [])


# ---------------------------------------------------------------- dynamic review


def other(item: Item, value: Any) -> str:
    """TOML of another value of an item."""
    if item.type == "enum":
        return f'"{next(name for name in item.values if name != value)}"'
    if item.type == "bytes":
        return f'"{bytes(byte ^ 0xFF for byte in value).hex()}"'
    return "[1, 7]" if item.type == "list" else str(value + 1)


@pytest.mark.parametrize(("table", "item"), ITEMS, ids=lambda value: getattr(value, "name", value))
def test_each_item_is_held_against_the_module(tmp_path: Path, table: str, item: Item) -> None:
    address, facts = asked()
    value = {**facts.description, "address": address}.get(item.name, 3)
    found = compare(
        stated(tmp_path, f"[{table}]\n{item.name} = {other(item, value)}"), CONTRACT, address, facts
    )
    assert [finding.field for finding in found] == ([f"{table}.{item.name}"] if item.described else [])
    assert all(finding.rule.startswith("the module describes ") for finding in found)


@pytest.mark.parametrize("item", MOTION_ITEMS, ids=lambda item: item.name)
def test_each_item_of_a_motion_is_held_against_the_module(tmp_path: Path, item: Item) -> None:
    address, facts = asked()
    text = f"[motion.pivot]\n{item.name} = {other(item, getattr(facts.motions['pivot'], item.name))}"
    (found,) = compare(stated(tmp_path, text), CONTRACT, address, facts)
    assert (found.field, found.clause) == (f"motion.pivot.{item.name}", item.clause)


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("capabilities = []", [f"capability {c.name} is described and not stated" for c in CONTRACT.capabilities]),
        ('motions = ["pivot", "hinge", "bond", "unbond", "hop"]', ["motion hop is stated and not described"]),
        ('motions = ["pivot", "hinge", "bond"]', ["motion unbond is described and not stated"]),
        ("[motion.hop]\nlongest_ms = 5", ["motion.hop: the module describes no such motion (DSC-01)"]),
        ("[testing]\nassist = false", ["testing.assist = false: the capability assist is described (DSC-01)"]),
        ('[module]\nhardware_id = "E000000000000001"', []),
    ],
)  # fmt: skip
def test_lists_are_held_against_the_module(tmp_path: Path, text: str, found: list[str]) -> None:
    differences = sorted(lines(compare(stated(tmp_path, text), CONTRACT, *asked())))
    assert len(differences) == len(found)
    assert all(part in line for part, line in zip(sorted(found), differences, strict=True))


# ---------------------------------------------------------------- a run beside a statement


def test_nothing_is_opened_for_a_statement_that_breaks_the_contract(tmp_path: Path) -> None:
    def never() -> MemoryLink:
        raise AssertionError("opened")

    statement = stated(tmp_path, "[times]\nstop_ms = 900\n[sizes]\nsessions = 1")
    with pytest.raises(StatementDiffers) as caught:
        run_suite(RunOptions(opener=never, statement=statement))
    assert str(caught.value).splitlines() == [
        f"{statement.file}: sizes.sessions = 1: must be 4..255 (DSC-06)",
        f"{statement.file}: times.stop_ms = 900: must be 0..500 ms, the limit stop_time (DSC-06)",
    ]


def test_a_module_that_differs_is_only_read(tmp_path: Path) -> None:
    sent: list[str] = []

    class Log:
        def frame(self, time_ns: int, direction: str, data: bytes, meaning: str) -> None:
            if direction == "->":
                sent.append(meaning.split(maxsplit=1)[0])

        def note(self, time_ns: int, text: str) -> None:
            raise AssertionError(text)

    statement = stated(tmp_path, "[times]\nstop_ms = 400")
    with pytest.raises(
        StatementDiffers, match=r"module 1 contradicts its statement:\n.*the module describes 50"
    ):
        run_suite(RunOptions(statement=statement, only="VER"), log=Log())
    assert sent
    assert {CONTRACT.kind(kind).class_ for kind in sent} == {"read"}


def test_the_address_of_the_statement_is_asked(tmp_path: Path) -> None:
    def opener() -> MemoryLink:
        return link_to(ModuleConfig().at(77))

    statement = stated(tmp_path, "[module]\naddress = 77")
    record = run_suite(RunOptions(opener=opener, statement=statement, only="VER.unknown-kind"))
    assert record.iut["address"] == 77
    assert record.environment["statement"] == statement.file
    assert re.fullmatch("[0-9a-f]{64}", str(record.environment["statement_sha256"]))


def unused(bench: object) -> None:
    raise AssertionError


def needing(needs: str, level: str = "required") -> CaseInfo:
    return CaseInfo("LOD.invented", level, "valid", "Purpose.", ("LOD-01",), needs, unused)


@pytest.mark.parametrize(
    ("config", "text", "needs", "reason"),
    [
        ("without-queue", "{all}", "queue", "needs queue (ics.toml: capabilities)"),
        ("without-queue", "", "queue", "needs queue (by the module's description, ics.toml does not say)"),
        (None, "{all}", "not queue", "only without queue (ics.toml: capabilities)"),
        ("one-way-slide", "{all}", "bonds", "needs bonds (ics.toml: module.faces, motions)"),
        ("one-way-slide", "{all}", "ballistic", "needs ballistic (ics.toml: motion.*.no_return_ms)"),
        ("one-way-slide", "[module]\nfaces = 0", "bonds", "needs bonds (ics.toml: module.faces)"),
        ("smallest", "{all}", "restart", "needs restart (ics.toml: capabilities)"),
        ("smallest", '[testing.restart]\nline = "dtr"', "restart",
         "needs restart (ics.toml: testing.restart is used with --restart only)"),
        ("smallest", '[testing.restart]\noperator = "Pull the plug."', "restart",
         "needs restart (ics.toml: testing.restart names an operator, whom the bench does not ask)"),
        (None, "{all}", "gaps and stream", "needs gaps (a matter of the link); needs stream (a matter of the link)"),
    ],
)  # fmt: skip
def test_what_is_not_applicable_names_the_item(
    tmp_path: Path, config: str | None, text: str, needs: str, reason: str
) -> None:
    address, facts = asked(config)
    items = facts.items - {"gaps", "stream"}
    statement = stated(tmp_path, text.replace("{all}", write_form(CONTRACT, address, facts)))
    found = why_not(needing(needs), items, statement, CONTRACT)
    assert found is not None
    assert found.startswith(reason.replace("ics.toml", statement.file))
    assert why_not(needing(needs), items, None, CONTRACT) == re.sub(r" \([^)]*\)", "", reason)


def test_a_run_says_it_in_its_report(tmp_path: Path) -> None:
    statement = stated(tmp_path, write_form(CONTRACT, *asked("without-telemetry")))
    opener = partial(link_to, CONFIGS["without-telemetry"])
    record = run_suite(RunOptions(opener=opener, statement=statement, only="TEL or telemetry"))
    left_out = [case.reason for case in record.cases if case.verdict == "not_applicable"]
    assert set(left_out) == {f"needs telemetry ({statement.file}: capabilities)"}


@pytest.mark.parametrize(
    ("item", "form", "shown"),
    [
        ("sizes.queue", "[sizes]\nqueue = 1", True),
        ("sizes.queue", "[sizes]\nfaults = 9", False),
        ("motions", 'motions = ["hop"]', True),
        ("motion.*.magnitude_max", "[motion.hop]\nmagnitude_max = 1", True),
        (None, "[sizes]\nqueue = 1", False),
    ],
)
def test_what_a_case_finds_missing_names_the_item_too(
    tmp_path: Path, item: str | None, form: str, shown: bool
) -> None:
    statement = stated(tmp_path, form)
    why = NotApplicable("too little", item=item)
    assert with_item(why, statement) == "too little" + (f" ({statement.file}: {item})" if shown else "")
    assert with_item(why, None) == "too little"


def test_a_run_names_the_item_of_what_a_case_finds_missing(tmp_path: Path) -> None:
    statement = stated(tmp_path, write_form(CONTRACT, *asked()))
    (case,) = run_suite(RunOptions(statement=statement, only="DSC.unsupported")).cases
    assert case.reason == f"the module declares every capability ({statement.file}: capabilities)"


def test_the_items_that_cases_name_are_items() -> None:
    known = {f"{table}.{item.name}" for table, item in ITEMS} | {"capabilities", "motions"}
    known |= {f"motion.*.{item.name}" for item in MOTION_ITEMS}
    source = "".join(path.read_text() for path in SUITE.glob("test_*.py"))
    named = re.findall(r'NotApplicable\([^\n]*item="([^"]+)"', source)
    assert named
    assert set(named) <= known


def test_every_item_of_the_contract_has_a_source() -> None:
    assert {row["name"] for row in spec("capabilities")["item"]} <= set(FOLLOWS_FROM)


def test_a_recommended_case_is_left_out_where_its_clause_is_not_kept(tmp_path: Path) -> None:
    statement = stated(tmp_path, '[clauses]\nnot_kept = ["LOD-01"]')
    reason = f"LOD-01 not kept ({statement.file}: clauses.not_kept)"
    assert why_not(needing("", "recommended"), (), statement, CONTRACT) == reason
    assert why_not(needing("", "required"), (), statement, CONTRACT) is None
    assert why_not(needing("", "recommended"), (), None, CONTRACT) is None
