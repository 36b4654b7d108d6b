"""The numbers of one controller session as a machine: what is new, a copy, overtaken, expired or in conflict.

Made from the clauses SEQ-02 to SEQ-08 and SEQ-11 to SEQ-13. What the machine knows of a session:

- whether it has begun, and whether it holds the lease (``next`` takes and gives back the lease in turn, so that a
  command executed twice, or not at all, shows);
- of the last two stored commands whether they were granted, accepted or refused: their copies say the same again;
- what the highest number and the number before it are: stored, seen without being stored (commands to many), or never
  seen.

Not in the machine: more stored receipts than two, several sessions, restarts, and words of more than WORD_MAX inputs,
after which a number at the window's far edge may have been used. Which number is overtaken or expired is the driver's
choice: the one nearest the edge that the session never used.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import NamedTuple

from protobench.suite.machines.mealy import Mealy

WORD_MAX = 28  # inputs after a reset; 32 numbers are remembered
GRANTED, ACCEPTED, REFUSED = "granted", "accepted", "refused stale-epoch"
CONFLICT, LATE, EXPIRED = "refused conflict", "refused late-unseen", "refused answer-expired"
STORED, SEEN, UNSEEN = "stored", "seen", "unseen"
AHEAD = {"next": 1, "skip": 2, "far": 40}

INPUTS = {
    "next": "the next number",
    "skip": "the number after the next, so that one is left out",
    "far": "a number 40 ahead: all that came before lies outside the window",
    "half": "a number 2^31 away, neither newer nor older",
    "refused": "the next number, with a command that is refused for its epoch",
    "copy": "the last stored command again, byte for byte",
    "copy-before": "the stored command before it again; the last one while it is the only one",
    "other-body": "the last stored number with another body",
    "other-kind": "the last stored number with another kind and the same body",
    "top": "the highest number with a new command",
    "gap": "the number before the highest with a new command",
    "inside": "the number farthest behind that is in the window and was never used",
    "outside": "the number just outside the window that was never used",
    "read": "a read with the next number",
    "halt": "a halt with the next number",
    "many": "the next number, with a renewal of the lease to all modules",
}

CLAUSES = {
    "granted": "SEQ-02",
    "accepted": "SEQ-02",
    "refused stale-epoch": "SEQ-14",
    "copy": "SEQ-03",
    "refused conflict": "SEQ-04",
    "refused late-unseen": "SEQ-05",
    "refused answer-expired": "SEQ-06",
    "status": "SEQ-11",
    "halt-receipt": "SEQ-13",
    "nothing": "SEQ-12",
}


class Session(NamedTuple):
    """What the machine knows. ``last`` and ``before`` are empty before the first number; ``before`` begins as ``last``.

    ``top`` and ``below``: what the highest number and the number before it are.
    """

    held: bool = False
    last: str = ""
    before: str = ""
    top: str = UNSEEN
    below: str = UNSEEN

    def __str__(self) -> str:
        lease = "held" if self.held else "free"
        if not self.last and self.top == UNSEEN:
            return f"{lease}, no number"
        return (
            f"{lease}, last {self.last or 'none'}, before {self.before or 'none'}, {self.top} on {self.below}"
        )


Reaction = tuple[str, Session]


def window_machine(inputs: Sequence[str] = tuple(INPUTS)) -> Mealy:
    """The machine, minimal, with these of INPUTS; a ValueError names one that is not among them."""
    unknown = next((symbol for symbol in inputs if symbol not in INPUTS), None)
    if unknown is not None:
        raise ValueError(f"input {unknown!r}: one of {', '.join(INPUTS)}")
    start = Session()
    table: dict[tuple[str, str], tuple[str, str]] = {}
    waiting = [start]
    known = {start}
    while waiting:
        session = waiting.pop()
        for symbol in inputs:
            output, after = react(session, symbol)
            table[str(session), symbol] = (output, str(after))
            if after not in known:
                known.add(after)
                waiting.append(after)
    return Mealy(inputs, str(start), table).minimal()


def clause_of(output: str) -> str:
    """The clause that predicts an output."""
    return next(clause for begin, clause in CLAUSES.items() if output.startswith(begin))


def react(session: Session, symbol: str) -> Reaction:
    """What the contract says a session answers to an input, and what it is then."""
    if symbol in _APART:
        return _APART[symbol](session)
    if session.top == UNSEEN or symbol in AHEAD:  # SEQ-02: newer, or the first of the session
        below = session.top if AHEAD.get(symbol) == 1 and session.top != UNSEEN else UNSEEN
        return _toggled(session, below)
    return _BEHIND[symbol](session)


def _toggled(session: Session, below: str) -> Reaction:
    result = ACCEPTED if session.held else GRANTED
    return result, _stored(session, result, below)._replace(held=not session.held)


def _stored(session: Session, result: str, below: str) -> Session:
    return Session(session.held, result, session.last or result, STORED, below)


def _refused(session: Session) -> Reaction:
    """SEQ-02: consumed and stored, whatever the verdict."""
    return REFUSED, _stored(session, REFUSED, session.top)


def _many(session: Session) -> Reaction:
    """SEQ-12: consumed and not stored, and never answered unless it asks for that."""
    return "nothing", session._replace(top=SEEN, below=session.top)


_APART: dict[str, Callable[[Session], Reaction]] = {
    "refused": _refused,
    "many": _many,
    "read": lambda session: (f"status {'held' if session.held else 'free'}", session),  # SEQ-11
    "halt": lambda session: ("halt-receipt", session),  # SEQ-13
}

_UNUSED = {STORED: CONFLICT, SEEN: EXPIRED, UNSEEN: LATE}  # SEQ-04, SEQ-06, SEQ-05


def _same(output: str) -> Callable[[Session], Reaction]:
    """SEQ-07: what is refused for its number changes nothing; neither does a copy."""
    return lambda session: (output, session)


_BEHIND: dict[str, Callable[[Session], Reaction]] = {
    "copy": lambda session: (f"copy {session.last}" if session.last else EXPIRED, session),  # SEQ-03
    "copy-before": lambda session: (f"copy {session.before}" if session.before else EXPIRED, session),
    "other-body": lambda session: (CONFLICT if session.last else EXPIRED, session),
    "other-kind": lambda session: (CONFLICT if session.last else EXPIRED, session),
    "top": lambda session: (_UNUSED[session.top], session),
    "gap": lambda session: (_UNUSED[session.below], session),
    "inside": _same(LATE),
    "outside": _same(EXPIRED),
    "half": _same(EXPIRED),
}
