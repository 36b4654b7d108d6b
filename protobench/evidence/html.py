"""``report.html``: one page with all that a run left, that needs no network, no script and no other file.

Whatever a module, a file or a case wrote is hostile text: it is cut, stripped of what cannot be read, and escaped.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup, escape

from protobench.contract import Contract
from protobench.evidence import failures, identity, matrix, plots
from protobench.evidence.text import cut, cut_block
from protobench.judge import NOT_APPLICABLE, RunRecord

TEMPLATES = Path(__file__).resolve().parent / "templates"
ROWS_MAX = 200  # of a table made of values that this page knows nothing about
VALUE_MAX = 300
ROW_NAMES = {
    "items": "conditions that hold",
    "statement": "conformance statement",
    "statement_sha256": "digest of the statement",
}
KNOWN = {"contract", "seed", "iut", "environment", "summary", "cases", "clauses", "stopped", "deviations"}
WORDS = {
    "pass": "pass",
    "fail": "fail",
    "inconc": "inconc",
    "error": "error",
    "known_deviation": "known deviation",
    "not_applicable": "not applicable",
    "none": "not judged",
}


@dataclass(frozen=True, slots=True)
class Particulars:
    """What the record does not hold.

    ``written``: time of the report; ``attended``: whether someone stood by; ``cautions``: what must be read before
    hardware may move; ``files``: what the run was given, by purpose; ``addresses``: names of the bench's own;
    ``assisted``: ids of cases that use assist; ``log``: name of the conformance log beside the page.
    """

    written: datetime
    attended: bool = False
    cautions: str = ""
    files: Mapping[str, Path] = field(default_factory=dict)
    addresses: Mapping[int, str] = field(default_factory=dict)
    assisted: frozenset[str] = frozenset()
    log: str = "conformance.log"


def html_report(
    record: RunRecord, report: Mapping[str, Any], contract: Contract, particulars: Particulars
) -> str:
    """The page. ``report``: as :func:`protobench.evidence.build_report` made it of ``record``."""
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(TEMPLATES), autoescape=True, undefined=jinja2.StrictUndefined,
        trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip
    environment.filters["cut"] = lambda value, length=VALUE_MAX: cut(str(value), length)
    environment.filters["block"] = lambda value, length=2000: cut_block(str(value), length)
    environment.filters["prose"] = prose
    environment.globals["words"] = WORDS
    page = environment.get_template("report.html.j2").render(
        style=Markup((TEMPLATES / "report.css").read_text(encoding="utf-8")),  # noqa: S704 - our own file
        title=title_of(record),
        record=record,
        outcome=outcome_of(record),
        particulars=particulars,
        identity=identity_rows(record, contract, particulars),
        counts=[(word, record.count(word)) for word in WORDS if record.count(word)],
        areas=matrix.areas(record, contract),
        columns=[word for word in WORDS if word not in ("none", "known_deviation") or record.count(word)],
        matrix=matrix.clauses(record, report, contract, particulars.assisted),
        titles={area.code: f"{area.code} {area.title}" for area in contract.areas},
        left_out=[case for case in record.cases if case.verdict == NOT_APPLICABLE],
        failures=failures.failures(record, contract, particulars.addresses),
        timings=plots.timings(record),
        deviations=report.get("deviations"),
        more=[extra(name, value) for name, value in report.items() if name not in KNOWN and value],
    )
    return page + "\n"


def prose(text: str) -> Markup:
    """Text in which what stands between back quotes is a name of the contract."""
    return Markup("").join(
        Markup("<code>{}</code>").format(part) if place % 2 else escape(part)
        for place, part in enumerate(text.split("`"))
    )


def title_of(record: RunRecord) -> str:
    """Whom the page is about."""
    return cut(f"module {record.iut.get('address', '?')}, {record.contract}", 120)


def outcome_of(record: RunRecord) -> tuple[str, str]:
    """Verdict's word and a sentence for the whole run, by the rules of the exit status."""
    if record.stopped:
        return "error", f"The run was stopped ({cut(record.stopped, 200)}). What follows is a part of it."
    stale = [entry for entry in record.deviations or () if entry.stale]
    if record.count("fail") or stale:
        return "fail", "The module does not keep the contract where the cases named below looked."
    judged = sum(record.count(word) for word in ("pass", "inconc", "known_deviation"))
    if record.count("error") or not judged:
        return "error", "The bench itself failed, or nothing was judged. This says nothing about the module."
    if record.count("inconc"):
        return "inconc", "Nothing failed, and not everything could be shown."
    if record.count("known_deviation"):
        return "known_deviation", "Nothing failed but what the list of known deviations expects."
    return "pass", "Nothing failed, and all that applies to this module was judged."


