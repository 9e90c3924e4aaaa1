"""The independent reference agrees with closed forms and with itself by two roads.

Closed forms are from text books and data sheets as named; "derived" marks figures that were
computed for these tests from those formulas.
"""

from dataclasses import replace
from math import exp, log

import numpy as np
import pytest

from tests.reference.integrate import Restless, flow_expm, run_exact, run_ode
from tests.reference.network import IDEAL, Chip, Contact, Equations, Net

QUIET = Chip("cmos", {}, IDEAL)


def rc(**more: object) -> Net:
    return replace(Net(5.0, QUIET, (("vcc", "n", 1e4),), (("n", "gnd", 1e-7),)), **more)


def toggle(feed: float = 1e5, **figures: float) -> Net:
    chip = Chip(
        "cmos",
        {"trigger": "in", "threshold": "in", "output": "out"},
        IDEAL | {"high_resistance": 1e-6, "low_resistance": 1e-6} | figures,
    )
    return Net(
        5.0,
        chip,
        (("vcc", "in", 1e4), ("in", "gnd", 1e4), ("out", "mem", feed)),
        (("mem", "gnd", 1e-6),),
        contacts={"B": Contact(("mem", "in"), 1e-4)},
    )


@pytest.mark.parametrize("k", [0.5, log(2), 1, log(3), 2, log(10), 3, 5, 10])
def test_a_capacitor_charges_as_one_minus_e_to_the_minus_k(k: float) -> None:
    got = run_exact(rc(), [(0, ())], 0.02, start="empty", nodes=("n",), times=(k * 1e-3,)).volts[0, 0]
    assert got == pytest.approx(5 * (1 - exp(-k)), rel=1e-13)


def test_a_capacitor_on_the_supply_starts_at_the_supply() -> None:
    net = rc(resistors=(("n", "gnd", 1e4),), capacitors=(("vcc", "n", 1e-7),))
    got = run_exact(net, [(0, ())], 0.02, start="empty", nodes=("n",), times=(1e-3,)).volts[0, 0]
    assert got == pytest.approx(5 * exp(-1), rel=1e-13)


def test_two_capacitors_across_the_supply_divide_the_step() -> None:
    net = rc(resistors=(("n", "gnd", 1e4),), capacitors=(("vcc", "n", 3e-7), ("n", "gnd", 1e-7)))
    got = run_exact(net, [(0, ())], 0.02, start="empty", nodes=("n",), times=(4e-3,)).volts[0, 0]
    assert got == pytest.approx(5 * 0.75 * exp(-1), rel=1e-13)


def test_charge_is_shared() -> None:
    """100 nF at 5 V onto 10 nF at 2.5 V: sum of charges over sum of capacitances, 4.772727 V."""
    net = Net(
        5.0,
        QUIET,
        (("vcc", "a", 1e9), ("vcc", "b", 1e9), ("b", "gnd", 1e9)),
        (("a", "gnd", 1e-7), ("b", "gnd", 1e-8)),
        contacts={"B": Contact(("a", "b"))},
    )
    run = run_exact(net, [(0, ()), (1e-3, ("B",))], 1.0, nodes=("a", "b"), times=(1e-3 + 1e-7,))
    assert run.volts[:, 0] == pytest.approx([(100 * 5 + 10 * 2.5) / 110] * 2, abs=1e-6)


def test_a_memory_of_ten_seconds_survives_a_contact_of_ten_nanoseconds() -> None:
    """Stiff by nine decades: the slow part still follows its own exponential (derived)."""
    net = Net(
        5.0,
        QUIET,
        (("vcc", "m", 1e7), ("x", "gnd", 1e3)),
        (("m", "gnd", 1e-6), ("x", "gnd", 1e-7)),
        contacts={"B": Contact(("vcc", "x"))},
    )
    run = run_exact(net, [(0, ("B",))], 20.0, start="empty", nodes=("m", "x"), times=(10.0,))
    assert run.volts[0, 0] == pytest.approx(5 * (1 - exp(-1)), rel=1e-13)
    assert run.volts[1, 0] == pytest.approx(5 * 1e3 / (1e3 + 0.1), rel=1e-13)


def test_free_running_times_are_ln_2_times_r_c() -> None:
    """tH = ln 2 (RA + RB) C, tL = ln 2 RB C (data-sheet formula)."""
    chip = Chip(
        "cmos", {"trigger": "c", "threshold": "c", "discharge": "d"}, IDEAL | {"discharge_resistance": 1e-6}
    )
    net = Net(5.0, chip, (("vcc", "d", 5e3), ("d", "c", 3e3)), (("c", "gnd", 0.15e-6),))
    edges = run_exact(net, [(0, ())], 4e-3, start="empty").edges
    assert edges[0] == (0.0, 1)
    gaps = np.diff([t for t, _ in edges])
    assert gaps[0] == pytest.approx(log(3) * 8e3 * 0.15e-6, rel=1e-8)
    assert gaps[1] == pytest.approx(311.9162e-6, abs=1e-10)
    assert gaps[2] == pytest.approx(831.7766e-6, abs=1e-10)


