"""The run as JUnit XML, in the shape that pytest writes; there is no standard behind the name.

``inconc``, what does not apply, and known deviations are ``skipped`` with a type that says which, since the format has
no word for them; ``error`` is the bench's own. An entry of the list of known deviations that the run has shown wrong
is a failed test case of class ``deviations``.
"""

from __future__ import annotations

import xml.etree.ElementTree as ET

from protobench.evidence.text import clean
from protobench.judge import CaseRecord, DeviationRecord, RunRecord

_ELEMENTS = {
    "fail": "failure",
    "error": "error",
    "inconc": "skipped",
    "not_applicable": "skipped",
    "known_deviation": "skipped",
}


def junit_xml(record: RunRecord) -> bytes:
    """The document, UTF-8 with a declaration."""
    skipped = sum(record.count(word) for word, element in _ELEMENTS.items() if element == "skipped")
    stale = [entry for entry in record.deviations or () if entry.stale]
    counts = {
        "tests": str(len(record.cases) + len(stale)),
        "failures": str(record.count("fail") + len(stale)),
        "errors": str(record.count("error")),
        "skipped": str(skipped),
        "time": f"{sum(case.duration_s for case in record.cases):.3f}",
    }
    root = ET.Element("testsuites", {"name": "protobench"})
    suite = ET.SubElement(root, "testsuite", {"name": f"protobench {record.contract}", **counts})
    properties = ET.SubElement(suite, "properties")
    facts: dict[str, object] = {"seed": record.seed, **record.environment}
    if record.stopped is not None:
        facts["stopped"] = record.stopped
    for name, value in facts.items():
        ET.SubElement(properties, "property", {"name": name, "value": clean(str(value))})
    for case in record.cases:
        _add_case(suite, case)
    for entry in stale:
        _add_stale(suite, entry)
    ET.indent(root)
    document: bytes = ET.tostring(root, encoding="utf-8", xml_declaration=True)
    return document


def _add_case(suite: ET.Element, case: CaseRecord) -> None:
    attributes = {"classname": case.id.partition(".")[0], "name": case.id, "time": f"{case.duration_s:.3f}"}
    element = ET.SubElement(suite, "testcase", attributes)
    properties = ET.SubElement(element, "properties")
    for name, value in (
        ("verdict", case.verdict),
        ("level", case.level),
        ("clauses", " ".join(case.clauses)),
    ):
        ET.SubElement(properties, "property", {"name": name, "value": value})
    tag = _ELEMENTS.get(case.verdict)
    if tag is not None:
        outcome = ET.SubElement(element, tag, {"type": case.verdict, "message": clean(case.reason)})
        outcome.text = clean("\n".join(text for text in (case.detail, case.replay) if text))


def _add_stale(suite: ET.Element, entry: DeviationRecord) -> None:
    element = ET.SubElement(
        suite, "testcase", {"classname": "deviations", "name": entry.case, "time": "0.000"}
    )
    outcome = ET.SubElement(element, "failure", {"type": entry.state, "message": clean(entry.message)})
    outcome.text = clean(f"listed by {entry.owner} until {entry.expires}: {entry.reason}")
