"""Time and telemetry: the clock, its wrap, and reports with a stated end."""

from __future__ import annotations

from protobench.judge import Failed, Inconclusive
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.port import Received, Sent
from protobench.suite.tester import Tester
from protobench.suite.tools import expect_silent_refusals
from protobench.wire import clock_offset_delay

MODULUS = 1 << 32
RATE_SHARE = 0.01
READING_US = 500  # by which a time told may differ from that of the byte it is of


@case(
    "TIM.exchange",
    "valid",
    "A clock exchange returns t1 and two ordered readings of one clock.",
    clauses=["TIM-01"],
)
def test_exchange(bench: Bench) -> None:
    a = bench.a
    offsets: list[float] = []
    for _ in range(5):
        sent = a.send("time-exchange", t1=_bench_us(bench.port.now_ns))
        answer = a.answered(sent)
        inside_us = (answer["t3"] - answer["t2"]) % MODULUS
        round_us = (answer.time_ns - sent.time_ns) / 1000
        if answer["t1"] != sent.fields["t1"] or inside_us > round_us + 1 + bench.port.u_ms * 1000:
            raise Failed(
                f"t3 is {inside_us} us after t2, the whole exchange took {round_us:.0f} us", clause="TIM-01"
            )
        if bench.port.is_lossless and inside_us < (1 - RATE_SHARE) * round_us - READING_US:
            raise Failed(
                f"t3 is {inside_us} us after t2; request and answer were {round_us:.0f} us apart",
                clause="TIM-01",
            )
        t4 = _bench_us(answer.time_ns)
        offset, delay = clock_offset_delay(answer["t1"], answer["t2"], answer["t3"], t4)
        if delay < -1 - bench.port.u_ms * 1000:
            raise Failed(
                f"the exchange has a delay of {delay} us: t2 and t3 cannot be right", clause="TIM-01"
            )
        offsets.append(float(offset))
        if abs(offsets[-1] - offsets[0]) > round_us + 10_000 * RATE_SHARE + 1 + bench.port.u_ms * 1000:
            raise Failed(f"the offset jumped from {offsets[0]} to {offsets[-1]} us", clause="TIM-01")
        bench.port.wait_ms(20)


@case(
    "TIM.last-byte",
    "valid",
    "A request that comes in two pieces has arrived with its last byte.",
    clauses=["TIM-01", "STA-06", "FRM-10"],
    needs="gaps",
)
def test_last_byte(bench: Bench) -> None:
    a = bench.a
    frame = a.frame("time-exchange", t1=0)
    answer = a.answered(a.sent(frame, bench.send_in_pieces(frame, PIECES_APART_MS)))
    inside_us = (answer["t3"] - answer["t2"]) % MODULUS
    if inside_us > 1000 * (bench.facts.receipt_ms + bench.port.u_ms):
        raise Failed(
            f"t2 is {inside_us} us before t3, with {PIECES_APART_MS} ms between a request's two pieces",
            clause="STA-06",
        )


PIECES_APART_MS = 120


def _bench_us(time_ns: int) -> int:
    return time_ns // 1000 % MODULUS


@case(
    "TIM.rate",
    "valid",
    "The clock runs within 1 % of true time, and status tells the same clock.",
    clauses=["TIM-02"],
)
def test_rate(bench: Bench) -> None:
    a = bench.a
    first = a.read("time-exchange", t1=0)
    bench.port.wait_ms(1000)
    second = a.read("time-exchange", t1=0)
    module_us = (second["t3"] - first["t3"]) % MODULUS
    true_us = (second.time_ns - first.time_ns) / 1000
    allowed_us = RATE_SHARE * true_us + 2 + 2 * bench.port.u_ms * 1000
    if abs(module_us - true_us) > allowed_us:
        raise Failed(f"in {true_us:.0f} us the clock counted {module_us}", clause="TIM-02")
    ahead_us = (a.status()["clock"] - second["t3"]) % MODULUS
    if ahead_us > 1_000_000:
        raise Failed("status and exchange tell different clocks", clause="TIM-02")


