"""Shares of the sequences in processes of their own, each with a link of its own to a module of its own."""

from __future__ import annotations

import multiprocessing
import signal
import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import replace
from multiprocessing.connection import Connection, wait
from multiprocessing.context import SpawnProcess

from protobench.suite.machines.compare import Comparison
from protobench.suite.machines.states_run import Wanted, open_plan, run
from protobench.suite.options import RunOptions

TELL_S = 0.2
JOIN_S = 10
STOP, HALT = "stop", "halt"
OPEN_TWICE = ("lockstep:", "run:")


class WorkerFailed(Exception):  # noqa: N818 - says what has failed
    """A process could not run its share. The message says why."""


def opens_twice(link: str | None) -> bool:
    """Whether each opening of a link starts a module of its own."""
    return link is None or link.startswith(OPEN_TWICE)


def run_shares(options: RunOptions, wanted: Wanted, jobs: int, progress: Callable[[int], None]) -> Comparison:
    """Run all sequences in so many processes; ``progress`` is told how many are done in all.

    The first difference ends every share. Raises WorkerFailed, and KeyboardInterrupt once every module was sent a
    halt.
    """
    context = multiprocessing.get_context("spawn")
    workers: dict[Connection, SpawnProcess] = {}
    try:
        for index in range(jobs):
            ours, theirs = context.Pipe()
            process = context.Process(
                target=_work, args=(theirs, options, replace(wanted, share=(index, jobs))), daemon=True
            )
            process.start()
            theirs.close()
            workers[ours] = process
        return _collect(list(workers), progress)
    except BaseException:
        _tell(list(workers), HALT)
        raise
    finally:
        for connection, process in workers.items():
            process.join(JOIN_S)
            if process.is_alive():
                process.terminate()
                process.join()
            connection.close()


def _collect(waiting: list[Connection], progress: Callable[[int], None]) -> Comparison:
    done, counts = Comparison(), dict.fromkeys(waiting, 0)
    while waiting:
        for connection in [one for one in wait(waiting, TELL_S) if isinstance(one, Connection)]:
            try:
                message = connection.recv()
            except EOFError:
                raise WorkerFailed("a process ended before its share was run") from None
            if isinstance(message, int):
                counts[connection] = message
                progress(sum(counts.values()))
                continue
            waiting.remove(connection)
            if isinstance(message, str):
                raise WorkerFailed(message)
            done.add(message)
            if message.is_over:
                _tell(waiting, STOP)
    return done


def _tell(connections: list[Connection], what: str) -> None:
    for connection in connections:
        with suppress(OSError):
            connection.send(what)


def _work(connection: Connection, options: RunOptions, wanted: Wanted) -> None:
    """One process: run a share, tell now and then how far it is, and obey."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # whoever started us says when to stop
    try:
        session, planned = open_plan(options, wanted)
        with suppress(KeyboardInterrupt), session:
            connection.send(run(session, planned, _Watch(connection, wanted.budget_s)))
    except Exception as error:  # noqa: BLE001 - told to the process that can say it
        with suppress(OSError):
            connection.send(f"{type(error).__name__}: {error}")


class _Watch:
    """Goes on until it is told otherwise or the budget is spent."""

    def __init__(self, connection: Connection, budget_s: float | None) -> None:
        self._connection = connection
        self._begin: float | None = None
        self._told = 0.0
        self._budget_s = budget_s

    def __call__(self, done: int) -> bool:
        now = time.monotonic()
        if self._begin is None:  # the budget is for the sequences, not for deriving them
            self._begin = now
        if now - self._told >= TELL_S:
            self._told = now
            order = self._order(done)
            if order == HALT:
                raise KeyboardInterrupt
            if order == STOP:
                return False
        return self._budget_s is None or now - self._begin < self._budget_s

    def _order(self, done: int) -> str:
        """Tell how far the share is; what comes back. Whoever is gone wanted a halt."""
        try:
            self._connection.send(done)
            return str(self._connection.recv()) if self._connection.poll() else ""
        except (EOFError, OSError):
            return HALT
