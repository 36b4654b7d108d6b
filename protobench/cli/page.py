"""The readable report of a run: what the command line knows beside the record, and the file itself."""

from __future__ import annotations

import re
from collections.abc import Mapping
from datetime import datetime
from pathlib import Path
from typing import Any

from protobench.cli.cautions import CAUTIONS
from protobench.contract import load_contract
from protobench.judge import RunRecord
from protobench.suite import run
from protobench.suite.bench import CONTROLLER_A, CONTROLLER_B, KEEPER
from protobench.suite.options import RunOptions

NAME = "report.html"
ADDRESSES = {CONTROLLER_A: "controller A", CONTROLLER_B: "controller B", KEEPER: "keeper"}


def write_page(
    record: RunRecord, report: Mapping[str, Any], options: RunOptions, files: Mapping[str, Path | None]
) -> None:
    """Write ``report.html`` into the folder of the run. ``files``: what the run was given, by purpose."""
    from protobench.evidence.html import Particulars, html_report  # noqa: PLC0415 - jinja2, only where a page is wanted

    if options.out is None:
        return
    particulars = Particulars(
        written=datetime.now().astimezone(),
        attended=options.attended,
        cautions=CAUTIONS,
        files={purpose: path for purpose, path in files.items() if path is not None},
        addresses=ADDRESSES,
        assisted=frozenset(info.id for info in run.list_cases() if re.search(r"\bassist\b", info.needs)),
    )
    page = html_report(record, report, load_contract(), particulars)
    (options.out / NAME).write_text(page, encoding="utf-8")
