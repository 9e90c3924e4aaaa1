"""The engine against data-sheet formulas, their worked examples, and text-book RC figures.

The parts are the sheets'; the timer is made ideal (levels of 1/3 and 2/3, rails reached, no input
currents), because the formulas are.  The contact and the switch to ground of 1 mohm are what is
left, hence the tolerances of a few parts in 10**6.
"""

from math import exp, log

import numpy as np
import pytest

from porter import simulate
from porter.spec.read import read_text
from tests.reference.network import IDEAL, Chip, Contact, Net
from tests.reference.text import spec_text

STOP = {"STOP": Contact(("r", "gnd"))}


def run(net: Net, schedule: list[tuple[float, tuple[str, ...]]], end_s: float, **more: object) -> object:
    return simulate(read_text(spec_text(net), "example.yaml"), schedule, end_s, **more)  # type: ignore[arg-type]


def one_shot(ohm: float, farad: float, **figures: float) -> Net:
    pins = {"trigger": "t", "threshold": "c", "discharge": "c", "output": "out"}
    return Net(
        5.0,
        Chip("cmos", pins, IDEAL | figures),
        (("vcc", "c", ohm), ("vcc", "t", 1e4), ("out", "gnd", 1e6)),
        (("c", "gnd", farad),),
        contacts={"GO": Contact(("t", "gnd"), 1e-3)},
    )


def free_running(ra: float, rb: float, farad: float) -> Net:
    pins = {"trigger": "c", "threshold": "c", "discharge": "d", "reset": "r", "output": "out"}
    return Net(
        5.0,
        Chip("cmos", pins, IDEAL),
        (("vcc", "d", ra), ("d", "c", rb), ("vcc", "r", 1e4), ("out", "gnd", 1e6)),
        (("c", "gnd", farad),),
        contacts=STOP,
    )


# ohm, farad, seconds; t = R C ln 3.  Digits derived from the formula, 1.098612288668110 R C.
ONE_SHOTS = [
    (
        9.1e3,
        10e-9,
        99.9737e-6,
        "TI SLFS022 fig. 10 (9.1 kohm from memory for TI, printed in a copy of the Fairchild sheet)",
    ),
    (10e3, 0.1e-6, 1.098612289e-3, "ST / TS555 class timing test circuit"),
    (470e3, 10e-6, 5.163478, "LMC555 fig. 8-2, printed 5.17 s with 1.1 for ln 3; parts inferred"),
    (100e3, 10e-6, 1.098612289, "middle of the tolerance example, derived"),
]


@pytest.mark.parametrize(("ohm", "farad", "seconds", "source"), ONE_SHOTS)
def test_one_shot(ohm: float, farad: float, seconds: float, source: str) -> None:
    got = run(one_shot(ohm, farad), [(0.0, ()), (1.0, ("GO",)), (1.0 + 1e-5, ())], 8.0, start="settled").edges
    assert [q for _, q in got] == [0, 1, 0], source
    assert got[2][0] - got[1][0] == pytest.approx(seconds, rel=3e-6), source


# Threshold volts at a supply: time in R C = ln(V / (V - level)).  Limits from TI SLFS022A and SLFS043C/F.
LIMITS = [
    (2.4 / 5, 0.65393),
    (4.2 / 5, 1.83258),
    (8.8 / 15, 0.88350),
    (11.2 / 15, 1.37305),
    (2.8 / 5, 0.82098),
    (3.8 / 5, 1.42712),
]


@pytest.mark.parametrize(("ratio", "in_rc"), LIMITS)
def test_one_shot_at_the_threshold_limits(ratio: float, in_rc: float) -> None:
    """General form t = R C ln((V_end - V_start)/(V_end - V_level)), derived to five digits."""
    net = one_shot(10e3, 0.1e-6, threshold_ratio=ratio)
    got = run(net, [(0.0, ()), (1.0, ("GO",)), (1.0 + 1e-5, ())], 2.0, start="settled").edges
    assert (got[2][0] - got[1][0]) / 1e-3 == pytest.approx(in_rc, abs=1e-5)


@pytest.mark.parametrize(("scale_r", "scale_c", "seconds"), [(0.95, 0.8, 0.8349), (1.05, 1.8, 2.0764)])
def test_one_shot_tolerance_example(scale_r: float, scale_c: float, seconds: float) -> None:
    """100 kohm ±5 % and 10 uF -20/+80 %: 0.8349 s to 2.0764 s (derived)."""
    net = one_shot(100e3 * scale_r, 10e-6 * scale_c)
    got = run(net, [(0.0, ()), (1.0, ("GO",)), (1.01, ())], 5.0, start="settled").edges
    assert got[2][0] - got[1][0] == pytest.approx(seconds, abs=6e-5)


