"""Loads are part of the logic: their current moves the output level, and so the memory."""

import math

import numpy as np
import pytest
from behaviour_circuits import IDEAL, derive, latch, of_rule, toggle

import porter
from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.port.step import run
from porter.spec.read import read_text

RC = 0.1


def re_arm(behaviour: Behaviour, start: str) -> float:
    window = next(w for w in behaviour.windows if (w.window, w.start) == ("re-arm-after-hold", start))
    assert window.seconds.nominal is not None
    return window.seconds.nominal


def volts(text: str, q: int, node: str) -> float:
    engine = Engine(read_text(text, "piece.yaml"))
    lanes, ok = engine.rest(q)
    assert ok[0]
    return float(engine.volts(lanes)[0, engine.topo.node(node)])


def figured(**ohms: str) -> str:
    """Ideal figures but for some."""
    values = IDEAL
    for key, value in ohms.items():
        values = values.replace(f"{key}: 1m", f"{key}: {value}").replace(f"{key}: 0 V", f"{key}: {value}")
    return values


# --- levels ---


@pytest.mark.parametrize(
    ("load", "between", "q", "level"),
    [
        ("load: 20 mA", "[out, gnd]", 1, 12 - 1.0 - 20e-3 * 50),
        ("load: 450 ohm", "[out, gnd]", 1, 11 * 450 / 500),
        ("load: 20 mA", "[vcc, out]", 0, 0.1 + 20e-3 * 20),
        ("load: 470 ohm", "[vcc, out]", 0, 0.1 + 11.9 * 20 / 490),
        ("led: 2 V, slope: 450", "[out, gnd]", 1, 2 + 9 * 450 / 500),
        ("led: 2 V, slope: 480", "[vcc, out]", 0, 0.1 + 9.9 * 20 / 500),
        ("load: 400 ohm, coil: true", "[vcc, out]", 0, 0.1 + 11.9 * 20 / 420),
    ],
)
def test_output_level_under_load(load: str, between: str, q: int, level: float) -> None:
    values = figured(high_drop="1 V", high_resistance="50", low_level="0.1 V", low_resistance="20")
    text = latch({"R3": None, "D1": None, "Z1": f"{{{load}, between: {between}}}"}, values=values)

    assert volts(text, q, "out") == pytest.approx(level, rel=1e-6)


def test_bipolar_output_neither_sinks_when_high_nor_sources_when_low() -> None:
    """A pull-up takes a high output to the rail, a pull-down a low one to ground."""
    values = figured(high_drop="1 V", low_level="0.1 V")
    none = {"R3": None, "D1": None}

    assert volts(
        latch({**none, "Z": "{load: 1k, between: [vcc, out]}"}, values=values), 1, "out"
    ) == pytest.approx(12)
    assert volts(
        latch({**none, "Z": "{load: 1k, between: [out, gnd]}"}, values=values), 0, "out"
    ) == pytest.approx(0)


# --- and what they do to the memory ---


@pytest.mark.parametrize("milliampere", [0, 5, 10])
def test_load_current_moves_the_re_arm_time(milliampere: int) -> None:
    """80 ohm at the high output: the memory heads for ``9 V - 80 I`` and held levels shift with it."""
    text = toggle(
        {"Z1": f"{{load: {milliampere or 1e-9} mA, between: [out, gnd]}}"},
        supply="9 V",
        values=figured(high_resistance="80"),
    )
    high = 9 - 80 * milliampere * 1e-3
    held = (9 / 10e3 + high / 100.08e3) / (2 / 10e3 + 1 / 100.08e3)
    tau = 100.08e3 * 1e-6

    # 15 ppm of the gap: the held network loads the 80 ohm as well
    assert re_arm(derive(text), "high") == pytest.approx(tau * math.log((high - held) / (high - 6)), rel=1e-4)
    assert re_arm(derive(text), "low") == pytest.approx(RC * math.log(30 / 21), rel=1e-4)


