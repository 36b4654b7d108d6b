"""The page in a browser: what it draws, that it loads nothing, that nothing is wider than a phone."""

from __future__ import annotations

import html
import http.server
import json
import re
import shutil
import struct
import subprocess
import sys
import threading
from pathlib import Path
from typing import Any

import pytest
from pages import page_of, parse
from test_evidence_html import HOSTILE, hostile_run

LOCKSTEP = Path(__file__).parent.parent / "cli" / "lockstep_module.py"
PHONE_PX = 360
# Put into an empty page beside a frame that shows the report; says what that frame holds once it is there.
PROBE = """<!doctype html><meta charset="utf-8"><title>probe</title>
<iframe id="page" width="{width}" height="800" sandbox="allow-same-origin" srcdoc="{page}"></iframe>
<script>
document.getElementById("page").addEventListener("load", (event) => {{
  const inner = event.target.contentDocument, root = inner.documentElement;
  const wide = [...inner.querySelectorAll("main *")].filter((element) =>
    element.getBoundingClientRect().right > root.clientWidth + 1 && !element.closest(".wide"));
  const found = {{
    width: root.scrollWidth, client: root.clientWidth,
    wide: wide.slice(0, 5).map((element) => element.outerHTML.slice(0, 200)),
    charts: [...inner.querySelectorAll("svg.chart")].map((one) => one.getBoundingClientRect().height),
    tables: inner.querySelectorAll("table").length,
    sheets: inner.styleSheets.length,
  }};
  const answer = document.createElement("pre");
  answer.id = "found"; answer.textContent = JSON.stringify(found);
  document.body.append(answer);
}});
</script>"""


def chromium(tmp_path: Path, *arguments: str, names: str = "~NOTFOUND") -> tuple[str, str]:
    """What the browser wrote to standard output, and what the page wrote to its console.

    ``names``: where every host's name leads; without it none leads anywhere.
    """
    program = shutil.which("chromium")
    if program is None:
        pytest.fail("chromium is not on the path; scripts/ensure-tools PYTHON tests installs it")
    command = [
        program, "--headless", "--no-sandbox", "--disable-gpu", "--no-first-run", "--hide-scrollbars",
        f"--user-data-dir={tmp_path / 'profile'}", f"--host-resolver-rules=MAP * {names}",
        "--disable-background-networking", "--disable-component-update",
        "--disable-features=NetworkTimeServiceQuerying", "--enable-logging=stderr", *arguments,
    ]  # fmt: skip
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=True)
    return done.stdout, "\n".join(line for line in done.stderr.splitlines() if "CONSOLE" in line)


def requests_of(tmp_path: Path, page: str) -> list[str]:
    """What a browser asks for, of any host, that is given the page: every name leads to a server here."""
    asked: list[str] = []

    class Answer(http.server.BaseHTTPRequestHandler):
        def do_GET(self) -> None:
            asked.append(f"{self.headers['Host']}{self.path}")
            self.send_response(200 if self.path == "/report.html" else 404)
            self.send_header("Content-Type", "text/html; charset=utf-8")
            self.end_headers()
            self.wfile.write(page.encode() if self.path == "/report.html" else b"")

        def log_message(self, format: str, *args: object) -> None:  # noqa: A002 - the base class calls it so
            pass

    with http.server.ThreadingHTTPServer(("127.0.0.1", 0), Answer) as server:
        threading.Thread(target=server.serve_forever, daemon=True).start()
        names = f"127.0.0.1:{server.server_port}"
        chromium(tmp_path, "--dump-dom", "http://report.test/report.html", names=names)
        server.shutdown()
    return asked


def probe(tmp_path: Path, page: str, width: int) -> dict[str, Any]:
    outer = tmp_path / "probe.html"
    outer.write_text(PROBE.format(width=width, page=html.escape(page)), encoding="utf-8")
    dom, _ = chromium(tmp_path, "--dump-dom", outer.as_uri())
    answer = re.search(r'<pre id="found">(.*?)</pre>', dom, re.DOTALL)
    assert answer is not None, dom[-2000:]
    found: dict[str, Any] = json.loads(html.unescape(answer[1]))
    return found


