"""Vectors of meaning: every kind, in its usual, its smallest and its fullest form."""

from __future__ import annotations

from typing import Any

from vector_tools import ANY_CONTROLLER, BROADCAST, FENCE, GROUP, MODULE, Area

HARDWARE_ID = bytes.fromhex("a1b2c3d4e5f60718")
BUILD = bytes.fromhex("0011223344556677")
U32 = 4294967295
I32_MIN = -2147483648

DESCRIPTION: dict[str, Any] = {
    "hardware_id": HARDWARE_ID,
    "build": BUILD,
    "majors": [1],
    "minor": 0,
    "nature": 1,
    "capabilities": 0x3F,
    "motions": 0x7E,
    "epoch": 3,
    "lease": 1,
    "faces": 6,
    "sessions": 4,
    "numbers": 8,
    "queue": 4,
    "outcomes": 8,
    "faults": 8,
    "groups": 4,
    "receipt_ms": 20,
    "starting_ms": 200,
    "stop_ms": 100,
    "turnaround_us": 0,
}
STATUS: dict[str, Any] = {
    "change": 9,
    "epoch": 3,
    "state": 4,
    "activity": 4,
    "halt_latch": False,
    "fault_latch": False,
    "halt_count": 1,
    "halt_cause": 1,
    "restart_cause": 0,
    "lease": 1,
    "holder": 0x10001,
    "holder_session": 0x5EED0001,
    "queued": 2,
    "scheduled": 0,
    "unconfirmed": 1,
    "position_known": True,
    "position": -90000,
    "faces": [[1, 2, 0], [0, 0, 0]],
    "latched_faults": 0,
    "clock": 123456789,
    "lease_remaining": 4200,
    "supply": 11870,
    "battery": 815,
    "temperatures": [312, 298],
}
FULLEST_STATUS = dict.fromkeys(
    ("change", "epoch", "halt_count", "lease", "holder", "holder_session", "clock"), U32
) | {
    "state": 7,
    "activity": 3,
    "halt_latch": True,
    "fault_latch": True,
    "halt_cause": 3,
    "restart_cause": 4,
    "queued": 255,
    "scheduled": 255,
    "unconfirmed": 255,
    "position_known": False,
    "position": I32_MIN,
    "faces": [[1, U32, 3]] * 6,
    "latched_faults": 255,
    "lease_remaining": 30000,
    "supply": 65535,
    "battery": 1000,
    "temperatures": [-1000, 3000, -1, 0],
}
OUTCOME: dict[str, Any] = {
    "event": 1,
    "epoch": 3,
    "change": 9,
    "motion": 1,
    "outcome": 1,
    "cause": 0,
    "displacement": 90000,
    "duration_ms": 118,
}
FAULT: dict[str, Any] = {
    "event": 2,
    "epoch": 3,
    "change": 10,
    "occurrence": 1,
    "code": 7,
    "class": 4,
    "severity": 1,
    "count": 1,
    "time": 4000000,
    "value": 1205,
}
MOTION_ENTRY = [4, 0x10001, 0x5EED0001, 7, 1, 4, 2, 31240, 0]
FAULT_ENTRY = [1, 7, 4, 1, 1, 4000000, 1205, 1, 1, 0]
ASSIST_OPERATIONS = (
    ("raise", {"op": 1, "code": 7, "survives": True}),
    ("withdraw", {"op": 2, "code": 7}),
    ("restart", {"op": 3, "cause": 2}),
    ("power-cut", {"op": 4, "writes": 1}),
    ("preset", {"op": 5, "item": 1, "value": U32}),
    ("hold", {"op": 6, "phase": 3}),
    ("release", {"op": 7}),
)


def reads(area: Area) -> None:
    for kind in ("describe", "status", "read-counters", "read-groups"):
        area.message(kind, f"{kind} has no fields.", kind, {})
    area.message("probe", "A probe to one module.", "probe", {})
    window = {"answer_window": 1500}
    area.message(
        "probe-many", "A probe to all states its answer window.", "probe", window, destination=BROADCAST
    )
    area.message("probe-group", "A probe to a group the module is in.", "probe", window, destination=GROUP)
    for kind in ("read-faults", "read-motions", "read-truth"):
        area.message(kind, "The page is optional.", kind, {})
        area.message(f"{kind}-page", "A page.", kind, {"page": 2})
    area.message("read-faults-default", "A default may be sent.", "read-faults", {"page": 0})
    area.message("time-exchange", "A clock exchange.", "time-exchange", {"t1": 1000000})
    area.message("describe-motion", "One motion.", "describe-motion", {"motion": 6})


