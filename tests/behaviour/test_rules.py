"""Every rule: a circuit that shows it, one just inside its limit, and its mend carried out to the letter.

The limits in the comments are worked out by hand from the circuit, not from the program.
"""

import re
from dataclasses import dataclass

import pytest
from behaviour_circuits import IDEAL, apply, derive, latch, of_rule, rules_of, toggle

from porter.behaviour.rules import RULES
from porter.spec.read import read_text


@dataclass(frozen=True)
class Case:
    """A circuit that shows a rule and one that just doesn't."""

    name: str
    rule: str
    severity: str
    shows: str
    inside: str
    place: str  # what stands at the finding's position
    says: str  # a pattern in the message: the failing inequality
    leaves: str = ""  # severity that may stay after the mend


def coil(extra: str | None) -> dict[str, str | None]:
    return {"K1": "{load: 400, coil: true, between: [out, gnd]}", "DK": extra, "R3": None, "D1": None}


def push(more: str) -> dict[str, str]:
    return {"PUSH": "{between: [store, mid], resistance: 1m" + more + "}"}


UP = {"UP": "{between: [vcc, set], resistance: %s}", "SET": "{between: [set, gnd], resistance: %s}"}


def up(ohm: str) -> dict[str, str]:
    return {name: text % ohm for name, text in UP.items()}


def spread(key: str, value: str) -> str:
    return re.sub(rf"{key}: [^,}}]+", f"{key}: {value}", IDEAL)


