"""Small pure functions on finite machines, and test suites with a fault-detection guarantee.

A *word* is a tuple of inputs; a suite is a set of words, each run from power-on.

Sources: the W method is T. S. Chow, IEEE Transactions on Software Engineering
SE-4(3), 178-187, 1978; harmonised state identifiers (HSI) are A. Petrenko,
N. Yevtushenko, G. v. Bochmann, 1993-96.  Both promise: every implementation
with at most m states that can be put back to its start, and that passes, is
equivalent to the minimal n-state machine (n <= m) that the suite was made from.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from porter.port.model import Port, State
from porter.port.step import start, step

Word = tuple[int, ...]
Words = tuple[Word, ...]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Mealy:
    """A complete machine of n states and k inputs; state 0 is where it starts.

    Args:
        after: state after input x in state s, shape (n, k).
        out: the answer to input x in state s, shape (n, k).
    """

    after: Ints
    out: Ints

    @property
    def states(self) -> int:
        """The number of states, n."""
        return len(self.after)

    @property
    def inputs(self) -> int:
        """The number of inputs, k."""
        return int(self.after.shape[1])


# --- from a port to its minimal machine ---


def rows(state: State) -> Ints:
    """Return each lane's state as one row, shape (B, 1 + registers)."""
    return np.column_stack([state.q.astype(np.int64), state.regs])


def state_of(row: Ints) -> State:
    """Return the states of *row*; the inverse of `rows`."""
    return State(row[:, 0].astype(np.uint8), row[:, 1:])


def explore(port: Port, limit: int) -> Mealy | None:
    """Return the machine of every state reachable from power-on, or None past *limit* states."""
    first = rows(start(port))
    known = {first[0].tobytes(): 0}
    frontier, tables = first, list[tuple[Ints, Ints]]()
    while len(frontier):
        after, out = successors(port, frontier)
        flat = after.reshape(-1, after.shape[2])
        fresh = _number(flat, known)
        if len(known) > limit:
            return None
        numbers = np.array([known[row.tobytes()] for row in flat]).reshape(out.shape)
        tables.append((numbers, out))
        frontier = flat[fresh]
    return Mealy(np.concatenate([t[0] for t in tables]), np.concatenate([t[1] for t in tables]))


def successors(port: Port, row: Ints) -> tuple[Ints, Ints]:
    """Return the state after each input, shape (B, k, 1 + registers), and the answers, shape (B, k)."""
    k = port.held_count
    after, out = step(port, state_of(np.repeat(row, k, axis=0)), np.tile(np.arange(k), len(row)))
    return rows(after).reshape(len(row), k, -1), out.reshape(len(row), k).astype(np.int64)


def _number(flat: Ints, known: dict[bytes, int]) -> list[int]:
    """Give each new row the next number in *known*; return the indices of the new rows."""
    fresh = []
    for i, row in enumerate(flat):
        key = row.tobytes()
        if key not in known:
            known[key] = len(known)
            fresh.append(i)
    return fresh


def minimise(machine: Mealy) -> Mealy:
    """Return the minimal machine, its states numbered in breadth-first order from the start."""
    labels = partitions(machine)[-1]
    kept = np.unique(labels, return_index=True)[1]
    merged = Mealy(labels[machine.after[kept]], machine.out[kept])
    order = np.array(list(_shortest(merged, int(labels[0]))))
    rank = np.full(merged.states, -1)
    rank[order] = np.arange(len(order))
    return Mealy(rank[merged.after[order]], merged.out[order])


def partitions(machine: Mealy) -> tuple[Ints, ...]:
    """Return the classes of states that words of length 1, 2, ... tell apart, each of shape (n,).

    Moore's partition refinement; the last entry is the coarsest partition that no word splits.
    """
    levels = [_classes(machine.out)]
    while True:
        finer = _classes(np.column_stack([levels[0], levels[-1][machine.after]]))
        if finer.max() == levels[-1].max():
            return tuple(levels)
        levels.append(finer)


def _classes(signature: Ints) -> Ints:
    return np.unique(signature, axis=0, return_inverse=True)[1].reshape(-1).astype(np.int64)


def _shortest(machine: Mealy, first: int = 0) -> dict[int, Word]:
    """Return the shortest word to each reachable state, in breadth-first order."""
    words: dict[int, Word] = {first: ()}
    queue = [first]
    for state in queue:
        for x, after in enumerate(machine.after[state].tolist()):
            if after not in words:
                words[after] = (*words[state], x)
                queue.append(after)
    return words


