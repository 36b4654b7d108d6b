"""Test sequences from a machine, complete for every subject of at most so many states.

A suite of m = n + extra kills every subject that differs from the machine of n states, as long as the subject has at
most m states, is deterministic and is brought to its start before each sequence. Methods:

- W: Vasilevskii, "Failure diagnosis of automata", 1973; Chow, "Testing software design modeled by finite-state
  machines", 1978. T = P.Z with Z = W u X.W u ... u X^(m-n).W.
- Wp: Fujiwara, von Bochmann, Khendek, Amalou, Ghedamsi, "Test selection based on finite state models", 1991.
- HSI: Petrenko, Yevtushenko, Lebedev, Das, "Nondeterministic state machines in protocol conformance testing", 1993;
  Yevtushenko and Petrenko's harmonised identifiers.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable, Iterable, Iterator, Sequence
from functools import cached_property
from typing import NamedTuple

from protobench.suite.machines.mealy import Mealy, Word

METHODS = ("W", "Wp", "HSI")
Identifiers = dict[str, tuple[Word, ...]]
Attach = Callable[[str, int], tuple[Word, ...]]


class Size(NamedTuple):
    """How many sequences, and how many inputs they have together."""

    sequences: int
    inputs: int


class Node(NamedTuple):
    """A place in the tree of all sequences of a suite.

    ``state``: where the machine is; ``access``: where in the tree of access words, None outside; ``left``: how many
    arbitrary inputs still follow, below 0 for none; ``tails``: what of identifying words remains to be put in.
    """

    state: str
    access: Word | None
    left: int
    tails: frozenset[Word]


class Suite:
    """The sequences of one method, none of which begins another.

    They are walked, not stored: what is kept are the few sorts of node that they pass through.
    """

    def __init__(self, machine: Mealy, method: str, extra: int, attach: Attach) -> None:
        self.machine = machine
        self.method = method
        self.extra = extra
        self._attach = attach
        self._cover = frozenset(machine.cover().values())
        self._sizes: dict[Node, Size] = {}
        self._known: dict[Node, list[tuple[str, Node]]] = {}  # many sequences pass through like nodes

    @property
    def states(self) -> int:
        """n: how many states the machine has."""
        return len(self.machine.states)

    @property
    def states_max(self) -> int:
        """m: how many states the subject may have."""
        return self.states + self.extra

    def __iter__(self) -> Iterator[Word]:
        """Each sequence once; the same in every run."""
        path: list[str] = []
        levels = [iter(self._children(self._root))]
        while levels:
            step = next(levels[-1], None)
            if step is None:
                levels.pop()
                if path:
                    path.pop()
                continue
            symbol, node = step
            children = self._children(node)
            if children:
                path.append(symbol)
                levels.append(iter(children))
            else:
                yield (*path, symbol)

    @cached_property
    def size(self) -> Size:
        """How large the suite is, counted without making it."""
        return self._size(self._root)

    @property
    def _root(self) -> Node:
        return Node(self.machine.initial, (), self.extra + 1, frozenset())

    def _children(self, node: Node) -> list[tuple[str, Node]]:
        known = self._known.get(node)
        if known is None:
            known = self._known[node] = self._grow(node)
        return known

    def _grow(self, node: Node) -> list[tuple[str, Node]]:
        ahead = node.tails.union(self._attach(node.state, node.left)) if node.left >= 0 else node.tails
        tails: dict[str, set[Word]] = {}
        for tail in ahead:
            if tail:
                tails.setdefault(tail[0], set()).add(tail[1:])
        children = []
        for symbol in self.machine.inputs:
            access = None if node.access is None else (*node.access, symbol)
            if access is not None and access not in self._cover:
                access = None
            left = self.extra + 1 if access is not None else max(node.left - 1, -1)
            if access is not None or left >= 0 or symbol in tails:
                after = self.machine.table[node.state, symbol][1]
                children.append((symbol, Node(after, access, left, frozenset(tails.get(symbol, ())))))
        return children

    def _size(self, node: Node) -> Size:
        known = self._sizes.get(node)
        if known is None:
            parts = [self._size(child) for _, child in self._children(node)]
            sequences = sum(part.sequences for part in parts)
            known = (
                Size(sequences, sum(part.inputs + part.sequences for part in parts)) if parts else Size(1, 0)
            )
            self._sizes[node] = known
        return known


def derive(machine: Mealy, method: str, extra: int, words: Sequence[Word] | None = None) -> Suite:
    """The suite of a method for subjects of at most ``extra`` states more than the machine.

    ``words``: the characterisation set to use, else one is made. Raises ValueError for an unknown method, a negative
    ``extra``, a machine that is not minimal, and words that do not tell all its states apart.
    """
    if method not in METHODS:
        raise ValueError(f"method {method!r}: one of {', '.join(METHODS)}")
    if extra < 0:
        raise ValueError(f"extra {extra}: a subject has at least the machine's own states")
    _need_minimal(machine)
    chosen = small_characterisation(machine) if words is None else tuple(words)
    _need_telling(machine, chosen)
    return Suite(machine, method, extra, _MAKERS[method](machine, chosen))


def _w(_: Mealy, words: tuple[Word, ...]) -> Attach:
    """Chow's: the whole set after every word of P.X^(0..extra)."""
    return lambda _state, _left: words