def commands(area: Area) -> None:
    area.message("halt", "A halt to one module.", "halt", {})
    area.message(
        "halt-many",
        "A halt to all, answered within a window.",
        "halt",
        {"answer_window": 200},
        destination=BROADCAST,
    )
    area.message("halt-group", "A halt to a group the module is in.", "halt", {}, destination=GROUP)
    area.message("halt-session-zero", "A halt with session and number 0.", "halt", {}, session=0, number=0)
    area.message("reset", "A reset.", "reset", FENCE | {"halt_count": 2})
    area.message(
        "take-lease",
        "The first lease after a start.",
        "take-lease",
        {"epoch": 3, "lease": 0, "duration": 5000},
    )
    area.message("renew-lease", "A renewal to one module.", "renew-lease", FENCE | {"duration": 5000})
    area.message(
        "renew-lease-many",
        "To many, epoch and lease number need not be there.",
        "renew-lease",
        {"duration": 5000, "answer_window": 0},
        destination=BROADCAST,
    )
    for kind in ("release-lease", "energize", "de-energize"):
        area.message(kind, f"{kind} has only the fence.", kind, FENCE)
    area.message(
        "move", "A pivot by 90 degrees.", "move", FENCE | {"motion": 1, "magnitude": 90000}, number=7
    )
    area.message("move-back", "A negative magnitude.", "move", FENCE | {"motion": 2, "magnitude": -25000})
    area.message(
        "move-at",
        "A start at a stated time, a critical key.",
        "move",
        FENCE | {"motion": 1, "magnitude": 90000, "start_at": U32},
    )
    area.message(
        "move-bond", "A bond names a face and no magnitude.", "move", FENCE | {"motion": 5, "face": 3}
    )
    area.message(
        "move-unbond",
        "The last bond needs the explicit flag.",
        "move",
        FENCE | {"motion": 6, "face": 5, "allow_last_bond": True},
    )
    area.message("cancel", "All motions.", "cancel", FENCE)
    area.message("cancel-one", "One motion, by its request number.", "cancel", FENCE | {"number": 7})
    area.message("clear-faults", "One occurrence.", "clear-faults", FENCE | {"occurrences": [1]})
    area.message(
        "clear-faults-eight",
        "As many occurrences as fit.",
        "clear-faults",
        FENCE | {"occurrences": [1, 2, 3, 127, 128, 255, 256, U32]},
    )
    area.message(
        "telemetry-on",
        "Ten a second for a minute.",
        "telemetry-on",
        FENCE | {"period": 100, "duration": 60000},
    )
    area.message("telemetry-off", "To one module.", "telemetry-off", FENCE)
    area.message(
        "telemetry-off-many", "To a group.", "telemetry-off", {"answer_window": 500}, destination=GROUP
    )
    area.message(
        "assign-address",
        "To one module.",
        "assign-address",
        FENCE | {"hardware_id": HARDWARE_ID, "address": 0x01020304},
    )
    area.message(
        "assign-address-many",
        "To all: the epoch, and no lease number.",
        "assign-address",
        {"epoch": 3, "hardware_id": HARDWARE_ID, "address": 2, "answer_window": 100},
        destination=BROADCAST,
    )
    area.message("set-groups", "Two groups.", "set-groups", FENCE | {"groups": [0xF0000000, 0xFFFFFFFD]})
    area.message(
        "set-groups-none", "An empty list ends all membership.", "set-groups", FENCE | {"groups": []}
    )
    area.message(
        "set-groups-sixteen",
        "Sixteen items need the long array header.",
        "set-groups",
        FENCE | {"groups": list(range(0xF0000000, 0xF0000010))},
    )
    area.message("identify", "For three seconds.", "identify", FENCE | {"duration": 3000})
    for name, fields in ASSIST_OPERATIONS:
        area.message(f"assist-{name}", f"The upper tester's {name}.", "assist", {"epoch": 3} | fields)
    area.message(
        "confirm", "A confirmation names epoch and event.", "confirm", {"epoch": 3, "event": 1}, number=8
    )


