"""Rules for every test of this project."""

from __future__ import annotations

import os
from collections.abc import Generator

import pytest
from hypothesis import settings

settings.register_profile("project", deadline=None, print_blob=True)
settings.load_profile("project")


def _in_ci() -> bool:
    return os.environ.get("CI", "").lower() == "true"


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport(
    item: pytest.Item, call: pytest.CallInfo[None]
) -> Generator[None, pytest.TestReport, pytest.TestReport]:
    """With CI=true, a skipped test is a failed one: there, every tool that a test wants must be installed."""
    report = yield
    if report.skipped and not hasattr(report, "wasxfail") and _in_ci():
        reason = report.longrepr[2] if isinstance(report.longrepr, tuple) else str(report.longrepr)
        report.outcome = "failed"
        report.longrepr = f"{item.nodeid} was skipped, which CI does not allow: {reason}"
    return report


@pytest.hookimpl(wrapper=True)
def pytest_make_collect_report(
    collector: pytest.Collector,
) -> Generator[None, pytest.CollectReport, pytest.CollectReport]:
    """The same for a module that skips itself while it is collected."""
    report = yield
    if report.skipped and _in_ci():
        report.outcome = "failed"
        report.longrepr = f"{collector.nodeid} was skipped while collecting, which CI does not allow"
    return report
