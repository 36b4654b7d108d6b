"""The module that fails, played against again and again."""

from __future__ import annotations

import time
from collections.abc import Callable

from protobench.judge import CaseRecord, CaseVerdict
from protobench.links import LinkError
from protobench.suite.bench import NoModule
from protobench.suite.case import CaseInfo
from protobench.suite.options import RunOptions
from protobench.suite.replay.steps import Send, Sequence
from protobench.suite.replay.trial import Trial, play
from protobench.suite.session import Session

QUICK_S = 0.06  # to open a link anew: then each play gets a new module
PROGRAMS = ("lockstep:", "run:")
LASTING = ("assign-address", "set-groups")  # what a module keeps through a restart


class CannotPlay(Exception):  # noqa: N818 - says what is missing
    """The link cannot be opened again, or the module behind it cannot be found."""


class Subject:
    """Plays sequences against the module of these options, on a new one where that is quick."""

    def __init__(self, options: RunOptions) -> None:
        self.options = options
        self.plays = 0
        begin = time.monotonic()
        self.session = self._open()
        self._quick = time.monotonic() - begin < QUICK_S
        self._fresh = True

    @property
    def starts_programs(self) -> bool:
        """Whether opening the link makes a new module."""
        link = self.options.link
        return self.options.opener is not None or link is None or link.startswith(PROGRAMS)

    def may_play(self, sequence: Sequence) -> bool:
        """Whether what the sequence leaves behind can be undone."""
        return self.starts_programs or not _lasts(sequence)

    def play(self, sequence: Sequence, *, fresh: bool = False) -> Trial:
        """Play it; ``fresh``: on a new module wherever one can be had."""
        self.plays += 1
        anew = fresh or self._quick or _lasts(sequence)
        if not self._fresh and self.starts_programs and anew:
            self.reopen()
        trial = play(self.session.bench, sequence)
        self._fresh = False
        if trial.ended:
            self.reopen()
        return trial

    def judge(self, info: CaseInfo) -> CaseRecord:
        """The case's own function again, on a new module where one can be had."""
        if not self._fresh:
            self.reopen()
        self._fresh = False
        return self.session.judge(info)

    def reopen(self) -> None:
        self.session.close()
        self.session = self._open()
        self._fresh = True

    def close(self) -> None:
        """Leave the module halted."""
        self.session.halt()
        self.session.close()

    def _open(self) -> Session:
        try:
            return Session(self.options)
        except (LinkError, NoModule, CaseVerdict, OSError) as error:
            raise CannotPlay(str(error)) from error


def _lasts(sequence: Sequence) -> bool:
    return any(isinstance(step, Send) and step.kind in LASTING for step in sequence.steps)


GoesOn = Callable[[], bool]
