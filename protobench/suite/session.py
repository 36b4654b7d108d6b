"""One run against one module: open, discover, judge case by case, whoever asks (command line or pytest)."""

from __future__ import annotations

import contextlib
import platform
import shlex
import time
from collections.abc import Sequence
from typing import Any, NamedTuple

from protobench import __version__
from protobench.contract import Contract, load_contract
from protobench.judge import (
    NOT_APPLICABLE,
    CaseRecord,
    CaseVerdict,
    Exchange,
    NotApplicable,
    RunRecord,
    Verdict,
)
from protobench.links import Link, LinkError, is_here, open_link
from protobench.suite.bench import Bench
from protobench.suite.case import CaseInfo
from protobench.suite.options import RunOptions
from protobench.suite.port import Log
from protobench.suite.restart import NoRestart, OutsideRestart, outside_restart
from protobench.suite.statement_review import compare, review
from protobench.suite.statement_select import why_not, with_item
from protobench.suite.targets import embedded_link
from protobench.wire import Codec, load_codec

DETAIL_FRAMES = 120
EXCHANGE_RUN_MAX = 50_000  # frames kept of all cases of a run together
EXCHANGE_LEAST = 200  # of each case after that
HALT_SETTLE_NS = 100_000_000


class Finding(NamedTuple):
    """What speaks against a pass; ``clause`` is empty where the reason names none."""

    verdict: Verdict
    reason: str
    clause: str = ""


class Judged(NamedTuple):
    """How a case went; ``detail`` and ``exchange`` are empty where there is nothing to look at."""

    verdict: str
    reason: str = ""
    detail: str = ""
    exchange: Sequence[Exchange] = ()
    ended_ns: int = 0


class Passed(NamedTuple):
    """The last of what passed in a case, of so many frames in all, up to a time since the case began."""

    exchange: Sequence[Exchange]
    total: int
    ended_ns: int


class NeedsAttendance(Exception):  # noqa: N818 - says what is missing
    """The module may move matter, and nobody said that someone stands by. The message says why and how."""


class StatementDiffers(Exception):  # noqa: N818 - says what differs
    """The conformance statement breaks the contract, or the module describes itself otherwise.

    The message says where, a line each.
    """


