"""The reference step made quick: the same function as `porter.port.step.step`, by gathers and look-up.

`step` is the definition and walks mode by mode; here every mode's numbers lie in
arrays, and a port of one capacitor is stepped once from each of its 2 x 65 536
states and looked up from then on.  Tests hold the two equal.
"""

from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import NDArray

from porter.port.model import U16, Charge, ChargeMode, Move, Port, State, Test
from porter.port.step import step

Ints = NDArray[np.int64]
Stepper = Callable[[State, NDArray[np.integer]], tuple[State, NDArray[np.uint8]]]
#: Held combinations up to which a one-capacitor port is tabulated (a megabyte each).
MOST_TABLES = 16
_COPIES = U16 + 1


_made: list[tuple[Port, Stepper]] = []


def stepper(port: Port) -> Stepper:
    """Return a function that steps a batch as `step(port, state, held)` does.

    The last few are kept, found again by identity: hashing a port's thousand numbers would cost
    more than a step.
    """
    for known, move in _made:
        if known is port:
            return move
    move = _stepper(port)
    _made.insert(0, (port, move))
    del _made[4:]
    return move


def _stepper(port: Port) -> Stepper:
    if not isinstance(port.machine, Charge) or any(m.kind == "mix" for m in _moves(port.machine)):
        return lambda state, held: step(port, state, held)
    gather = _Gather(port, port.machine)
    if len(port.machine.start) == 1 and port.held_count <= MOST_TABLES:
        return Table(port, gather)
    return gather


def decider(port: Port) -> Callable[[State, NDArray[np.integer]], NDArray[np.uint8]]:
    """Return a function that gives the latch after the decision of a tick, without moving."""
    move = stepper(port)
    if isinstance(move, (_Gather, Table)):
        return move.decide
    return lambda state, held: step(port, state, held)[0].q


def _moves(machine: Charge) -> Iterator[Move]:
    return (move for row in machine.modes for mode in row for move in mode.moves)


class _Gather:
    """All modes' numbers in arrays, picked by ``q * masks + held``."""

    def __init__(self, port: Port, machine: Charge) -> None:
        modes = [mode for row in machine.modes for mode in row]
        self.masks = port.held_count
        self.answer = np.array(port.answer, np.uint8)
        self.end = np.array([[m.end for m in mode.moves] for mode in modes], np.int64)
        self.rate = np.array([[_rate(m) for m in mode.moves] for mode in modes], np.int64)
        self.up = np.array([[m.only != "down" for m in mode.moves] for mode in modes], bool)
        self.down = np.array([[m.only != "up" for m in mode.moves] for mode in modes], bool)
        self.flip = np.array([[U16 * m.mirror for m in mode.moves] for mode in modes], np.int64)
        self.affine = np.array([[m.kind in ("scale", "drain") for m in mode.moves] for mode in modes], bool)
        self.shift = np.array([[m.shift for m in mode.moves] for mode in modes], np.int64)
        self.add = np.array([[m.add for m in mode.moves] for mode in modes], np.int64)
        self.tests = [_Tests(modes, name, len(machine.start)) for name in ("force", "flips", "blocks")]

    def decide(self, state: State, held: NDArray[np.integer]) -> NDArray[np.uint8]:
        """Return the latch after deciding, shape (B,)."""
        q = state.q.astype(np.int64)
        there = self._flips(q * self.masks + held, state.regs)
        back = self._flips((1 - q) * self.masks + held, state.regs)
        return np.where(there & ~back, 1 - q, q).astype(np.uint8)

    def _flips(self, key: Ints, regs: Ints) -> NDArray[np.bool_]:
        force, flips, blocks = (tests.any(key, regs) for tests in self.tests)
        return force | (flips & ~blocks)

    def __call__(self, state: State, held: NDArray[np.integer]) -> tuple[State, NDArray[np.uint8]]:
        q = self.decide(state, held)
        key = q.astype(np.int64) * self.masks + held
        X, end = state.regs ^ self.flip[key], self.end[key]
        far = end - X
        by = (np.abs(far) * self.rate[key] + 32768) >> 16
        to = np.where(far > 0, X + by, X - by)
        if self.affine.any():
            to = np.where(self.affine[key], self._affine(key, X), to)
        stays = ~np.where(far > 0, self.up[key], self.down[key]) | (
            (far == 0) & ~(self.up[key] & self.down[key])
        )
        regs = np.where(stays, X, to)
        return State(q, regs ^ self.flip[key]), self.answer[q, held]

    def _affine(self, key: Ints, X: Ints) -> Ints:
        """Scale and drain: a drain has no rate, so its shift tells them apart."""
        shift = self.shift[key]
        kept = np.where(shift > 0, X - (X >> shift), X * self.rate[key] >> 16)
        return np.asarray(kept + self.add[key])


def _rate(move: Move) -> int:
    """Every plain move as a number of 65536ths: a shift by s is exactly 65536 >> s of them."""
    plain = {"hold": 0, "jump": 65536, "shift": 65536 >> move.shift}
    return plain.get(move.kind, move.rate)


class _Tests:
    """One group of tests of all modes; missing ones never hold."""

    def __init__(self, modes: list[ChargeMode], name: str, copies: int) -> None:
        groups = [[_upward(t, copies) for t in getattr(mode, name)] for mode in modes]
        self.most = max(len(g) for g in groups)
        never = ((0,) * copies, 1)
        padded = [g + [never] * (self.most - len(g)) for g in groups]
        self.coeff = np.array([[t[0] for t in g] for g in padded], np.int64).reshape(
            len(modes), self.most, copies
        )
        self.limit = np.array([[t[1] for t in g] for g in padded], np.int64).reshape(len(modes), self.most)

    def any(self, key: Ints, regs: Ints) -> NDArray[np.bool_]:
        """Whether any test of each lane's mode holds, shape (B,)."""
        if not self.most:
            return np.zeros(len(key), bool)
        total = (self.coeff[key] * regs[:, None, :]).sum(axis=2)
        return np.asarray((total >= self.limit[key]).any(axis=1))


def _upward(test: Test, copies: int) -> tuple[tuple[int, ...], int]:
    """Write a test as ``sum(coeff * X) >= limit``."""
    coeff = test.coeff or (0,) * copies
    return (coeff, test.limit) if test.ge else (tuple(-c for c in coeff), -test.limit)


class Table:
    """Every state of a one-capacitor port stepped once, then looked up."""

    def __init__(self, port: Port, gather: _Gather) -> None:
        self.answer = np.array(port.answer, np.uint8)
        q, X = np.divmod(np.arange(2 * _COPIES, dtype=np.int64), _COPIES)
        every = State(q.astype(np.uint8), X[:, None])
        after = [gather(every, np.full(len(q), h, np.int64))[0] for h in range(port.held_count)]
        self.next = np.stack([a.q * np.int64(_COPIES) + a.regs[:, 0] for a in after])

    def codes(self, state: State) -> Ints:
        """Return ``q * 65536 + X`` of each lane."""
        return np.asarray(state.q.astype(np.int64) * _COPIES + state.regs[:, 0])

    def decide(self, state: State, held: NDArray[np.integer]) -> NDArray[np.uint8]:
        """Return the latch after deciding: moving doesn't change it."""
        return np.asarray(self.next[held, self.codes(state)] >> 16, np.uint8)

    def __call__(self, state: State, held: NDArray[np.integer]) -> tuple[State, NDArray[np.uint8]]:
        to = self.next[held, self.codes(state)]
        q = (to >> 16).astype(np.uint8)
        return State(q, (to & U16)[:, None]), self.answer[q, held]
