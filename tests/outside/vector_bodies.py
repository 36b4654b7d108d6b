"""Vectors of bodies: canonical form, boundaries of integers, fields that are missing, wrong or unknown."""

from __future__ import annotations

from typing import Any

from vector_tools import FENCE_KEYS, KEYS, Area, body, frame, meaning, pack

# Other ways to write a value; each means the same to a lenient reader. Formats: MessagePack specification.
ALTERNATIVES = {
    "0 as uint 8": "cc00",
    "0 as uint 16": "cd0000",
    "0 as uint 32": "ce00000000",
    "0 as uint 64": "cf" + "00" * 8,
    "0 as int 8": "d000",
    "0 as int 16": "d10000",
    "0 as int 32": "d200000000",
    "0 as int 64": "d3" + "00" * 8,
    "127 as uint 8": "cc7f",
    "127 as int 8": "d07f",
    "128 as uint 16": "cd0080",
    "128 as int 16": "d10080",
    "255 as uint 32": "ce000000ff",
    "256 as uint 32": "ce00000100",
    "32767 as int 16": "d17fff",
    "65535 as uint 32": "ce0000ffff",
    "65536 as uint 64": "cf0000000000010000",
    "2^31 - 1 as int 32": "d27fffffff",
    "2^32 - 1 as uint 64": "cf00000000ffffffff",
    "minus 1 as int 8": "d0ff",
    "minus 32 as int 8": "d0e0",
    "minus 33 as int 16": "d1ffdf",
    "minus 128 as int 16": "d1ff80",
    "minus 129 as int 32": "d2ffffff7f",
    "minus 32768 as int 32": "d2ffff8000",
    "minus 2^31 as int 64": "d3ffffffff80000000",
    "a string of 1 as str 8": "d90161",
    "a string of 1 as str 16": "da000161",
    "a string of 1 as str 32": "db0000000161",
    "a binary of 1 as bin 16": "c5000161",
    "a binary of 1 as bin 32": "c60000000161",
    "an array of 1 as array 16": "dc000100",
    "an array of 1 as array 32": "dd0000000100",
    "a map of 1 as map 16": "de00010000",
    "a map of 1 as map 32": "df000000010000",
}
FORBIDDEN = {
    "nil": "c0",
    "never used": "c1",
    "float 32": "ca3fc00000",
    "float 64": "cb3ff8000000000000",
    "float 32 of a whole number": "ca3f800000",
    "fixext 1": "d40100",
    "fixext 2": "d5010000",
    "fixext 4": "d6ff00000000",
    "fixext 8": "d701" + "00" * 8,
    "fixext 16": "d801" + "00" * 16,
    "ext 8": "c7010100",
    "ext 16": "c800010100",
    "ext 32": "c9000000010100",
}
TOO_MUCH = {
    "33 bytes of string": "d921" + "61" * 33,
    "33 bytes of binary": "c421" + "61" * 33,
    "17 items": "dc0011" + "00" * 17,
    "33 pairs in a nested map": "de0021" + "".join(f"{key:02x}00" for key in range(33)),
    "4 levels": "91918100 00".replace(" ", ""),
    "4 levels, the last empty": "919190",
    "a tab in a string": "a109",
    "DEL in a string": "a17f",
    "UTF-8 in a string": "a2c3a4",
    "a zero byte in a string": "a100",
}
TRUNCATED = {
    "an array of 15": "9f",
    "an array of 2^32 - 1": "ddffffffff",
    "a map of 2^32 - 1": "dfffffffff",
    "a map of 15": "8f",
    "a string of 31": "bf6161",
    "a binary of 32": "c4206161",
    "a string of 2^32 - 1": "dbffffffff",
    "a binary of 2^32 - 1": "c6ffffffff",
    "half an integer": "ce0001",
    "half a header": "dc00",
}
# A whole body, not a value in it.
WHOLE = {
    "no bytes": "",
    "an array": "90",
    "an integer": "00",
    "nil": "c0",
    "a string": "a0",
    "a map of 0 as map 16": "de0000",
    "a map of 1 as map 32": "df000000010000",
    "a byte after the map": "8000",
    "a second map": "8080",
    "a pair more than the header says": "8100000100",
    "a pair less than the header says": "820000",
    "a key without a value": "8100",
    "keys that fall": "820100" + "0000",
    "a key twice": "8200000000",
    "a negative key": "81ff00",
    "a string for a key": "81a13000",
    "a key in a long encoding": "81cc0500",
    "key 128": "81cc8000",
    "key 256": "81cd010000",
    "a boolean for a key": "81c200",
    "nil for a key": "81c000",
    "a nested map with falling keys": "8105820100" + "0000",
    "a nested key twice": "81058200000000",
    "a nested key 128": "810581cc8000",
    "33 pairs": "de0021" + "".join(f"{key:02x}00" for key in range(33)),
}
TAKEN = {
    "a boolean": "c3",
    "a string of 31": "bf" + "61" * 31,
    "a string of 32": "d920" + "61" * 32,
    "an empty string": "a0",
    "a binary of 32": "c420" + "00" * 32,
    "an empty binary": "c400",
    "16 items": "dc0010" + "00" * 16,
    "3 levels": "9190",
    "a nested map": "8200c2017f",
    "-2^63": "d38000000000000000",
    "2^64 - 1": "cfffffffffffffffff",
    "every printable character": "d920" + bytes(range(0x20, 0x40)).hex(),
    "a tilde": "a17e",
}