class Session:
    """Judges cases against one module. Use as a context manager; ``log`` takes every frame."""

    def __init__(self, options: RunOptions, log: Log | None = None) -> None:
        self.options = options
        self.contract: Contract = load_contract()
        self.codec: Codec = load_codec(self.contract)
        self._log = log
        self._kept = 0
        self._review_statement()
        self.bench = self._open()

    def __enter__(self) -> Session:
        return self

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        if kind is not None:
            self.halt()
        self.close()

    def halt(self) -> None:
        """Whatever broke the run off, the module does not go on moving for it."""
        with contextlib.suppress(LinkError):
            self.bench.a.send("halt")
            self.bench.port.link.settle(self.bench.port.now_ns + HALT_SETTLE_NS)

    def close(self) -> None:
        self.bench.port.link.close()

    # ------------------------------------------------------------ opening

    def _open(self) -> Bench:
        named = self.options.link if self.options.opener is None else None
        if named is not None and not is_here(named):  # opening a device may already restart what is behind it
            self._need_attendance(named)
        link = self._open_link()
        try:
            if not link.loopback:
                self._need_attendance(link.name)
            bench = Bench(link, self.contract, self.codec, self.options.seed, self._log)
            statement = self.options.statement
            address = self.options.address
            if self.options.restart:
                bench.outside_restart = self._restart_means(link)
            bench.discover(statement.address if statement is not None and address is None else address)
            self._compare_statement(bench)
            if not (bench.facts.emulated or self.options.attended or self.options.reads_only):
                raise NeedsAttendance(
                    f"module {bench.address} on {link.name} describes itself as physical. Nothing that can move it "
                    "was sent. Give --attended when someone stands by with an independent power cut."
                )
        except BaseException:
            link.close()
            raise
        return bench

    def _restart_means(self, link: Link) -> OutsideRestart:
        means = outside_restart(self.options.statement, link)
        if means is None:
            file = self.options.statement.file if self.options.statement is not None else "no statement"
            raise NoRestart(
                f"{file} names no means of restarting that the bench can use over this link: "
                "a command, in real time, or a line of a serial device"
            )
        return means

    def _need_attendance(self, name: str) -> None:
        if not self.options.attended:
            raise NeedsAttendance(
                f"{name} is a serial device or another host: what is behind it may move. "
                "Nothing was sent. Give --attended when someone stands by with an independent power cut."
            )

    def _review_statement(self) -> None:
        statement = self.options.statement
        if statement is not None and not self.options.reads_only:
            found = review(statement, self.contract)
            if found:
                raise StatementDiffers("\n".join(f"{statement.file}: {finding}" for finding in found))

    def _compare_statement(self, bench: Bench) -> None:
        statement = self.options.statement
        if statement is not None and not self.options.reads_only:
            found = compare(statement, self.contract, bench.address, bench.facts)
            if found:
                lines = [f"  {statement.file}: {finding}" for finding in found]
                raise StatementDiffers(
                    "\n".join([f"module {bench.address} contradicts its statement:", *lines])
                )

    def _open_link(self) -> Link:
        if self.options.opener is not None:
            return self.options.opener()
        if self.options.link is None:
            return embedded_link(self.options.seed)
        return open_link(self.options.link, virtual=bool(self.options.virtual))

    def record(self) -> RunRecord:
        """A record without cases: who is judged, and where."""
        description = self.bench.facts.description
        iut: dict[str, Any] = {
            name: value.hex() if isinstance(value, bytes) else value for name, value in description.items()
        }
        iut["address"] = self.bench.address
        iut["items"] = sorted(self.bench.facts.items)
        environment: dict[str, Any] = {
            "bench": __version__,
            "link": self.bench.port.link.name,
            "time": "virtual" if self.bench.port.link.virtual else "real",
            "python": platform.python_version(),
            "system": f"{platform.system()} {platform.machine()}",
        }
        if self.options.statement is not None:
            environment["statement"] = self.options.statement.file
            environment["statement_sha256"] = self.options.statement.digest
        return RunRecord(f"{self.contract.name} {self.contract.version}", self.options.seed, iut, environment)

    # ------------------------------------------------------------ judging

    def judge(self, info: CaseInfo) -> CaseRecord:
        """Run one case with preamble and postamble and say how it went. Never raises what a module can cause."""
        begin = time.monotonic()
        found: list[Finding] = []
        judged = self._verdict(info, found)
        return CaseRecord(
            id=info.id,
            level=info.level,
            case_class=info.case_class,
            purpose=info.purpose,
            clauses=info.clauses,
            verdict=judged.verdict,
            reason=judged.reason,
            duration_s=round(time.monotonic() - begin, 6),
            detail=judged.detail,
            replay="" if judged.verdict in ("pass", NOT_APPLICABLE) else self._replay(info),
            broken=tuple(finding.clause for finding in found if finding.verdict is Verdict.FAIL),
            exchange=judged.exchange,
            ended_ns=judged.ended_ns,
        )

    def _verdict(self, info: CaseInfo, found: list[Finding]) -> Judged:
        """How the case went; ``found`` takes every finding."""
        missing = why_not(info, self.bench.facts.items, self.options.statement, self.contract)
        if missing:
            return Judged(NOT_APPLICABLE, missing)
        passed: Passed | None = None
        try:
            self._attempt(lambda: self.bench.begin(info.id), found)
            if not found:
                self._attempt(lambda: info.function(self.bench), found)
            passed = self._passed() if found else None  # before the postamble adds to it
            self._attempt(self.bench.end, found, "postamble: ")
            if not found and self.bench.port.watch.violations:
                passed = self._passed(self.bench.port.violated_at)
            found += [
                Finding(Verdict.FAIL, f"{violation.clause}: {violation.reason}", violation.clause)
                for violation in self.bench.port.watch.violations
            ]
        except NotApplicable as why:
            self._attempt(self.bench.end, found, "postamble: ")
            if not found:
                return Judged(NOT_APPLICABLE, with_item(why, self.options.statement))
        except LinkError as error:
            found.append(Finding(Verdict.FAIL, f"LOD-02: the link to the module ended: {error}", "LOD-02"))
            passed = self._passed()
            self._reopen()
            return Judged(
                Verdict.FAIL.word, found[0].reason, _detail(passed), passed.exchange, passed.ended_ns
            )
        if not found:
            return Judged(Verdict.PASS.word)
        worst = max(finding.verdict for finding in found)
        reasons = [finding.reason for finding in found if finding.verdict is worst]
        passed = passed or self._passed()
        detail = _detail(passed, reasons[1:])
        return Judged(worst.word, reasons[0], detail, passed.exchange, passed.ended_ns)

    def _attempt(self, step: Any, found: list[Finding], prefix: str = "") -> None:
        try:
            step()
        except CaseVerdict as verdict:
            reason = f"{prefix}{verdict}\n{verdict.detail}" if verdict.detail else f"{prefix}{verdict}"
            found.append(Finding(verdict.verdict, reason, verdict.clause or ""))
        except (LinkError, NotApplicable):
            raise
        except Exception as error:  # noqa: BLE001 - a defect of the bench or of a case is a verdict of its own
            found.append(Finding(Verdict.ERROR, f"{prefix}{type(error).__name__}: {error}"))

    def _passed(self, until: int | None = None) -> Passed:
        """What passed in the case, up to its event number ``until``.

        It is kept whole for charts and replays, until so many of the run's are kept that only ends are.
        """
        port = self.bench.port
        most = None if self._kept < EXCHANGE_RUN_MAX else EXCHANGE_LEAST
        kept = port.exchange(until, most) or port.exchange(None, most)
        self._kept += len(kept)
        ended_ns = port.passed_ns if until is None or not kept else kept[-1].time_ns
        return Passed(kept, port.events_seen if until is None else until, ended_ns)

    def _reopen(self) -> None:
        """The far end went away: the next case gets a new link. What cannot be opened again ends the run."""
        self.close()
        self.bench = self._open()

    def _replay(self, info: CaseInfo) -> str:
        command = ["protobench", "check"]
        if self.options.link is not None:
            command += ["--link", self.options.link]
        command += ["--address", str(self.bench.address), "--seed", str(self.options.seed), "--only", info.id]
        if self.options.statement is not None:
            command += ["--ics", self.options.statement.file]
        if self.options.restart:
            command.append("--restart")
        if self.options.attended:
            command.append("--attended")
        return shlex.join(command)


def _detail(passed: Passed, more: Sequence[str] = ()) -> str:
    """The exchange up to the failure; what the postamble did after it is in the conformance log."""
    lines = [f"also: {reason}" for reason in more]
    if passed.total > DETAIL_FRAMES:
        lines.append(f"... {passed.total - DETAIL_FRAMES} earlier frames are in the conformance log")
    return "\n".join(lines + [_line(exchange) for exchange in passed.exchange[-DETAIL_FRAMES:]])


def _line(exchange: Exchange) -> str:
    data = exchange.data
    shown = data.hex(" ") if len(data) <= 320 else f"{data[:320].hex(' ')} ... {len(data)} bytes"
    return f"{exchange.time_ns / 1e6:12.3f} ms {exchange.direction} {exchange.words}\n{'':19}{shown}"
