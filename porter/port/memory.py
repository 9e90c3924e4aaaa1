"""Which capacitors a port has to remember, and what one tick does to them.

The circuit's capacitor states split in three: those no decision depends on
(a filter on the lamp), those that move the same way whatever is pressed (a
bypass that charges once), and the rest, which the port carries.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from porter.circuit.engine import Engine, Ints, Lanes
from porter.circuit.network import Mode
from porter.circuit.values import Floats
from porter.port.model import U16

_SMALL = 1e-9  # part of a rate or a supply below which a coupling is rounding


@dataclass(frozen=True, slots=True)
class Memory:
    """The states that a port carries and the scale of its copies.

    Args:
        kept: indices of the carried capacitor states.
        base: a value for every state (what the others are held at), volt.
        low_v, scale_v: shape (kept,): copy X stands for ``low_v + X * scale_v``.
    """

    engine: Engine
    kept: tuple[int, ...]
    base: Floats
    low_v: Floats
    scale_v: Floats

    def volts(self, copies: NDArray[np.integer | np.floating]) -> Floats:
        """Return full capacitor states for copies, shape (B, kept) -> (B, m)."""
        x = np.tile(self.base, (len(copies), 1))
        x[:, list(self.kept)] = self.low_v + np.asarray(copies, float) * self.scale_v
        return x

    def copies(self, x: Floats) -> Floats:
        """Return unrounded copies of full states, shape (B, m) -> (B, kept)."""
        return np.asarray((x[:, list(self.kept)] - self.low_v) / self.scale_v)

    def lanes(self, q: Ints | int, held: Ints | int, copies: NDArray[np.integer | np.floating]) -> Lanes:
        """Return lanes of the nominal unit with the capacitors at the copies' voltages."""
        return self.engine.lanes(np.zeros(len(copies), np.int64), q, self.volts(copies), held)


def settled_mode(engine: Engine, q: int, held: int, x: Floats) -> Mode:
    """Return the mode that the network is in at state x with the latch kept at q."""
    lanes = engine.lanes(np.zeros(1, np.int64), q, x[None, :], held)
    engine.resolve(lanes, frozen=True)
    return engine.mode(q, held, int(lanes.conducts[0]))


def frozen_rest(engine: Engine, q: int, held: int, x: Floats) -> Floats:
    """Return where the capacitors settle with latch and buttons kept, shape (m,)."""
    lanes = engine.lanes(np.zeros(1, np.int64), q, x[None, :], held)
    engine.run(lanes, np.inf, frozen=True)
    return np.asarray(lanes.x[0])


def memory(engine: Engine) -> Memory:
    """Find the capacitors that a port must carry."""
    m = engine.topo.states
    masks = range(1 << len(engine.circuit.buttons))
    starts = _starts(engine)
    modes = {(q, h): [settled_mode(engine, q, h, x) for x in starts] for q in (0, 1) for h in masks}
    flat = [mode for group in modes.values() for mode in group]
    needed = _needed(flat, m)
    kept = tuple(k for k in range(m) if needed[k] and not _same_everywhere(flat, k, engine))
    base = frozen_rest(engine, 0, 0, starts[0])
    low, high = _range(engine, starts, masks)
    scale = (high - low) / U16
    index = list(kept)
    return Memory(engine, kept, base, low[index], scale[index])


def _starts(engine: Engine) -> list[Floats]:
    """States the circuit can be found in: just powered, and settled in either latch state."""
    empty = engine.empty(0).x[0]
    rests = [frozen_rest(engine, q, 0, empty) for q in (1, 0)]
    return [*rests, frozen_rest(engine, 0, 0, rests[0]), empty]


def _dynamics(mode: Mode) -> tuple[Floats, Floats]:
    """Return A and b of ``dx/dt = A x + b`` for the nominal unit."""
    S, Sinv = mode.S[0], mode.Sinv[0]
    return -(S * mode.rate[0]) @ Sinv, S @ mode.drive[0]


def _needed(modes: list[Mode], m: int) -> NDArray[np.bool_]:
    """Which states reach a comparator, directly or through another state."""
    needed = np.zeros(m, bool)
    for mode in modes:
        rows = np.abs(mode.Gz[0, :3] @ mode.Sinv[0])
        needed |= (rows > _SMALL).any(axis=0)
    for _ in range(m):
        for mode in modes:
            A = np.abs(_dynamics(mode)[0])
            coupled = A > _SMALL * (np.diag(A)[:, None] + 1e-12)
            needed |= coupled[needed].any(axis=0) if needed.any() else needed
    return needed


def _same_everywhere(modes: list[Mode], k: int, engine: Engine) -> bool:
    """True where a state moves by one law, on its own, in every mode."""
    rows = [(A[k], b[k]) for A, b in map(_dynamics, modes)]
    first_A, first_b = rows[0]
    own = abs(first_A[k]) + 1e-12
    alone = all(np.abs(np.delete(A, k)).max(initial=0.0) <= _SMALL * own for A, _ in rows)
    return alone and all(
        abs(A[k] - first_A[k]) <= _SMALL * own and abs(b - first_b) <= _SMALL * own * engine.supply[0]
        for A, b in rows
    )


def _range(engine: Engine, starts: list[Floats], masks: range) -> tuple[Floats, Floats]:
    """Return the least and most voltage each state can have: 0..supply where that is enough."""
    seen = list(starts)
    for q in (0, 1):
        for h in masks:
            seen += [frozen_rest(engine, q, h, x) for x in starts[:2]]
    seen_array = np.array(seen).reshape(len(seen), engine.topo.states)
    low, high = seen_array.min(axis=0), seen_array.max(axis=0)
    slack = 1e-6 * engine.supply[0]
    pad = 0.05 * (high - low) + slack
    low = np.where(low >= -slack, 0.0, low - pad)
    high = np.where(high <= engine.supply[0] + slack, engine.supply[0], high + pad)
    return low, high