# --- covers and separating words (the machine must be minimal) ---


def state_cover(machine: Mealy) -> Words:
    """Return for each state that can be reached the shortest word from the start to it."""
    words = _shortest(machine)
    return tuple(words[state] for state in sorted(words))


def transition_cover(machine: Mealy) -> Words:
    """Return the empty word, the state cover, and each of its words followed by each input (Chow's P)."""
    return tuple(_ordered(_extended(state_cover(machine), machine.inputs, 1)))


def _extended(words: Words, inputs: int, longest: int) -> set[Word]:
    """Return each of *words* followed by every word of at most *longest* inputs."""
    tails = [tail for size in range(longest + 1) for tail in product(range(inputs), repeat=size)]
    return {word + tail for word in words for tail in tails}


def _ordered(words: Iterable[Word]) -> list[Word]:
    return sorted(set(words), key=lambda word: (len(word), word))


def separators(machine: Mealy) -> dict[tuple[int, int], Word]:
    """Return for each pair of states ``(s, t)`` with s < t a shortest word that they answer differently.

    Raises:
        ValueError: the machine is not minimal.
    """
    levels = partitions(machine)
    if len(np.unique(levels[-1])) < machine.states:
        raise ValueError("two states of the machine answer every word alike: minimise it first")
    pairs = [(s, t) for t in range(machine.states) for s in range(t)]
    return {pair: _separator(machine, levels, *pair) for pair in pairs}


def _separator(machine: Mealy, levels: tuple[Ints, ...], s: int, t: int) -> Word:
    word: list[int] = []
    level = next(i for i, classes in enumerate(levels) if classes[s] != classes[t])
    for classes in reversed(levels[:level]):
        # the lowest input that leads to a pair split one level earlier
        a, b = machine.after[s], machine.after[t]
        x = int(np.argmax(classes[a] != classes[b]))
        word.append(x)
        s, t = int(a[x]), int(b[x])
    return (*word, int(np.argmax(machine.out[s] != machine.out[t])))


def characterisation_set(machine: Mealy) -> Words:
    """Return words that together tell every two states apart (Chow's W); empty for one state."""
    return tuple(_ordered(separators(machine).values()))


def identifiers(machine: Mealy) -> tuple[Words, ...]:
    """Return each state's words: any two states share a word (or its beginning) that tells them apart."""
    sets: list[set[Word]] = [set() for _ in range(machine.states)]
    for (s, t), word in separators(machine).items():
        sets[s].add(word)
        sets[t].add(word)
    return tuple(without_prefixes(words) for words in sets)


def without_prefixes(words: Iterable[Word]) -> Words:
    """Return *words* less those that begin another, shortest first."""
    kept = set(words)
    for word in list(kept):
        kept.difference_update(word[:size] for size in range(len(word)))
    return tuple(_ordered(kept))


# --- suites ---


def w_words(machine: Mealy, extra: int = 0) -> Words:
    """Return all distinct words of the W method, ``P X^0..extra W``, prefixes included.

    Args:
        extra: how many states more than the machine's n an implementation may have (m - n).
    """
    stems = _extended(state_cover(machine), machine.inputs, extra + 1)
    ends = characterisation_set(machine) or ((),)
    return tuple(_ordered(stem + end for stem in stems for end in ends))


def w_suite(machine: Mealy, extra: int = 0) -> Words:
    """Return the W method's suite: `w_words` less those that begin another."""
    return without_prefixes(w_words(machine, extra))


def hsi_suite(machine: Mealy, extra: int = 0) -> Words:
    """Return the HSI suite: as the W method's, but each state is checked by its own words only."""
    ends = identifiers(machine)
    stems = _extended(state_cover(machine), machine.inputs, extra + 1)
    return without_prefixes(stem + end for stem in stems for end in ends[_reach(machine, stem)] or ((),))


def _reach(machine: Mealy, word: Word) -> int:
    state = 0
    for x in word:
        state = int(machine.after[state, x])
    return state


def answers(machine: Mealy, word: Word) -> Word:
    """Return the machine's answers to *word* from the start."""
    said, state = [], 0
    for x in word:
        said.append(int(machine.out[state, x]))
        state = int(machine.after[state, x])
    return tuple(said)