# RA, RB, C, tH, tL, f by tH = ln 2 (RA + RB) C, tL = ln 2 RB C; digits derived.
FREE = [
    (5e3, 3e3, 0.15e-6, 831.7766e-6, 311.9162e-6, 874.3606, "TI SLFS022I fig. 13; eq. 1 to 7"),
    (3.9e3, 3e3, 0.01e-6, 47.8272e-6, 20.7944e-6, 14572.68, "National/TI LM555 SNAS548C fig. 16"),
]


@pytest.mark.parametrize(("ra", "rb", "farad", "high", "low", "hertz", "source"), FREE)
def test_free_running(
    ra: float, rb: float, farad: float, high: float, low: float, hertz: float, source: str
) -> None:
    edges = run(free_running(ra, rb, farad), [(0.0, ())], 4.2 * (high + low), start="empty").edges
    assert [q for _, q in edges[:5]] == [1, 0, 1, 0, 1], source
    gaps = np.diff([t for t, _ in edges])
    assert gaps[0] == pytest.approx(log(3) * (ra + rb) * farad, rel=3e-6), "first charge from empty"
    assert gaps[1::2] == pytest.approx(low, rel=5e-6), source
    assert gaps[2::2] == pytest.approx(high, rel=5e-6), source
    assert 1 / (edges[3][0] - edges[1][0]) == pytest.approx(hertz, rel=5e-6), source
    assert gaps[2] / (gaps[1] + gaps[2]) == pytest.approx(1 - rb / (ra + 2 * rb), rel=5e-6), "duty"


def test_free_running_stops_while_reset_is_held() -> None:
    """Reset beats everything (Intersil ICM7555 p.8-172): no edge while held, and on again after."""
    schedule = [(0.0, ()), (5e-3, ("STOP",)), (10e-3, ())]
    edges = run(free_running(5e3, 3e3, 0.15e-6), schedule, 15e-3, start="empty").edges
    assert not [t for t, _ in edges if 5e-3 < t < 10e-3]
    assert [q for t, q in edges if t >= 10e-3][:2] == [1, 0]


FRACTIONS = [
    (0.5, 39.3469), (log(2), 50.0), (1, 63.2121), (log(3), 66.6667), (1.5, 77.6870), (2, 86.4665),
    (log(10), 90.0), (3, 95.0213), (4, 98.1684), (log(100), 99.0), (5, 99.3262), (6, 99.7521),
    (log(1000), 99.9), (7, 99.9088), (10, 99.9955),
]  # fmt: skip


def quiet(**more: object) -> Net:
    base = {
        "supply": 5.0,
        "chip": Chip("cmos", {"trigger": "vcc", "output": "out"}, IDEAL),
        "resistors": (("vcc", "n", 1e4), ("out", "gnd", 1e5)),
        "capacitors": (("n", "gnd", 1e-7),),
        "contacts": {"B": Contact(("n", "out"))},
    }
    return Net(**(base | more))  # type: ignore[arg-type]


def test_rc_charge_fractions() -> None:
    """Charged part after k time constants, 1 - e**-k (text book; digits derived, to 0.0001 %)."""
    times = tuple(k * 1e-3 for k, _ in FRACTIONS)
    got = run(quiet(), [(0.0, ())], 0.02, start="empty", nodes=("n",), times=times).volts[0] / 5 * 100
    assert got == pytest.approx([p for _, p in FRACTIONS], abs=6e-5)
    assert got == pytest.approx([100 * (1 - exp(-k)) for k, _ in FRACTIONS], rel=1e-11)


def test_charge_sharing() -> None:
    """Sum of charges over sum of capacitors: 100 nF at 5 V onto 10 nF at 2.5 V gives 4.772727 V."""
    net = quiet(
        resistors=(("vcc", "a", 1e9), ("vcc", "b", 1e9), ("b", "gnd", 1e9), ("out", "gnd", 1e5)),
        capacitors=(("a", "gnd", 1e-7), ("b", "gnd", 1e-8)),
        contacts={"B": Contact(("a", "b"))},
    )
    times = (0.5, 1 + 1e-7)
    got = run(net, [(0.0, ()), (1.0, ("B",))], 2.0, start="settled", nodes=("a", "b"), times=times).volts
    assert got[:, 0] == pytest.approx([5.0, 2.5], abs=1e-6)
    assert got[:, 1] == pytest.approx([4.772727] * 2, abs=1e-6)


def test_constant_current_ramp() -> None:
    """I/C: 0.215 mA into 22 nF rises at 9.77 V/ms (Fairchild ramp example, parts as in a copy of the sheet)."""
    net = quiet(
        supply=15.0,
        resistors=(("out", "gnd", 1e5), ("n", "gnd", 1e9)),
        capacitors=(("n", "gnd", 22e-9),),
        currents=(("vcc", "n", 0.215e-3),),
    )
    got = run(net, [(0.0, ())], 1e-3, start="empty", nodes=("n",), times=(0.5e-3, 1e-3 - 1e-9)).volts[0]
    assert got[0] / 0.5 == pytest.approx(9.77, abs=0.005)
    assert got[1] / 1.0 == pytest.approx(9.77, abs=0.005)
