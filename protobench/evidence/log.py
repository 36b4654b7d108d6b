"""The conformance log: every frame with time, direction, bytes and meaning, written as it happens."""

from __future__ import annotations

from typing import TextIO


class ConformanceLog:
    """Writes one line a frame to ``stream``.

    A line is: time in seconds since the first entry with microseconds, direction (``->`` to the module, ``<-`` from
    it), meaning, and the bytes in hex after a bar. Lines that begin with ``#`` say what belongs to the run and its
    cases.
    """

    def __init__(self, stream: TextIO) -> None:
        self._stream = stream
        self._first_ns: int | None = None

    def header(self, **facts: object) -> None:
        """What the run is: versions, seed, link, basis of the times."""
        for name, value in facts.items():
            self._line(f"# {name}: {value}")

    def case_begins(self, case_id: str) -> None:
        """What follows belongs to this case."""
        self._line(f"# case {case_id} begins")

    def case_ends(self, case_id: str, verdict: str, reason: str) -> None:
        """The verdict of a case."""
        self._line(f"# case {case_id} ends: {verdict}" + (f" ({_one_line(reason)})" if reason else ""))

    def frame(self, time_ns: int, direction: str, data: bytes, meaning: str) -> None:
        """One frame, or raw bytes, as it passed."""
        self._line(f"{self._seconds(time_ns):14.6f} {direction} {_one_line(meaning)} | {data.hex()}")

    def note(self, time_ns: int, text: str) -> None:
        """Something else that happened at a time."""
        self._line(f"{self._seconds(time_ns):14.6f} .. {_one_line(text)}")

    def _seconds(self, time_ns: int) -> float:
        if self._first_ns is None:
            self._first_ns = time_ns
        return (time_ns - self._first_ns) / 1e9

    def _line(self, text: str) -> None:
        self._stream.write(text + "\n")


def _one_line(text: str) -> str:
    return " ".join(text.split())
