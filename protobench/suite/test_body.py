"""Bodies: one meaning, one encoding; everything else is refused by name."""

from __future__ import annotations

from protobench.judge import Failed
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.language import canonical

UNKNOWN = b"\x05"  # a key that status does not have and that may be ignored


def _refuse_all(bench: Bench, bodies: list[bytes], clause: str) -> None:
    """Every body, sent with a read, must be refused malformed without a key."""
    for body in bodies:
        receipt = bench.a.ask("status", body=body)
        if receipt.kind != "receipt" or receipt.get("reason") != "malformed" or "key" in receipt.fields:
            raise Failed(
                f"body {body[:40].hex(' ')} must be refused malformed without a key; "
                f"it was answered by {receipt.kind} {receipt.fields}",
                clause=clause,
            )


def _under_unknown_key(value: bytes) -> bytes:
    return b"\x81" + UNKNOWN + value


@case(
    "BDY.not-a-map", "invalid", "A body that is no map, or no bytes at all, is refused.", clauses=["BDY-01"]
)
def test_not_a_map(bench: Bench) -> None:
    bodies = [b"", b"\x90", b"\x91\x80", b"\xc0", b"\x00", b"\xa0", b"\xc3", b"\xc4\x00", b"\xff"]
    _refuse_all(bench, bodies, "BDY-01")


@case(
    "BDY.keys",
    "invalid",
    "Keys out of order, twice, above 127, negative or of another type are refused, in nested maps too.",
    clauses=["BDY-02"],
)
def test_keys(bench: Bench) -> None:
    maps = [
        b"\x82\x02\x00\x01\x00",
        b"\x82\x01\x00\x01\x00",
        b"\x83\x01\x00\x03\x00\x02\x00",
        b"\x81\xcc\x80\x00",
        b"\x81\xcd\x01\x00\x00",
        b"\x81\xff\x00",
        b"\x81\xa1a\x00",
        b"\x81\xc3\x00",
        b"\x81\x90\x00",
        b"\x82\x01\x00\xa1a\x00",
    ]
    _refuse_all(bench, maps, "BDY-02")
    _refuse_all(bench, [_under_unknown_key(nested) for nested in maps], "BDY-02")


@case(
    "BDY.shortest",
    "invalid",
    "Integers, strings, binaries, arrays and maps in a longer encoding than they need are refused.",
    clauses=["BDY-03"],
)
def test_shortest(bench: Bench) -> None:
    values = [
        "cc05", "cc7f", "cd0005", "cd00ff", "ce00000005", "ce0000ffff", "cf0000000000000005", "cf00000000ffffffff",
        "d005", "d07f", "d0ff", "d0e0", "d10005", "d1ff80", "d1ffff", "d200000005", "d2ffff8000",
        "d30000000000000005", "d3ffffffff80000000", "d1007f", "d200008000",
        "d90161", "da000161", "db0000000161", "d91f" + "61" * 31,
        "c5000100", "c60000000100",
        "dc000100", "dd0000000100", "dc0000", "de0000", "de00010100", "df000000010100",
    ]  # fmt: skip
    _refuse_all(bench, [_under_unknown_key(bytes.fromhex(value)) for value in values], "BDY-03")
    _refuse_all(
        bench,
        [b"\xde\x00\x00", b"\xdf\x00\x00\x00\x00", b"\x81\xcc\x05\x00", b"\xde\x00\x01\x05\x00"],
        "BDY-03",
    )


@case(
    "BDY.forbidden",
    "invalid",
    "Floating point, nil, extension types and the unused byte are refused, under unknown keys too.",
    clauses=["BDY-04"],
)
def test_forbidden(bench: Bench) -> None:
    values = [
        "ca3f800000", "cb3ff0000000000000", "ca7fc00000", "cb7ff0000000000000", "c0", "c1",
        "d40000", "d5000000", "d60000000000", "c7010000", "c800010000", "91c0", "81 01 c0", "91ca3f800000",
    ]  # fmt: skip
    _refuse_all(bench, [_under_unknown_key(bytes.fromhex(value)) for value in values], "BDY-04")
    move = b"\x84\x00\x01\x01\x00\x02\x01\x03"
    for value in ("cb40f86a0000000000", "ca47c35000", "cb7ff8000000000000", "cb7ff0000000000000"):
        bench.a.refused("malformed", "move", body=move + bytes.fromhex(value), clause="BDY-04")


