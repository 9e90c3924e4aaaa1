"""Which units stand for all: the corners that the drawing allows.

For a one-capacitor circuit every crossing time is monotone in every value, so
the corners hold the extremes exactly; for more capacitors corners and the
nominal unit are the rule, and the notes say so.  Values that move nothing at
all are left out first; when more than `MOST` are left, each quantity gets the
two corners that its own slopes point to, beside a fixed draw of others.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from porter.behaviour.measure import MarginKey, Measures, measure
from porter.circuit.engine import Engine
from porter.circuit.values import Columns, Floats, corners
from porter.spec.model import Circuit

MOST = 12  # toleranced values whose every corner is taken
_DRAWN = 512  # further corners beyond that
_CHUNK = 4200


@dataclass(frozen=True, slots=True)
class Population:
    """Measurements over a set of units; the first one is the nominal unit.

    Args:
        rows: values, shape (U, P); measures: of all of them.
        moving: columns that move something; exhaustive: every corner of these was taken.
    """

    rows: Floats
    measures: Measures
    moving: tuple[int, ...]
    exhaustive: bool


def single_steps(cols: Columns, free: NDArray[np.integer]) -> Floats:
    """Return the nominal unit, then each free value alone at its least and at its most."""
    rows = np.tile(cols.nominal, (1 + 2 * len(free), 1))
    for k, column in enumerate(free):
        rows[1 + 2 * k, column] = cols.least[column]
        rows[2 + 2 * k, column] = cols.most[column]
    return rows


def quantities(measures: Measures) -> Floats:
    """All measured numbers side by side, shape (U, K); never and no rest as large numbers."""
    parts = [
        *measures.held.values(),
        *measures.windows.values(),
        *measures.margins.values(),
        *measures.timed.values(),
        *measures.period_s.values(),
        *measures.rests,
    ]
    return np.column_stack(
        [np.nan_to_num(np.asarray(p, float), nan=0.0, posinf=1e30, neginf=-1e30) for p in parts]
    )


def population(circuit: Circuit, cols: Columns, published: bool, keys: tuple[MarginKey, ...]) -> Population:
    """Measure the units that stand for all those the drawing allows.

    Args:
        published: let the timer's published figures vary too.
        keys: the margins to take.
    """
    free = cols.free(published)
    alone = single_steps(cols, free)
    table = quantities(measure(Engine(circuit, alone, cols), keys))
    far = np.abs(table[1:] - table[0]) > 1e-9 * (1e-3 + np.abs(table[0]))
    moves = far.reshape(len(free), 2, table.shape[1])
    moving = free[moves.any(axis=(1, 2))] if len(free) else free
    exhaustive = len(moving) <= MOST
    rows = corners(cols, moving) if exhaustive else _pointed(cols, free, moving, table)
    return Population(rows, _in_chunks(circuit, cols, rows, keys), tuple(int(c) for c in moving), exhaustive)


def _pointed(cols: Columns, free: NDArray[np.integer], moving: NDArray[np.integer], table: Floats) -> Floats:
    """Corners that each quantity's slopes point to, and a fixed draw of others."""
    at = [int(np.flatnonzero(free == column)[0]) for column in moving]
    slope = np.sign(table[2::2][at] - table[1::2][at])  # (F, K)
    rng = np.random.default_rng(20)
    picks = np.concatenate([slope.T >= 0, slope.T < 0, rng.random((_DRAWN, len(moving))) < 0.5])
    picks = np.unique(picks, axis=0)
    rows = np.tile(cols.nominal, (1 + len(picks), 1))
    rows[1:, moving] = np.where(picks, cols.most[moving], cols.least[moving])
    return rows


def _in_chunks(circuit: Circuit, cols: Columns, rows: Floats, keys: tuple[MarginKey, ...]) -> Measures:
    """Measure in pieces that keep the working set small."""
    pieces = [measure(Engine(circuit, rows[k : k + _CHUNK], cols), keys) for k in range(0, len(rows), _CHUNK)]
    if len(pieces) == 1:
        return pieces[0]

    def join(name: str) -> dict:  # type: ignore[type-arg]
        return {
            key: np.concatenate([getattr(p, name)[key] for p in pieces]) for key in getattr(pieces[0], name)
        }

    rests = [np.concatenate([p.rests[q] for p in pieces]) for q in (0, 1)]
    return Measures(rests, join("held"), join("period_s"), join("windows"), join("margins"), join("timed"))


def units_at_the_ends(groups: tuple[Population, ...]) -> Floats:
    """Return the units that stand for the family: the nominal one, and those with the least and the most
    of every window and margin, shape (U, P)."""
    picked = [groups[0].rows[:1]]
    for group in groups:
        of = group.measures
        for values in (*of.windows.values(), *of.margins.values(), *of.timed.values(), *of.period_s.values()):
            finite = np.isfinite(values)
            if finite.any() and values[finite].max() > values[finite].min():
                at = np.flatnonzero(finite)
                ends = {int(at[values[finite].argmin()]), int(at[values[finite].argmax()])}
                picked.append(group.rows[sorted(ends)])
    return np.unique(np.concatenate(picked), axis=0)