def answers(area: Area) -> None:
    receipt = {
        "accepted": {"result": 0},
        "lease": {"result": 0, "lease": 2},
        "stale-epoch": {"result": 1, "reason": 8, "epoch": 4, "lease": 0},
        "not-holder": {"result": 1, "reason": 10, "holder": 0x10002, "holder_session": 77},
        "out-of-range": {"result": 1, "reason": 13, "key": 64},
        "newer-halt": {"result": 1, "reason": 20, "halt_count": 2},
        "unsupported-version": {"result": 1, "reason": 1, "majors": [1]},
        "storage-failed": {"result": 1, "reason": 29},
    }
    for name, fields in receipt.items():
        area.message(f"receipt-{name}", f"A receipt: {name}.", "receipt", fields, number=7)
    area.message("description", "A module with everything.", "description", DESCRIPTION)
    area.message("status-report", "A module in motion.", "status-report", STATUS)
    area.message("status-report-fullest", "Every field at its longest.", "status-report", FULLEST_STATUS)
    area.message(
        "presence",
        "A module with an address.",
        "presence",
        {"hardware_id": HARDWARE_ID, "epoch": 3, "nature": 0, "state": 6},
    )
    area.message(
        "presence-unassigned",
        "A module without an address answers with source 0.",
        "presence",
        {"hardware_id": HARDWARE_ID, "epoch": 1, "nature": 0, "state": 6},
        source=0,
    )
    area.message(
        "counters",
        "Twelve drop reasons.",
        "counters",
        {"drops": [0, 1, 2, 3, 127, 128, 255, 256, 65535, 0, 0, 9], "silent_refusals": 4},
    )
    area.message(
        "counters-more",
        "A later minor version counts more reasons.",
        "counters",
        {"drops": [0] * 16, "silent_refusals": 65535},
    )
    area.message("fault-page", "One entry.", "fault-page", {"total": 1, "lost": 0, "entries": [FAULT_ENTRY]})
    area.message(
        "fault-page-full",
        "Three entries.",
        "fault-page",
        {"total": 255, "lost": 65535, "entries": [[U32, 65535, 7, 1, U32, U32, I32_MIN, 1, 1, 1]] * 3},
    )
    area.message("fault-page-empty", "Past the end.", "fault-page", {"total": 0, "lost": 0, "entries": []})
    area.message("motion-page", "Two entries.", "motion-page", {"total": 2, "entries": [MOTION_ENTRY] * 2})
    area.message("motion-page-empty", "Past the end.", "motion-page", {"total": 2, "entries": []})
    area.message(
        "time-answer", "Three of the four time stamps.", "time-answer", {"t1": 1000000, "t2": 5, "t3": 305}
    )
    area.message(
        "motion-description",
        "A hop with a point of no return.",
        "motion-description",
        {
            "motion": 4,
            "actuator": 0,
            "magnitude_min": -100000,
            "magnitude_max": 100000,
            "typical_ms": 150,
            "longest_ms": 400,
            "no_return_ms": 60,
            "halt_category": 1,
            "lease_end_category": 1,
            "fault_category": 0,
        },
    )
    area.message("group-list", "Two groups.", "group-list", {"groups": [0xF0000000, GROUP]})
    area.message(
        "truth-page",
        "Two entries.",
        "truth-page",
        {
            "motion_starts": 1,
            "energized": True,
            "position": 31240,
            "total": 2,
            "entries": [[2000000, 4, 31240], [1900000, 3, 0]],
        },
    )
    area.message(
        "truth-page-full",
        "Eight entries.",
        "truth-page",
        {
            "motion_starts": U32,
            "energized": False,
            "position": I32_MIN,
            "total": 65535,
            "entries": [[U32, 6, I32_MIN]] * 8,
        },
    )
    area.message(
        "halt-receipt", "Found at rest.", "halt-receipt", {"disposition": 1, "halt_count": 2, "epoch": 3}
    )
    area.message(
        "halt-receipt-past",
        "Past the point of no return.",
        "halt-receipt",
        {"disposition": 3, "halt_count": U32, "epoch": U32},
        number=U32,
    )


def events(area: Area) -> None:
    area.message("outcome", "Done.", "outcome", OUTCOME, number=7)
    area.message(
        "outcome-interrupted",
        "A hop that landed although halted, with its energy.",
        "outcome",
        OUTCOME | {"motion": 4, "interrupted": 2, "energy_mj": 81},
        number=7,
    )
    area.message(
        "outcome-never-begun",
        "Halted in the queue.",
        "outcome",
        OUTCOME | {"outcome": 4, "cause": 2, "displacement": 0, "duration_ms": 0},
        number=8,
    )
    area.message("fault", "To the lease holder.", "fault", FAULT, number=0)
    area.message(
        "fault-anyone",
        "Nobody holds the lease.",
        "fault",
        FAULT | {"value": I32_MIN},
        number=0,
        session=0,
        destination=ANY_CONTROLLER,
    )
    area.message(
        "telemetry",
        "A measurement.",
        "telemetry",
        {
            "sequence": 0,
            "change": 9,
            "clock": U32,
            "state": 4,
            "position": -1,
            "supply": 12000,
            "temperatures": [],
        },
    )
    area.message(
        "started",
        "After a brown-out.",
        "started",
        {"epoch": 4, "change": 1, "restart_cause": 3, "hardware_id": HARDWARE_ID, "nature": 0},
        number=0,
        session=0,
        destination=ANY_CONTROLLER,
    )
    area.message(
        "log", "The longest text.", "log", {"text": "thirty-two characters, ~ and all"}, source=MODULE
    )
    area.message("log-empty", "No text.", "log", {"text": ""})


def make() -> Area:
    area = Area("message", "Every message kind, as decoded fields. A field that is absent has its default.")
    for part in (reads, commands, answers, events):
        part(area)
    return area
