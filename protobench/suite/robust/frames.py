"""Frames of a step: sound requests that fit the module, and the ways in which one can be wrong."""

from __future__ import annotations

import random
from collections.abc import Callable
from typing import Any

from protobench.contract import Field
from protobench.suite.bench import Bench
from protobench.suite.facts import BONDING
from protobench.suite.language import canonical
from protobench.suite.tester import MODULUS, Tester
from protobench.suite.tools import sound_crc

NEVER_DAMAGED = ("move", "energize", "assist")  # a damaged one could be another that moves the module
KIND_OFFSET = 1
CHECK_BYTES = 4


class Beliefs:
    """What the bench has seen of the module in this sequence, for requests that fit it."""

    def __init__(self) -> None:
        self.halt_count = 1
        self.clock = 0
        self.clock_ns = 0
        self.moves: list[int] = []
        self.frames: list[bytes] = []
        self.holder: Tester | None = None


class Frames:
    """Makes the frames of steps."""

    def __init__(self, bench: Bench, beliefs: Beliefs) -> None:
        self.bench = bench
        self.contract = bench.contract
        self.beliefs = beliefs

    # ------------------------------------------------------------ sound ones

    def sound(self, tester: Tester, kind: str, rng: random.Random) -> bytes:
        """A request that the module should take, if its state allows."""
        return tester.frame(kind, **self.fields(kind, rng))

    def fields(self, kind: str, rng: random.Random) -> dict[str, Any]:
        """Fields of a sound request but epoch and lease number, which the tester fills in."""
        if kind == "move":
            return self._move(rng)
        return {
            ("target" if field.name == "number" else field.name): self._value(kind, field, rng)
            for field in self.contract.kind(kind).fields
            if field.name not in ("epoch", "lease") and (field.required != "optional" or rng.random() < 0.3)
        }

    def _move(self, rng: random.Random) -> dict[str, Any]:
        facts = self.bench.facts
        motion = rng.choice(list(facts.motions.values()))
        fields: dict[str, Any] = {"motion": motion.name}
        if motion.name in BONDING:
            fields["face"] = rng.randrange(max(1, facts.description["faces"]))
        else:
            fields["magnitude"] = rng.randint(motion.magnitude_min, motion.magnitude_max)
        if facts.has("schedule") and rng.random() < 0.2:
            passed = (self.bench.port.now_ns - self.beliefs.clock_ns) // 1000
            ahead = rng.choice((-1000, 10_000, 100_000, 400_000, 70_000_000))
            fields["start_at"] = (self.beliefs.clock + passed + ahead) % MODULUS
        return fields

    def _value(self, kind: str, field: Field, rng: random.Random) -> Any:
        description = self.bench.facts.description
        known: dict[str, Callable[[], Any]] = {
            "halt_count": lambda: max(0, self.beliefs.halt_count - (rng.random() < 0.1)),
            "hardware_id": lambda: description["hardware_id"],
            "address": lambda: self.bench.address,
            "number": lambda: rng.choice(self.beliefs.moves[-3:] or [0]),
            "occurrences": lambda: rng.sample(range(1, 6), rng.randint(1, 3)),
            "groups": lambda: self._groups(rng),
            "motion": lambda: rng.choice(list(self.bench.facts.motions) or ["pivot"]),
        }
        if field.name in known:
            return known[field.name]()
        if kind in ("take-lease", "renew-lease") and field.name == "duration":
            return rng.choice((500, 700, 3000, 10_000, 30_000))
        if field.name == "duration":
            return rng.choice((field.min, 500, 1000))
        if field.type in ("uint", "int"):
            return rng.choice((field.min, field.max, rng.randint(field.min or 0, field.max or 0)))
        return rng.random() < 0.5

    def _groups(self, rng: random.Random) -> list[int]:
        first = self.contract.addresses.group_first
        return [
            first + rng.randrange(4) for _ in range(rng.randint(0, self.bench.facts.description["groups"]))
        ]

    # ------------------------------------------------------------ wrong ones

    def twisted(self, tester: Tester, kind: str, how: str, rng: random.Random) -> bytes | None:
        """A request with one thing about it that is unusual or wrong; None where that means nothing."""
        fields = self.fields(kind, rng)
        if how in ("epoch", "lease") and how not in self.bench.fence_fields(kind, many=False):
            return None
        header = self._header(tester, how, rng)
        if header is not None:
            if kind == "assign-address" and how == "to-all":
                fields["hardware_id"] = bytes(8)
            return tester.frame(kind, **fields, **header)
        numbers = self._body(tester, kind, fields)
        body = self._wrong_body(kind, how, numbers, rng)
        return None if body is None else tester.frame(kind, body=body)

    def _body(self, tester: Tester, kind: str, fields: dict[str, Any]) -> dict[int, Any]:
        import msgpack  # noqa: PLC0415

        frame = self.bench.language.unpack(tester.frame(kind, **fields))
        found: dict[int, Any] = msgpack.unpackb(getattr(frame, "body"), strict_map_key=False)  # noqa: B009
        return found

    def _header(self, tester: Tester, how: str, rng: random.Random) -> dict[str, Any] | None:
        """Fields of the header that make it so; None where it is a matter of the body."""
        addresses = self.contract.addresses
        highest = tester.next_number() if how in ("unseen", "behind", "half-way", "newer-by-far") else 0
        ways: dict[str, Callable[[], dict[str, Any]]] = {
            "flags": lambda: {"flags": 1 << rng.randrange(8)},
            "version": lambda: {"version": rng.choice((2, 3, 127, 255))},
            "length": lambda: {"body_length": rng.choice((0, 1, 212, 214, 255))},
            "to-other": lambda: {"to": self.bench.other_address(rng.randint(1, 3))},
            "to-all": lambda: {"to": addresses.broadcast},
            "to-group": lambda: {"to": addresses.group_first + rng.randrange(4)},
            "from-none": lambda: {"source": 0},
            "from-all": lambda: {"source": rng.choice((addresses.broadcast, addresses.any_controller))},
            "from-own": lambda: {"source": self.bench.address},
            "epoch": lambda: {"epoch": (tester.epoch + rng.choice((1, -1, 7))) % MODULUS},
            "lease": lambda: {"lease": (tester.lease + rng.choice((1, -1, 9))) % MODULUS},
            "unseen": lambda: self._jump(tester, highest, rng.randint(2, 30)),
            "behind": lambda: {"number": (highest - rng.randint(1, 60)) % MODULUS},
            "half-way": lambda: {"number": (highest + (1 << 31) - rng.randint(0, 3)) % MODULUS},
            "newer-by-far": lambda: self._jump(tester, highest, rng.randint(33, 1 << 20)),
        }
        return ways[how]() if how in ways else None

    def _jump(self, tester: Tester, highest: int, distance: int) -> dict[str, Any]:
        tester.use_number(highest + distance)
        return {"number": (highest + distance) % MODULUS}

    def _wrong_body(self, kind: str, how: str, body: dict[int, Any], rng: random.Random) -> bytes | None:
        fields = self.contract.kind(kind).fields
        moves = kind == "move"
        whole = canonical(body)
        bodies: dict[str, Callable[[], bytes]] = {
            "ignored-key": lambda: _with(body, rng.randint(40, 63), rng.choice((0, "x", b"y", [1], True))),
            "private-key": lambda: _with(body, rng.randint(120, 127), 1),
            "critical-key": lambda: _with(body, rng.randint(70, 119), 1),
            "trailing": lambda: whole + bytes(rng.randrange(256) for _ in range(rng.randint(1, 5))),
            "no-body": lambda: b"",
            "no-map": lambda: rng.choice(
                (b"\x90", b"\x00", b"\xc0", b"\x91\x80", b"\xc1", b"\xdf\xff\xff\xff\xff")
            ),
            "float": lambda: _with(body, rng.randint(40, 63), 1.5),
            "nil": lambda: _with(body, rng.randint(40, 63), None),
            "deep": lambda: _with(body, rng.randint(40, 63), [[[[1]]]]),
            "twice": lambda: bytes([whole[0] + 2]) + whole[1:] + b"\x3f\x01\x3f\x01",
            "longer-form": lambda: bytes([whole[0] + 1]) + whole[1:] + b"\xcc\x3f\x01",
        }
        if how in bodies:
            return bodies[how]()
        if not fields:
            return None
        field = rng.choice(
            [field for field in fields if not moves or field.name in ("epoch", "lease", "start_at")]
        )
        return self._wrong_field(how, field, dict(body), rng)

    def _wrong_field(self, how: str, field: Field, body: dict[int, Any], rng: random.Random) -> bytes | None:
        wrong: Any
        if how == "absent":
            body.pop(field.key, None)
            return canonical(body)
        if how == "type":
            wrong = (
                rng.choice((b"x", "x", [b"x"], {0: 1}, [True]))
                if field.type != "bytes"
                else rng.choice((1, "x"))
            )
        elif how == "default" and field.default is not None:
            wrong = field.default
        elif field.min is None or field.max is None or how not in ("least", "most", "under", "over"):
            return None
        else:
            value = {"least": field.min, "most": field.max, "under": field.min - 1, "over": field.max + 1}[
                how
            ]
            wrong = [value] if field.type == "list" else value
        if how in ("least", "most", "default") and field.name in ("epoch", "lease", "address"):
            return None
        return _with(body, field.key, wrong)

    # ------------------------------------------------------------ damaged ones

    def damaged(self, frame: bytes, how: str, rng: random.Random) -> bytes | None:
        """A frame with bits or bytes changed, with a sound check sequence where ``how`` says so."""
        data = bytearray(frame)
        way, _, repaired = how.partition("-")
        if repaired and frame[KIND_OFFSET] == self.contract.kind("assign-address").code:
            return None  # it might be sound, and the module then somewhere else
        if way == "flip":
            for _ in range(rng.randint(1, 3)):
                data[rng.randrange(len(data) - (CHECK_BYTES if repaired else 0))] ^= 1 << rng.randrange(8)
        elif way == "cut":
            del data[rng.randrange(1, len(data)) :]
        else:
            data += bytes(rng.randrange(256) for _ in range(rng.randint(1, 12)))
        if repaired and len(data) > CHECK_BYTES:
            data[-CHECK_BYTES:] = sound_crc(self.bench, bytes(data[:-CHECK_BYTES]))
        return bytes(data)


def _with(body: dict[int, Any], key: int, value: Any) -> bytes:
    changed = {**body, key: value}
    return canonical({key: changed[key] for key in sorted(changed)})
