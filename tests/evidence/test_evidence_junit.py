"""JUnit XML: well-formed whatever the text, with the right counts."""

from __future__ import annotations

import xml.etree.ElementTree as ET

from hypothesis import given
from hypothesis import strategies as st
from records import case, run

from protobench.evidence import junit_xml
from protobench.judge import RunRecord


def suite_of(record: RunRecord) -> ET.Element:
    suite = ET.fromstring(junit_xml(record)).find("testsuite")
    assert suite is not None
    return suite


def test_counts_and_elements() -> None:
    suite = suite_of(run())
    counts = {name: suite.attrib[name] for name in ("tests", "failures", "errors", "skipped", "time")}
    assert counts == {"tests": "6", "failures": "1", "errors": "1", "skipped": "3", "time": "1.500"}
    found = {
        element.attrib["name"]: [child.tag for child in element if child.tag != "properties"]
        for element in suite.iter("testcase")
    }
    assert found == {
        "LSE.a": [],
        "LSE.b": ["failure"],
        "LSE.c": ["skipped"],
        "LSE.d": ["error"],
        "LSE.e": ["skipped"],
        "LSE.f": ["skipped"],
    }
    failure = suite.find("testcase[@name='LSE.b']/failure")
    assert failure is not None
    assert failure.text == "-> one\n<- two\nprotobench check"
    seed = suite.find("properties/property[@name='seed']")
    assert seed is not None
    assert seed.attrib["value"] == "42"


TEXT = st.text(
    st.characters() | st.sampled_from("\0\x1b\r\x85\ud800\udfff\ufffe\uffff\U0010ffff&<]"), max_size=40
)


@given(TEXT)
def test_any_reason_makes_a_document_that_can_be_read(text: str) -> None:
    record = RunRecord("c", 1, environment={"link": text})
    record.cases.append(case("LSE.a", "fail", reason=text, detail=text, replay=text))
    suite = suite_of(record)
    assert suite.find("testcase/failure") is not None
