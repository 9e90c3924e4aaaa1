"""The one-button toggle against its closed forms, through `simulate` and through `derive`.

Two resistors R hold the joined inputs at half the supply, the output feeds a memory capacitor C
through RF, and the button joins the memory to the inputs.  The closed forms are derived (Thevenin
and one exponential) for levels of 1/3 and 2/3 and an output that reaches the rails:

- held level V (1/R + vo/RF)/(2/R + 1/RF), reached with C ((R/2) || RF);
- no oscillation while held needs RF > R;
- re-arm after a settled hold RF C ln(3 held/V), after a tap RF C ln 3.
"""

from functools import cache
from math import exp, log

import pytest

from porter import simulate
from porter.behaviour.derive import derive
from porter.behaviour.model import Behaviour
from porter.spec.model import Circuit
from porter.spec.read import read_text
from tests.reference.network import IDEAL, Chip, Contact, Net
from tests.reference.text import spec_text

R, RF, C = 10e3, 100e3, 1e-6
TAU = RF * C
HELD = (1 / R) / (2 / R + 1 / RF)
#: The contact and the output stage are 1 mohm instead of nothing.
REL = 2e-6


@cache
def toggle(feed: float = RF, farad: float = C, supply: float = 5.0) -> Circuit:
    pins = {"trigger": "in", "threshold": "in", "reset": "vcc", "output": "out"}
    net = Net(
        supply,
        Chip("cmos", pins, IDEAL),
        (("vcc", "in", R), ("in", "gnd", R), ("out", "mem", feed)),
        (("mem", "gnd", farad),),
        contacts={"B": Contact(("mem", "in"), 1e-3)},
    )
    return read_text(spec_text(net), "toggle.yaml")


@cache
def behaviour() -> Behaviour:
    return derive(toggle())


def levels(schedule: list[tuple[float, tuple[str, ...]]], end_s: float, start: str) -> list[int]:
    run = simulate(toggle(), schedule, end_s, start="settled", output=start)  # type: ignore[arg-type]
    return [q for _, q in run.edges]


@pytest.mark.parametrize(("start", "level"), [("high", 0.4761904762), ("low", 0.5238095238)])
def test_held_level_and_its_time_constant(start: str, level: float) -> None:
    """0.476190 V with the output low, 0.523810 V with it high; 4.761905 ms (derived)."""
    tau = C / (2 / R + 1 / RF)
    assert tau == pytest.approx(4.761905e-3, rel=1e-6)
    run = simulate(
        toggle(),
        [(0.0, ("B",))],
        1.0,
        start="settled",
        output=start,  # type: ignore[arg-type]
        nodes=("mem",),
        times=(tau, 0.5),
    )
    began = 1.0 if start == "high" else 0.0
    assert run.volts[0, 1] / 5 == pytest.approx(level, rel=REL)
    assert run.volts[0, 0] / 5 == pytest.approx(level + (began - level) * exp(-1), rel=REL)


@pytest.mark.parametrize("start", ["low", "high"])
@pytest.mark.parametrize(
    ("hold_s", "gap_s"),
    [
        # press 10 ms leaves 0.5403343 V; 50 and 100 ms are nearly settled; 1 s is settled (derived)
        (10e-3, 48.3045e-3),
        (50e-3, 35.6705e-3),
        (100e-3, 35.6675e-3),
        (1.0, 35.667494e-3),
    ],
)
def test_gap_until_the_next_press_acts(start: str, hold_s: float, gap_s: float) -> None:
    """A contact that closes again sooner does nothing, later toggles; the printed digits bound it."""
    left = HELD + (1 - HELD) * exp(-hold_s * (2 / R + 1 / RF) / C)
    exact = TAU * log(3 * left)
    assert exact == pytest.approx(gap_s, abs=6e-8)
    other = 0 if start == "high" else 1
    for factor, want in ((1 - 1e-5, [other]), (1 + 1e-5, [other, 1 - other])):
        again = hold_s + exact * factor
        schedule: list[tuple[float, tuple[str, ...]]] = [(0.0, ("B",)), (hold_s, ()), (again, ("B",))]
        assert levels(schedule, again + 0.5, start) == want, factor


