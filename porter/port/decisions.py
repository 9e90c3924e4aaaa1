"""What a one-capacitor circuit decides at every copy: asked once, for the planner and for the proof."""

import numpy as np
from numpy.typing import NDArray

from porter.circuit.engine import Ints
from porter.port.memory import Memory
from porter.port.model import U16

#: Copies at which the circuit is asked first; from each to the next is a stretch.
GRID = np.unique(np.rint(np.linspace(0, U16, 258)).astype(np.int64))


def decisions(mem: Memory, q: int, h: int) -> Ints:
    """Return the circuit's latch right after deciding, for every copy, shape (65536,).

    Decided on a grid; a stretch whose ends agree in every comparator with the latch at either
    level, in the same mode, decides alike throughout, since every guard is affine there; the other
    stretches are looked at copy by copy.
    """
    decided = _decided(mem, q, h, GRID)
    seen = np.column_stack([sides(mem, level, h, GRID) for level in (q, 1 - q)])
    truth, open_ = spread_out(decided, (seen[1:] == seen[:-1]).all(axis=1))
    truth[open_] = _decided(mem, q, h, open_)
    truth[GRID] = decided
    return truth


def sides(mem: Memory, q: int, h: int, copies: Ints) -> Ints:
    """Return the conducting set and the comparators' signs with latch and buttons kept, shape (B, 4)."""
    lanes = mem.lanes(q, h, copies[:, None])
    mem.engine.resolve(lanes, frozen=True)
    signs = np.sign(mem.engine.guards(lanes)).astype(np.int64)
    return np.column_stack([lanes.conducts, signs])


def spread_out(at_grid: Ints, alike: NDArray[np.bool_]) -> tuple[Ints, Ints]:
    """Return each copy's value at the start of its stretch, and the copies of stretches that aren't alike.

    Args:
        at_grid: shape of `GRID`; alike: one for each stretch.
    """
    which = np.clip(np.searchsorted(GRID, np.arange(U16 + 1), side="right") - 1, 0, len(GRID) - 2)
    return at_grid[which], np.flatnonzero(~alike[which])


def _decided(mem: Memory, q: int, h: int, copies: Ints) -> Ints:
    lanes = mem.lanes(q, h, copies[:, None])
    mem.engine.resolve(lanes)
    return lanes.q