CASES = [
    Case(
        "open-trigger",
        "floating-input",
        "error",
        latch({"R1": None}),
        latch(),
        "set",
        "0 conducting paths",
    ),
    Case(
        "not-connected",
        "floating-input",
        "error",
        latch({"R2": None}, {"CLEAR": None}, pins="{trigger: set, threshold: gnd, output: out}"),
        latch({"R2": None}, {"CLEAR": None}, pins="{trigger: set, threshold: gnd, reset: vcc, output: out}"),
        "timer",
        "reset pin is not connected",
    ),
    Case(
        "broken-by-a-press",  # a contact that opens takes the pull-up with it
        "floating-input",
        "error",
        latch(
            {"R1": "{resistor: 10k, between: [top, set]}"},
            {"STOP": "{between: [vcc, top], normally: closed}"},
        ),
        latch(
            {"R1": "{resistor: 10k, between: [top, set]}", "R9": "{resistor: 100k, between: [vcc, set]}"},
            {"STOP": "{between: [vcc, top], normally: closed}"},
        ),
        "set",
        "STOP held",
    ),
    Case(
        "led-current",  # (12 - 1.3 - 2.0) V / 30 mA = 290 ohm = 4 + 10 + 276 ohm
        "led-without-resistor",
        "error",
        latch({"R3": "{resistor: 274, between: [out, lamp]}"}),
        latch({"R3": "{resistor: 278, between: [out, lamp]}"}),
        "2.0 V",
        r"30\.2\d* mA .* more than 30 mA",
    ),
    Case(
        "bare-led",
        "led-without-resistor",
        "error",
        latch({"R3": None, "D1": "{led: 2.0 V, between: [out, gnd]}"}, family="cmos", supply="5 V"),
        latch(family="cmos", supply="5 V"),
        "2.0 V",
        "0 Ω in series",
    ),
    Case(
        "no-diode",
        "relay-without-diode",
        "error",
        latch(coil(None)),
        latch(coil("{diode: 0.7 V, between: [gnd, out]}")),
        "400",
        r"26\.\d+ mA in the coil",
    ),
    Case(
        "diode-reversed",
        "relay-without-diode",
        "error",
        latch(coil("{diode: 0.7 V, between: [out, gnd]}")),
        latch(coil("{diode: 0.7 V, between: [gnd, out]}")),
        "400",
        "wrong way",
    ),
    Case(
        "bipolar-decoupling",
        "no-decoupling",
        "warning",
        latch({"C1": "{capacitor: 99.5n, between: [vcc, gnd]}"}),
        latch({"C1": "{capacitor: 50n, between: [vcc, gnd]}", "C2": "{capacitor: 50n, between: [gnd, vcc]}"}),
        "timer",
        r"99\.5 nF .* less than 100 nF",
    ),
    Case(
        "cmos-decoupling",
        "no-decoupling",
        "note",
        latch({"C1": "{capacitor: 9.95n, between: [vcc, gnd]}"}, family="cmos"),
        latch({"C1": "{capacitor: 10n, between: [vcc, gnd]}"}, family="cmos"),
        "timer",
        r"9\.95 nF .* less than 10 nF",
    ),
    Case(
        "short",  # 12 V / (2 x 60 ohm) = 100 mA
        "supply-short",
        "error",
        latch(buttons=up("59.7")),
        latch(buttons=up("60.2")),
        "SET",
        r"100\.\d+ mA .* more than 100 mA",
    ),
    Case(
        "output-current",  # (12 - 1.3) V / 0.2 A = 53.5 ohm = 4 + 49.5 ohm
        "output-overloaded",
        "error",
        latch({"RL": "{load: 49.3, between: [out, gnd]}", "R3": None, "D1": None}),
        latch({"RL": "{load: 49.7, between: [out, gnd]}", "R3": None, "D1": None}),
        "out",
        r"200\.\d+ mA .* more than 200 mA",
    ),
    Case(
        "output-drawn-down",  # 400 ohm on 200 ohm: two thirds of the supply
        "output-overloaded",
        "warning",
        latch(
            {"RL": "{load: 398, between: [out, gnd]}", "R3": None, "D1": None}, family="cmos", supply="5 V"
        ),
        latch(
            {"RL": "{load: 402, between: [out, gnd]}", "R3": None, "D1": None}, family="cmos", supply="5 V"
        ),
        "out",
        r"3\.32\d V, below 3\.333 V",
    ),
    Case(
        "supply-too-low",
        "timer-out-of-range",
        "error",
        latch(supply="4.48 V"),
        latch(supply="4.5 V"),
        "4.48 V",
        r"4\.48 V is below 4\.5 V",
    ),
    Case(
        "supply-may-be-too-high",
        "timer-out-of-range",
        "warning",
        latch(supply="15 V ±7%"),
        latch(supply="15 V ±6.6%"),
        "15 V ±7%",
        r"most supply of 16\.05 V is above 16 V",
    ),
    Case(
        "memory-leak",  # 200 kohm on 100 kohm: two thirds of the supply
        "leak-too-high",
        "error",
        toggle({"CM": "{capacitor: 1u, leak: 199k, between: [store, gnd]}"}),
        toggle({"CM": "{capacitor: 1u, leak: 201k, between: [store, gnd]}"}),
        "1u",
        r"leakage of CM takes the threshold input to 3\.32\d V.* is 3\.333 V",
    ),
    Case(
        "memory-leak-current",  # 5 V / 200 kohm = 25 uA
        "leak-too-high",
        "error",
        toggle({"CM": "{capacitor: 1u, leak: 25.2 uA, between: [store, gnd]}"}),
        toggle({"CM": "{capacitor: 1u, leak: 24.8 uA, between: [store, gnd]}"}),
        "1u",
        r"leakage of CM takes the threshold input to 3\.32\d V.* is 3\.333 V",
    ),
    Case(
        "contact-leak",  # 5 kohm to ground under 10 kohm to the supply: a third of it
        "leak-too-high",
        "error",
        latch({}, {"SET": "{between: [set, gnd], leak: 4.97k}"}, family="cmos", values=IDEAL),
        latch({}, {"SET": "{between: [set, gnd], leak: 5.03k}"}, family="cmos", values=IDEAL),
        "SET",
        r"leakage of SET takes the trigger input to 3\.98\d V.* is 4 V",
    ),
    Case(
        "charge-sharing",  # (5 + 2.5 k) / (1 + k) = 10 / 3 at k = 2
        "capacitor-on-inputs",
        "error",
        toggle({"CX": "{capacitor: 2.01u, between: [mid, gnd]}"}),
        toggle({"CX": "{capacitor: 1.99u, between: [mid, gnd]}"}),
        "2.01u",
        r"3\.33\d* V, not above 3\.333 V",
    ),
    Case(
        "idles-too-high",  # 20 kohm under 10 kohm: two thirds of the supply
        "divider-uneven",
        "error",
        toggle({"RB": "{resistor: 20.1k, between: [mid, gnd]}"}),
        toggle({"RB": "{resistor: 19.9k, between: [mid, gnd]}"}),
        "mid",
        r"idles at 3\.33\d V, above its level 3\.333 V",
    ),
    Case(
        "idles-too-low",
        "divider-uneven",
        "error",
        toggle({"RA": "{resistor: 20.1k ±1%, between: [vcc, mid]}"}),
        toggle({"RA": "{resistor: 19.9k, between: [vcc, mid]}"}),
        "mid",
        r"idles at 1\.66\d V, below its level 1\.667 V",
    ),
    Case(
        "output-drop",  # the supply must be more than three times the drop
        "high-level-too-low",
        "error",
        toggle(values=spread("high_drop", "1.68 V"), family="bipolar"),
        toggle(values=spread("high_drop", "1.655 V"), family="bipolar"),
        "PUSH",
        r"to 3\.32 V, not above its level 3\.333 V",
    ),
    Case(
        "low-level-too-high",
        "high-level-too-low",
        "error",
        toggle(values=spread("low_level", "1.68 V"), family="bipolar"),
        toggle(values=spread("low_level", "1.655 V"), family="bipolar"),
        "PUSH",
        r"to 1\.68 V, not below its level 1\.667 V",
    ),
    Case(
        "load-on-the-memory's-feed",  # 600 ohm on a 300 ohm output: two thirds of the supply
        "high-level-too-low",
        "error",
        toggle({"RL": "{resistor: 598, between: [out, gnd]}"}, values=spread("high_resistance", "300")),
        toggle({"RL": "{resistor: 602.5, between: [out, gnd]}"}, values=spread("high_resistance", "300")),
        "PUSH",
        r"not above its level 3\.333 V",
    ),
    Case(
        "oscillates-while-held",  # feedback equal to the divider's resistors
        "feedback-too-strong",
        "error",
        toggle({"RF": "{resistor: 9.95k, between: [out, store]}"}),
        toggle({"RF": "{resistor: 10.05k, between: [out, store]}"}),
        "PUSH",
        r"oscillates with a period of \d.* \(above 3\.333 V\).* \(below 1\.667 V\)",
    ),
    Case(
        "may-oscillate-while-held",  # 10 kohm / 0.95 = 10.526 kohm
        "feedback-too-strong",
        "warning",
        toggle({"RF": "{resistor: 10.5k ±5%, between: [out, store]}"}),
        toggle({"RF": "{resistor: 10.56k ±5%, between: [out, store]}"}),
        "PUSH",
        "some allowed unit oscillates",
    ),
    Case(
        "published-threshold",
        "hold-not-guaranteed",
        "warning",
        toggle(values=spread("threshold_ratio", "{nominal: 0.6667, least: 0.498, most: 0.7}")),
        toggle(values=spread("threshold_ratio", "{nominal: 0.6667, least: 0.5275, most: 0.7}")),
        "{nominal: 0.6667, least: 0.498, most: 0.7}",
        r"no button held.* -10 mV < 0 V .*above all the threshold level .* least, 0\.498",
    ),
    Case(
        "tolerance-of-the-divider",  # half of 1.04 is 0.52
        "hold-not-guaranteed",
        "warning",
        toggle(
            {
                "RA": "{resistor: 10k ±4.2%, between: [vcc, mid]}",
                "RB": "{resistor: 10k ±4%, between: [mid, gnd]}",
                "RF": "{resistor: 10M, between: [out, store]}",
            },
            values=spread("threshold_ratio", "0.52"),
        ),
        toggle(
            {
                "RA": "{resistor: 10k ±3.9%, between: [vcc, mid]}",
                "RB": "{resistor: 10k ±3.9%, between: [mid, gnd]}",
                "RF": "{resistor: 10M, between: [out, store]}",
            },
            values=spread("threshold_ratio", "0.52"),
        ),
        "10k ±4.2%",
        r"part tolerances alone do it, above all `RA` at its least, 9\.58 kΩ",
    ),
    Case(
        "bounce",  # 100 kohm x 1 uF x ln(3 x 0.476190) = 35.667 ms
        "bounce-outlasts-window",
        "error",
        toggle(buttons=push(", bounce: 35.8 ms")),
        toggle(buttons=push(", bounce: 35.5 ms")),
        "PUSH",
        r"35\.8 ms, longer than the 35\.67 ms",
    ),
    Case(
        "bounce-of-some-units",  # 0.9 x 35.667 ms = 32.10 ms
        "bounce-outlasts-window",
        "warning",
        toggle({"CM": "{capacitor: 1u ±10%, between: [store, gnd]}"}, push(", bounce: 32.3 ms")),
        toggle({"CM": "{capacitor: 1u ±10%, between: [store, gnd]}"}, push(", bounce: 32 ms")),
        "PUSH",
        r"32\.3 ms, longer than the 32\.1 ms",
    ),
    Case(
        "contact-too-resistive",  # 12 V x r / (r + 10 k || 12 V / 0.4 mA) = 0.7 V at 464.6 ohm
        "reset-not-low-enough",
        "error",
        latch(buttons={"CLEAR": "{between: [clear, gnd], resistance: 467}"}),
        latch(buttons={"CLEAR": "{between: [clear, gnd], resistance: 462}"}),
        "CLEAR",
        r"comes down to 703\.\d mV, not below its level 700 mV",
    ),
    Case(
        "contact-too-resistive-for-some",  # 12 V x r / (r + 10 k || 12 V / 1.5 mA) = 0.3 V at 113.96 ohm
        "reset-not-low-enough",
        "warning",
        latch(buttons={"CLEAR": "{between: [clear, gnd], resistance: 114.5}"}),
        latch(buttons={"CLEAR": "{between: [clear, gnd], resistance: 113.5}"}),
        "CLEAR",
        r"comes down to 301\.\d mV, not below its level 300 mV",
    ),
    Case(
        "resistor-under-the-contact",
        "reset-not-low-enough",
        "error",
        latch({"R9": "{resistor: 467, between: [knob, gnd]}"}, {"CLEAR": "{between: [clear, knob]}"}),
        latch({"R9": "{resistor: 462, between: [knob, gnd]}"}, {"CLEAR": "{between: [clear, knob]}"}),
        "CLEAR",
        r"comes down to 703\.\d mV, not below its level 700 mV",
    ),
    Case(
        "pull-down-too-weak",  # 12 V x r / (r + 12 V / 0.4 mA) = 0.7 V at 1.858 kohm
        "reset-not-low-enough",
        "error",
        latch({"R2": "{resistor: 1.87k, between: [gnd, clear]}"}, {"CLEAR": "{between: [clear, vcc]}"}),
        latch({"R2": "{resistor: 1.85k, between: [gnd, clear]}"}, {"CLEAR": "{between: [clear, vcc]}"}),
        "clear",
        r"no button held: the reset pin comes down to 704\.\d mV, not below its level 700 mV",
    ),
    Case(
        "weak-pull-up",  # (5 - 1.0) V / 0.4 mA = 10 kohm; the advice of TI SLFS023H
        "reset-pull-up-too-weak",
        "warning",
        latch({"R2": "{resistor: 10.05k, between: [vcc, clear]}"}, supply="5 V"),
        latch({"R2": "{resistor: 10k, between: [vcc, clear]}"}, supply="5 V"),
        "clear",
        r"5 V - 400 µA × 10\.05 kΩ = 980 mV .* less than 1 V",
    ),
    Case(
        "nothing-decides",
        "power-on-undetermined",
        "warning",
        latch(),
        latch({"CR": "{capacitor: 1u, between: [clear, gnd]}"}),
        "out",
        "undetermined",
        leaves="note",
    ),
    Case(
        "held-otherwise",
        "intent-not-met",
        "error",
        latch(more="intent:\n  - {held: [SET], output: high}\n  - {held: [SET, CLEAR], output: high}\n"),
        latch(more="intent:\n  - {held: [SET], output: high}\n  - {held: [SET, CLEAR], output: low}\n"),
        "{held: [SET, CLEAR], output: high}",
        "SET and CLEAR held: the output is low from low and is low from high; it is meant to be high",
    ),
    Case(
        "released-otherwise",
        "intent-not-met",
        "error",
        latch(more="intent:\n  - {release: [CLEAR, SET], output: low}\n"),
        latch(more="intent:\n  - {release: [CLEAR, SET], output: high}\n"),
        "{release: [CLEAR, SET], output: low}",
        "then CLEAR, SET released in this order: the output is high from low",
    ),
    Case(
        "comes-up-otherwise",
        "intent-not-met",
        "error",
        latch({"CR": "{capacitor: 1u, between: [clear, gnd]}"}, more="intent:\n  - {power_on: high}\n"),
        latch({"CR": "{capacitor: 1u, between: [clear, gnd]}"}, more="intent:\n  - {power_on: low}\n"),
        "{power_on: high}",
        "after power-on the output is low",
    ),
    Case(
        "comes-up-either-way",
        "intent-not-met",
        "error",
        latch(more="intent:\n  - {power_on: low}\n"),
        latch(more="intent:\n  - {power_on: low}\nport: {power_on: low}\n"),
        "{power_on: low}",
        "undetermined",
        leaves="note",
    ),
]
NAMED = [pytest.param(case, id=f"{case.rule}-{case.name}") for case in CASES]
RANK = {"note": 0, "warning": 1, "error": 2}


