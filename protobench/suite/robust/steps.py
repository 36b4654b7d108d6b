"""Sequences of steps, drawn from a seed alone, so that one can be told, kept, shortened and played again."""

from __future__ import annotations

import random
from collections.abc import Sequence
from typing import Any, NamedTuple

from protobench.contract import Contract
from protobench.suite.facts import Facts

STEPS_LEAST, STEPS_MOST = 6, 26
CONTROLLERS = 3  # two addresses, one of them with two sessions: within the least history a module may have
WAITS_MS = (0, 1, 5, 20, 60, 150, 400, 700, 2500)
ACTS = {  # act: its share
    "sound": 46, "ready": 8, "confirm": 8, "wait": 10, "copy": 5, "twist": 16, "burst": 3, "damage": 5, "stream": 4,
    "rush": 3,
}  # fmt: skip
SHARES = {  # of sound requests; what is not named has a share of 1
    "move": 14, "cancel": 5, "halt": 3, "energize": 4, "renew-lease": 3, "take-lease": 3, "status": 6, "reset": 3,
    "release-lease": 1, "telemetry-on": 2, "de-energize": 2,
}  # fmt: skip
LEFT_OUT = {"assist"}  # changes what the model does not follow; its own cases judge it
TWISTS = (
    "least", "most", "under", "over", "absent", "type", "default", "ignored-key", "private-key", "critical-key",
    "longer-form", "trailing", "no-body", "no-map", "float", "nil", "deep", "twice", "flags", "version", "length",
    "to-other", "to-all", "to-group", "from-none", "from-all", "from-own", "epoch", "lease", "unseen", "behind",
    "half-way", "conflict", "kind", "class", "newer-by-far",
)  # fmt: skip
DAMAGES = ("flip", "flip-repaired", "cut", "cut-repaired", "extend", "extend-repaired")
NEED_KIND = ("sound", "twist", "damage", "burst")
STREAMS = ("garbage", "zeros", "glued", "half", "gap-short", "gap-long", "too-long", "early-zero", "bytewise")


class Step(NamedTuple):
    """One thing to do: by controller ``who``, about ``kind``, in what way, with what is drawn from ``draw``."""

    act: str
    who: int = 0
    kind: str = ""
    how: str = ""
    draw: int = 0

    @property
    def words(self) -> str:
        told = " ".join(part for part in (self.act, self.kind, self.how) if part)
        return f"controller {self.who + 1}: {told} [{self.draw}]"


def read_step(row: Any, contract: Contract) -> Step:
    """A step from JSON; ValueError for anything else."""
    types = (str, int, str, str, int)
    if not isinstance(row, list) or len(row) != len(types):
        raise ValueError(f"a step is a list of act, controller, kind, way and draw; not {row!r}")
    for value, wanted in zip(row, types, strict=True):
        if type(value) is not wanted:
            raise ValueError(f"step {row!r}: {value!r} must be {wanted.__name__}")
    step = Step(*row)
    if step.act not in ACTS or not 0 <= step.who < CONTROLLERS:
        raise ValueError(f"step {row!r}: no such act or controller")
    names = {kind.name for kind in contract.kinds if kind.is_request} - LEFT_OUT
    if step.kind not in names and (step.kind or step.act in NEED_KIND):
        raise ValueError(f"step {row!r}: no such kind of request")
    ways = {"twist": TWISTS, "damage": DAMAGES, "stream": STREAMS}.get(step.act, ("",))
    if step.how not in ways:
        raise ValueError(f"step {row!r}: no such way")
    return step


class Grammar:
    """Draws sequences for one module, from the contract's tables and what the module declares."""

    def __init__(self, contract: Contract, facts: Facts) -> None:
        requests = [kind.name for kind in contract.kinds if kind.is_request and kind.name not in LEFT_OUT]
        self.requests: Sequence[str] = requests
        able = [name for name in requests if (needs := contract.kind(name).needs) is None or facts.has(needs)]
        if not facts.motions:
            able.remove("move")
        self._sound = able
        self._shares = [SHARES.get(name, 1) for name in able]

    def sequence(self, seed: int, index: int) -> list[Step]:
        """The sequence of this number: the same for the same seed and module."""
        rng = random.Random(f"{seed}/robust/{index}")
        count = rng.randint(STEPS_LEAST, STEPS_MOST)
        return [self._step(rng, None if place else "ready") for place in range(count)]

    def _step(self, rng: random.Random, act: str | None) -> Step:
        act = act or rng.choices(list(ACTS), list(ACTS.values()))[0]
        who = rng.choices(range(CONTROLLERS), (8, 1, 1))[0]
        draw = rng.randrange(1 << 32)
        if act in ("ready", "confirm", "copy", "wait", "rush"):
            return Step(act, who, "", "", draw)
        if act == "stream":
            return Step(act, who, "status", rng.choice(STREAMS), draw)
        if act in ("twist", "damage"):
            kind = rng.choice(self.requests)
            return Step(act, who, kind, rng.choice(TWISTS if act == "twist" else DAMAGES), draw)
        return Step(act, who, rng.choices(self._sound, self._shares)[0], "", draw)
