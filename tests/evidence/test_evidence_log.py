"""The conformance log: one line an entry, times from the first."""

from __future__ import annotations

import io

from protobench.evidence import ConformanceLog


def test_lines() -> None:
    stream = io.StringIO()
    log = ConformanceLog(stream)
    log.header(contract="a contract 1.0", seed=4)
    log.case_begins("LSE.take")
    log.frame(5_000_000_000, "->", b"\x01\xff", "halt\nto all")
    log.frame(5_001_500_000, "<-", b"", "nothing")
    log.note(6_000_000_000, "the link   was reopened")
    log.case_ends("LSE.take", "fail", "first\nsecond")
    log.case_ends("LSE.free", "pass", "")
    assert stream.getvalue().splitlines() == [
        "# contract: a contract 1.0",
        "# seed: 4",
        "# case LSE.take begins",
        "      0.000000 -> halt to all | 01ff",
        "      0.001500 <- nothing | ",
        "      1.000000 .. the link was reopened",
        "# case LSE.take ends: fail (first second)",
        "# case LSE.free ends: pass",
    ]
