"""The circuit's values as columns of an array: nominal, corners, samples.

Column order is fixed by `columns`; a row is one unit.  Values that the spec
gives (supply, parts, contacts, overridden figures) are *drawn*; the rest of
the timer's figures are *published*.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from porter.circuit.family import figures
from porter.spec.model import Circuit, Spread

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Columns:
    """Names, spreads and origin of all values of a circuit.

    Args:
        names: dotted, such as ``supply``, ``parts.R1``, ``buttons.SET``, ``timer.high_drop``.
        nominal, least, most: shape (P,).
        drawn: True where the spec gives the value, shape (P,).
    """

    names: tuple[str, ...]
    nominal: Floats
    least: Floats
    most: Floats
    drawn: NDArray[np.bool_]

    def index(self, name: str) -> int:
        """Return the column of a name."""
        return self.names.index(name)

    def free(self, published: bool) -> NDArray[np.int64]:
        """Return the columns that may vary: the drawn ones, with the published ones if asked."""
        loose = self.least < self.most
        return np.flatnonzero(loose & (self.drawn | published))


def columns(circuit: Circuit) -> Columns:
    """Lay out all values of a circuit."""
    rows: list[tuple[str, Spread, bool]] = [("supply", circuit.supply, True)]
    for part in circuit.parts:
        rows.append((f"parts.{part.name}", part.current or part.value, True))
        if part.slope is not None:
            rows.append((f"parts.{part.name}.slope", part.slope, True))
        if part.leak is not None:
            spread = part.leak.current or part.leak.resistance
            assert spread is not None
            rows.append((f"parts.{part.name}.leak", spread, True))
    for button in circuit.buttons:
        rows.append((f"buttons.{button.name}", button.resistance, True))
        if button.leak is not None:
            rows.append((f"buttons.{button.name}.leak", button.leak, True))
    for key, spread in figures(circuit.timer, circuit.supply.nominal).items():
        rows.append((f"timer.{key}", spread, key in circuit.timer.values))
    return Columns(
        names=tuple(name for name, _, _ in rows),
        nominal=np.array([s.nominal for _, s, _ in rows]),
        least=np.array([s.least for _, s, _ in rows]),
        most=np.array([s.most for _, s, _ in rows]),
        drawn=np.array([d for _, _, d in rows]),
    )


def corners(cols: Columns, free: NDArray[np.integer]) -> Floats:
    """Return the nominal row and every corner over the *free* columns, shape (1 + 2**F, P)."""
    count = len(free)
    bits = (np.arange(1 << count)[:, None] >> np.arange(count)) & 1
    rows = np.tile(cols.nominal, (1 + (1 << count), 1))
    rows[1:, free] = np.where(bits == 1, cols.most[free], cols.least[free])
    return rows


def samples(cols: Columns, free: NDArray[np.integer], count: int, seed: int) -> Floats:
    """Return *count* units with the *free* columns drawn evenly within their spreads, shape (count, P)."""
    rows = np.tile(cols.nominal, (count, 1))
    rng = np.random.default_rng(seed)
    rows[:, free] = rng.uniform(cols.least[free], cols.most[free], (count, len(free)))
    return rows