def _wp(machine: Mealy, words: tuple[Word, ...]) -> Attach:
    """Fujiwara's two phases: the whole set as far as the states are confirmed, then each state's own identifier.

    The second phase is for the last of the arbitrary inputs alone: what comes before it is in the first.
    """
    own = state_identifiers(machine, words)
    return lambda state, left: words if left > 0 else own[state]


def _hsi(machine: Mealy, words: tuple[Word, ...]) -> Attach:
    """Petrenko's and Yevtushenko's: each state's harmonised identifier everywhere."""
    own = harmonised_identifiers(machine, words)
    return lambda state, _left: own[state]


_MAKERS: dict[str, Callable[[Mealy, tuple[Word, ...]], Attach]] = {"W": _w, "Wp": _wp, "HSI": _hsi}


# ---------------------------------------------------------------- words that tell states apart


def characterisation(machine: Mealy) -> tuple[Word, ...]:
    """A characterisation set: for each two states a shortest word that tells them apart, shortest words first.

    Gill, "Introduction to the theory of finite-state machines", 1962; as in Chow's W-method. It is read off the
    partitions P1, P2, ...: words of k inputs split the classes of P(k-1).
    """
    found = dict.fromkeys(_word(machine, one, other) for one, other in _pairs(machine.states))
    order = {symbol: index for index, symbol in enumerate(machine.inputs)}
    return tuple(sorted(found, key=lambda word: (len(word), [order[symbol] for symbol in word])))


def small_characterisation(machine: Mealy) -> tuple[Word, ...]:
    """A characterisation set of few words: always the word that parts the most pairs of states still together."""
    together = list(_pairs(machine.states))
    candidates = characterisation(machine)
    answers = {word: {state: machine.run(word, state) for state in machine.states} for word in candidates}
    return tuple(_greedy(together, candidates, lambda word, pair: _parts(answers[word], pair)))


def state_identifiers(machine: Mealy, words: Sequence[Word]) -> Identifiers:
    """For each state a few of the words that tell it from every other state: Fujiwara's W_i."""
    answers = {word: {state: machine.run(word, state) for state in machine.states} for word in words}
    return {
        state: tuple(
            _greedy(
                [(state, other) for other in machine.states if other != state],
                words,
                lambda word, pair: _parts(answers[word], pair),
            )
        )
        for state in machine.states
    }


def harmonised_identifiers(machine: Mealy, words: Sequence[Word]) -> Identifiers:
    """For each state words such that any two states share one that tells them apart: Petrenko's H_i.

    For each two states a word that one or both already have is taken where there is one.
    """
    answers = {word: {state: machine.run(word, state) for state in machine.states} for word in words}
    own: dict[str, dict[Word, None]] = {state: {} for state in machine.states}
    for pair in _pairs(machine.states):
        one, other = own[pair[0]], own[pair[1]]
        telling = [word for word in words if _parts(answers[word], pair)]
        word = min(telling, key=lambda word: ((word not in one) + (word not in other), len(word)))
        one[word] = other[word] = None
    return {state: tuple(words) for state, words in own.items()}


def without_prefixes(words: Iterable[Word]) -> list[Word]:
    """The words that do not begin another one, in alphabetical order."""
    ordered = sorted(set(words))
    return [
        word for word, after in zip(ordered, [*ordered[1:], ()], strict=True) if after[: len(word)] != word
    ]


def _word(machine: Mealy, one: str, other: str) -> Word:
    word = machine.separating(one, other)
    if word is None:
        raise ValueError(
            f"states {one!r} and {other!r}: no word tells them apart; the machine is not minimal"
        )
    return word


def _pairs(states: Sequence[str]) -> Iterator[tuple[str, str]]:
    return ((one, other) for index, one in enumerate(states) for other in states[index + 1 :])


def _parts(answers: dict[str, Word], pair: tuple[str, str]) -> bool:
    return answers[pair[0]] != answers[pair[1]]


def _greedy(
    pairs: list[tuple[str, str]], words: Sequence[Word], parts: Callable[[Word, tuple[str, str]], bool]
) -> Iterator[Word]:
    """Words until every pair is parted; gains only fall, so that an old gain is a bound of the new one."""
    gains = [(-len(pairs), len(word), index) for index, word in enumerate(words)]
    while pairs and gains:
        _, length, index = heapq.heappop(gains)
        gain = sum(parts(words[index], pair) for pair in pairs)
        if gains and (-gain, length, index) > gains[0]:
            if gain:
                heapq.heappush(gains, (-gain, length, index))
            continue
        if gain:
            pairs = [pair for pair in pairs if not parts(words[index], pair)]
            yield words[index]


def _need_minimal(machine: Mealy) -> None:
    reached = machine.cover()
    lost = next((state for state in machine.states if state not in reached), None)
    if lost is not None:
        raise ValueError(f"state {lost!r}: cannot be reached; derive from machine.minimal()")
    nearest: dict[int, str] = {}
    for state, block in machine.blocks().items():
        twin = nearest.setdefault(block, state)
        if twin != state:
            raise ValueError(f"states {twin!r} and {state!r}: are equivalent; derive from machine.minimal()")


def _need_telling(machine: Mealy, words: tuple[Word, ...]) -> None:
    seen: dict[tuple[Word, ...], str] = {}
    for state in machine.states:
        twin = seen.setdefault(tuple(machine.run(word, state) for word in words), state)
        if twin != state:
            raise ValueError(f"states {twin!r} and {state!r}: no word of the set tells them apart")
