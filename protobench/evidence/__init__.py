"""What a run leaves for a review: report, JUnit XML, conformance log."""

from protobench.evidence.junit import junit_xml
from protobench.evidence.log import ConformanceLog
from protobench.evidence.report import build_report

__all__ = ["ConformanceLog", "build_report", "junit_xml"]
