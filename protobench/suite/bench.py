"""What a case is given: the port, the module's facts, two controllers, and the way back to the start."""

from __future__ import annotations

import random
from typing import Any

from protobench.contract import Contract
from protobench.judge import Failed
from protobench.links import Link
from protobench.suite.facts import Facts, MotionFacts, derive_items
from protobench.suite.language import Language
from protobench.suite.port import Log, Port, Received
from protobench.suite.restart import OutsideRestart
from protobench.suite.tester import PATIENCE_MS, Tester
from protobench.wire import Codec

CONTROLLER_A = 0x00010001
CONTROLLER_B = 0x00010002
KEEPER = 0x0001FFFF
PROBE_WINDOW_MS = 100
FIRST_CONTACT_MS = 4000  # a program or a board may still be starting
FIRST_READS = 3
STARTING_POLL_MS = 20
REAL_SPACING_SLACK_NS = 100_000_000


class NoModule(Exception):  # noqa: N818 - says what is missing
    """No module, or more than one, answered: there is nothing to judge. The message says what to do."""


class Bench:
    """The bench as a case sees it.

    ``a`` and ``b``: two controllers with fresh sessions. ``facts``: what the module declares. ``rng``: seeded for
    the case. ``raised``: fault codes whose condition the case raised. ``outside_restart``: restarts the module where
    a way to do so from outside is known.
    """

    def __init__(
        self, link: Link, contract: Contract, codec: Codec, seed: int, log: Log | None = None
    ) -> None:
        self.contract = contract
        self.language = Language(contract, codec)
        self.port = Port(link, self.language, log)
        own_slack_ns = 0 if link.virtual else REAL_SPACING_SLACK_NS
        self.port.watch.spacing_slack_ns = own_slack_ns + self.port.line_ns
        self.seed = seed
        self.address = 0
        self.facts = Facts()
        self.rng = random.Random(seed)
        self.raised: set[int] = set()
        self.outside_restart: OutsideRestart | None = None
        self._testers: list[Tester] = []
        self.a = self.b = Tester(self, CONTROLLER_A, self.rng)

    # ------------------------------------------------------------ the module

    def discover(self, address: int | None) -> None:
        """Find the module and learn what it says of itself. Sends reads only.

        Raises NoModule when nobody answers, or several do and no address was given.
        """
        self.address = self._find() if address is None else address
        self.port.watch.own_addresses = {self.address}
        self.a = Tester(self, KEEPER, self.rng)
        description = self._first_answer()
        motions = {}
        for name, number in self.contract.enum_values("motion").items():
            if description["motions"] >> number & 1:
                answer = self._read_or_none("describe-motion", motion=name)
                if answer is not None and answer.kind == "motion-description":
                    motions[name] = _motion_facts(name, answer.fields)
        self.facts.description = dict(description.fields)
        self.facts.motions = motions
        self.facts.items = derive_items(self.contract, description.fields, motions, self.link_items())
        if self.outside_restart is not None:
            self.facts.items |= {"restart"}
        self._wait_started()

    def _wait_started(self) -> None:
        """Opening a link may start what is behind it; while it starts it refuses what a case's preamble asks."""
        deadline_ns = self.port.now_ns + (self.facts.starting_ms + FIRST_CONTACT_MS) * 1_000_000
        while self.port.now_ns < deadline_ns:
            status = self._read_or_none("status")
            if status is None or status.get("activity") != "starting":
                return
            self.port.wait_ms(STARTING_POLL_MS)

    def _read_or_none(self, kind: str, **fields: Any) -> Received | None:
        """The answer to a read; None when none that keeps to the contract comes, which is for the cases to judge."""
        for _ in range(FIRST_READS):
            answer = self.a.answer(self.a.send(kind, **fields))
            if answer is not None:
                return answer
        return None

    def link_items(self) -> set[str]:
        """What the link allows: raw ``stream`` bytes, ``gaps`` that mean something, ``virtual`` time."""
        items = set()
        if self.port.has_stream:
            items.add("stream")
        if self.port.link.framing.name == "STREAM":
            items.add("gaps")
        if self.port.link.virtual:
            items.add("virtual")
        return items

    def _find(self) -> int:
        self.port.watch.own_addresses = set()
        tester = Tester(self, KEEPER, self.rng)
        found: dict[int, Received] = {}
        deadline_ns = self.port.now_ns + FIRST_CONTACT_MS * 1_000_000
        while not found and self.port.now_ns < deadline_ns:
            tester.send("probe", to=self.broadcast, answer_window=PROBE_WINDOW_MS)
            self.port.wait_ms(PROBE_WINDOW_MS + 60 + self.port.u_ms)
            for received in self.port.take_all(lambda received: received.kind == "presence"):
                found[received.frame.source] = received
        if not found:
            raise NoModule(
                f"no module answered a probe on {self.port.link.name} within {FIRST_CONTACT_MS} ms; "
                "check the link, its speed, and that the module runs; with --address N it is asked directly"
            )
        if len(found) > 1:
            addresses = ", ".join(str(address) for address in sorted(found))
            raise NoModule(f"modules {addresses} answered; choose one with --address N")
        (address,) = found
        if address == 0:
            raise NoModule("the module that answered has no address yet; give it one first (assign-address)")
        return address

    def _first_answer(self) -> Received:
        deadline_ns = self.port.now_ns + FIRST_CONTACT_MS * 1_000_000
        while True:
            answer = self.a.answer(self.a.send("describe"))
            if answer is not None and answer.kind == "description":
                return answer
            if self.port.now_ns >= deadline_ns:
                broken = [violation.reason for violation in self.port.watch.violations]
                raise NoModule(
                    f"module {self.address} did not describe itself on {self.port.link.name} "
                    f"within {FIRST_CONTACT_MS} ms" + (f": {broken[0]}" if broken else "")
                )

    @property
    def broadcast(self) -> int:
        return self.contract.frame.addresses.broadcast

    @property
    def longest_ms(self) -> int:
        """Longest declared duration of any motion, in ms."""
        return max((motion.longest_ms for motion in self.facts.motions.values()), default=0)

    def other_address(self, distance: int = 1) -> int:
        """A unicast address that is not the module's, so many places after it."""
        last = self.contract.addresses.unicast_last
        return (self.address - 1 + distance) % last + 1

    def is_many(self, address: int) -> bool:
        return self.contract.is_multicast(address)

    def fence_fields(self, kind: str, *, many: bool) -> tuple[str, ...]:
        """Which of ``epoch`` and ``lease`` a request of this kind needs."""
        spec = self.contract.kind(kind)
        if spec.class_ != "command":
            return ()
        needed = [field.name for field in spec.fields if field.required == "always"]
        if not many:
            needed += [field.name for field in spec.fields if field.required == "unicast"]
        return tuple(name for name in ("epoch", "lease") if name in needed)

    def fault_code(self, name: str) -> int:
        return self.contract.fault(name).code

    # ------------------------------------------------------------ testers

    def tester(self, address: int = CONTROLLER_A) -> Tester:
        """Another controller, or another session of one, which knows the module's epoch and lease number."""
        tester = Tester(self, address, self.rng)
        tester.epoch, tester.lease = self.a.epoch, self.a.lease
        self._testers.append(tester)
        return tester

    def learned(self, epoch: int, lease: int) -> None:
        """The module restarted: what every tester believes is brought up to date."""
        for tester in self._testers:
            tester.epoch, tester.lease = epoch, lease

    def counters(self) -> tuple[dict[str, int], int]:
        """Drop counters by reason, and the silent-refusal counter."""
        answer = self.a.read("read-counters")
        drops = {drop.name: answer["drops"][drop.number - 1] for drop in self.contract.drops}
        return drops, answer["silent_refusals"]

    def send_in_pieces(self, frame: bytes, apart_ms: float) -> int:
        """Send a frame on a stream link in two pieces, some time apart; the time in ns of the last byte."""
        block = self.language.stuff(frame) + b"\0"
        self.port.send_raw(block[: len(block) // 2])
        self.port.wait_ms(apart_ms)
        self.port.note_sent(frame, self.language.read(frame), self.port.now_ns)
        return self.port.send_raw(block[len(block) // 2 :], lead=False)

    # ------------------------------------------------------------ before and after a case

    def begin(self, case_id: str) -> None:
        """A fresh session for each case; the generator depends on the seed and the case alone."""
        self.rng = random.Random(f"{self.seed}/{case_id}")
        self.port.begin_case()
        self.raised.clear()
        self._testers.clear()
        self.a = self.tester(CONTROLLER_A)
        self.a.learn()
        self.b = self.tester(CONTROLLER_B)

    def end(self) -> None:
        """Postamble: at rest, halted, nothing waiting, nothing unconfirmed, no fault, no lease.

        Raises Failed when the module cannot be brought back to the start.
        """
        self.port.wait_ms(0)
        keeper = self.tester(KEEPER)
        keeper.learn()
        if self.facts.has("assist"):
            if self.raised:
                for code in sorted(self.raised):
                    keeper.accepted("assist", op="withdraw", code=code, clause="AST-01")
            keeper.accepted("assist", op="release", clause="AST-01")
        status = keeper.status()
        keeper.answered(keeper.send("halt"))
        if status["activity"] == "moving" or status["queued"] or status["scheduled"]:
            self._rest(keeper)
        status = keeper.status()
        self._free_lease(status)
        status = keeper.status()
        if status["unconfirmed"] or status["fault_latch"] or status["activity"] != "idle":
            self._tidy(keeper)
        if self.raised and any(not entry.told for entry in self.fault_entries(keeper)):
            keeper.restart()  # notices that nobody confirmed would be told into the next case
        self.port.wait_ms(0)

    def _rest(self, keeper: Tester) -> None:
        deadline_ns = self.port.now_ns + (self.longest_ms + 500) * 1_000_000
        while keeper.status()["activity"] == "moving":
            if self.port.now_ns > deadline_ns:
                raise Failed("the module does not come to rest after a halt", clause="HLT-07")
            self.port.wait_ms(10)

    def _free_lease(self, status: Received) -> None:
        holder = (status["holder"], status["holder_session"])
        if holder == (0, 0):
            return
        for tester in self._testers:
            if (tester.address, tester.session) == holder:
                tester.epoch, tester.lease = status["epoch"], status["lease"]
                tester.accepted("release-lease", clause="LSE-11")
                return
        self.port.wait_ms(status["lease_remaining"] + PATIENCE_MS)

    def _tidy(self, keeper: Tester) -> None:
        keeper.take_lease(2000)
        for _ in range(self.facts.description.get("outcomes", 4) + 1):
            open_events = [entry for entry in self.motion_entries(keeper) if not entry.confirmed]
            if not open_events:
                break
            for entry in open_events:
                keeper.send("confirm", epoch=keeper.epoch, event=entry.event)
        latched = [entry.occurrence for entry in self.fault_entries(keeper) if entry.latched]
        for first in range(0, len(latched), 8):
            keeper.accepted("clear-faults", occurrences=latched[first : first + 8], clause="FLT-08")
        if keeper.status()["activity"] == "energized":
            keeper.accepted("de-energize", clause="STA-10")
        keeper.accepted("release-lease", clause="LSE-11")
        status = keeper.status()
        if status["unconfirmed"] or status["fault_latch"] or status["activity"] != "idle":
            raise Failed(
                f"the module cannot be brought back to the start: {status['unconfirmed']} outcomes unconfirmed, "
                f"fault latch {status['fault_latch']}, activity {status['activity']}"
            )

    def motion_entries(self, tester: Tester) -> list[Any]:
        """All motion records, newest first."""
        return self._pages(tester, "read-motions")

    def fault_entries(self, tester: Tester) -> list[Any]:
        """All fault entries, newest first."""
        return self._pages(tester, "read-faults")

    def _pages(self, tester: Tester, kind: str) -> list[Any]:
        entries: list[Any] = []
        for page in range(256):
            answer = tester.read(kind, page=page)
            entries += answer["entries"]
            if len(entries) >= answer["total"] or not answer["entries"]:
                break
        return entries


def _motion_facts(name: str, fields: dict[str, Any]) -> MotionFacts:
    wanted = MotionFacts.__dataclass_fields__
    return MotionFacts(name, **{key: value for key, value in fields.items() if key in wanted})
