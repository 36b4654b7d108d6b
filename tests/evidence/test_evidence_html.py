"""The page: what must stand on it, that it needs nothing else, that it stays small and that text stays text."""

from __future__ import annotations

import hashlib
import itertools
import re
from pathlib import Path

import pytest
from exchanges import MODULE_ADDRESS, A, frame, received, sent
from pages import CONTRACT, Element, page_of, parse
from records import NASTY, case, run

from protobench.evidence.identity import contract_digest, digest_of, file_digest
from protobench.judge import DeviationRecord, Exchange, RunRecord

HOSTILE = "</script></style><script>alert(1)</script><img src=http://x.test/ onerror=alert(1)>{{ 7*7 }}"
SIZE_MAX = 3_000_000


def rows(table: Element) -> list[list[str]]:
    return [
        [" ".join(cell.text.split()) for cell in row.parts if isinstance(cell, Element)]
        for row in table.all("tr")
    ]


def table_of(page: Element, heading: str) -> Element:
    section = next(one for one in page.all("section") if one.attributes.get("aria-labelledby") == heading)
    return section.all("table")[0]


def exchange() -> list[Exchange]:
    return [
        sent(0, frame("status", source=A, number=5)),
        received(1, frame("receipt", source=MODULE_ADDRESS, destination=A, number=5, result=0)),
    ]


# ---------------------------------------------------------------- contents


def test_identity(tmp_path: Path) -> None:
    listed = tmp_path / "known.toml"
    listed.write_bytes(b"deviation = []\n")
    record = run()
    record.environment |= {"statement": "my.toml", "statement_sha256": "ab" * 32}
    page = page_of(record, attended=True, files={"list of known deviations": listed})
    facts = dict(definitions(parse(page)))
    assert facts["seed"] == "42"
    assert facts["link"] == "memory:"
    assert facts["time basis"] == "virtual time"
    assert facts["date"] == "2026-05-04 12:30:00+00:00"
    assert facts["attended"] == "yes, someone stood by"
    assert facts["nature"] == "emulated"
    assert facts["digest of its tables"] == contract_digest("1.0")
    assert (
        facts["list of known deviations"]
        == f"known.toml, digest {hashlib.sha256(listed.read_bytes()).hexdigest()}"
    )
    assert re.fullmatch("[0-9a-f]{64}", facts["digest of its sources"])
    assert (facts["conformance statement"], facts["digest of the statement"]) == ("my.toml", "ab" * 32)


def test_bit_sets_are_told_by_name() -> None:
    record = run()
    record.iut |= {"capabilities": 0b101, "motions": 0}
    facts = dict(definitions(parse(page_of(record))))
    names = {capability.number: capability.name for capability in CONTRACT.capabilities}
    assert facts["capabilities"] == f"{names[0]}, {names[2]}"
    assert facts["motions"] == "none"


def definitions(page: Element) -> list[tuple[str, str]]:
    return [(name.text, value.text) for name, value in zip(page.all("dt"), page.all("dd"), strict=True)]


def test_cautions_and_self_report() -> None:
    record = run()
    page = parse(page_of(record, assisted=frozenset({"LSE.a"})))
    assert "CAUTION: it may move." in page.text
    assert "self-report" in page.text
    row = next(row for row in rows(table_of(page, "clauses")) if row[0] == "LSE-01")
    assert "LSE.a pass (uses assist)" in row[5]


def test_areas() -> None:
    (row,) = rows(table_of(parse(page_of(run())), "areas"))[1:]
    own = sum(clause.area == "LSE" for clause in CONTRACT.clauses)
    assert row == ["LSE Lease", "1", "1", "1", "1", "2", f"4 of {own}"]


def test_every_clause_stands_there_with_its_verdict() -> None:
    table = {row[0]: row for row in rows(table_of(parse(page_of(run())), "clauses")) if len(row) == 6}
    assert set(table) == {"clause", *(clause.id for clause in CONTRACT.clauses)}
    assert table["LSE-01"][4:] == ["pass", "LSE.a pass LSE.f not applicable".replace("pass LSE", "passLSE")]
    assert table["LSE-02"][4] == "fail"
    assert table["LSE-05"][4:] == [
        "not judged",
        "its cases do not apply to this module or link LSE.e not applicable",
    ]
    assert table["SEQ-01"][4:] == ["not judged", "no case of this run"]
    hidden = next(clause for clause in CONTRACT.clauses if not clause.observable)
    assert table[hidden.id][4:] == ["not judged", "cannot be observed on a link"]
    for clause in CONTRACT.clauses:
        assert table[clause.id][2:4] == [clause.level, clause.subject]
        assert table[clause.id][1] == " ".join(clause.text.replace("`", "").split())