def test_every_rule_has_its_case() -> None:
    assert {case.rule for case in CASES} == set(RULES)


@pytest.mark.parametrize("case", NAMED)
def test_shows(case: Case) -> None:
    found = of_rule(derive(case.shows), case.rule)

    assert found, "no finding"
    assert found[0].severity == case.severity
    assert re.search(case.says, found[0].message), found[0].message
    place = found[0].position
    line = case.shows.splitlines()[place.line - 1]
    assert line[place.column - 1 :].startswith(case.place), line[place.column - 1 :]


@pytest.mark.parametrize("case", NAMED)
def test_just_inside_does_not_show(case: Case) -> None:
    found = of_rule(derive(case.inside), case.rule)

    assert [f for f in found if RANK[f.severity] >= RANK[case.severity]] == []


@pytest.mark.parametrize("case", NAMED)
def test_mend_carried_out_clears(case: Case) -> None:
    before = of_rule(derive(case.shows), case.rule)
    text = apply(case.shows, before[0].mend, before[0].position.line)
    after = derive(text)

    left = [f for f in of_rule(after, case.rule) if f.severity != case.leaves]
    assert left == [], f"{before[0].mend}\n{left}\n{text}"
    gone = rules_of(derive(case.shows).findings)
    assert rules_of(after.findings) <= gone, "the mend breaks something else"


