"""What the published least and most figures allow and forbid, as findings and margins.

All limits are derived from the figures of TI SLFS022A (bipolar) and SLFS043C/F (CMOS); each test
has a circuit just inside the limit and one just outside.
"""

import pytest

from porter import simulate
from porter.behaviour.derive import derive
from porter.behaviour.model import Behaviour
from porter.spec.read import read_text

TOGGLE = """\
circuit: Checked toggle
supply: {supply} V
timer:
  family: {family}
  pins: {{trigger: in, threshold: in, reset: vcc, output: out}}
  values: {{{values}}}
parts:
  R1: {{resistor: 1k {tolerance}, between: [vcc, in]}}
  R2: {{resistor: 1k {tolerance}, between: [in, gnd]}}
  R3: {{resistor: {feed}, between: [out, mem]}}
  C1: {{capacitor: 1u, between: [mem, gnd]}}
  C2: {{capacitor: 100n, between: [vcc, gnd]}}
buttons:
  B: {{between: [mem, in]}}
"""
#: An output that reaches the rails and no input currents, to leave the levels alone.
RAILS = (
    "high_drop: 0, low_level: 0, high_resistance: 1, low_resistance: 1, "
    "trigger_current: 0, threshold_current: 0"
)


def toggle(
    family: str, supply: float, feed: str = "1M", tolerance: str = "", values: str = RAILS
) -> Behaviour:
    text = TOGGLE.format(family=family, supply=supply, feed=feed, tolerance=tolerance, values=values)
    return derive(read_text(text, "toggle.yaml"))


def rules(behaviour: Behaviour) -> set[str]:
    return {f.rule for f in behaviour.findings}


def test_half_the_supply_is_not_a_hold_state_on_a_bipolar_part_at_5_volt() -> None:
    """Least threshold 2.4 V is 0.480 of 5 V, below the idle half: a derived flag, TI SLFS022A p.4."""
    found = toggle("bipolar", 5)
    assert "hold-not-guaranteed" in rules(found)
    assert found.verdict == "typical-only"
    idle = [m.guaranteed.least for m in found.margins if m.guaranteed.least is not None]
    assert min(idle) == pytest.approx(2.4 - 2.5, abs=0.01)


@pytest.mark.parametrize(
    ("family", "supply", "tolerance"),
    [
        ("bipolar", 15, ""),  # 0.587 and 0.373
        ("cmos", 5, ""),  # 0.56 and 0.392
        ("cmos", 5, "±5%"),  # mid 0.475 to 0.525
        ("cmos", 15, ""),  # 0.63 and 0.357
        ("cmos", 15, "±5%"),
    ],
)
def test_half_the_supply_is_a_hold_state(family: str, supply: float, tolerance: str) -> None:
    assert "hold-not-guaranteed" not in rules(toggle(family, supply, tolerance=tolerance))


@pytest.mark.parametrize(
    ("family", "supply", "limit"),
    [
        # the larger of (R/2) f/(0.5 - f) with the most trigger f, and (R/2)(1 - g)/(g - 0.5) with the
        # least threshold g, over R
        ("cmos", 5, 3.667),
        ("bipolar", 15, 2.385),
    ],
)
def test_feedback_limit_with_published_levels(family: str, supply: float, limit: float) -> None:
    """The hold is guaranteed for RF above the limit only, within 1 % (derived)."""
    inside = toggle(family, supply, feed=f"{limit * 1010:.0f}")
    outside = toggle(family, supply, feed=f"{limit * 990:.0f}")
    watched = {"hold-not-guaranteed", "feedback-too-strong"}
    assert not rules(inside) & watched
    assert rules(outside) & watched
    assert (inside.verdict, outside.verdict) == ("sound", "typical-only")