@case(
    "TIM.wrap",
    "valid",
    "Across the clock's wrap the lease, repeats, telemetry and motions go on as before.",
    clauses=["TIM-03", "TIM-02"],
    needs="assist and travel",
)
def test_wrap(bench: Bench) -> None:
    a = bench.a
    lease_ms = 2000 + bench.longest_ms
    a.make_ready(lease_ms)
    a.assist("preset", item="clock", value=MODULUS - 250_000)
    first = a.status()["clock"]
    if (first - (MODULUS - 250_000)) % MODULUS > 1_000_000:
        raise Failed(f"a clock preset to {MODULUS - 250_000} reads {first}", clause="AST-03")
    move = a.move()
    outcome = a.outcome(move)
    if bench.facts.has("telemetry"):
        a.accepted("telemetry-on", period=50, duration=400, clause="TIM-03")
    again = a.outcome_or_none(move, 300 + bench.port.u_ms)
    gap_ms = (again.time_ns - outcome.time_ns) / 1e6 if again else -1
    if again is None or abs(gap_ms - 200) > bench.facts.receipt_ms + 3 * bench.port.u_ms + 2:
        raise Failed(f"a repeat across the clock's wrap came after {gap_ms:.0f} ms", clause="TIM-03")
    a.confirm(outcome)
    bench.port.wait_ms(350)
    status = a.status()
    if status["clock"] > 2_000_000 + 1000 * bench.longest_ms or status["holder"] != a.address:
        raise Failed(
            f"after the wrap the clock reads {status['clock']}, holder {status['holder']}", clause="TIM-03"
        )
    if bench.facts.has("telemetry"):
        count = len(bench.port.take_all(lambda received: received.kind == "telemetry"))
        if not 7 <= count <= 8:
            raise Failed(f"across the wrap {count} of 8 telemetry events came", clause="TIM-03")
    bench.port.wait_ms(lease_ms)
    if a.status()["holder"]:
        raise Failed("across the wrap the lease did not end", clause="TIM-03")


def _telemetry(bench: Bench, request: Sent, within_ms: float) -> list[Received]:
    """All telemetry for a request until the time is over."""
    bench.port.wait_ms(within_ms)
    return bench.port.take_all(
        lambda received: received.kind == "telemetry" and received.frame.number == request.frame.number
    )


