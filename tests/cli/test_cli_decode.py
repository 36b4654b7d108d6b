"""``protobench decode``: hex, files, standard input, streams, dropped frames, and anything at all."""

from __future__ import annotations

import json
import random
from pathlib import Path

import pytest
from command import invoke, run, words

from protobench.cli.decode import SIZE_MAX
from protobench.contract.vectors import Dropped, Vector, load_vectors
from protobench.wire import load_codec

CODEC = load_codec()
PROBE = CODEC.new("probe", answer_window=100).to_frame(0x1FFFF, 0xFFFFFFFF, 0x1E2FEB8A, 7)
STREAM = b"\0" + CODEC.stuff(PROBE) + CODEC.stuff(PROBE)
SEED = 4


def rows(*arguments: str, stdin: bytes | None = None) -> list[dict[str, object]]:
    found: list[dict[str, object]] = json.loads(invoke("decode", "--json", *arguments, stdin=stdin).stdout)
    return found


@pytest.mark.parametrize(
    "text",
    [PROBE.hex(), PROBE.hex(" "), PROBE.hex(":").upper(), ", ".join(f"0x{byte:02x}" for byte in PROBE)],
)
def test_hex_in_every_spelling(text: str) -> None:
    done = invoke("decode", text)
    assert done.exit_code == 0
    lines = words(done.stdout)
    for expected in (
        "probe, 27 bytes",
        "kind probe (0x03)",
        "destination 0xffffffff",
        "answer_window 100 ms",
    ):
        assert expected in lines


def test_a_binary_file_a_hex_file_and_standard_input(tmp_path: Path) -> None:
    (tmp_path / "binary").write_bytes(PROBE)
    (tmp_path / "hex").write_text(PROBE.hex(" ") + "\n")
    expected = rows(PROBE.hex())
    assert rows(str(tmp_path / "binary")) == rows(str(tmp_path / "hex")) == expected
    assert rows("-", stdin=PROBE) == rows("-", stdin=PROBE.hex().encode()) == expected
    assert json.loads(run("decode", "--json", stdin=PROBE).stdout) == expected


def test_a_stream_is_split_whether_said_or_not() -> None:
    assert [row["kind"] for row in rows(STREAM.hex())] == ["probe", "probe"]
    assert rows(STREAM.hex()) == rows("--stream", STREAM.hex()) == rows("--stream", STREAM[1:].hex())
    assert rows("--bare", STREAM.hex())[0]["dropped"] is not None


def test_a_bad_frame_in_a_stream_does_not_cost_the_good_one_after_it() -> None:
    bad = bytearray(PROBE)
    bad[9] ^= 1
    found = rows("--stream", (CODEC.stuff(bytes(bad)) + CODEC.stuff(PROBE)).hex())
    assert [(row["dropped"] or {"reason": None})["reason"] for row in found] == ["crc", None]  # type: ignore[index]
    assert invoke("decode", "--stream", (CODEC.stuff(bytes(bad)) + CODEC.stuff(PROBE)).hex()).exit_code == 1


FRAME_DROPS = [
    vector
    for file in load_vectors("1.0")
    if file.area == "frame"
    for vector in file.vectors
    if vector.link == "datagram" and isinstance(vector.expect[0], Dropped)
]
assert FRAME_DROPS


@pytest.mark.parametrize("vector", FRAME_DROPS, ids=lambda vector: vector.id)
def test_dropped_frames_are_explained_with_the_vectors_reason(vector: Vector) -> None:
    (expected,) = vector.expect
    assert isinstance(expected, Dropped)
    done = invoke("decode", "--bare", "-", stdin=vector.data or b"\n")
    assert done.exit_code == 1
    assert f"dropped: {expected.drop}" in words(done.stdout)


def test_a_malformed_body_is_said_to_be_refused() -> None:
    (vector,) = [v for file in load_vectors("1.0") for v in file.vectors if v.id == "body-0-as-uint-8"]
    done = invoke("decode", vector.data.hex())
    assert done.exit_code == 1
    assert "a module refuses this" in done.stdout


@pytest.mark.parametrize("source", ["nosuchfile", "0", "zz", "/"])
def test_what_is_neither_hex_nor_a_file(source: str) -> None:
    done = invoke("decode", source)
    assert done.exit_code == 2
    assert f"{source!r} is neither hex nor a file that can be read" in words(done.stderr)


def test_too_much_and_nothing(tmp_path: Path) -> None:
    (tmp_path / "big").write_bytes(b"\1" * (SIZE_MAX + 1))
    done = invoke("decode", str(tmp_path / "big"))
    assert (done.exit_code, f"more than {SIZE_MAX} bytes" in done.stderr) == (2, True)
    done = invoke("decode", stdin=b"")
    assert (done.exit_code, done.stdout, done.stderr) == (1, "", "no bytes were given\n")
    done = invoke("decode", "--stream", "0000")
    assert (done.exit_code, done.stderr) == (1, "no frame in there\n")
    assert invoke("decode", "--stream", "--bare", "00").exit_code == 2


def test_any_bytes_at_all() -> None:
    rng = random.Random(SEED)
    for _ in range(150):
        data = rng.randbytes(rng.randrange(1, 600))
        option = rng.choice(["--stream", "--bare", "--json"])
        done = invoke("decode", option, "-", stdin=data)
        assert done.exit_code in (0, 1), (SEED, data.hex(), done.output)
        assert done.exception is None or isinstance(done.exception, SystemExit), (SEED, data.hex())
