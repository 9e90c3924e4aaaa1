"""The timer families' figures against the published numbers, and the chip's function table.

Sources as named beside each row; figures at the stated supplies, 25 °C.
"""

from itertools import product

import pytest

from porter import simulate
from porter.circuit.family import figures
from porter.findings import Position
from porter.spec.model import Spread, Timer
from porter.spec.read import read_text
from tests.reference.integrate import decide
from tests.reference.network import IDEAL, Chip, Contact, Net
from tests.reference.text import spec_text

NE = "TI SLFS022A p.4, bipolar commercial column"
TLC5 = "TI SLFS043C p.9 and SLFS043F p.8"
TLC15 = "TI SLFS043C p.8"

# family, supply, figure, least, typical, most (volt where the sheet gives volts), source
LEVELS = [
    ("bipolar", 15.0, "threshold_ratio", 8.8, 10.0, 11.2, NE),
    ("bipolar", 5.0, "threshold_ratio", 2.4, 3.33, 4.2, NE),
    ("bipolar", 15.0, "trigger_ratio", 4.5, 5.0, 5.6, NE),
    ("bipolar", 5.0, "trigger_ratio", 1.1, 1.67, 2.2, NE),
    ("cmos", 15.0, "threshold_ratio", 9.45, 10.0, 10.55, TLC15),
    ("cmos", 5.0, "threshold_ratio", 2.8, 3.3, 3.8, TLC5),
    ("cmos", 15.0, "trigger_ratio", 4.65, 5.0, 5.35, TLC15),
    ("cmos", 5.0, "trigger_ratio", 1.36, 1.66, 1.96, TLC5),
]
ABSOLUTE = [
    ("bipolar", 5.0, "reset_level", 0.3, 0.7, 1.0, NE),
    ("bipolar", 15.0, "reset_level", 0.3, 0.7, 1.0, NE),
    ("cmos", 5.0, "reset_level", 0.4, 1.1, 1.5, TLC5),
    ("cmos", 15.0, "reset_level", 0.4, 1.1, 1.5, TLC15),
    ("bipolar", 5.0, "trigger_current", None, 0.5e-6, 2e-6, NE),
    ("bipolar", 5.0, "threshold_current", None, 30e-9, 250e-9, NE),
    ("bipolar", 5.0, "reset_current", None, 0.4e-3, 1.5e-3, NE + ", pin at 0 V"),
    ("cmos", 5.0, "trigger_current", None, 10e-12, None, TLC5),
    ("cmos", 5.0, "threshold_current", None, 10e-12, None, TLC5),
    ("cmos", 5.0, "reset_current", None, 10e-12, None, TLC5),
    ("bipolar", 5.0, "divider", None, 5e3, None, "block diagrams of the class, 3 x 5 kohm"),
    ("cmos", 5.0, "divider", 80e3, 100e3, 120e3, "Intersil ICM7555 p.8-172, 100 kohm ±20 % each"),
]


def figure(family: str, supply: float, key: str) -> Spread:
    here = Position("x.yaml", 1, 1)
    return figures(Timer(family, {}, {}, here, {}, {}), supply)[key]


@pytest.mark.parametrize(("family", "supply", "key", "least", "typical", "most", "source"), LEVELS)
def test_input_levels(
    family: str, supply: float, key: str, least: float, typical: float, most: float, source: str
) -> None:
    """Volts as printed; the typical is printed to two digits beside the exact third, hence 0.04 V."""
    got = figure(family, supply, key)
    assert got.least * supply == pytest.approx(least, abs=1e-9), source
    assert got.most * supply == pytest.approx(most, abs=1e-9), source
    assert got.nominal * supply == pytest.approx(typical, abs=0.04), source


@pytest.mark.parametrize(("family", "supply", "key", "least", "typical", "most", "source"), ABSOLUTE)
def test_absolute_figures(
    family: str,
    supply: float,
    key: str,
    least: float | None,
    typical: float,
    most: float | None,
    source: str,
) -> None:
    got = figure(family, supply, key)
    assert got.nominal == pytest.approx(typical, rel=1e-9), source
    assert least is None or got.least == pytest.approx(least, rel=1e-9), source
    assert most is None or got.most == pytest.approx(most, rel=1e-9), source