@case(
    "TIM.telemetry",
    "valid",
    "Telemetry comes each period, first after one, numbered without a gap, and ends by itself.",
    clauses=["TIM-04", "TIM-05"],
    needs="telemetry",
)
def test_telemetry(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    sent = a.accepted("telemetry-on", period=50, duration=500, clause="TIM-04")
    events = _telemetry(bench, sent, 800)
    if [event["sequence"] for event in events] != list(range(10)):
        raise Failed(
            f"500 ms at 50 ms brought sequences {[event['sequence'] for event in events]}", clause="TIM-05"
        )
    slack_ms = bench.facts.receipt_ms + 2 * bench.port.u_ms + 1
    for place, event in enumerate(events):
        at_ms = (event.time_ns - sent.time_ns) / 1e6
        if not -slack_ms <= at_ms - 50 * (place + 1) <= slack_ms:
            words = f"telemetry {place} came {at_ms:.1f} ms after the request"
            raise (Failed if bench.facts.has("virtual") else Inconclusive)(words, clause="TIM-04")
        if (event.frame.destination, event.frame.session) != (a.address, a.session):
            raise Failed("telemetry must go to the requester's session", clause="TIM-04")


@case(
    "TIM.replace", "valid", "A second telemetry-on replaces the first.", clauses=["TIM-05"], needs="telemetry"
)
def test_replace(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    first = a.accepted("telemetry-on", period=40, duration=5000, clause="TIM-04")
    bench.port.wait_ms(100)
    second = a.accepted("telemetry-on", period=60, duration=200, clause="TIM-05")
    events = _telemetry(bench, second, 400)
    if [event["sequence"] for event in events] != [0, 1, 2]:
        raise Failed(
            f"the second brought sequences {[event['sequence'] for event in events]}", clause="TIM-05"
        )
    later = [
        e
        for e in bench.port.take_all(lambda r: r.kind == "telemetry")
        if e.time_ns > second.time_ns + 30_000_000
    ]
    if [event for event in later if event.frame.number == first.number]:
        raise Failed("the first telemetry went on beside the second", clause="TIM-05")


@case(
    "TIM.off",
    "valid",
    "telemetry-off ends it at once; to many it acts only for the session that asked.",
    clauses=["TIM-06", "ADR-05"],
    needs="telemetry",
)
def test_off(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease()
    a.accepted("telemetry-off", clause="TIM-06")
    sent = a.accepted("telemetry-on", period=30, duration=5000, clause="TIM-04")
    with expect_silent_refusals(bench, 1, "TIM-06"):
        b.send("telemetry-off", to=bench.broadcast, answer_window=20)
        bench.port.wait_ms(40)
    if not _telemetry(bench, sent, 100):
        raise Failed("another session's telemetry-off to all ended it", clause="TIM-06")
    off = a.send("telemetry-off", to=bench.broadcast, answer_window=20)
    if a.answer(off, 20 + a.patience_ms) is None:
        raise Failed("telemetry-off to all was not answered in its window", clause="TIM-06")
    _telemetry(bench, sent, bench.port.u_ms)
    if _telemetry(bench, sent, 100):
        raise Failed("telemetry-off to all did not end the telemetry of its session", clause="TIM-06")
    again = a.accepted("telemetry-on", period=30, duration=5000, clause="TIM-04")
    a.accepted("telemetry-off", clause="TIM-06")
    _telemetry(bench, again, bench.port.u_ms)
    if _telemetry(bench, again, 100):
        raise Failed("telemetry went on after telemetry-off", clause="TIM-06")


@case(
    "TIM.range",
    "invalid",
    "Periods and durations outside their ranges are refused with their key.",
    clauses=["TIM-08"],
    needs="telemetry",
)
def test_range(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    for period, duration, key in ((19, 100, 2), (10_001, 100, 2), (20, 19, 3), (20, 600_001, 3), (0, 0, 2)):
        a.refused("out-of-range", "telemetry-on", period=period, duration=duration, key=key, clause="TIM-08")
    bench.port.wait_ms(60)
    if bench.port.take_all(lambda received: received.kind == "telemetry"):
        raise Failed("a refused telemetry-on brought telemetry", clause="TIM-08")


@case(
    "TIM.outlasts-lease",
    "valid",
    "Telemetry goes on after the lease, and ends with a restart.",
    clauses=["TIM-09"],
    needs="telemetry",
)
def test_outlasts_lease(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    sent = a.accepted("telemetry-on", period=30, duration=1500, clause="TIM-04")
    a.accepted("release-lease", clause="LSE-11")
    if len(_telemetry(bench, sent, 200)) < 4:
        raise Failed("telemetry ended with the lease", clause="TIM-09")
    if bench.facts.has("restart"):
        a.restart()
        bench.port.take_all(lambda received: received.kind == "telemetry")
        if _telemetry(bench, sent, 150):
            raise Failed("telemetry went on after a restart", clause="TIM-09")
    else:
        a.take_lease()
        a.accepted("telemetry-off", clause="TIM-06")


@case(
    "TIM.priority",
    "valid",
    "At the shortest period answers, outcomes and halts keep their times.",
    clauses=["TIM-07", "ACK-03"],
    needs="telemetry and travel",
)
def test_priority(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    a.accepted("telemetry-on", period=20, duration=2000, clause="TIM-04")
    late = 0
    for place in range(30):
        sent = a.send(("status", "describe", "halt")[place % 3])
        late += (a.answered(sent).time_ns - sent.time_ns) / 1e6 > bench.facts.receipt_ms + bench.port.u_ms
    if late and (bench.facts.has("virtual") or late > 15):
        raise Failed(f"{late} of 30 answers were late beside telemetry", clause="TIM-07")
    if late > 3:
        raise Inconclusive(f"{late} of 30 answers were late beside telemetry")
    a.reset()
    a.accepted("energize", clause="STA-09")
    a.ended(a.move(), "done", "none", "TIM-07")
    a.accepted("telemetry-off", clause="TIM-06")


@case(
    "TIM.telemetry-truth",
    "valid",
    "Telemetry and status agree on state and change number.",
    clauses=["TIM-04", "STA-07"],
    needs="telemetry",
)
def test_telemetry_truth(bench: Bench) -> None:
    a: Tester = bench.a
    a.take_lease()
    sent = a.accepted("telemetry-on", period=30, duration=200, clause="TIM-04")
    status = a.status()
    for event in _telemetry(bench, sent, 300):
        if event["change"] == status["change"] and event["state"] != status["state"]:
            raise Failed(
                f"telemetry says {event['state']}, status {status['state']}, with one change number",
                clause="STA-07",
            )
        if event["change"] != status["change"]:
            raise Failed("the change number rose though nothing changed", clause="STA-07")