@pytest.mark.parametrize(("ohm", "works"), [("164", True), ("156", False)])
def test_load_that_keeps_the_memory_below_two_thirds(ohm: str, works: bool) -> None:
    """80 ohm in series: ``load / (load + 80)`` of the supply passes two thirds from 160 ohm on."""
    text = toggle({"Z1": f"{{load: {ohm} ohm, between: [out, gnd]}}"}, values=figured(high_resistance="80"))
    behaviour = derive(text)
    off = next(r for r in behaviour.held if (r.held, r.start) == (("PUSH",), "high"))

    assert (off.output == "low") == works
    assert bool(of_rule(behaviour, "high-level-too-low")) != works


def test_relay_to_the_supply_lifts_the_low_level_and_lengthens_turning_on() -> None:
    """A coil of 400 ohm beside 20 ohm: the memory heads for 9 V x 20 / 420 when low."""
    coil = {
        "K1": "{load: 400 ohm, coil: true, between: [vcc, out]}",
        "D9": "{diode: 0.7 V, between: [out, vcc]}",
    }
    behaviour = derive(toggle(coil, supply="9 V", values=figured(low_resistance="20")))
    ohm = 20 * 400 / 420
    low = 9 * 20 / 420
    rf = 100e3 + ohm
    held = (9 / 10e3 + low / rf) / (2 / 10e3 + 1 / rf)

    assert re_arm(behaviour, "low") == pytest.approx(rf * 1e-6 * math.log((held - low) / (3 - low)), rel=1e-4)
    assert re_arm(behaviour, "low") > re_arm(derive(toggle(supply="9 V")), "low") * 1.1


# --- on the discharge pin ---

DRAINED = {
    "R3": None,
    "D1": "{led: 2.0 V, between: [lamp, drain]}",
    "RL": "{resistor: 1k, between: [vcc, lamp]}",
}
DRAIN_PINS = "{trigger: set, threshold: gnd, reset: clear, output: out, discharge: drain}"
OUTPUTS = "outputs: {plain: {high: out}, lamp: {lit: D1}}\nport: {power_on: low}\n"


@pytest.mark.parametrize("family", ["bipolar", "cmos"])
def test_load_on_the_discharge_pin_comes_out_inverted(family: str) -> None:
    """The pin conducts while the latch is low: so must the port's output that stands for its lamp."""
    text = latch(DRAINED, pins=DRAIN_PINS, family=family, more=OUTPUTS)
    circuit = read_text(text, "piece.yaml")
    behaviour = porter.derive(circuit)
    port = porter.plan(circuit, behaviour)

    # bit 0: the timer's output, bit 1: the lamp
    assert port.outputs == ("plain", "lamp")
    assert [set(answers) for answers in port.answer] == [{0b10}, {0b01}]
    held = np.array([[0] * 5 + [1] * 5 + [0] * 5 + [2] * 5 + [0] * 5])
    out = run(port, held)[0]
    assert [out[k] for k in (2, 7, 12, 17, 22)] == [0b10, 0b01, 0b01, 0b10, 0b10]


def test_lamps_to_either_rail_light_in_turn() -> None:
    parts = {"RG": "{resistor: 1k, between: [vcc, red]}", "D2": "{led: 1.8 V, between: [red, out]}"}
    more = "outputs: {up: {lit: D1}, down: {lit: D2}}\nport: {power_on: low}\n"
    circuit = read_text(latch(parts, more=more), "piece.yaml")
    port = porter.plan(circuit, porter.derive(circuit))

    assert [set(answers) for answers in port.answer] == [{0b10}, {0b01}]


def test_discharge_resistance_holds_up_the_pin() -> None:
    values = "{discharge_resistance: 50}"
    text = latch(
        {**DRAINED, "D1": "{led: 2.0 V, slope: 10, between: [lamp, drain]}"}, pins=DRAIN_PINS, values=values
    )

    assert volts(text, 0, "drain") == pytest.approx(10 * 50 / 1060, rel=1e-6)


# --- contacts ---


def test_carbon_pads_set_but_do_not_reset() -> None:
    """1 kohm: the trigger comes to 1.09 V of 12 V, the reset pin to 12 V x 1 k / 8.5 k = 1.41 V."""
    buttons = {b: f"{{between: [{n}, gnd], resistance: 1k}}" for b, n in (("SET", "set"), ("CLEAR", "clear"))}
    values = IDEAL.replace("reset_current: 0 A", "reset_current: 0.4 mA")
    behaviour = derive(latch(buttons=buttons, values=values))
    found = {(r.held, r.start): r.output for r in behaviour.held}

    assert found[("SET",), "low"] == "high"
    assert found[("CLEAR",), "high"] == "high"
    assert [f.severity for f in of_rule(behaviour, "reset-not-low-enough")] == ["error"]