@case("BDY.trailing", "invalid", "Bytes after the map are refused.", clauses=["BDY-05"])
def test_trailing(bench: Bench) -> None:
    _refuse_all(
        bench, [b"\x80\x00", b"\x80\x80", b"\x80\xc1", b"\x81\x05\x00\x00", b"\x80" + bytes(100)], "BDY-05"
    )


@case(
    "BDY.bounds",
    "invalid",
    "Sizes and depth over the bounds, and text that is not printable ASCII, are refused; at the bounds they pass.",
    clauses=["BDY-06"],
)
def test_bounds(bench: Bench) -> None:
    over = [
        canonical(dict.fromkeys(range(33), 0)),
        canonical({5: [0] * 17}),
        canonical({5: "x" * 33}),
        canonical({5: b"x" * 33}),
        canonical({5: [[[0]]]}),
        canonical({5: {1: {2: [0]}}}),
        canonical({5: "\t"}),
        canonical({5: "\x7f"}),
        canonical({5: "é"}),
        b"\x81\x05\xa1\xff",
        b"\x81\x05\xa1\x00",
    ]
    _refuse_all(bench, over, "BDY-06")
    at = [
        dict.fromkeys(range(32), 0),
        {5: [0] * 16},
        {5: "x" * 32},
        {5: " ~"},
        {5: b"x" * 32},
        {5: [[0]]},
        {5: {1: {2: 0}}},
        {5: True, 6: False, 7: -(2**63), 8: 2**64 - 1},
    ]
    for fields in at:
        answer = bench.a.ask("describe", body=canonical(fields))
        if answer.kind != "description":
            raise Failed(
                f"a body at the bounds, {fields}, must be taken; it was {answer.fields}", clause="BDY-06"
            )


@case(
    "BDY.claims",
    "invalid",
    "A header that claims more than is there is refused at once.",
    clauses=["BDY-07"],
)
def test_claims(bench: Bench) -> None:
    bodies = [
        "81", "8105", "82 05 00", "8f", "8105 91", "8105 9f00", "8105 a5 6161", "8105 c4", "8105 c420 00", "8105 cc",
        "8105 cd00", "8105 ce000000", "8105 cf00000000000000", "8105 d9", "8105 dc", "8105 dd ffffffff",
        "8105 df ffffffff", "8105 c6 ffffffff",
        "8105 db ffffffff", "df ffffffff", "de ffff", "8105 c9 ffffffff 00",
    ]  # fmt: skip
    _refuse_all(bench, [bytes.fromhex(body) for body in bodies], "BDY-07")


@case(
    "BDY.wrong-type",
    "invalid",
    "A known field of another type, or a missing required one, is refused with the lowest such key.",
    clauses=["BDY-08"],
)
def test_wrong_type(bench: Bench) -> None:
    a = bench.a
    a.refused("malformed", "time-exchange", body=b"\x80", key=0, clause="BDY-08")
    a.refused("malformed", "describe-motion", body=b"\x80", key=0, clause="BDY-08")
    for value in (True, "1", b"1", [1], {1: 1}):
        a.refused("malformed", "time-exchange", body=canonical({0: value}), key=0, clause="BDY-08")
        a.refused("malformed", "read-faults", body=canonical({0: value}), key=0, clause="BDY-08")
    tables = [
        ("take-lease", {0: 1, 1: 0, 2: False}, 2),
        ("take-lease", {0: 1, 2: 1000}, 1),
        ("take-lease", {0: "x", 1: 0, 2: True}, 0),
        ("take-lease", {1: True, 2: 1000}, 0),
        ("move", {0: 1, 1: 0}, 2),
        ("move", {0: 1, 1: 0, 2: "pivot"}, 2),
        ("move", {0: 1, 1: 0, 2: 1, 3: True}, 3),
        ("move", {0: 1, 1: 0, 2: 1, 3: 5, 65: 1}, 65),
        ("move", {0: 1, 1: 0, 2: 1, 3: 5, 64: "1"}, 64),
        ("reset", {0: 1, 1: 0}, 2),
        ("clear-faults", {0: 1, 1: 0, 2: 1}, 2),
        ("clear-faults", {0: 1, 1: 0, 2: [1, True]}, 2),
        ("assign-address", {0: 1, 1: 0, 2: "12345678", 3: 5}, 2),
    ]
    for kind, fields, key in tables:
        a.refused("malformed", kind, body=canonical(fields), key=key, clause="BDY-08")