@pytest.mark.parametrize("case", [p for p in NAMED if p.values[0].severity == "error"])
def test_one_fault_is_one_error(case: Case) -> None:
    also = {"output-overloaded"} if case.name == "diode-reversed" else set()  # it shorts the output
    assert rules_of(derive(case.shows).findings) == {case.rule} | also


@pytest.mark.parametrize("case", [p for p in NAMED if p.values[0].severity == "error"])
def test_an_error_makes_the_verdict_faulty(case: Case) -> None:
    assert derive(case.shows).verdict == "faulty"


@pytest.mark.parametrize("case", NAMED)
def test_message_says_numbers_and_mend_says_what_to_write(case: Case) -> None:
    for found in of_rule(derive(case.shows), case.rule):
        assert re.search(r"\d", found.message) or case.rule in ("intent-not-met", "relay-without-diode")
        assert "`" in found.mend
        assert not re.search(r"\be[-+]\d|\dnan|\binf\b", found.message + found.mend)


def test_findings_are_in_the_order_of_the_spec() -> None:
    text = latch(
        {"R1": None, "R3": "{resistor: 100, between: [out, lamp]}"}, more="intent:\n  - {power_on: low}\n"
    )
    positions = [f.position for f in derive(text).findings]

    assert positions == sorted(positions)


def test_node_is_named_as_in_the_spec() -> None:
    circuit = read_text(latch({"R1": None}), "piece.yaml")

    assert "set" in circuit.nodes
    assert "`set`" in of_rule(derive(latch({"R1": None})), "floating-input")[0].message
