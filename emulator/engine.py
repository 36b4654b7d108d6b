"""The emulated module, sans I/O: bytes and the time come in, frames and the next deadline come out."""

from __future__ import annotations

import random
from functools import partial
from typing import Any

from emulator.answers import Answers
from emulator.config import ModuleConfig
from emulator.execute import Executor
from emulator.faults import FaultList, Occurrence
from emulator.history import COPY, NEW, Entry, History
from emulator.judge import Judge, Refused, Request, examine
from emulator.lease import Lease
from emulator.motion import COMMITTED, READY, REPEATS_MS, RUNNING, SETTLING, Body, Motion, MotionTable, Run
from emulator.outbox import Outbox, Written
from emulator.storage import PowerCut, Storage, WriteFailed
from emulator.telemetry import Telemetry
from emulator.truth import TruthLog
from protobench.contract import Contract, State
from protobench.wire import Codec, Dropped, Frame, load_codec, stuff

MODULUS = 1 << 32
RESEND_SPACING_US = 100_000
STORAGE_FAILED = "storage-failed"
FAULTS_OF_RESTARTS = {"watchdog": "watchdog", "brown-out": "brown-out"}


class ModuleEngine:
    """One module. ``feed`` and ``advance`` take times in microseconds that never go back.

    Stream form: ``feed`` bytes, ``take_output`` stuffed frames. Unit form, for datagrams and message parts:
    ``feed_frame`` bare frames, ``take_frames`` bare frames with whose request they answer. One module is used in one
    form.
    """

    def __init__(
        self, config: ModuleConfig, storage: Storage, rng: random.Random, contract: Contract
    ) -> None:
        self.config = config
        self.storage = storage
        self.rng = rng
        self.contract = contract
        self.codec: Codec = load_codec(contract)
        self.judge = Judge(self, contract)
        self.answers = Answers(self)
        self.executor = Executor(self)
        self.now_us = 0
        self.drops = dict.fromkeys((drop.name for drop in contract.drops), 0)
        self._decoder = self.codec.stream_decoder()
        self._output: list[Written] = []
        self.asker: bytes | None = None
        self._saturation = int(contract.limit("counter_saturation").value or 0)
        self._last_sent_us: int | None = None
        self._survivors: set[int] = set()
        self._start("power-on")

    # ------------------------------------------------------------ start

    def _start(self, cause: str) -> None:
        """Everything volatile is new; the epoch is kept before the first frame leaves."""
        cause, is_kept = self._keep_epoch(cause)
        config = self.config
        self.address = config.address if self.storage.address is None else self.storage.address
        self.restart_cause = cause
        self.state: State = self.contract.states.initial
        self.halt_count = 1
        self.halt_cause = "restart"
        self.boot_us = self.now_us
        self.starting_end_us: int | None = self.now_us + 1000 * config.starting_ms
        self.lease = Lease()
        self.history = History(config.sessions, config.numbers, self.lease.is_holder)
        self.outbox = Outbox(config.answers, config.sessions)
        self.motions = MotionTable(config)
        self.body = Body.new(config)
        self.faults = FaultList(self.contract, config.faults)
        self.telemetry: Telemetry | None = None
        self.truth = TruthLog()
        self.silent_refusals = 0
        self.event_number = 0
        self.change = 0
        self.drops = dict.fromkeys(self.drops, 0)
        self.restart_wanted: tuple[str, int] | None = None
        self._started_waiting = False
        self._covered: tuple[object, ...] | None = None
        survivors, self._survivors = self._survivors, set()
        for code in sorted(survivors):
            self.raise_condition(code, survives=True)
        if cause in FAULTS_OF_RESTARTS:
            self.happen(self.contract.fault(FAULTS_OF_RESTARTS[cause]).code)
        if not is_kept:
            self.raise_condition(self.contract.fault(STORAGE_FAILED).code, survives=False)
        self._note_change()

    def _keep_epoch(self, cause: str) -> tuple[str, bool]:
        """Count this start; the cause it reports (power may fail meanwhile), and whether the count is kept."""
        self.epoch = self.storage.epoch % (MODULUS - 1) + 1
        try:
            self.storage.write(epoch=self.epoch)
        except PowerCut:
            return self._keep_epoch("power-on")
        except WriteFailed:
            return cause, False
        return cause, True

    def restart(self, cause: str) -> None:
        """Restart now; conditions that survive are found again."""
        self._start(cause)

    # ------------------------------------------------------------ the peer's side: bytes, time, output

    def feed(self, now_us: int, data: bytes) -> None:
        """Stream bytes arrived at ``now_us``."""
        self._run_until(now_us - 1)
        self._pass_time(now_us)
        for unit in self._decoder.feed(data, now_us * 1000):
            self._take_unit(unit)

    def feed_frame(self, now_us: int, data: bytes, asker: bytes | None = None) -> None:
        """A bare frame of a peer arrived at ``now_us``; what answers it names that peer."""
        self._run_until(now_us - 1)
        self._pass_time(now_us)
        self.asker = asker
        self._take_unit(data)

    def count_drops(self, reason: str, count: int) -> None:
        """So many units were dropped for a reason of the contract, before they came here."""
        self.drops[reason] = min(self._saturation, self.drops[reason] + count)

    def advance(self, now_us: int) -> None:
        """Do all that is due at ``now_us`` or before."""
        self._run_until(now_us)
        self._pass_time(now_us)

    def take_output(self) -> list[bytes]:
        """Stuffed frames, each ended by a delimiter, written since the last call."""
        frames, self._output = self._output, []
        blocks = [stuff(frame.data) + b"\0" for frame in frames]
        if blocks and (self._last_sent_us is None or self.now_us - self._last_sent_us > 200_000):
            blocks.insert(0, b"\0")
        if blocks:
            self._last_sent_us = self.now_us
        return blocks

    def take_frames(self) -> list[Written]:
        """Bare frames written since the last call."""
        frames, self._output = self._output, []
        return frames

    def next_deadline_us(self) -> int | None:
        """When ``advance`` is wanted next."""
        times = [
            self.starting_end_us,
            self.lease.end_us,
            self.motions.run.next_us() if self.motions.run else None,
            self.motions.next_start_us(),
            self.now_us if self._ready_motion() is not None else None,
            min(
                (m.next_us for m in self.motions.formed if m.is_open and m.next_us is not None), default=None
            ),
            self.faults.next_due_us(),
            self.telemetry.next_us if self.telemetry else None,
            self.outbox.next_due_us(),
        ]
        return min((time for time in times if time is not None), default=None)

    def _pass_time(self, now_us: int) -> None:
        self.now_us = max(self.now_us, now_us)

    def _run_until(self, limit_us: int) -> None:
        while (due_us := self.next_deadline_us()) is not None and due_us <= limit_us:
            self._pass_time(due_us)
            self._do_due()
            self._after_input()

    # ------------------------------------------------------------ what is due

    def _do_due(self) -> None:
        """Everything due at this instant, in the contract's order."""
        now_us = self.now_us
        if self.starting_end_us is not None and self.starting_end_us <= now_us:
            self.starting_end_us = None
            self.apply("started")
            self._started_waiting = True
        if self.lease.end_us is not None and self.lease.end_us <= now_us:
            self.end_lease("lease-end")
        while (run := self.motions.run) is not None and run.is_due(now_us):
            self._end_phase(run)  # settling and rest fall on one instant
        for motion in self.motions.due_starts(now_us):
            self._begin_scheduled(motion)
        ready = self._ready_motion()
        if ready is not None:
            self._get_ready(ready)

    def _after_input(self) -> None:
        """An input is taken: number the change, then send what is due."""
        while self.faults.record_waiting(self.now_us, self.next_event()):
            self.event_number = self.next_event()
        self._note_change()
        self._send_due()
        if self.restart_wanted is not None and self.outbox.left >= self.restart_wanted[1]:
            self.restart(self.restart_wanted[0])

    def _note_change(self) -> None:
        covered = self.answers.covered()
        if covered != self._covered:
            self._covered = covered
            self.change = (self.change + 1) % MODULUS
        for motion in self.motions.formed:
            if motion.change is None:
                motion.change = self.change
        for entry in self.faults.occurrences:
            if entry.change is None:
                entry.change = self.change

    def _send_due(self) -> None:
        """Halt receipts, answers, faults, outcomes, answers to many, started, telemetry: in this order."""
        now_us = self.now_us
        self._output += self.outbox.take_halts(now_us)
        self._output += self.outbox.take_answers(now_us)
        while (entry := self.faults.take_due(now_us)) is not None:
            self._output.append(self.answers.fault(entry))
        for motion in self.motions.formed:
            if motion.is_open and motion.next_us is not None and motion.next_us <= now_us:
                self._send_outcome(motion)
        self._output += self.outbox.take_many(now_us)
        if self._started_waiting:
            self._started_waiting = False
            self._output.append(self.answers.started())
        telemetry = self.telemetry
        while telemetry is not None and telemetry.next_us <= now_us and not telemetry.is_over:
            self._output.append(self.answers.telemetry(telemetry))
            telemetry.advance()
        if telemetry is not None and telemetry.is_over:
            self.telemetry = None

    def _send_outcome(self, motion: Motion) -> None:
        self._output.append(self.answers.outcome(motion))
        motion.last_sent_us = self.now_us
        repeat = motion.sendings
        motion.sendings += 1
        motion.next_us = self.now_us + 1000 * REPEATS_MS[repeat] if repeat < len(REPEATS_MS) else None

    # ------------------------------------------------------------ state

    def apply(self, name: str) -> None:
        """Take an input of the state table."""
        before = self.state.activity
        _, self.state = self.contract.states.step(self.state, name, self.config.settles)
        self._log_power(before, self.state.activity)

    def _log_power(self, before: str, after: str) -> None:
        powered = ("energized", "moving")
        if before in powered and after not in powered:
            self.truth.add(self.clock(), "de-energized", self.true_position())
        elif before not in powered and after in powered:
            self.truth.add(self.clock(), "energized", self.true_position())

    def input_of(self, request: Request) -> str | None:
        """The input of the state table that a command is."""
        name = request.name
        if not request.is_command or name == "assist":
            return None
        if name == "reset":
            return "reset" if request.fields.halt_count == self.halt_count else "reset-older"
        if name == "clear-faults":
            return "clear-faults"
        known = (
            "take-lease",
            "renew-lease",
            "release-lease",
            "energize",
            "de-energize",
            "move",
            "cancel",
            "assign-address",
        )
        return name if name in known else "other-command"

    def clock(self) -> int:
        return (self.now_us - self.boot_us) % MODULUS

    def true_position(self) -> int:
        run = self.motions.run
        return self.body.moved(run.displacement(self.now_us) if run is not None else 0)

    def next_event(self) -> int:
        return (self.event_number + 1) % MODULUS

    # ------------------------------------------------------------ frames in

    def _take_unit(self, unit: bytes | Dropped) -> None:
        frame = unit if isinstance(unit, Dropped) else self.codec.frames.unpack(unit)
        if isinstance(frame, Dropped):
            self._drop(frame.reason)
            return
        if frame.kind == self.contract.kind("halt").code and self._includes(frame):
            self._take_halt(
                frame
            )  # on the same instant a halt comes before what is due, everything else after it
        else:
            self._run_until(self.now_us)
            self._take_frame(frame)
        self._after_input()

    def _drop(self, reason: str) -> None:
        self.count_drops(reason, 1)

    def refuse_silently(self) -> None:
        self.silent_refusals = min(self._saturation, self.silent_refusals + 1)

    def _includes(self, frame: Frame) -> bool:
        addresses = self.contract.addresses
        if self.address == addresses.unassigned:
            kinds = [self.contract.kind(name).code for name in ("halt", "probe", "assign-address")]
            return frame.destination == addresses.broadcast and frame.kind in kinds
        if frame.destination in (self.address, addresses.broadcast):
            return True
        return frame.destination in self.storage.groups and self.config.has("groups")

    def _is_answerable(self, source: int) -> bool:
        addresses = self.contract.addresses
        return addresses.unicast_first <= source <= addresses.unicast_last

    def _take_frame(self, frame: Frame) -> None:
        reason = self._drop_reason(frame)
        if reason is not None:
            self._drop(reason)
            return
        low, high = self.contract.kind_range("notice")
        if low <= frame.kind <= high:
            self._take_confirm(frame)
        else:
            self._take_request(frame)

    def _drop_reason(self, frame: Frame) -> str | None:
        """The first reason of the drop table from `other-address` to `length` that fits."""
        if not self._includes(frame):
            return "other-address"
        if frame.source == self.address and self.address:
            self._meet_own_address()
            return "own-source"
        if not self._is_answerable(frame.source):
            return "bad-source"
        own_major = frame.version == self.contract.major
        is_confirm = frame.kind == self.contract.kind("confirm").code and own_major
        ranges = [self.contract.kind_range(name) for name in ("read", "command", "command_private")]
        if not is_confirm and not any(low <= frame.kind <= high for low, high in ranges):
            return "not-a-request"
        return "length" if own_major and self.codec.frames.check_length(frame) is not None else None

    def _meet_own_address(self) -> None:
        code = self.contract.fault("address-conflict").code
        if not any(entry.code == code for entry in self.faults.latched):
            self.happen(code)

    def _kind_of(self, frame: Frame) -> Any:
        kind = self.codec.kinds_by_code.get(frame.kind)
        if kind is None:
            return None
        found = self.contract.kind(kind.name)
        return found if found.class_ in ("read", "command", "notice") else None

    # ------------------------------------------------------------ halt

    def _take_halt(self, frame: Frame) -> None:
        disposition = self.halt("request")
        if not self._is_answerable(frame.source) or frame.source == self.address:
            return
        count, epoch = self.halt_count, self.epoch
        make = self.answers.maker(
            frame, "halt-receipt", disposition=disposition, halt_count=count, epoch=epoch
        )
        if not self.contract.is_multicast(frame.destination):
            self.outbox.put_halt(self.now_us + self.config.receipt_delay_us, make)
            return
        kind = self.contract.kind("halt")
        request = Request(frame, kind, True, examine(self, frame, kind, True), NEW)
        readable = self.codec.frames.check_length(frame) is None and self.judge.is_readable(request)
        window_ms = request.fields.answer_window if readable else 0
        self.outbox.put_many(request.key, self._window_due(window_ms), make)

    def halt(self, cause: str) -> int:
        """Stop everything now; how the halt found the module, as the number of its disposition."""
        run = self.motions.run
        found = "at-rest" if run is None else "past-no-return" if run.past_return else "stopping"
        self.motions.stop_all("halt", self.now_us)
        self.apply("halt")
        self.halt_count = (self.halt_count + 1) % MODULUS
        self.halt_cause = cause
        self.form_ended()
        return self.contract.enum_values("disposition")[found]

    def _window_due(self, window_ms: int) -> int | None:
        return self.now_us + self.rng.randint(0, 1000 * window_ms) if window_ms else None

    # ------------------------------------------------------------ requests

    def _take_request(self, frame: Frame) -> None:
        many = self.contract.is_multicast(frame.destination)
        kind = self._kind_of(frame) if frame.version == self.contract.major else None
        if (many and self._lacks_room_for_many(frame, kind)) or (not many and not self.outbox.has_room):
            self._drop("no-room")
            return
        if frame.version != self.contract.major:
            self._answer_version(frame, many)
            return
        low, _ = self.contract.kind_range("command")
        is_command = frame.kind >= low
        digest = hash((frame.kind, frame.flags, frame.destination, frame.body))
        key = (frame.source, frame.session)
        standing, entry = self.history.lookup(key, frame.number, digest) if is_command else (NEW, None)
        request = Request(frame, kind, many, examine(self, frame, kind, many), standing)
        if many:
            self._take_from_many(request)
        elif standing == COPY and entry is not None:
            self._answer_with(frame, entry.receipt)
            self._resend_outcome(request)
        else:
            self._judge(request, digest, is_command=is_command)

    def _lacks_room_for_many(self, frame: Frame, kind: Any) -> bool:
        if kind is None or not kind.many:
            return False
        examined = examine(self, frame, kind, True)
        window_ms = getattr(examined.message, "answer_window", 0) if examined is not None else 0
        return bool(window_ms) and not self.outbox.has_room_for_many((frame.source, frame.session))

    def _answer_version(self, frame: Frame, many: bool) -> None:
        if many:
            self.refuse_silently()
            return
        request = Request(frame, None, False, None, NEW)
        refused = self.judge.refuse(request)
        assert refused is not None
        self._answer_with(frame, self.answers.refusal(refused))

    def _judge(self, request: Request, digest: int, *, is_command: bool) -> None:
        refused = self.judge.refuse(request)
        stored = is_command and request.standing == NEW
        session = self.history.consume(request.key, request.frame.number) if stored else None
        if refused is None and not is_command:
            make = self.answers.read(request, self.clock())
            self.outbox.put(self.now_us + self.config.receipt_delay_us, make)
            return
        try:
            receipt = self._receipt(request, refused)
        except PowerCut:
            self.restart("power-on")
            return
        if session is not None:
            self.history.store(session, request.frame.number, Entry(digest, receipt))
        self._answer_with(request.frame, receipt)

    def _receipt(self, request: Request, refused: Refused | None) -> bytes:
        if refused is not None:
            return self.answers.refusal(refused)
        try:
            details = self.executor.execute(request)
        except WriteFailed:
            self.happen(self.contract.fault(STORAGE_FAILED).code)
            return self.answers.refusal(self.judge.refusal(STORAGE_FAILED))
        self.extend_lease(request)
        return self.answers.accepted(details)

    def extend_lease(self, request: Request) -> None:
        """Accepted first-seen unicast commands of the holder extend its lease; assist does not."""
        if self.lease.is_holder(request.key) and not request.many and request.name != "assist":
            self.lease.extend(self.now_us)

    def _answer_with(self, frame: Frame, receipt: bytes) -> int:
        make = self.answers.raw_maker(frame, "receipt", receipt)
        return self.outbox.put(self.now_us + self.config.receipt_delay_us, make)

    def _take_from_many(self, request: Request) -> None:
        refused = self.judge.refuse(request)
        if (
            request.is_command
            and request.standing == NEW
            and (request.kind is not None and request.kind.many)
        ):
            self.history.consume(request.key, request.frame.number)
        if refused is not None:
            self.refuse_silently()
            return
        due_us = self._window_due(request.fields.answer_window)
        if not request.is_command:
            self.outbox.put_many(request.key, due_us, self.answers.read(request, self.clock()))
            return
        try:
            receipt = self.answers.accepted(self.executor.execute(request))
        except PowerCut:
            self.restart("power-on")
            return
        except WriteFailed:
            self.happen(self.contract.fault(STORAGE_FAILED).code)
            self.refuse_silently()
            return
        self.outbox.put_many(request.key, due_us, self.answers.raw_maker(request.frame, "receipt", receipt))

    def _resend_outcome(self, request: Request) -> None:
        """A copied move brings its unconfirmed outcome again, after its receipt."""
        frame = request.frame
        for motion in self.motions.formed:
            if (
                motion.is_open
                and (motion.source, motion.session, motion.number) == (*request.key, frame.number)
                and self.now_us - motion.last_sent_us >= RESEND_SPACING_US
            ):
                motion.last_sent_us = self.now_us
                due_us = self.now_us + self.config.receipt_delay_us
                self.outbox.put(due_us, partial(self.answers.outcome, motion))

    def _take_confirm(self, frame: Frame) -> None:
        kind = self.contract.kind("confirm")
        many = self.contract.is_multicast(frame.destination)
        if many:
            self.refuse_silently()
            return
        request = Request(frame, kind, False, examine(self, frame, kind, False), NEW)
        if not self.judge.is_readable(request) or not self._confirm(request):
            self._drop("stale-confirm")

    def _confirm(self, request: Request) -> bool:
        if request.fields.epoch != self.epoch:
            return False
        by_holder = self.lease.is_holder(request.key)
        for motion in self.motions.formed:
            if motion.is_open and motion.event == request.fields.event:
                if not by_holder and (motion.source, motion.session) != request.key:
                    return False
                motion.confirmed = True
                return True
        return self.faults.confirm(request.fields.event, self.now_us, by_holder=by_holder)

    # ------------------------------------------------------------ lease end

    def end_lease(self, name: str) -> None:
        """The lease ends, by expiry (``lease-end``) or release (``release-lease``)."""
        self.motions.stop_all("lease-end", self.now_us)
        self.apply(name)
        self.lease.end()
        self.form_ended()

    # ------------------------------------------------------------ faults

    def raise_condition(self, code: int, *, survives: bool) -> None:
        """A condition arises; one that stands already raises nothing."""
        if survives:
            self._survivors.add(code)
        if code in self.faults.standing:
            return
        self.faults.standing.add(code)
        self.happen(code)

    def withdraw_condition(self, code: int) -> None:
        self._survivors.discard(code)
        self.faults.standing.discard(code)

    def happen(self, code: int) -> None:
        """A rising edge."""
        value = self.answers.measured(code)
        if self.faults.occur(code, self.now_us, self.clock(), value, self.next_event()):
            self.event_number = self.next_event()
        if self.faults.is_latching(code):
            self.motions.stop_all("fault", self.now_us)
            self.apply("fault")
            self.form_ended()

    def clear_faults(self, numbers: tuple[int, ...]) -> None:
        for number in numbers:
            entry: Occurrence | None = self.faults.find_latched(number)
            if entry is not None:
                self.faults.clear(entry)
        while self.faults.record_waiting(self.now_us, self.next_event()):
            self.event_number = self.next_event()
        if not self.faults.latched:
            self.apply("clear-faults")

    # ------------------------------------------------------------ motion

    def _ready_motion(self) -> Motion | None:
        """The first of the queue, when it may begin and its receipt has left."""
        if self.motions.run is not None or not self.motions.queued or self.state.activity != "energized":
            return None
        motion = self.motions.queued[0]
        if motion.held or motion.ending is not None or self.outbox.left < motion.answer:
            return None
        return motion

    def _begin_scheduled(self, motion: Motion) -> None:
        """A stated start has come: before all that is queued, yet not before the receipt has left."""
        if self.motions.run is not None:
            self.motions.end(motion, "late")
            self.form_alone(motion)
            return
        self.motions.scheduled.remove(motion)
        self.motions.queued.insert(0, motion)
        if self.outbox.left >= motion.answer:
            self._get_ready(motion)

    def _get_ready(self, motion: Motion) -> None:
        if self.motions.hold_phase == READY:
            self.motions.hold_phase = None
            motion.held = True
            return
        if not motion.allow_last_bond and self.body.is_last_bond(motion.motion, motion.face):
            self.motions.end(motion, "last-bond")
            self.form_alone(motion)
            return
        self.motions.queued.remove(motion)
        self.apply("begin")
        self.truth.begin(self.clock(), self.true_position())
        self.motions.run = Run(motion, self.config.motions[motion.motion], self.now_us, self.now_us)
        self.motions.enter(RUNNING, self.now_us)

    def _end_phase(self, run: Run) -> None:
        if run.stop_us is not None or run.phase == SETTLING:
            self._reach_rest(run)
        elif run.phase == RUNNING and run.config.no_return_ms:
            self.motions.enter(COMMITTED, self.now_us)
        else:
            self.motions.enter(SETTLING, self.now_us)

    def _reach_rest(self, run: Run) -> None:
        motion = run.motion
        faces = [face.bonded for face in self.body.faces]
        motion.displacement = run.displacement(self.now_us)
        motion.duration_ms = min(65_535, (self.now_us - run.begun_us) // 1000)
        motion.energy_mj = 8 * motion.duration_ms
        if run.stop_us is None:
            motion.outcome, motion.cause = self.body.conclude(motion)
        self.body.position = self.body.moved(motion.displacement)
        self.motions.run = None
        for before, face in zip(faces, self.body.faces, strict=True):
            if before != face.bonded:
                self.truth.add(
                    self.clock(), "bond-closed" if face.bonded else "bond-opened", self.body.position
                )
        self.truth.add(self.clock(), "at-rest", self.body.position)
        self.apply("rest")
        self._form([motion])
        if motion.outcome != "done":
            for waiting in self.motions.queued:
                self.motions.end(waiting, "predecessor")
        self.form_ended()

    def form_alone(self, motion: Motion) -> None:
        """Outcomes of a waiting motion that ended by itself, and of those behind it."""
        self._form(self.motions.take_ended(alone=motion))

    def form_ended(self) -> None:
        """Outcomes of motions that ended without having begun, once nothing runs."""
        self._form(self.motions.take_ended())

    def _form(self, motions: list[Motion]) -> None:
        for motion in motions:
            self.event_number = self.next_event()
            motion.event = self.event_number
            # never before its own receipt, which leaves within the receipt delay
            waits = self.outbox.left < motion.answer
            motion.next_us = self.now_us + (self.config.receipt_delay_us if waits else 0)
            self.motions.formed.append(motion)