@pytest.mark.parametrize(("drop", "rule"), [("1.2 V", True), ("0.7 V", False)])
def test_high_level_must_pass_the_most_threshold(drop: str, rule: bool) -> None:
    """Bipolar at 5 V: off by the memory needs VOH > 4.2 V; about 3.8 V is what it gives at light load.

    The published part is TI SLFS022A p.4; the light-load drop is from memory.
    """
    values = RAILS.replace("high_drop: 0", f"high_drop: {drop}")
    found = toggle("bipolar", 5, values=values)
    below = [m for m in found.margins if m.guaranteed.least is not None and m.guaranteed.least < -0.3]
    assert bool(below) is rule, [(m.where, m.guaranteed) for m in found.margins]
    assert {h.output for h in found.held if h.held == ("B",)} == {"low", "high"}, "typical 3.33 V works"


def test_high_level_too_low_even_for_the_typical_threshold() -> None:
    """Supply less 1.7 V at 5 V is 3.3 V, below the typical 3.33 V: the memory never gets there (derived)."""
    found = toggle("bipolar", 5, values=RAILS.replace("high_drop: 0", "high_drop: 1.7 V"))
    assert "high-level-too-low" in rules(found)


RESET = """\
circuit: Checked reset
supply: 5 V
timer:
  family: bipolar
  pins: {{trigger: t, threshold: gnd, reset: r, output: out}}
parts:
  R1: {{resistor: 4k7, between: [vcc, t]}}
  R2: {{resistor: {pull}, between: [vcc, r]}}
  R3: {{resistor: 1k, between: [out, gnd]}}
  C1: {{capacitor: 100n, between: [vcc, gnd]}}
buttons:
  GO: {{between: [t, gnd]}}
  STOP: {{between: [r, gnd], resistance: {contact}}}
"""


def reset(pull: str, contact: str = "100m") -> Behaviour:
    return derive(read_text(RESET.format(pull=pull, contact=contact), "reset.yaml"))


@pytest.mark.parametrize(("pull", "weak"), [("9.9k", False), ("10.1k", True)])
def test_reset_pull_up(pull: str, weak: bool) -> None:
    """(5 V - 1.0 V)/0.4 mA = 10 kohm by the pin's current at the supply; TI SLFS022A p.4, NE556 advice."""
    assert ("reset-pull-up-too-weak" in rules(reset(pull))) is weak


@pytest.mark.parametrize(("contact", "high"), [("100m", False), ("100", False), ("330", True)])
def test_reset_low_enough(contact: str, high: bool) -> None:
    """A contact must sink up to 1.5 mA + V/R and stay below the least reset level of 0.3 V (TI SLFS022A p.4).

    With 10 kohm and 1.5 mA at 0 V: (1.5 + 0.5) mA through 100 ohm is 0.2 V, through 330 ohm 0.6 V.
    """
    assert ("reset-not-low-enough" in rules(reset("10k", contact))) is high


BIAS = """\
circuit: Checked bias
supply: 15 V
timer:
  family: {family}
  pins: {{trigger: t, threshold: gnd, reset: vcc, output: out}}
  values: {{trigger_current: {current}}}
parts:
  R1: {{resistor: {feed}, between: [t, gnd]}}
  R2: {{resistor: 1k, between: [out, gnd]}}
  C1: {{capacitor: 100n, between: [vcc, gnd]}}
buttons:
  B: {{between: [t, gnd]}}
"""


@pytest.mark.parametrize(
    ("family", "current", "feed", "volts"),
    [
        ("bipolar", "2 uA", "5k", 10e-3),
        ("bipolar", "2 uA", "1M", 2.0),
        ("cmos", "10 pA", "1M", 10e-6),
    ],
)
def test_bias_error(family: str, current: str, feed: str, volts: float) -> None:
    """Trigger current times the resistance in its path (derived; currents as published)."""
    circuit = read_text(BIAS.format(family=family, current=current, feed=feed), "bias.yaml")
    run = simulate(circuit, [(0.0, ())], 1.0, start="settled", output="high", nodes=("t",), times=(0.5,))
    assert run.volts[0, 0] == pytest.approx(volts, rel=1e-6)