# family, supply, load in ampere, typical volts across the output stage, most, source
DROPS = [
    ("bipolar", 15.0, "high", 0.1, 15 - 13.3, 15 - 12.75, NE + ", VOH at 100 mA"),
    ("bipolar", 5.0, "high", 0.1, 5 - 3.3, 5 - 2.75, NE + ", VOH at 100 mA"),
    ("bipolar", 15.0, "low", 0.01, 0.1, 0.25, NE + ", VOL at 10 mA"),
    ("bipolar", 15.0, "low", 0.05, 0.4, 0.75, NE + ", VOL at 50 mA"),
    ("bipolar", 5.0, "low", 0.005, 0.1, 0.35, NE + ", VOL at 5 mA"),
    ("bipolar", 5.0, "low", 0.008, 0.15, 0.4, NE + ", VOL at 8 mA"),
    ("cmos", 5.0, "high", 0.001, 5 - 4.8, 5 - 4.1, TLC5 + ", VOH at 1 mA"),
    ("cmos", 5.0, "low", 0.008, 0.21, 0.4, TLC5 + ", VOL at 8 mA"),
    ("cmos", 15.0, "high", 0.01, 15 - 14.2, 15 - 12.5, TLC15 + ", VOH at 10 mA"),
    ("cmos", 15.0, "low", 0.1, 1.28, 3.2, TLC15 + ", VOL at 100 mA"),
]


@pytest.mark.parametrize(("family", "supply", "side", "amps", "typical", "most", "source"), DROPS)
def test_output_levels_at_the_published_loads(
    family: str, supply: float, side: str, amps: float, typical: float, most: float, source: str
) -> None:
    """The straight-line output stage passes through the printed points; 2 % for its slope's rounding."""
    volts, ohms = ("high_drop", "high_resistance") if side == "high" else ("low_level", "low_resistance")
    v, r = figure(family, supply, volts), figure(family, supply, ohms)
    assert v.nominal + r.nominal * amps == pytest.approx(typical, rel=0.02), source
    assert v.most + r.most * amps == pytest.approx(most, rel=0.02), source


def test_the_published_spread_is_kept_in_order() -> None:
    for family, supply in product(("bipolar", "cmos"), (5.0, 9.0, 12.0, 15.0)):
        here = Position("x.yaml", 1, 1)
        for key, spread in figures(Timer(family, {}, {}, here, {}, {}), supply).items():
            assert spread.least <= spread.nominal <= spread.most, (family, supply, key)


# The function table: Fairchild LM555 Rev 1.1.0 table 1; Intersil ICM7555 p.8-172, whose note says that
# reset beats everything and the trigger beats the threshold.
TABLE = [
    # reset asserted, trigger below 1/3, threshold above 2/3 -> low, high, or kept
    (True, False, False, 0),
    (True, True, False, 0),
    (True, False, True, 0),
    (True, True, True, 0),
    (False, True, False, 1),
    (False, True, True, 1),
    (False, False, True, 0),
    (False, False, False, None),
]


@pytest.mark.parametrize("family", ["bipolar", "cmos"])
@pytest.mark.parametrize("before", [0, 1])
@pytest.mark.parametrize(("reset", "trigger", "threshold", "output"), TABLE)
def test_function_table(
    family: str, before: int, reset: bool, trigger: bool, threshold: bool, output: int | None
) -> None:
    net = Net(
        5.0,
        Chip(family, {"trigger": "t", "threshold": "h", "reset": "r", "output": "out"}, IDEAL),
        (("vcc", "t", 1e4), ("h", "gnd", 1e4), ("vcc", "r", 1e4), ("out", "gnd", 1e5)),
        contacts={"R": Contact(("r", "gnd")), "T": Contact(("t", "gnd")), "H": Contact(("vcc", "h"))},
    )
    held = tuple(name for name, on in (("R", reset), ("T", trigger), ("H", threshold)) if on)
    want = before if output is None else output
    assert decide({"reset": reset, "trigger": trigger, "threshold": threshold}, before) == want
    run = simulate(
        read_text(spec_text(net), "table.yaml"),
        [(0.0, ()), (1.0, held)],
        2.0,
        start="settled",
        output="high" if before else "low",
    )
    assert run.edges == (((0.0, before),) if want == before else ((0.0, before), (1.0, want)))