def form(area: Area) -> None:
    for table, purpose in (
        (ALTERNATIVES, "Not the shortest encoding: {}."),
        (FORBIDDEN, "Never in a body: {}."),
        (TOO_MUCH, "Beyond the bounds of a body: {}."),
        (TRUNCATED, "The header claims more than is there: {}."),
    ):
        for name, value in table.items():
            content = b"\x81\x05" + bytes.fromhex(value)
            area.refused(name, purpose.format(name), "status", content, "malformed")
    for name, value in WHOLE.items():
        area.refused(
            f"whole-{name}", f"Not one canonical map: {name}.", "status", bytes.fromhex(value), "malformed"
        )
    for name, value in TAKEN.items():
        bare = frame("status", b"\x81\x05" + bytes.fromhex(value))
        purpose = f"An unknown key below 64 is ignored, its value well formed: {name}."
        area.add(f"ignored-{name}", purpose, bare, meaning(bare, "status", {}))
    pairs = frame("status", pack(dict.fromkeys(range(32), 0)))
    area.add("ignored-32-pairs", "As many pairs as a body may have.", pairs, meaning(pairs, "status", {}))


def integers(area: Area) -> None:
    """Both ends of fields, and one beyond; every width of an integer within a field."""
    for value in (0, 127, 128, 255, 256, 65535, 65536, 2**32 - 1):
        area.message(f"t1-{value}", f"An unsigned field holds {value}.", "time-exchange", {"t1": value})
    for value in (2**32, 2**64 - 1, -1, -32, -33, -(2**63)):
        area.refused(
            f"t1-{value}",
            f"{value} lies outside 0..2^32-1.",
            "time-exchange",
            pack({0: value}),
            "out-of-range",
            0,
        )
    for value in (-1, -32, -33, -128, -129, -32768, -32769, -(2**31), 2**31 - 1):
        fields = {"epoch": 3, "lease": 1, "motion": 1, "magnitude": value}
        area.message(f"magnitude-{value}", f"A signed field holds {value}.", "move", fields)
    for value in (-(2**31) - 1, 2**31, 2**64 - 1):
        content = pack(FENCE_KEYS | {2: 1, 3: value})
        area.refused(
            f"magnitude-{value}", f"{value} lies outside -2^31..2^31-1.", "move", content, "out-of-range", 3
        )
    ranges: tuple[tuple[str, str, int, int, dict[str, Any]], ...] = (
        ("take-lease", "duration", 500, 30000, {}),
        ("renew-lease", "duration", 500, 30000, {}),
        ("telemetry-on", "period", 20, 10000, {"duration": 1000}),
        ("telemetry-on", "duration", 20, 600000, {"period": 1000}),
        ("identify", "duration", 100, 60000, {}),
        ("assign-address", "address", 1, 0xEFFFFFFF, {"hardware_id": bytes(8)}),
        ("assist", "code", 1, 65535, {"op": 1}),
        ("assist", "writes", 1, 255, {"op": 4}),
    )
    for kind, name, low, high, others in ranges:
        fence = {"epoch": 3} if kind == "assist" else {"epoch": 3, "lease": 1}
        for value in (low, high):
            purpose = f"{name} from {low} to {high}."
            area.message(f"{kind}-{name}-{value}", purpose, kind, fence | others | {name: value})
        for value in (low - 1, high + 1):
            content = body(kind, **fence, **others, **{name: value})
            slug, purpose = (
                f"{kind}-{name}-{value}",
                f"{name} is {value}, outside {low}..{high}; never clamped.",
            )
            area.refused(slug, purpose, kind, content, "out-of-range", KEYS[kind][name])
    for kind, value in (("probe", 2001), ("read-faults", 256), ("read-motions", -1)):
        area.refused(
            f"{kind}-{value}", "Outside the range of the field.", kind, pack({0: value}), "out-of-range", 0
        )