@pytest.mark.parametrize("start", ["low", "high"])
def test_drift_after_a_tap(start: str) -> None:
    """From full charge to a third of the supply: RF C ln 3 = 109.861229 ms (derived)."""
    tap, other = 1e-8, 0 if start == "high" else 1
    for gap, want in ((0.10986, [other]), (0.10988, [other, 1 - other])):
        assert levels([(0.0, ("B",)), (tap, ()), (tap + gap, ("B",))], 0.5, start) == want


@pytest.mark.parametrize("start", ["low", "high"])
@pytest.mark.parametrize(
    ("window", "seconds"),
    [
        ("shortest-press", 0.0),
        ("re-arm-after-tap", 109.861229e-3),
        ("re-arm-after-hold", 35.667494e-3),
        ("stray-gap", 35.667494e-3),
    ],
)
def test_windows(start: str, window: str, seconds: float) -> None:
    """The same closed forms as `derive` states them (derived); no part has a tolerance."""
    rows = [w for w in behaviour().windows if (w.button, w.start, w.window) == ("B", start, window)]
    assert len(rows) == 1
    band = rows[0].seconds
    assert band.nominal == pytest.approx(seconds, rel=REL, abs=1e-9)
    assert band.least == pytest.approx(band.nominal, rel=1e-9, abs=1e-12)
    assert band.most == pytest.approx(band.nominal, rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("start", ["low", "high"])
def test_held_table(start: str) -> None:
    rows = [h for h in behaviour().held if h.held == ("B",) and h.start == start]
    assert [h.output for h in rows] == ["low" if start == "high" else "high"]


SLOW = pytest.mark.system


@pytest.mark.parametrize(
    ("factor", "settles"),
    [
        (0.999, False),
        (1.001, True),
        pytest.param(0.99, False, marks=SLOW),
        pytest.param(1.01, True, marks=SLOW),
    ],
)
def test_stability_limit(factor: float, settles: bool) -> None:
    """Held without oscillation if and only if RF > R, for levels of 1/3 and 2/3 (derived)."""
    circuit = toggle(feed=R * factor, farad=1e-7)
    found = derive(circuit)
    outputs = {h.start: h.output for h in found.held if h.held == ("B",)}
    assert outputs == (
        {"low": "high", "high": "low"} if settles else dict.fromkeys(("low", "high"), "oscillates")
    )
    errors = {f.rule for f in found.findings if f.severity == "error"}
    assert ("feedback-too-strong" in errors) is not settles
    edges = simulate(circuit, [(0.0, ("B",))], 0.1, start="settled", output="high").edges
    assert (len(edges) == 1) is settles


def test_period_while_held_with_half_the_limit() -> None:
    """RF = R/2: the level aims at V/4 or 3V/4 with tau = C R/4, so each half takes tau ln 5 (derived).

    From 2/3 towards 1/4 down to 1/3: (2/3 - 1/4)/(1/3 - 1/4) = 5.
    """
    circuit = toggle(feed=R / 2, farad=C)
    period = 2 * C * R / 4 * log(5)
    edges = simulate(circuit, [(0.0, ("B",))], 0.1, start="settled", output="high").edges
    assert edges[6][0] - edges[4][0] == pytest.approx(period, rel=1e-5)


@pytest.mark.system
def test_period_while_held_as_derived() -> None:
    """The same period in the held table."""
    rows = [h for h in derive(toggle(feed=R / 2, farad=C)).held if h.held == ("B",)]
    assert [h.output for h in rows] == ["oscillates"] * 2
    for row in rows:
        assert row.period_s == pytest.approx(2 * C * R / 4 * log(5), rel=1e-5)
