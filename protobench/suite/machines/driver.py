"""Drives a module through the inputs of the command states and says what it put out.

The driver believes what the module told it: epoch, lease number, halt count, who holds the lease, whose motion runs,
which fault is latched. Whatever the module does becomes an output; only a link that ends is raised.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from protobench.judge import Failed
from protobench.suite.bench import Bench
from protobench.suite.machines.product import GONE, NOT_SENT, STANDS, inputs_of, joined, moved, status_words
from protobench.suite.port import Received, Sent
from protobench.suite.tester import MODULUS, PATIENCE_MS, Tester

LEASE_MS = 30_000  # the longest
LAST_LEASE_MS = 500  # the shortest: what a lease that shall end is renewed with
KEEP_MS = 12_000  # a lease with less left than this is renewed unasked
LEASE_LATE_MS = 50  # LSE-05
OTHER = 1000  # an epoch or lease number this far off is another one
FAULT = "over-current"
SPACING_MS = 100  # between fault events: so long may the second one wait
SLACK_MS = 10
EVENTS = ("outcome", "fault")


class ModuleDriver:
    """A :class:`~protobench.suite.machines.mealy.Subject` over a bench that has begun."""

    def __init__(self, bench: Bench) -> None:
        self._bench = bench
        self._port = bench.port
        self._facts = bench.facts
        self._testers = {"A": bench.a, "B": bench.b}
        self._assist = bench.facts.has("assist")
        self._holds = self._assist and bench.facts.has("travel")
        self._queue = bench.facts.has("queue")
        self._fault_code = bench.fault_code(FAULT)
        self._latches = {fault.code for fault in bench.contract.faults if fault.severity == "latching"}
        self._motion = moved(bench.facts) if bench.facts.has("travel") else None
        self._sign = 1
        self._starts = 0
        self._steps: dict[str, Callable[[], list[str]]] = {
            "halt": self._halt,
            "lease-end": self._lease_end,
            "fault": self._fault,
            "fault-ends": self._fault_ends,
            "restart": lambda: self._restart("commanded"),
            "restart-faulty": lambda: self._restart("watchdog"),
            "commit": self._commit,
            "complete": self._complete,
            "A.status": self._status,
        }
        self._commands: dict[str, Callable[[Tester], Sent | None]] = {
            "take": lambda one: one.send("take-lease", duration=LEASE_MS),
            "renew": lambda one: one.send("renew-lease", duration=LEASE_MS),
            "release": lambda one: one.send("release-lease"),
            "energize": lambda one: one.send("energize"),
            "de-energize": lambda one: one.send("de-energize"),
            "cancel": lambda one: one.send("cancel"),
            "reset": lambda one: one.send("reset", halt_count=self._halt_count),
            "reset-older": lambda one: one.send("reset", halt_count=(self._halt_count - 1) % MODULUS),
            "clear": lambda one: one.send("clear-faults", occurrences=[self._occurrence or 1]),
            "move": self._move,
            "move-out-of-range": lambda one: self._send_move(one, magnitude=self._outside()),
            "move-stale-epoch": lambda one: self._send_move(one, epoch=(one.epoch + OTHER) % MODULUS),
            "move-stale-lease": lambda one: self._send_move(one, lease=(one.lease + OTHER) % MODULUS),
        }
        self._names = set(inputs_of(bench.facts))
        self._settled()
        self._halt_count = 1

    def _settled(self) -> None:
        """What is believed at the start."""
        self._halted = True
        self._holder = ""
        self._lease_until_ns = 0
        self._move_sent: Sent | None = None
        self._occurrence = 0
        self._fault_state = ""
        self._held = False
        self._past = False
        self._seen: set[tuple[int, ...]] = set()
        self._noticed = len(self._port.watch.violations)

    # ------------------------------------------------------------ Subject

    def reset(self) -> None:
        """Restart the module, or without assist bring it to rest, halted and free, by the postamble.

        Raises Failed when it does not come there.
        """
        self._port.inbox.clear()
        if not self._assist:
            self._start_again()
            return
        words = self._restart("commanded")
        if words:
            self._learn()
            words = self._restart("commanded")
        strays = self._events()
        if words or strays != ["started"]:
            raise Failed(f"a restart brought {joined([*words, *strays])}", clause="STA-08")

    def _start_again(self) -> None:
        """The postamble, and fresh sessions: the module still remembers the numbers of the old ones."""
        self._bench.end()
        self._starts += 1
        self._bench.begin(f"command states {self._starts}")
        self._testers = {"A": self._bench.a, "B": self._bench.b}
        self._wait(self._quiet_ms())
        self._port.inbox.clear()
        self._halt_count = self._bench.a.status()["halt_count"]
        self._settled()

    def step(self, symbol: str, /) -> str:
        """One input, and all that it brought until quiet.

        ValueError for an input that this module cannot be given.
        """
        if symbol not in self._names:
            raise ValueError(f"input {symbol!r}: one of {', '.join(sorted(self._names))}")
        words = self._keep()
        own = self._steps.get(symbol)
        words += own() if own is not None else self._command(*symbol.split(".", 1))
        words += self._events()
        return joined(words)

    def _learn(self) -> None:
        description = self._bench.a.learn()
        self._believe(description["epoch"], description["lease"])

    def _believe(self, epoch: int, lease: int) -> None:
        for tester in self._testers.values():
            tester.epoch, tester.lease = epoch, lease

    # ------------------------------------------------------------ what came unasked

    def _wait(self, milliseconds: float) -> None:
        self._port.wait_ms(milliseconds + self._port.u_ms)

    def _quiet_ms(self) -> float:
        """Until nothing more can come of an input: what stops is at rest, and a fault event's turn has come."""
        return float(max(self._facts.stop_ms + 2 * self._facts.receipt_ms, SPACING_MS) + SLACK_MS)

    def _events(self) -> list[str]:
        """Wait until quiet; what came that answers nothing. Each event is confirmed by whom it is addressed to."""
        self._wait(self._quiet_ms())
        words = [word for received in self._port.take_all(lambda _: True) for word in self._event(received)]
        violations = self._port.watch.violations[self._noticed :]
        self._noticed += len(violations)
        return [*words, *(violation.reason for violation in violations)]

    def _event(self, received: Received) -> list[str]:
        if received.kind not in EVENTS:
            return [received.kind]
        frame = received.frame
        key = (frame.kind, frame.destination, frame.session, received["epoch"], received["event"])
        if key in self._seen:
            return []  # told again: repeats have clauses of their own
        self._seen.add(key)
        to = next(
            (
                name
                for name, one in self._testers.items()
                if (one.address, one.session) == (frame.destination, frame.session)
            ),
            "",
        )
        self._testers[to or "A"].confirm(received)
        return [self._outcome(received) if received.kind == "outcome" else self._fault_event(received, to)]

    def _outcome(self, received: Received) -> str:
        sent, frame = self._move_sent, received.frame
        self._move_sent, self._past, self._held = None, False, False
        if sent is None or (sent.frame.source, sent.frame.session, sent.number) != (
            frame.destination,
            frame.session,
            frame.number,
        ):
            return f"outcome {received['outcome']} of what does not run"
        interrupted = received.get("interrupted", "none")
        if interrupted == "none":
            return f"outcome {received['outcome']} {received['cause']}"
        landed = received["outcome"] in ("done", "failed")  # which of them is the module's affair
        return f"outcome {'landed' if landed else received['outcome']}, interrupted {interrupted}"

    def _fault_event(self, received: Received, to: str) -> str:
        if received["code"] in self._latches:
            if received["occurrence"] != self._occurrence:
                self._fault_state = STANDS if self._assist and received["code"] == self._fault_code else GONE
            self._occurrence = received["occurrence"]
        addresses = self._bench.contract.addresses
        anyone = (received.frame.destination, received.frame.session) == (addresses.any_controller, 0)
        return f"fault to {to or ('anyone' if anyone else 'a stranger')}"

    # ------------------------------------------------------------ commands

    def _keep(self) -> list[str]:
        """Renew a lease that would soon end by itself: it shall end by the input alone."""
        if not self._holder or self._lease_until_ns - self._port.now_ns > KEEP_MS * 1_000_000:
            return []
        answer = self._ask(self._testers[self._holder].send("renew-lease", duration=LEASE_MS))
        self._extended()
        return [] if answer == "accepted" else [f"unasked renewal {answer}"]

    def _extended(self) -> None:
        self._lease_until_ns = self._port.now_ns + LEASE_MS * 1_000_000

    def _ask(self, sent: Sent) -> str:
        answer = self._bench.a.answer(sent)
        return "nothing" if answer is None else self._words(answer)

    def _command(self, name: str, verb: str) -> list[str]:
        tester = self._testers[name]
        sent = self._commands[verb](tester)
        if sent is None:
            return [NOT_SENT]
        answer = tester.answer(sent)
        if answer is None:
            return ["no answer"]
        words = self._words(answer)
        if words == "accepted":
            self._accepted(name, verb, answer, sent)
        return [words]

    def _accepted(self, name: str, verb: str, answer: Received, sent: Sent) -> None:
        if verb == "take":
            self._holder = name
            self._believe(self._testers[name].epoch, answer.get("lease", self._testers[name].lease))
            self._seen.clear()  # FLT-07: told afresh
        elif verb == "release":
            self._holder = ""
        elif verb == "reset":
            self._halted = False
        elif verb == "clear":
            self._occurrence, self._fault_state = 0, ""
        elif verb.startswith("move"):
            self._move_sent = sent
            self._held, self._past = self._holds, False
            if not self._holds:
                self._await_outcome()
        if name == self._holder:
            self._extended()

    def _words(self, answer: Received) -> str:
        if answer.kind == "halt-receipt":
            return f"halt-receipt {answer['disposition']}"
        if answer.kind != "receipt":
            return f"answered by {answer.kind}"
        if answer["result"] == "accepted":
            return "accepted"
        reason = answer.get("reason")
        if reason not in ("not-holder", "lease-held"):
            return f"refused {reason}"
        return f"refused {reason} of {self._whose(answer.get('holder'), answer.get('holder_session'))}"

    def _whose(self, address: Any, session: Any) -> str:
        if (address, session) == (0, 0):
            return "nobody"
        for name, tester in self._testers.items():
            if (tester.address, tester.session) == (address, session):
                return name
        return "a stranger"

    # ------------------------------------------------------------ moves

    def _move(self, tester: Tester) -> Sent | None:
        """A motion that stays in its first phase. None for one that would have to wait: the queue is left out."""
        whose = self._testers.get(self._holder)
        clear = not self._halted and not self._fault_state
        if self._move_sent is not None and self._queue and clear and tester is whose:
            return None
        if self._holds and not self._held:
            self._do_assist(op="hold", phase="running")
            self._held = True
        return self._send_move(tester)

    def _send_move(self, tester: Tester, **changes: int) -> Sent:
        assert self._motion is not None  # the inputs are there only where there is a motion
        fields = {"motion": self._motion.name, "magnitude": self._magnitude(), **changes}
        return tester.send("move", **fields)

    def _magnitude(self) -> int:
        """The declared magnitude; to and fro where the motion goes both ways."""
        assert self._motion is not None
        magnitude = self._motion.magnitude
        self._sign = (
            -self._sign if self._motion.magnitude_min <= -magnitude <= self._motion.magnitude_max else 1
        )
        return self._sign * magnitude

    def _outside(self) -> int:
        assert self._motion is not None
        return self._motion.magnitude_max + 1

    def _await_outcome(self) -> Received | None:
        """Let the running motion come to its end; its outcome stays in the inbox."""
        sent = self._move_sent
        if sent is None:
            return None
        found = self._bench.a.outcome_or_none(sent)
        if found is not None:
            self._port.inbox.append(found)
        return found

    def _do_assist(self, **fields: Any) -> str:
        return self._ask(self._bench.a.send("assist", **fields))

    # ------------------------------------------------------------ what happens

    def _halt(self) -> list[str]:
        sent = self._bench.a.send("halt")
        answer = self._bench.a.answer(sent)
        self._halted = True
        if answer is None:
            return ["no answer"]
        self._halt_count = answer.get("halt_count", self._halt_count)
        return [self._words(answer)]

    def _lease_end(self) -> list[str]:
        if not self._holder:
            return []
        answer = self._ask(self._testers[self._holder].send("renew-lease", duration=LAST_LEASE_MS))
        self._holder = ""
        self._wait(LAST_LEASE_MS + LEASE_LATE_MS)
        return [] if answer == "accepted" else [f"last renewal {answer}"]

    def _fault(self) -> list[str]:
        if not self._assist:
            self._bench.a.send("status", source=self._bench.address)
            return []
        if self._fault_state == GONE:
            return [NOT_SENT]
        self._bench.raised.add(self._fault_code)
        return self._unless_accepted(self._do_assist(op="raise", code=self._fault_code))

    def _fault_ends(self) -> list[str]:
        if self._fault_state == STANDS:
            self._fault_state = GONE
        return self._unless_accepted(self._do_assist(op="withdraw", code=self._fault_code))

    @staticmethod
    def _unless_accepted(answer: str) -> list[str]:
        return [] if answer == "accepted" else [f"assist {answer}"]

    def _restart(self, cause: str) -> list[str]:
        before = self._bench.a.epoch
        words = self._unless_accepted(self._do_assist(op="restart", cause=cause))
        if words:
            return words
        self._port.watch.restarted()
        limit_ms = self._facts.starting_ms + PATIENCE_MS + self._port.u_ms
        started = self._port.wait_for(lambda one: one.kind == "started" and one["epoch"] != before, limit_ms)
        if started is None:
            return ["does not start"]
        self._port.inbox.append(started)
        self._settled()
        self._bench.raised.clear()
        self._halt_count = 1
        self._believe(started["epoch"], 0)
        return []

    def _commit(self) -> list[str]:
        motion = self._motion
        if self._move_sent is None or motion is None or self._past:
            return []
        words = self._unless_accepted(self._do_assist(op="hold", phase="committed"))
        words += self._unless_accepted(self._do_assist(op="release"))
        self._past = True
        self._wait(motion.no_return_ms + SLACK_MS)
        return words

    def _complete(self) -> list[str]:
        if self._move_sent is None:
            return []
        words = self._unless_accepted(self._do_assist(op="release"))
        self._await_outcome()
        return words

    def _status(self) -> list[str]:
        tester = self._bench.a
        answer = tester.answer(tester.send("status"))
        if answer is None:
            return ["no status"]
        if answer.kind != "status-report":
            return [f"status {self._words(answer)}"]
        power = None
        if self._assist:
            truth = tester.answer(tester.send("read-truth", page=0))
            if truth is None or truth.kind != "truth-page":
                return ["no truth"]
            power = bool(truth["energized"])
        whose = self._whose(answer["holder"], answer["holder_session"])
        latches = (bool(answer["halt_latch"]), bool(answer["fault_latch"]))
        holder = "" if whose == "nobody" else whose
        return [status_words(answer["activity"], answer["state"], latches, holder, power)]