def identity_rows(
    record: RunRecord, contract: Contract, particulars: Particulars
) -> list[tuple[str, list[tuple[str, str]]]]:
    """Module, contract, bench and run, each with its facts."""
    environment = dict(record.environment)
    bench = [
        ("version", _value(environment.pop("bench", ""))),
        ("digest of its sources", identity.bench_digest()),
    ]
    run: list[tuple[str, str]] = [
        ("date", particulars.written.isoformat(sep=" ", timespec="seconds")),
        ("link", _value(environment.pop("link", ""))),
        ("time basis", f"{_value(environment.pop('time', ''))} time"),
        ("seed", str(record.seed)),
        ("attended", "yes, someone stood by" if particulars.attended else "no"),
        ("processors", str(os.cpu_count() or "unknown")),
        *((_row_name(name), _value(value)) for name, value in environment.items()),
    ]
    for purpose, path in particulars.files.items():
        run.append(
            (purpose, f"{cut(path.name, 100)}, digest {identity.file_digest(path) or 'not to be had'}")
        )
    data = [
        ("name", contract.name),
        ("version", contract.version),
        ("digest of its tables", identity.contract_digest(contract.version)),
    ]
    return [
        ("Run", run),
        ("Contract", data),
        ("Bench", bench),
        ("Module, as it describes itself", _module_rows(record.iut, contract)),
    ]


def _row_name(name: str) -> str:
    return cut(ROW_NAMES.get(name, name.replace("_", " ")), 80)


def _module_rows(iut: Mapping[str, object], contract: Contract) -> list[tuple[str, str]]:
    bits = {
        "capabilities": {capability.number: capability.name for capability in contract.capabilities},
        "motions": {number: name for name, number in contract.enum_values("motion").items()},
    }
    rows = []
    for name, value in iut.items():
        shown = _value(value)
        if name in bits and isinstance(value, int):
            shown = ", ".join(word for bit, word in bits[name].items() if value >> bit & 1) or "none"
        rows.append((_row_name(name), shown))
    return rows


def _value(value: object) -> str:
    if isinstance(value, list | tuple):
        return cut(", ".join(str(item) for item in value), VALUE_MAX)
    if isinstance(value, dict):
        return cut(", ".join(f"{name} {item}" for name, item in value.items()), VALUE_MAX)
    return cut(str(value), VALUE_MAX)


def extra(name: str, value: object) -> dict[str, Any]:
    """A part of the report that this page knows only by its shape: a table of rows, or names with values."""
    whole = value if isinstance(value, list) else [value]
    part = {"title": name.replace("_", " ").capitalize(), "columns": [], "cut": max(0, len(whole) - ROWS_MAX)}
    shown = whole[:ROWS_MAX]
    records = [row for row in shown if isinstance(row, dict)]
    if len(records) < len(shown):
        return {**part, "rows": [[str(place + 1), _value(row)] for place, row in enumerate(shown)]}
    if len(records) == 1:
        return {**part, "rows": [[key.replace("_", " "), _value(item)] for key, item in records[0].items()]}
    columns = list(dict.fromkeys(str(key) for row in records for key in row))
    return {
        **part,
        "columns": columns,
        "rows": [[_value(row.get(key, "")) for key in columns] for row in records],
    }