def lists(area: Area) -> None:
    """Lengths, numbers of items, and items out of range."""
    for name, value in (("none", []), ("nine", list(range(1, 10))), ("zero", [1, 0]), ("large", [2**32])):
        content = pack(FENCE_KEYS | {2: value})
        area.refused(
            f"occurrences-{name}",
            "One to eight occurrence numbers, each from 1 to 2^32-1.",
            "clear-faults",
            content,
            "out-of-range",
            2,
        )
    for name, value in (
        ("unicast", [1]),
        ("any-controller", [0xFFFFFFFE]),
        ("broadcast", [0xF0000000, 0xFFFFFFFF]),
    ):
        content = pack(FENCE_KEYS | {2: value})
        area.refused(f"groups-{name}", "A group address is wanted.", "set-groups", content, "out-of-range", 2)
    for size in (0, 7, 9):
        content = pack(FENCE_KEYS | {2: bytes(size), 3: 2})
        area.refused(
            f"hardware-id-{size}",
            f"A hardware id of {size} bytes; it has 8.",
            "assign-address",
            content,
            "out-of-range",
            2,
        )
    for key, value in ((2, 8), (2, 0)):
        area.refused(
            f"op-{value}",
            "An enumeration has no such value.",
            "assist",
            pack({0: 3, key: value}),
            "out-of-range",
            key,
        )