@pytest.mark.parametrize(("leak", "sets"), [("5.1k", False), ("4.9k", True)])
def test_leak_across_an_open_contact_can_press_it(leak: str, sets: bool) -> None:
    """Against 10 kohm the trigger falls below a third of the supply where the leak is below 5 kohm."""
    behaviour = derive(latch(buttons={"SET": f"{{between: [set, gnd], leak: {leak}}}"}, values=IDEAL))
    idle = {r.start: r.output for r in behaviour.held if not r.held}

    assert idle == ({"high": "high"} if sets else {"low": "low", "high": "high"})


def test_gaps_shorter_than_the_stray_gap_are_no_press_and_longer_ones_are() -> None:
    """The window is RC ln(30 / 21) = 35.667 ms after a hold (held contact 1 mohm)."""
    text = toggle()
    gap = re_arm(derive(text), "low")
    assert gap == pytest.approx(RC * math.log(30 / 21), rel=1e-5)
    for factor, turns in ((0.99, 1), (1.01, 2)):
        schedule = [(0.0, []), (0.1, ["PUSH"]), (0.6, []), (0.6 + gap * factor, ["PUSH"]), (1.5, [])]
        edges = porter.simulate(read_text(text, "piece.yaml"), schedule, 3.0, start="settled").edges
        assert len(edges) - 1 == turns


def test_a_train_of_short_gaps_is_one_press() -> None:
    """5 ms of bounce, half open, at both ends of a press."""
    schedule: list[tuple[float, list[str]]] = [(0.0, [])]
    for begin, last in ((0.1, ["PUSH"]), (0.4, [])):
        schedule += [(begin + k * 0.5e-3, ["PUSH"] if k % 2 == 0 else []) for k in range(10)]
        schedule.append((begin + 5e-3, last))
    edges = porter.simulate(read_text(toggle(), "piece.yaml"), schedule, 3.0, start="settled").edges

    assert [q for _, q in edges] == [0, 1]


def chattering(closed_s: float, period_s: float, count: int) -> list[float]:
    """When the toggle turns under a contact that closes for a while in every period, worked out by hand.

    Memory in parts of the supply: toward the output with 100 ms while open, toward 10/21 or 11/21
    with 100/21 ms while closed.  A closed contact shows it to the inputs; both held levels lie
    between the thirds, so that only the instant of closing can turn the output.
    """
    v, q, flips = 0.0, 0, []
    for k in range(count):
        if (v < 1 / 3 and not q) or (v > 2 / 3 and q):
            q ^= 1
            flips.append(k * period_s)
        end = (10 + q) / 21
        v = end + (v - end) * math.exp(-closed_s / (0.1 / 21))
        v = q + (v - q) * math.exp(-(period_s - closed_s) / 0.1)
    return flips


def test_chattering_contact_toggles_in_the_end() -> None:
    """Closings of 0.5 ms in every 10 ms don't settle the memory, so that it re-arms all the same."""
    schedule: list[tuple[float, list[str]]] = [(0.0, [])]
    for k in range(90):
        schedule += [(0.01 + k * 10e-3, ["PUSH"]), (0.01 + k * 10e-3 + 0.5e-3, [])]
    edges = porter.simulate(read_text(toggle(), "piece.yaml"), schedule, 0.91, start="settled").edges
    expected = chattering(0.5e-3, 10e-3, 90)

    assert len(expected) > 8
    assert [t - 0.01 for t, _ in edges[1:]] == pytest.approx(expected, abs=1e-7)


def test_bounce_longer_than_the_window_is_a_finding() -> None:
    """Just inside and just outside of the stray gap, 35.667 ms."""
    for bounce, found in (("35.4 ms", False), ("35.9 ms", True)):
        behaviour = derive(
            toggle(buttons={"PUSH": f"{{between: [store, mid], resistance: 1m, bounce: {bounce}}}"})
        )
        assert bool(of_rule(behaviour, "bounce-outlasts-window")) == found
