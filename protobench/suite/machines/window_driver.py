"""Drives a module through the inputs of the number window. A fresh session is the way back to the start."""

from __future__ import annotations

from collections.abc import Callable

from protobench.judge import Failed
from protobench.suite.bench import Bench
from protobench.suite.machines.window import AHEAD, WORD_MAX
from protobench.suite.port import Received, Sent
from protobench.suite.tester import MODULUS, answer_words

FIRST_NUMBER = MODULUS - 2  # so that the numbers wrap at once
LEASE_MS = 8000
WINDOW = 32
HALF = 1 << 31
_FIELDS: tuple[str, ...] = ("epoch", "lease", "duration")


class WindowDriver:
    """A :class:`~protobench.suite.machines.mealy.Subject`: one session of controller A after the other.

    It believes what the module told it: the highest number, which numbers it used, its last two stored commands with
    their receipts, and whether it holds the lease.
    """

    def __init__(self, bench: Bench) -> None:
        self._bench = bench
        self._tester = bench.a
        self._held = False
        self._begin()
        self._steps: dict[str, Callable[[], str]] = {
            "refused": self._refused,
            "copy": lambda: self._copy(-1),
            "copy-before": lambda: self._copy(-2),
            "other-body": self._other_body,
            "other-kind": self._other_kind,
            "read": self._read,
            "halt": self._halt,
            "many": self._many,
        }

    def _begin(self) -> None:
        self._highest: int | None = None
        self._used: set[int] = set()
        self._stored: list[tuple[Sent, Received]] = []
        self._taken = 0
        self._noticed = len(self._bench.port.watch.violations)

    # ------------------------------------------------------------ Subject

    def reset(self) -> None:
        """Give the lease back and begin a session that the module has never heard of.

        Raises Failed when the lease does not come free.
        """
        self._free()
        self._bench.port.inbox.clear()
        self._tester.session = self._bench.rng.randrange(1, MODULUS)
        self._begin()

    def step(self, symbol: str, /) -> str:
        """One input of the window machine and what came of it, with everything that nobody asked for."""
        self._taken += 1
        if self._taken > WORD_MAX:
            raise ValueError(f"a word of the number window has at most {WORD_MAX} inputs")
        own = self._steps.get(symbol)
        output = own() if own is not None else self._new(self._number(symbol))
        strays = sorted(received.kind for received in self._bench.port.take_all(lambda _: True))
        violations = self._bench.port.watch.violations[self._noticed :]
        self._noticed += len(violations)
        return " and ".join([output, *strays, *(violation.reason for violation in violations)])

    def _free(self) -> None:
        tester = self._tester
        status = tester.status()
        if status["holder"] == 0:
            self._held = False
            return
        if (status["holder"], status["holder_session"]) == (tester.address, tester.session):
            tester.lease = status["lease"]
            tester.answer(tester.send("release-lease", number=((self._highest or 0) + 1) % MODULUS))
            status = tester.status()
        if status["holder"] != 0:
            self._bench.port.wait_ms(status["lease_remaining"] + 100)
            status = tester.status()
        if status["holder"] != 0:
            raise Failed("the lease does not come free", clause="LSE-11")
        tester.lease = status["lease"]
        self._held = False

    # ------------------------------------------------------------ numbers

    def _number(self, symbol: str) -> int:
        top = self._highest
        if top is None:
            return FIRST_NUMBER
        if symbol in AHEAD:
            return (top + AHEAD[symbol]) % MODULUS
        if symbol in ("top", "gap"):
            return (top - ("top", "gap").index(symbol)) % MODULUS
        if symbol == "half":
            return (top + HALF) % MODULUS
        places = range(WINDOW - 1, 0, -1) if symbol == "inside" else range(WINDOW, HALF)
        return next(number for behind in places if (number := (top - behind) % MODULUS) not in self._used)

    def _following(self) -> int:
        return self._number("next")

    # ------------------------------------------------------------ inputs

    def _new(self, number: int) -> str:
        """Take the lease, or give it back, with this number."""
        if self._held:
            return self._command(number, "release-lease")
        return self._command(number, "take-lease", duration=LEASE_MS)

    def _refused(self) -> str:
        epoch = (self._tester.epoch + 1000) % MODULUS
        return self._command(self._following(), "renew-lease", duration=LEASE_MS, epoch=epoch)

    def _command(self, number: int, kind: str, **fields: int) -> str:
        sent = self._tester.send(kind, number=number, **fields)
        receipt = self._tester.answer(sent)
        if receipt is None:
            return "nothing"
        words = self._words(receipt)
        if words in ("granted", "accepted") or receipt.get("reason") == "stale-epoch":
            self._note(number)
            self._stored = [*self._stored[-1:], (sent, receipt)]
        if words == "granted":
            self._held, self._tester.lease = True, receipt["lease"]
        elif words == "accepted":
            self._held = False
        return words

    def _note(self, number: int) -> None:
        self._used.add(number)
        self._highest = number
        self._tester.use_number(number)  # whoever goes on with this session goes on behind it

    def _copy(self, place: int) -> str:
        """The bytes of a stored command; before there is one, a new command."""
        if not self._stored:
            return self._new(self._number("top"))
        sent, first = self._stored[max(place, -len(self._stored))]
        again = self._tester.answer(self._tester.send_frame(sent.frame_bytes))
        if again is None:
            return "nothing"
        same = again.frame_bytes == first.frame_bytes
        return f"copy {self._words(again)}" if same else f"another answer: {self._words(again)}"

    def _other_body(self) -> str:
        if not self._stored:
            return self._new(self._number("top"))
        sent, _ = self._stored[-1]
        fields = {name: sent.fields[name] for name in _FIELDS if name in sent.fields}
        changed = "duration" if "duration" in fields else "lease"
        fields[changed] += 1
        return self._ask(sent.kind, sent.number, **fields)

    def _other_kind(self) -> str:
        if not self._stored:
            return self._new(self._number("top"))
        sent, _ = self._stored[-1]
        other = {"take-lease": "renew-lease", "renew-lease": "take-lease", "release-lease": "de-energize"}
        again = self._tester.send(other[sent.kind], number=sent.number, body=sent.frame.body)
        return self._answered(again)

    def _ask(self, kind: str, number: int, **fields: int) -> str:
        return self._answered(self._tester.send(kind, number=number, **fields))

    def _answered(self, sent: Sent) -> str:
        answer = self._tester.answer(sent)
        return "nothing" if answer is None else self._words(answer)

    def _read(self) -> str:
        return self._ask("status", self._following())

    def _halt(self) -> str:
        return self._ask("halt", self._following())

    def _many(self) -> str:
        number = self._following()
        sent = self._tester.send("renew-lease", number=number, to=self._bench.broadcast, duration=LEASE_MS)
        self._note(number)
        port = self._bench.port
        answer = self._tester.answer(sent, self._bench.facts.receipt_ms + port.u_ms)
        return "nothing" if answer is None else self._words(answer)

    @staticmethod
    def _words(answer: Received) -> str:
        if answer.kind == "status-report":
            return f"status {'held' if answer['holder'] else 'free'}"
        if answer.kind != "receipt":
            return answer.kind
        if answer["result"] == "accepted":
            return "granted" if answer.get("lease") is not None else "accepted"
        return answer_words(answer)