def test_the_toggle_waits_its_closed_form() -> None:
    """Held level 0.476190 of the supply; re-arm RF C ln(3 x 0.476190) = 35.667494 ms (derived)."""
    held = run_exact(toggle(), [(0, ("B",))], 0.2, output="high", nodes=("mem",), times=(0.19,))
    assert held.edges == [(0.0, 0)]
    assert held.volts[0, 0] / 5 == pytest.approx(0.4761904762, abs=1e-8)
    for gap, flips in ((35.667e-3, 1), (35.668e-3, 2)):
        run = run_exact(toggle(), [(0, ("B",)), (0.3, ()), (0.3 + gap, ("B",))], 0.5, output="high")
        assert len(run.edges) == flips


def test_the_toggle_oscillates_with_too_strong_a_feedback() -> None:
    """Stable while held only with RF above R for thresholds of 1/3 and 2/3 (derived)."""
    assert len(run_exact(toggle(feed=1.01e4), [(0, ("B",))], 0.5, output="high").edges) == 1
    assert len(run_exact(toggle(feed=0.99e4), [(0, ("B",))], 0.5, output="high").edges) > 10


def test_priority_is_reset_then_trigger_then_threshold() -> None:
    pins = {"trigger": "t", "threshold": "h", "reset": "r"}
    net = Net(
        5.0,
        Chip("cmos", pins, IDEAL),
        (("vcc", "t", 1e4), ("h", "gnd", 1e4), ("vcc", "r", 1e4)),
        contacts={"T": Contact(("t", "gnd")), "H": Contact(("vcc", "h")), "R": Contact(("r", "gnd"))},
    )
    held = [("T",), ("T", "H"), ("T", "H", "R"), ("T", "H"), ("H",), ()]
    run = run_exact(net, [(k, h) for k, h in enumerate(held)], 10.0)
    assert run.edges == [(0.0, 1), (2.0, 0), (3.0, 1), (4.0, 0)]


def test_a_latch_that_fights_itself_is_restless() -> None:
    """Output, trigger and threshold on one node: low asks for high, high for low."""
    chip = Chip("cmos", {"trigger": "x", "threshold": "x", "output": "x"}, IDEAL)
    with pytest.raises(Restless):
        run_exact(Net(5.0, chip), [(0, ())], 1.0)


def fitted(family: str) -> Net:
    """A toggle with a lamp, real levels and bias currents, and a reset filter."""
    figures = IDEAL | {
        "high_drop": 1.4, "high_resistance": 7.0, "low_level": 0.05, "low_resistance": 12.0,
        "trigger_current": 5e-7, "threshold_current": 3e-8, "reset_current": 4e-4, "divider": 5e3,
    }  # fmt: skip
    pins = {"trigger": "in", "threshold": "in", "output": "out", "reset": "rst", "control": "ctl"}
    return Net(
        12.0,
        Chip(family, pins, figures),
        (
            ("vcc", "in", 1e4),
            ("in", "gnd", 1e4),
            ("out", "mem", 1e5),
            ("vcc", "rst", 1e4),
            ("out", "lamp", 1e3),
        ),
        (("mem", "gnd", 1e-6), ("ctl", "gnd", 1e-7), ("rst", "gnd", 1e-6)),
        (("lamp", "gnd", 2.0, 10.0),),
        contacts={"B": Contact(("mem", "in"), 10.0), "R": Contact(("rst", "gnd"), 100.0)},
    )


@pytest.mark.parametrize("family", ["bipolar", "cmos"])
@pytest.mark.parametrize("method", ["DOP853", pytest.param("Radau", marks=pytest.mark.system)])
def test_both_roads_agree(family: str, method: str) -> None:
    schedule = [
        (0.0, ()),
        (0.11, ("B",)),
        (0.15, ()),
        (0.3, ("B",)),
        (0.33, ("B", "R")),
        (0.36, ()),
        (0.5, ("B",)),
    ]
    if method == "Radau":
        schedule = schedule[:4]
    end = schedule[-1][0] + 0.05
    ask = {"nodes": ("mem", "in", "rst", "ctl"), "times": np.linspace(0.003, end - 0.001, 23)}
    for start in ("empty", "settled"):
        exact = run_exact(fitted(family), schedule, end, start=start, **ask)
        smooth = run_ode(fitted(family), schedule, end, start=start, method=method, **ask)
        assert [q for _, q in exact.edges] == [q for _, q in smooth.edges]
        assert [t for t, _ in exact.edges] == pytest.approx([t for t, _ in smooth.edges], rel=1e-8)
        # Between its steps the integrator interpolates, which is what limits the agreement.
        assert exact.volts == pytest.approx(smooth.volts, abs=12 * 2e-7)


def test_the_ladder_agrees_with_scipy_expm() -> None:
    net = fitted("bipolar")
    equations = Equations(net)
    state = np.array(equations.rest(1, frozenset()), dtype=float)
    for seconds in (1e-6, 1e-3, 0.02):
        ours = run_exact(
            net, [(0, ("B",))], seconds * 2, output="high", nodes=("mem", "rst"), times=(seconds,)
        )
        if len(ours.edges) == 1 and ours.edges[0][1] == 0:
            want = flow_expm(net, 0, frozenset({"B"}), state, seconds)
            names = [equations.index[n] for n in ("mem", "rst")]
            mode = equations.at(want, 0, frozenset({"B"}))
            volts = np.array(mode.volts, dtype=float)[names] @ np.append(want, 1.0)
            assert ours.volts[:, 0] == pytest.approx(volts, rel=1e-9)