def test_cases_not_applicable_name_the_item() -> None:
    assert rows(table_of(parse(page_of(run())), "left-out"))[1:] == [
        ["LSE.e", "A purpose.", "no queue"],
        ["LSE.f", "A purpose.", "no queue"],
    ]
    nothing = RunRecord("c", 1, cases=[case("LSE.a", "pass", "LSE-01")])
    assert "Every case of this run applied." in parse(page_of(nothing)).text


def test_a_failure_is_told_whole() -> None:
    record = RunRecord("c", 1, {"address": MODULE_ADDRESS})
    failed = case(
        "LSE.b", "fail", "LSE-01", "LSE-02", reason="LSE-02: late", replay="protobench check --only LSE.b"
    )
    failed.broken, failed.exchange = ("LSE-02",), exchange()
    record.cases.append(failed)
    article = parse(page_of(record)).by_id("case-LSE.b")
    assert [
        line.text.split()[0] for line in article.all("p") if "clause" in line.attributes.get("class", "")
    ] == [
        "LSE-02",
        "LSE-01",
    ]
    assert CONTRACT.clause("LSE-02").text.replace("`", "") in article.text
    (chart,) = article.all("svg", role="img")
    assert "receipt #5" in chart.text
    assert "fail: LSE-02: late" in chart.text
    (frames,) = article.all("table")
    assert [row[0] for row in rows(frames)] == ["ms", "0.000", "1.000"]
    assert exchange()[1].data.hex(" ") in frames.text
    assert exchange()[1].words in frames.text
    assert article.all("code")[-1].text == "protobench check --only LSE.b"


def test_a_long_failure_says_what_is_left_out() -> None:
    failed = case("LSE.b", "fail", "LSE-02", reason="LSE-02: late")
    failed.exchange = [sent(number, frame("status", source=A, number=number)) for number in range(500)]
    article = parse(page_of(RunRecord("c", 1, cases=[failed]))).by_id("case-LSE.b")
    assert (
        "the last 40 frames; 460 before them are left out here and stand in conformance.log" in article.text
    )
    assert "status #499" in article.text
    assert "status #459 " not in article.text


def test_a_failure_of_which_only_the_text_is_kept() -> None:
    article = parse(page_of(run())).by_id("case-LSE.b")
    assert article.all("pre")[0].text == "-> one\n<- two"


def test_known_deviations() -> None:
    record = RunRecord("c", 1, cases=[case("LSE.b", "known_deviation", "LSE-02", reason="LSE-02: late")])
    record.deviations = [
        DeviationRecord(
            "LSE.b", None, "mended soon", "firmware team", "2027-01-31", "known", "fails as listed"
        )
    ]
    page = parse(page_of(record))
    assert rows(table_of(page, "deviations"))[1] == [
        "LSE.b", "any", "mended soon (firmware team)", "2027-01-31", "known fails as listed"
    ]  # fmt: skip
    assert "Nothing failed but what the list of known deviations expects." in page.text


@pytest.mark.parametrize(
    ("verdicts", "stopped", "sentence"),
    [
        (("pass",), None, "Nothing failed, and all that applies"),
        (("pass", "inconc"), None, "Nothing failed, and not everything could be shown"),
        (("pass", "error"), None, "The bench itself failed"),
        ((), None, "nothing was judged"),
        (("error", "fail"), None, "does not keep the contract"),
        (("pass",), "interrupted", "The run was stopped (interrupted)."),
    ],
)
def test_outcome(verdicts: tuple[str, ...], stopped: str | None, sentence: str) -> None:
    cases = [case(f"LSE.{number}", verdict, "LSE-01") for number, verdict in enumerate(verdicts)]
    page = parse(page_of(RunRecord("c", 1, cases=cases, stopped=stopped)))
    (outcome,) = page.all("section", **{"aria-label": "Outcome"})
    assert sentence in outcome.text


def test_parts_of_the_report_that_the_page_does_not_know() -> None:
    more = {
        "states": {"method": "W", "sequences": 120},
        "statistics": [{"case": "ADR.x", "false fail": 1e-9}, {"case": "ADR.y", "n": 300}],
        "remarks": ["one", "two"],
        "empty": [],
    }
    page = parse(page_of(run(), more))
    assert rows(table_of(page, "more-1")) == [["method", "W"], ["sequences", "120"]]
    assert rows(table_of(page, "more-2")) == [
        ["case", "false fail", "n"],
        ["ADR.x", "1e-09", ""],
        ["ADR.y", "", "300"],
    ]
    assert rows(table_of(page, "more-3")) == [["1", "one"], ["2", "two"]]
    assert not page.all(id="more-4")


