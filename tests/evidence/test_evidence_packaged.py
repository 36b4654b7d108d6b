"""What the page is made from travels in the wheel."""

from __future__ import annotations

import subprocess
import sys
import zipfile
from pathlib import Path

ROOT = Path(__file__).parents[2]


def test_the_wheel_holds_the_templates_of_the_page(tmp_path: Path) -> None:
    command = [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)]
    subprocess.run(command, cwd=ROOT, check=True, capture_output=True, timeout=120)
    (wheel,) = tmp_path.glob("*.whl")
    held = set(zipfile.ZipFile(wheel).namelist())
    templates = {
        path.relative_to(ROOT).as_posix() for path in (ROOT / "protobench/evidence/templates").iterdir()
    }
    assert {Path(name).name for name in templates} == {"report.html.j2", "report.css"}
    assert templates <= held