@case(
    "BDY.unknown-ignored",
    "valid",
    "Unknown keys that may be ignored are, before, between and after known ones.",
    clauses=["BDY-09"],
)
def test_unknown_ignored(bench: Bench) -> None:
    for key in [*range(1, 64, 7), 63, 120, 127]:
        for value in (0, -1, "text", b"\x00\xff", [1, [2]], {3: {4: 5}}, True):
            answer = bench.a.ask("time-exchange", body=canonical({0: 77, key: value}))
            if answer.kind != "time-answer" or answer["t1"] != 77:
                raise Failed(f"key {key} = {value!r} beside a known one must be ignored", clause="BDY-09")
    bench.a.learn()
    fields = {0: bench.a.epoch, 1: bench.a.lease, 2: 1000, 9: [1, 2], 63: {1: 2}, 121: "x"}
    bench.a.accepted("take-lease", body=canonical(fields), clause="BDY-09")


@case(
    "BDY.unknown-checked",
    "invalid",
    "The form of what stands under an unknown key is still checked, in private keys too.",
    clauses=["BDY-09", "BDY-03", "BDY-04"],
)
def test_unknown_checked(bench: Bench) -> None:
    bodies = [b"\x82\x00\x01\x3f\xcc\x01", b"\x82\x00\x01\x7f\xc0", b"\x82\x00\x01\x20\x91\xcd\x00\x01"]
    for body in bodies:
        bench.a.refused("malformed", "time-exchange", body=body, clause="BDY-09")


@case(
    "BDY.critical",
    "invalid",
    "An unknown key from 64 to 119 is refused not-understood with the lowest such key.",
    clauses=["BDY-10"],
)
def test_critical(bench: Bench) -> None:
    a = bench.a
    for key in (64, 65, 100, 119):
        a.refused("not-understood", "status", body=canonical({key: 0}), key=key, clause="BDY-10")
        a.refused(
            "not-understood", "energize", body=canonical({0: 1, 1: 0, key: 0}), key=key, clause="BDY-10"
        )
    a.refused(
        "not-understood", "time-exchange", body=canonical({0: 1, 70: 0, 90: 1}), key=70, clause="BDY-10"
    )
    a.refused(
        "not-understood", "move", body=canonical({0: 1, 1: 0, 2: 1, 3: 5, 66: 0}), key=66, clause="BDY-10"
    )
    a.refused("not-understood", "take-lease", body=canonical({80: 0}), key=80, clause="BDY-10")


@case(
    "BDY.flags",
    "invalid",
    "Each reserved flag is refused not-understood without a key, whatever the body.",
    clauses=["BDY-11"],
)
def test_flags(bench: Bench) -> None:
    for bit in range(8):
        bench.a.refused("not-understood", "status", flags=1 << bit, clause="BDY-11")
        bench.a.refused("not-understood", "energize", flags=1 << bit, clause="BDY-11")
    bench.a.refused("not-understood", "status", flags=0xFF, body=b"\xc1", clause="BDY-11")