# ---------------------------------------------------------------- form


def hostile_run(cases: int = 1, frames: int = 3) -> RunRecord:
    record = RunRecord(
        HOSTILE, 1, {"address": 1, HOSTILE: HOSTILE, "nature": NASTY}, {"link": HOSTILE, HOSTILE: HOSTILE}
    )
    for number in range(cases):
        text = f"{HOSTILE} {NASTY} \u202e " * 50
        failed = case(f"LSE.{number}", "fail", "LSE-01", reason=text, detail=text, replay=text)
        failed.exchange = [
            Exchange(step * 30_000_000, "<-", b"<script>" * 60, text) for step in range(frames)
        ]
        record.cases.append(failed)
    record.cases.append(case("LSE.left-out", "not_applicable", "LSE-02", reason=HOSTILE))
    return record


def test_text_stays_text() -> None:
    page = page_of(hostile_run(), {"odd": [{HOSTILE: HOSTILE}, {HOSTILE: NASTY}]}, cautions=HOSTILE)
    page.encode()
    root = parse(page)
    assert not root.all("script")
    assert not root.all("img")
    assert len(root.all("style")) == 1
    assert not any(name.startswith("on") for element in root.all() for name in element.attributes)
    assert "{{ 7*7 }}" in root.text
    assert not set(page) & set("\0\x1b\u202e\ufffe\ud800")


@pytest.mark.parametrize(
    "record", [run(), hostile_run(), RunRecord("c", 1)], ids=["plain", "hostile", "empty"]
)
def test_nothing_is_loaded_and_every_reference_is_met(record: RunRecord) -> None:
    page = page_of(record)
    root = parse(page)
    idents = [element.attributes["id"] for element in root.all() if "id" in element.attributes]
    assert len(idents) == len(set(idents))
    for element in root.all():
        assert "src" not in element.attributes
        for name in ("href", "xlink:href"):
            target = element.attributes.get(name)
            assert target is None or target == "data:," or target.removeprefix("#") in idents, target
        for ident in element.attributes.get("aria-labelledby", "").split():
            assert ident in idents
    assert "url(" not in page
    assert "@import" not in page


def test_those_who_do_not_see_it_are_told_the_same() -> None:
    root = parse(page_of(run()))
    (html,) = root.all("html")
    assert html.attributes["lang"] == "en"
    for table in root.all("table"):
        assert all(head.attributes.get("scope") for head in table.all("th"))
        assert table.all("th")
    for picture in root.all("svg"):
        named = {"aria-label", "aria-labelledby"} & set(picture.attributes)
        assert named or picture.attributes["aria-hidden"] == "true"
    for verdict in root.all("span"):
        if verdict.attributes.get("class", "").startswith("v "):
            assert verdict.text.strip()
            assert verdict.all("svg")
    levels = [int(element.tag[1]) for element in root.all() if re.fullmatch("h[1-4]", element.tag)]
    assert levels[0] == 1
    assert all(after <= before + 1 for before, after in itertools.pairwise(levels))


def test_the_page_stays_small_when_everything_fails() -> None:
    page = page_of(hostile_run(cases=240, frames=300))
    assert len(page.encode()) < SIZE_MAX
    assert len(parse(page).all("svg", role="img")) >= 240


def test_the_same_run_makes_the_same_page() -> None:
    assert page_of(run()) == page_of(run())


# ---------------------------------------------------------------- digests


def test_a_digest_tells_contents_and_names_apart(tmp_path: Path) -> None:
    seen = set()
    for names in (("a.py", "b.py"), ("a.py", "c.py"), ("ab.py", "py")):
        root = tmp_path / "".join(names)
        root.mkdir()
        for name in names:
            (root / name).write_text("x = 1\n")
        (root / "left out.txt").write_text("y")
        seen.add(digest_of(root, "*.py"))
    first = tmp_path / "a.pyb.py"
    assert digest_of(first, "*.py") in seen
    (first / "a.py").write_text("x = 2\n")
    assert digest_of(first, "*.py") not in seen
    assert len(seen) == 3
    assert file_digest(tmp_path / "none") == ""