@pytest.fixture(scope="module")
def judged(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The report of a module that obeys halts meant for others."""
    out = tmp_path_factory.mktemp("judged")
    link = f"lockstep:{sys.executable} {LOCKSTEP} halts-for-others"
    command = [
        sys.executable,
        "-m",
        "protobench.cli",
        "check",
        "--link",
        link,
        "--only",
        "HLT or FRM",
        "--out",
        str(out),
    ]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)
    assert done.returncode == 1, done.stderr
    assert f"report: {out}/report.html," in done.stdout
    return out / "report.html"


def test_a_real_report_is_there_and_silent(tmp_path: Path, judged: Path) -> None:
    dom, console = chromium(tmp_path, "--dump-dom", judged.as_uri())
    assert console == ""
    page = parse(dom)
    failures = page.all("article")
    assert failures
    for failure in failures:
        (chart, *_) = failure.all("svg", role="img")
        assert "halt" in chart.text
        assert failure.all("table")
    assert "A halt for somebody else does nothing." in page.by_id("case-HLT.not-included").text


@pytest.mark.parametrize("width", [PHONE_PX, 1280])
def test_nothing_is_wider_than_the_screen(tmp_path: Path, judged: Path, width: int) -> None:
    found = probe(tmp_path, judged.read_text(encoding="utf-8"), width)
    assert found["wide"] == []
    assert found["width"] <= found["client"] <= width
    assert found["sheets"] == 1
    assert found["tables"] >= 4
    assert found["charts"]
    assert min(found["charts"]) > 100


def test_it_asks_for_nothing(tmp_path: Path, judged: Path) -> None:
    assert requests_of(tmp_path, judged.read_text(encoding="utf-8")) == ["report.test/report.html"]


def test_what_these_tests_look_for_would_be_seen(tmp_path: Path) -> None:
    page = page_of(hostile_run())
    wide = '<main id="main"><p style="width: 900px">wide</p>'
    found = probe(tmp_path, page.replace('<main id="main">', wide), PHONE_PX)
    assert len(found["wide"]) == 1
    assert found["width"] > found["client"]
    picture = page.replace("<main", '<img src="http://elsewhere.test/picture.png"><main')
    unguarded = re.sub("<meta http-equiv[^>]*>", "", picture)
    assert "elsewhere.test/picture.png" in requests_of(tmp_path, unguarded)
    assert requests_of(tmp_path, picture) == ["report.test/report.html"]
    guarded = tmp_path / "report.html"
    guarded.write_text(picture, encoding="utf-8")
    _, console = chromium(tmp_path, "--dump-dom", guarded.as_uri())
    assert "Content Security Policy" in console


def test_hostile_text_is_text_to_a_browser_too(tmp_path: Path) -> None:
    page = tmp_path / "report.html"
    page.write_text(page_of(hostile_run(3)), encoding="utf-8")
    dom, console = chromium(tmp_path, "--dump-dom", page.as_uri())
    assert console == ""
    root = parse(dom)
    assert not root.all("script")
    assert not root.all("img")
    assert HOSTILE in root.text
    found = probe(tmp_path, page.read_text(encoding="utf-8"), PHONE_PX)
    assert found["wide"] == []
    assert found["width"] <= found["client"]


def test_it_can_be_seen_and_printed(tmp_path: Path, judged: Path) -> None:
    picture, paper = tmp_path / "page.png", tmp_path / "page.pdf"
    chromium(tmp_path, "--window-size=1280,2000", f"--screenshot={picture}", judged.as_uri())
    content = picture.read_bytes()
    assert struct.unpack(">II", content[16:24]) == (1280, 2000)
    assert len(content) > 50_000
    chromium(tmp_path, f"--print-to-pdf={paper}", "--no-pdf-header-footer", judged.as_uri())
    edges = re.findall(rb"/MediaBox ?\[([^]]*)\]", paper.read_bytes())
    boxes = {tuple(round(float(edge)) for edge in box.split()) for box in edges}
    assert boxes == {(0, 0, 595, 842)}  # A4 in points, ISO 216: 210 mm by 297 mm
