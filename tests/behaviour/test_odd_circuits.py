"""Circuits that nobody would draw: they are derived all the same, and what is wrong is said."""

import pytest
from behaviour_circuits import derive, rules_of, spec

ODD = {
    "a-capacitor-that-goes-nowhere": (
        {
            "P0": "{load: 1k, between: [c, vcc]}",
            "P1": "{capacitor: 10n, between: [a, gnd]}",
            "P2": "{load: 20 mA, between: [c, b]}",
            "P3": "{diode: 0.7 V, between: [c, a]}",
            "P4": "{capacitor: 100u, leak: 1 uA, between: [out, b]}",
        },
        {"B0": "{between: [c, b], leak: 100k}"},
        "{output: out, threshold: c, reset: gnd}",
        "floating-input",
    ),
    "inputs-on-the-output": (
        {
            "P0": "{diode: 0.7 V, between: [vcc, b]}",
            "P1": "{diode: 0.7 V, between: [out, gnd]}",
            "P2": "{capacitor: 100u, leak: 1M, between: [out, gnd]}",
        },
        {
            "B0": "{between: [b, out], normally: closed}",
            "B1": "{between: [out, gnd], bounce: 5 ms}",
        },
        "{output: out, trigger: b, threshold: out, reset: b}",
        "supply-short",
    ),
    "no-trigger": (
        {
            "P0": "{capacitor: 100u, leak: 1M, between: [b, vcc]}",
            "P1": "{resistor: 1M ±10%, between: [a, gnd]}",
            "P2": "{resistor: 0.1, between: [c, gnd]}",
            "P3": "{capacitor: 100n ±20%, between: [b, out]}",
            "P4": "{diode: 0.7 V, between: [c, out]}",
            "P5": "{resistor: 100, between: [b, a]}",
        },
        {"B0": "{between: [vcc, c]}", "B1": "{between: [out, gnd], normally: closed}"},
        "{output: out, threshold: out, reset: b, discharge: a}",
        "floating-input",
    ),
    "nothing-but-a-button": ({}, {"B0": "{between: [out, gnd]}"}, "{output: out}", "floating-input"),
}


@pytest.mark.parametrize("family", ["bipolar", "cmos"])
@pytest.mark.parametrize("name", ODD)
def test_odd_circuit_is_borne(name: str, family: str) -> None:
    parts, buttons, pins, rule = ODD[name]
    behaviour = derive(
        spec(parts, buttons, pins, "5 V", family, "", "").replace("parts:\nbuttons", "buttons")
    )

    assert rule in rules_of(behaviour.findings)
    assert behaviour.verdict == "faulty"
