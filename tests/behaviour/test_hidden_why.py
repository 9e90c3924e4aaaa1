"""`derive --why`: the formulas that it prints give the numbers that it prints."""

import math
import re

import pytest
from behaviour_circuits import derive, latch, toggle
from hypothesis import given, settings
from hypothesis import strategies as st
from quantiphy import Quantity

from porter.behaviour.model import Behaviour, Window

_FORMULA = re.compile(r": ([\d.]+ [µmn]?s) \* ln\((.+?) / (.+?)\) = ([\d.]+ [µmn]?s)")
FILTER = {
    "R1": "{resistor: 1k ±5%, between: [vcc, knob]}",
    "RS": "{resistor: 10k ±5%, between: [knob, set]}",
    "CS": "{capacitor: 1u ±20%, between: [set, gnd]}",
}


def difference(text: str) -> float:
    """Evaluate ``(a - b)``, ``(a + b)`` or ``a``."""
    parts = re.findall(r"([-+]?)\s*([\d.]+ [µmn]?V)", text.strip("()"))
    return sum((-1 if sign == "-" else 1) * float(Quantity(volts)) for sign, volts in parts)


def worked_out(why: str) -> float:
    """Evaluate the formulas of a reason, as a reader with a calculator would."""
    found = _FORMULA.findall(why)
    assert found, why
    total = 0.0
    for tau, a, b, seconds in found:
        value = float(Quantity(tau)) * math.log(difference(a) / difference(b))
        assert value == pytest.approx(float(Quantity(seconds)), rel=5e-3), why
        total += value
    return total


def timed(behaviour: Behaviour) -> list[Window]:
    return [w for w in behaviour.windows if w.seconds.nominal and w.window != "stray-gap"]


@settings(max_examples=8)
@given(
    supply=st.sampled_from(("9 V", "12 V", "15 V")),
    feedback=st.integers(60, 900),
    farad=st.integers(1, 99),
    family=st.sampled_from(("bipolar", "cmos", "cmos-icm")),
)
def test_formula_of_each_time_of_a_toggle(supply: str, feedback: int, farad: int, family: str) -> None:
    parts = {
        "RF": f"{{resistor: {feedback}k, between: [out, store]}}",
        "CM": f"{{capacitor: {farad * 10}n, between: [store, gnd]}}",
    }
    windows = timed(derive(toggle(parts, supply=supply, family=family, values="")))

    assert windows
    for window in windows:
        assert worked_out(window.why) == pytest.approx(window.seconds.nominal, rel=5e-3)
        assert "RF * CM" in window.why


def test_formula_of_a_filtered_press_names_the_parts_that_make_it() -> None:
    behaviour = derive(latch(FILTER, {"SET": "{between: [knob, gnd], resistance: 1m}"}, family="cmos"))
    window = next(w for w in timed(behaviour) if w.button == "SET")

    assert worked_out(window.why) == pytest.approx(window.seconds.nominal, rel=5e-3)
    assert "set from 12 V toward" in window.why and "(RS * CS) until 4 V" in window.why
    assert re.search(r"moved by CS \(\+\d+%\), RS \(\+\d+%\)", window.why)


def test_two_time_constants_are_named_where_both_count() -> None:
    """Two filters of one speed in a row: the press goes through two exponentials, neither alone."""
    parts = {
        **FILTER,
        "RS": "{resistor: 10k, between: [knob, half]}",
        "CH": "{capacitor: 1u, between: [half, gnd]}",
        "RT": "{resistor: 10k, between: [half, set]}",
        "R1": "{resistor: 1k, between: [vcc, knob]}",
        "CS": "{capacitor: 1u, between: [set, gnd]}",
    }
    behaviour = derive(latch(parts, {"SET": "{between: [knob, gnd], resistance: 1m}"}, family="cmos"))
    window = next(w for w in timed(behaviour) if w.button == "SET")

    # 10 ms times 2 / (3 -+ sqrt 5), the ladder's two time constants
    assert "tau 26.18 ms" in window.why and "3.82 ms" in window.why


def test_margins_are_written_as_differences() -> None:
    behaviour = derive(toggle(supply="9 V", values=""))
    margin = next(
        m for m in behaviour.margins if m.where == "no button held, output low: trigger above its level"
    )

    assert margin.why.startswith("trigger (mid) at 4.5 V, its level at 3 V")
    assert margin.volts.nominal == pytest.approx(1.5, abs=1e-3)


def test_what_never_happens_has_no_formula() -> None:
    never = [w for w in derive(latch()).windows if w.seconds.nominal is None]

    assert never and all("never changes that output this way" in w.why for w in never)
