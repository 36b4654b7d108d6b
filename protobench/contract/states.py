"""Models of ``states.toml`` and the complete state table that its rows expand to."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from itertools import product
from types import MappingProxyType
from typing import Any, Literal, NamedTuple

import pydantic as pd

from protobench.contract.base import Model, Name, Text
from protobench.contract.problems import Problem

FILE = "states.toml"
FACTORS = ("activity", "halt", "fault", "lease")
DECLARED = "declared"
InputClass = Literal["internal", "read", "command"]
Lease = Literal["free", "held"]
Declared = Callable[..., str]


class State(NamedTuple):
    """One state of a module; ``lease`` is "free" or "held"."""

    activity: str
    halt: bool
    fault: bool
    lease: str

    def __str__(self) -> str:
        latches = [name for name, is_set in (("halt", self.halt), ("fault", self.fault)) if is_set]
        return f"{self.activity}/{'+'.join(latches) or 'clear'}/{self.lease}"


class Pattern(Model):
    """The states a row speaks of; a factor that is absent or "any" stands for all its values."""

    activity: Name | tuple[Name, ...] = "any"
    halt: bool | Literal["any"] = "any"
    fault: bool | Literal["any"] = "any"
    lease: Lease | Literal["any"] = "any"

    def fits(self, state: State) -> bool:
        """Whether the pattern includes a state."""
        return all(_includes(getattr(self, name), getattr(state, name)) for name in FACTORS)

    @property
    def activities(self) -> tuple[str, ...]:
        """The activities named; empty for any."""
        if isinstance(self.activity, tuple):
            return self.activity
        return () if self.activity == "any" else (self.activity,)


class Displayed(Pattern):
    """A row of the table of displayed states."""

    state: Name


class Transition(Pattern):
    """A row of the state table."""

    input: Name
    answer: Name
    next_activity: Name = "same"
    next_halt: bool | Literal["same"] = "same"
    next_fault: bool | Literal["same"] = "same"
    next_lease: Lease | Literal["same"] = "same"

    def after(self, state: State) -> State:
        """Return the state that follows; its activity may be DECLARED."""
        wanted = (getattr(self, f"next_{name}") for name in FACTORS)
        return State._make(old if new == "same" else new for old, new in zip(state, wanted, strict=True))


class Input(Model):
    """What can happen to a module."""

    name: Name
    class_: InputClass = pd.Field(alias="class")
    text: Text


class Factors(Model):
    """The values of each factor of a state."""

    activity: tuple[Name, ...]
    halt: tuple[bool, ...]
    fault: tuple[bool, ...]
    lease: tuple[Lease, ...]
    excluded_text: Text


class Order(Model):
    """Which of several inputs of the same instant is taken first."""

    first_to_last: tuple[Name, ...]


class Initial(Model):
    """The state at power-on."""

    activity: Name
    halt: bool
    fault: bool
    lease: Lease


class StatesFile(Model):
    """``states.toml``."""

    factors: Factors
    excluded: tuple[Pattern, ...]
    displayed: tuple[Displayed, ...]
    order: Order
    initial: Initial
    input: tuple[Input, ...]
    transition: tuple[Transition, ...]


@dataclass(frozen=True, slots=True)
class Cell:
    """What one input does in one state.

    ``after.activity`` is DECLARED where it depends on the declared stop categories; then ``causes`` names
    those that apply (of halt, fault, lease_end). ``row``: index of the transition in the file.
    """

    answer: str
    after: State
    causes: tuple[str, ...]
    row: int


class StateTable:
    """Every state, every input, and what follows."""

    def __init__(self, file: StatesFile) -> None:
        self.file = file
        every = product(*(getattr(file.factors, name) for name in FACTORS))
        self.states = tuple(
            state for state in map(State._make, every) if not any(row.fits(state) for row in file.excluded)
        )
        self.inputs = file.input
        self.initial = State._make(getattr(file.initial, name) for name in FACTORS)
        self.order = file.order.first_to_last
        cells: dict[tuple[State, str], Cell] = {}
        self.overlaps: list[tuple[State, str, int, int]] = []
        for index, row in enumerate(file.transition):
            for state in self.states:
                if not row.fits(state):
                    continue
                if (first := cells.get((state, row.input))) is not None:
                    self.overlaps.append((state, row.input, first.row, index))
                    continue
                after = row.after(state)
                causes = _causes(after) if after.activity == DECLARED else ()
                cells[state, row.input] = Cell(row.answer, after, causes, index)
        self.cells: Mapping[tuple[State, str], Cell] = MappingProxyType(cells)

    def cell(self, state: State, input_name: str) -> Cell:
        """Return what an input does in a state; KeyError for an unknown one."""
        try:
            return self.cells[State(*state), input_name]
        except KeyError:
            raise KeyError(f"the state table has no {input_name!r} in {tuple(state)}") from None

    def step(
        self, state: tuple[str, bool, bool, str], input_name: str, declared: Declared
    ) -> tuple[str, State]:
        """Return the answer to an input in a state, and the next state.

        ``declared``: called with the causes that apply (of "halt", "fault", "lease_end") where the table says
        so; returns the activity after them, "energized" or "idle", as the module's stop categories have it.
        KeyError for an unknown state or input.
        """
        cell = self.cell(State(*state), input_name)
        if cell.after.activity != DECLARED:
            return cell.answer, cell.after
        return cell.answer, cell.after._replace(activity=declared(*cell.causes))

    def displayed(self, state: tuple[str, bool, bool, str]) -> str:
        """Return the displayed state; KeyError for an unknown state."""
        wanted = State(*state)
        for row in self.file.displayed:
            if row.fits(wanted):
                return row.state
        raise KeyError(f"no displayed state for {wanted}")

    def followers(self, state: State) -> Iterator[tuple[str, State]]:
        """Every input and the state or states it can lead to."""
        for item in self.inputs:
            after = self.cells[state, item.name].after
            for activity in ("idle", "energized") if after.activity == DECLARED else (after.activity,):
                yield item.name, after._replace(activity=activity)

    @property
    def unreachable(self) -> tuple[State, ...]:
        """States that no sequence of inputs from the initial one leads to."""
        seen = {self.initial}
        waiting = [self.initial]
        while waiting:
            for _, after in self.followers(waiting.pop()):
                if after not in seen:
                    seen.add(after)
                    waiting.append(after)
        return tuple(state for state in self.states if state not in seen)

    def problems(self) -> list[Problem]:
        """Everything that makes the table incomplete or ambiguous, or names what does not exist."""
        return [*self._name_problems(), *self._coverage_problems()]

    def _name_problems(self) -> Iterator[Problem]:
        inputs = [item.name for item in self.inputs]
        activities = self.file.factors.activity
        for index, row in enumerate(self.file.transition):
            path = ("transition", index)
            if row.input not in inputs:
                yield Problem(FILE, (*path, "input"), f"there is no input {row.input!r}")
            if row.next_activity not in (*activities, "same", DECLARED):
                yield Problem(FILE, (*path, "next_activity"), f"there is no activity {row.next_activity!r}")
        for table in ("transition", "displayed", "excluded"):
            for index, pattern in enumerate(getattr(self.file, table)):
                for name in pattern.activities:
                    if name not in activities:
                        yield Problem(FILE, (table, index, "activity"), f"there is no activity {name!r}")
        if self.initial not in self.states:
            yield Problem(FILE, ("initial",), f"{self.initial} is not one of the states")
        known = {*inputs, "frames"}
        for index, name in enumerate(self.order):
            if name not in known:
                yield Problem(FILE, ("order", "first_to_last", index), f"there is no input {name!r}")

    def _coverage_problems(self) -> Iterator[Problem]:
        for state, name, first, index in self.overlaps:
            yield Problem(
                FILE, ("transition", index), f"{name} in {state} has a row already: transition[{first}]"
            )
        for state in self.states:
            for item in self.inputs:
                cell = self.cells.get((state, item.name))
                if cell is None:
                    yield Problem(FILE, ("transition",), f"{item.name} in {state} has no row")
                elif cell.after.activity == DECLARED and not cell.causes:
                    rule = f"{item.name} in {state}: activity is declared, yet no cause of a stop applies"
                    yield Problem(FILE, ("transition", cell.row), rule)
                elif cell.after.activity != DECLARED and cell.after not in self.states:
                    rule = f"{item.name} in {state} leads to {cell.after}, which is excluded"
                    yield Problem(FILE, ("transition", cell.row), rule)
            if not any(row.fits(state) for row in self.file.displayed):
                yield Problem(FILE, ("displayed",), f"{state} has no displayed state")


def _includes(wanted: Any, value: object) -> bool:
    if isinstance(wanted, tuple):
        return value in wanted
    return wanted in ("any", value)


def _causes(state: State) -> tuple[str, ...]:
    """The causes for which an actuator's stop category counts in a state."""
    applies = {"halt": state.halt, "fault": state.fault, "lease_end": state.lease == "free"}
    return tuple(name for name, holds in applies.items() if holds)
