"""The contract's vectors are what an independent script makes, and nothing of this project makes them."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import make_vectors
import vector_tools

SCRIPT = Path(make_vectors.__file__)


def test_committed_vectors_are_what_the_script_makes() -> None:
    assert make_vectors.main(["--check"]) == 0, f"run: python {SCRIPT.relative_to(SCRIPT.parents[2])}"


def test_script_uses_nothing_of_this_project() -> None:
    code = f"import sys; sys.path.insert(0, {str(SCRIPT.parent)!r}); import make_vectors; make_vectors.texts()\n"
    code += "own = ('protobench', 'emulator', 'cobs', 'crcmod', 'msgpack')\n"
    code += "print([name for name in sys.modules if name.split('.')[0] in own])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=True)
    assert done.stdout.strip() == "[]"


# Source: the encoding table widely reproduced with the COBS paper, and the paper's own example.
COBS_TABLE = {
    "": "01",
    "00": "0101",
    "0000": "010101",
    "001100": "01021101",
    "11220033": "0311220233",
    "11223344": "0511223344",
    "11000000": "0211010101",
    "4500002c4c79000040064f37": "024501042c4c79010540064f37",
}


def test_the_scripts_stuffing_agrees_with_the_published_table() -> None:
    for data, stuffed in COBS_TABLE.items():
        assert vector_tools.cobs(bytes.fromhex(data)).hex() == stuffed
        assert vector_tools.uncobs(bytes.fromhex(stuffed)) == bytes.fromhex(data)
    longest = bytes(range(1, 254))
    assert vector_tools.cobs(longest) == b"\xfe" + longest
    assert vector_tools.uncobs(b"\x05\x11") is None