@case(
    "BDY.defaults",
    "valid",
    "A field sent with its default means the same as its absence.",
    clauses=["BDY-12"],
)
def test_defaults(bench: Bench) -> None:
    bench.a.send("status", source=bench.address)  # a fault, so that a page shows something
    for kind in ("read-faults", "read-motions", "probe"):
        first = bench.a.ask(kind, body=canonical({}))
        second = bench.a.ask(kind, body=canonical({0: 0}))
        if first.kind == "receipt" or first.fields != second.fields:
            raise Failed(f"{kind} with its default field is answered differently", clause="BDY-12")


@case(
    "BDY.default-move",
    "valid",
    "A move with its defaults spelled out is the move without them.",
    clauses=["BDY-12"],
    needs="travel",
)
def test_default_move(bench: Bench) -> None:
    bench.a.make_ready()
    move = bench.a.move(face=0, allow_last_bond=False)
    bench.a.ended(move, "done", "none", "BDY-12")
    first, second = (bench.a.ask("read-motions", body=canonical(fields)) for fields in ({}, {0: 0}))
    if first.fields != second.fields:
        raise Failed("read-motions with its default field is answered differently", clause="BDY-12")


@case(
    "BDY.out-of-range",
    "invalid",
    "Values outside a field's range are refused with the lowest such key, never clamped.",
    clauses=["BDY-13"],
)
def test_out_of_range(bench: Bench) -> None:
    a = bench.a
    for kind in ("read-faults", "read-motions"):
        for page in (256, -1, 65536, 2**64 - 1):
            a.refused("out-of-range", kind, page=page, key=0, clause="BDY-13")
    for number in (0, 7, 200, -3):
        a.refused("out-of-range", "describe-motion", body=canonical({0: number}), key=0, clause="BDY-13")
    a.refused("out-of-range", "probe", answer_window=2001, key=0, clause="BDY-13")
    a.take_lease()
    for motion in (0, 7, 99, -1):
        a.refused("out-of-range", "move", motion=motion, magnitude=5, key=2, clause="BDY-13")
    a.refused("out-of-range", "move", motion=99, magnitude=2**31, face=99, key=2, clause="BDY-13")
    a.refused("out-of-range", "reset", halt_count=2**32, key=2, clause="BDY-13")
    a.refused("out-of-range", "clear-faults", occurrences=[], key=2, clause="BDY-13")
    a.refused("out-of-range", "clear-faults", occurrences=[1] * 9, key=2, clause="BDY-13")
    a.refused("out-of-range", "clear-faults", occurrences=[0], key=2, clause="BDY-13")
    own = bench.facts.description["hardware_id"]
    for address in (0, 0xF0000000, 0xFFFFFFFF):
        a.refused("out-of-range", "assign-address", hardware_id=own, address=address, key=3, clause="BDY-13")
    a.refused("out-of-range", "assign-address", hardware_id=own[:7], address=5, key=2, clause="BDY-13")
    status = a.status()
    if status["holder"] != a.address:
        raise Failed("a refused value changed the lease", clause="BDY-13")


@case(
    "BDY.integers",
    "valid",
    "Integers keep their exact value at every boundary of width; beyond the field they are out of range.",
    clauses=["BDY-14", "BDY-13", "TIM-01"],
)
def test_integers(bench: Bench) -> None:
    for value in (0, 1, 31, 32, 127, 128, 255, 256, 32767, 32768, 65535, 65536, 2**31 - 1, 2**31, 2**32 - 1):
        answer = bench.a.read("time-exchange", t1=value)
        if answer["t1"] != value:
            raise Failed(f"t1 {value} came back as {answer['t1']}", clause="BDY-14")
    for value in (
        2**32,
        2**63 - 1,
        2**63,
        2**64 - 1,
        -1,
        -32,
        -33,
        -128,
        -129,
        -32768,
        -32769,
        -(2**31),
        -(2**63),
    ):
        bench.a.refused("out-of-range", "time-exchange", t1=value, key=0, clause="BDY-13")