def fields(area: Area) -> None:
    """Missing fields, wrong types, unknown keys; the lowest key is named."""
    types = {
        "text for an integer": ("time-exchange", {0: "1"}, 0),
        "binary for an integer": ("time-exchange", {0: b"1"}, 0),
        "a boolean for an integer": ("time-exchange", {0: True}, 0),
        "a list for an integer": ("time-exchange", {0: [1]}, 0),
        "a map for an integer": ("time-exchange", {0: {0: 1}}, 0),
        "an integer for a boolean": ("move", FENCE_KEYS | {2: 1, 65: 1}, 65),
        "text for bytes": ("assign-address", FENCE_KEYS | {2: "12345678", 3: 2}, 2),
        "an integer for a list": ("clear-faults", FENCE_KEYS | {2: 1}, 2),
        "text in a list": ("clear-faults", FENCE_KEYS | {2: [1, "2"]}, 2),
        "a list in a list": ("set-groups", FENCE_KEYS | {2: [[0xF0000000]]}, 2),
        "a boolean for an enumeration": ("describe-motion", {0: True}, 0),
        "text for an optional field": ("probe", {0: ""}, 0),
    }
    for name, (kind, content, key) in types.items():
        area.refused(name, f"Wrong type: {name}.", kind, pack(content), "malformed", key)
    missing = {
        "t1": ("time-exchange", {}, 0),
        "epoch": ("energize", {1: 1}, 0),
        "lease": ("energize", {0: 3}, 1),
        "duration": ("take-lease", {0: 3, 1: 0}, 2),
        "two": ("telemetry-on", FENCE_KEYS, 2),
        "all": ("reset", {}, 0),
        "address": ("assign-address", FENCE_KEYS | {2: bytes(8)}, 3),
        "op": ("assist", {0: 3}, 2),
    }
    for name, (kind, content, key) in missing.items():
        area.refused(
            f"missing-{name}",
            f"Missing: {name}; the lowest key is named.",
            kind,
            pack(content),
            "malformed",
            key,
        )
    for key in (64, 66, 119):
        area.refused(
            f"critical-{key}",
            "An unknown key from 64 to 119 must be understood.",
            "status",
            pack({key: 0}),
            "not-understood",
            key,
        )
    for key in (0, 63, 120, 127):
        bare = frame("status", pack({key: 0}))
        area.add(
            f"unknown-{key}",
            "An unknown key below 64 or from 120 on is ignored.",
            bare,
            meaning(bare, "status", {}),
        )
    bare = frame("reset", pack(FENCE_KEYS | {2: 2, 63: b"x", 127: [1]}))
    purpose = "Unknown keys beside known ones are ignored."
    area.add(
        "unknown-beside-known",
        purpose,
        bare,
        meaning(bare, "reset", {"epoch": 3, "lease": 1, "halt_count": 2}),
    )


def orders(area: Area) -> None:
    """Two errors, one right answer."""
    area.refused(
        "order-form-critical",
        "Form is judged before a critical key.",
        "status",
        bytes.fromhex("8140c0"),
        "malformed",
    )
    area.refused(
        "order-critical-type",
        "A critical key is judged before a wrong type.",
        "time-exchange",
        pack({0: "1", 64: 0}),
        "not-understood",
        64,
    )
    area.refused(
        "order-critical-lowest",
        "The lowest critical key is named.",
        "status",
        pack({100: 0, 119: 0}),
        "not-understood",
        100,
    )
    area.refused(
        "order-type-range",
        "A wrong type is judged before a range.",
        "telemetry-on",
        pack(FENCE_KEYS | {2: 5, 3: "x"}),
        "malformed",
        3,
    )
    area.refused(
        "order-missing-type",
        "Of a missing field and a wrong type, the lower key is named.",
        "telemetry-on",
        pack(FENCE_KEYS | {3: "x"}),
        "malformed",
        2,
    )
    area.refused(
        "order-range-lowest",
        "Of two values out of range, the lower key is named.",
        "telemetry-on",
        pack(FENCE_KEYS | {2: 5, 3: 5}),
        "out-of-range",
        2,
    )
    area.add(
        "order-flags-form",
        "Flags are judged before the body is looked at.",
        frame("status", b"\xc1", flags=0x80),
        {"refusal": "not-understood"},
    )
    area.add(
        "order-kind-flags",
        "An unknown kind is judged before its flags.",
        frame(0x1F, b"\xc1", flags=1),
        {"refusal": "unknown-kind"},
    )
    area.add(
        "order-version-kind",
        "The version is judged before the kind.",
        frame(0x1F, version=2),
        {"refusal": "unsupported-version"},
    )


def make() -> list[Area]:
    body_form = Area(
        "body", "Canonical form. A refusal is what the body alone earns; epoch, lease and state are right."
    )
    form(body_form)
    values = Area(
        "field", "Types, ranges, missing and unknown fields. A refusal is what the body alone earns."
    )
    for part in (integers, lists, fields, orders):
        part(values)
    return [body_form, values]
