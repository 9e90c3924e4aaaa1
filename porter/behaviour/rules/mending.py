"""Search for a change of one value that mends a fault: candidates are tried as a batch of units."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from porter.behaviour.corner import single_steps
from porter.behaviour.rules.case import Case, settle
from porter.behaviour.rules.words import change, series, with_tolerance
from porter.circuit.engine import Engine, Mask
from porter.circuit.network import VCC
from porter.circuit.values import Floats

_SAMPLE = 60  # units on which a candidate is tried beyond the nominal one


@dataclass(frozen=True, slots=True)
class Candidate:
    """Another nominal value of one part."""

    name: str
    value: float
    ratio: float

    @property
    def column(self) -> str:
        """The part's column."""
        return f"parts.{self.name}"


def candidates(case: Case, names: Sequence[str], up: bool | None = None) -> list[Candidate]:
    """Return E12 values of the named parts, the smallest change first; `up`: larger (smaller) ones only."""
    found = []
    for name in names:
        part = case.part(name)
        assert part is not None
        old = (part.current or part.value).nominal
        sides = (True, False) if up is None else (up,)
        found += [Candidate(name, v, v / old) for side in sides for v in series(old, side)]
    return sorted(found, key=lambda c: (abs(np.log(c.ratio)), c.name, c.value))


def resistors(case: Case) -> list[str]:
    """Return the names of all resistors."""
    return [p.name for p in case.circuit.parts if p.kind == "resistor"]


def applied(case: Case, rows: Floats, candidate: Candidate) -> Floats:
    """Return rows with a candidate's value in place."""
    rows = rows.copy()
    rows[:, case.cols.index(candidate.column)] *= candidate.ratio
    return rows


def first_good(case: Case, tried: Sequence[Candidate], good: Callable[[Engine], Mask]) -> Candidate | None:
    """Return the first candidate with which the nominal unit is good, None where none helps."""
    return next(iter(all_good(case, tried, good)), None)


def all_good(case: Case, tried: Sequence[Candidate], good: Callable[[Engine], Mask]) -> list[Candidate]:
    """Return the candidates that make the nominal unit good, with a tenth of the change to spare."""
    if not tried:
        return []
    softer = [Candidate(c.name, c.value, c.ratio**0.9) for c in tried]
    rows = np.concatenate([applied(case, case.evidence.engine.rows, c) for c in (*tried, *softer)])
    fine = good(case.with_rows(rows)).reshape(2, len(tried)).all(axis=0)
    return [tried[int(k)] for k in np.flatnonzero(fine)]


def some_units(case: Case) -> Floats:
    """Return a fixed choice of the units that the published spread allows."""
    rows = case.evidence.published.rows
    if len(rows) <= _SAMPLE:
        return rows
    pick = np.random.default_rng(7).choice(len(rows), _SAMPLE, replace=False)
    return rows[np.sort(pick)]


def wording(case: Case, candidate: Candidate) -> str:
    """Word the mend that a candidate is."""
    part = case.part(candidate.name)
    assert part is not None
    unit = "A" if part.current is not None else ""
    return change(candidate.name, with_tolerance(candidate.value, part.current or part.value, unit))


def worst_row(case: Case, badness: Callable[[Engine], Floats]) -> Floats:
    """Return the unit of the published spread that its single steps point to as the worst, shape (1, P).

    Exact where the badness is monotone in each value, as settled voltages of resistive networks are.
    """
    cols = case.cols
    free = cols.free(True)
    values = badness(case.with_rows(single_steps(cols, free)))
    row = cols.nominal[None, :].copy()
    for k, column in enumerate(free):
        least, most = values[1 + 2 * k], values[2 + 2 * k]
        if max(least, most) > values[0]:
            row[0, column] = cols.least[column] if least > most else cols.most[column]
    return row


def settle_volts(engine: Engine, q: int, held: int, node: int | None) -> Floats:
    """Return a node's settled voltage in every unit, the latch kept at *q*, shape (U,)."""
    if node is None or node < 0:
        return engine.supply if node == VCC else np.zeros(len(engine.rows))
    return engine.volts(settle(engine, q, held))[:, node]
