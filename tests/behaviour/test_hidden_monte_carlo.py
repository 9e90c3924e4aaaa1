"""Ten thousand drawn units of each shipped circuit: none lies outside least..most, none does otherwise.

The corners are computed, the units are run; for one capacitor the corners hold the extremes
exactly, so that there is no slack but that of rounding.
"""

from pathlib import Path

import numpy as np
import pytest

import porter
from porter.behaviour.derive import margin_place
from porter.behaviour.measure import Measures, measure
from porter.behaviour.model import Band, Behaviour
from porter.circuit.engine import Engine
from porter.circuit.values import Columns, columns
from porter.spec.model import Circuit

UNITS, CHUNK = 10_000, 5_000
SPECS = Path("specs")
ONE_CAPACITOR = ("aquarium_light", "map_lamp", "stair_light")
#: It swings to and fro while held: what is left of it after a hold depends on when the hold ended.
RESTLESS = ("faulty_strong_feedback",)
REST = sorted(p.stem for p in SPECS.glob("*.yaml") if p.stem not in ONE_CAPACITOR + RESTLESS)


def drawn_units(cols: Columns, published: bool, seed: int) -> np.ndarray:
    """Draw evenly within the spreads, a third of all values right at an end of theirs."""
    rng = np.random.default_rng(seed)
    free = cols.free(published)
    rows = np.tile(cols.nominal, (UNITS, 1))
    part = rng.random((UNITS, len(free)))
    ends = rng.random((UNITS, len(free)))
    part = np.where(ends < 1 / 6, 0.0, np.where(ends > 5 / 6, 1.0, part))
    rows[:, free] = cols.least[free] + part * (cols.most[free] - cols.least[free])
    return rows


def measured(circuit: Circuit, cols: Columns, rows: np.ndarray) -> list[Measures]:
    keys = tuple(measure(Engine(circuit, None, cols)).margins)
    return [measure(Engine(circuit, rows[k : k + CHUNK], cols), keys) for k in range(0, len(rows), CHUNK)]


def within(values: np.ndarray, band: Band, slack: float) -> bool:
    """True where all values lie in a band; None stands for never, an infinite window."""
    least, most = (np.inf if v is None else v for v in (band.least, band.most))
    low = values >= (least if np.isinf(least) else least - slack * (1 + abs(least)))
    high = values <= (most if np.isinf(most) else most + slack * (1 + abs(most)))
    return bool(low.all() and high.all())


def in_some_units_only(band: Band) -> bool:
    """A window that some corners have and others don't ends where it ceases to be, not at a corner."""
    return band.most is None and band.least is not None


def outside(
    circuit: Circuit, behaviour: Behaviour, seen: Measures, published: bool, slack: float
) -> list[str]:
    """Name the windows and margins that some unit leaves."""
    names, found = behaviour.buttons, []
    windows = {(w.button, w.start, w.window): w for w in behaviour.windows}
    for (button, q, kind), values in seen.windows.items():
        window = windows[names[button], ("low", "high")[q], kind]
        band = window.guaranteed if published else window.seconds
        if not in_some_units_only(band) and not within(values, band, slack):
            found.append(f"{names[button]} {kind}")
    margins = {m.where: m for m in behaviour.margins}
    for key, volts in seen.margins.items():
        margin = margins[margin_place(circuit, key)]
        # Of a unit that doesn't even hold the state in question a margin says how lost it is, no more.
        whole = (seen.held[int(key[2][-1]), key[0]] == key[1]).all() if key[2] != "press" else True
        if whole and not within(volts, margin.guaranteed if published else margin.volts, slack):
            found.append(margin.where)
    return found


def check(name: str, slack: float) -> None:
    circuit = porter.read(str(SPECS / f"{name}.yaml"))
    behaviour, cols = porter.derive(circuit), columns(circuit)
    agreed = {(r.held, r.start): r for r in behaviour.held}
    for published in (False, True):
        for seen in measured(circuit, cols, drawn_units(cols, published, seed=11)):
            assert outside(circuit, behaviour, seen, published, slack) == []
            for (q, mask), outputs in seen.held.items():
                held = tuple(b for i, b in enumerate(behaviour.buttons) if mask >> i & 1)
                row = agreed.get((held, ("low", "high")[q]))
                same = row is not None and (row.guaranteed if published else row.corners) == "same"
                assert not same or len(set(outputs)) == 1, (held, q)


@pytest.mark.parametrize("name", ONE_CAPACITOR)
def test_no_drawn_unit_leaves_its_bands(name: str) -> None:
    check(name, 1e-9)


@pytest.mark.system
@pytest.mark.parametrize("name", REST)
def test_no_drawn_unit_of_the_others_leaves_its_bands(name: str) -> None:
    check(name, 1e-9)


def test_check_sees_a_band_that_is_too_narrow() -> None:
    circuit = porter.read(str(SPECS / "map_lamp.yaml"))
    behaviour, cols = porter.derive(circuit), columns(circuit)
    units = np.tile(cols.nominal, (2, 1))
    units[1, cols.index("parts.C1")] *= 1.3
    seen = measured(circuit, cols, units)[0]

    assert outside(circuit, behaviour, seen, False, 1e-9) != []
