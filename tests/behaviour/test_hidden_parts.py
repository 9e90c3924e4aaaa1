"""Parts that nobody thinks of and that change what the circuit does, against closed forms."""

import math

import numpy as np
import pytest
from behaviour_circuits import IDEAL, derive, latch, of_rule, spec, toggle

from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.single_run import simulate
from porter.spec.read import read_text

RC = 0.1  # s, the toggle's 100 kohm and 1 uF
CONTROL = "{trigger: mid, threshold: mid, reset: vcc, output: out, control: ctl}"


def outputs(behaviour: Behaviour) -> dict[tuple[tuple[str, ...], str], str]:
    return {(row.held, row.start): row.output for row in behaviour.held}


def edges(
    text: str, schedule: list[tuple[float, list[str]]], end: float, **how: str
) -> list[tuple[float, int]]:
    run = simulate(read_text(text, "piece.yaml"), schedule, end, **how)  # type: ignore[arg-type]
    return list(run.edges)


# --- a capacitor on the joined inputs ---


def test_charge_is_shared_at_the_instant_of_the_press() -> None:
    """5 V on 100 nF laid on 2.5 V on 10 nF: 4.772727 V, then toward the held level."""
    text = toggle(
        {"CM": "{capacitor: 100n, between: [store, gnd]}", "CX": "{capacitor: 10n, between: [mid, gnd]}"}
    )
    circuit = read_text(text, "piece.yaml")
    engine = Engine(circuit)
    lanes, _ = engine.rest(1)
    assert engine.volts(lanes)[0][[engine.topo.node("store"), engine.topo.node("mid")]] == pytest.approx(
        [5, 2.5], abs=1e-4
    )
    engine.press(lanes, 1)
    engine.run(lanes, 1e-10)  # ten time constants of the 1 mohm contact
    assert engine.volts(lanes)[0][engine.topo.node("mid")] == pytest.approx(4.772727, abs=1e-4)


@pytest.mark.parametrize(("farad", "acts"), [("1.98u", True), ("2.02u", False)])
def test_too_much_on_the_inputs_defeats_the_press(farad: str, acts: bool) -> None:
    """``(5 C + 2.5 Cx) / (C + Cx)`` passes two thirds of 5 V where Cx is below twice C."""
    behaviour = derive(toggle({"CX": f"{{capacitor: {farad}, between: [mid, gnd]}}"}))

    assert outputs(behaviour)[("PUSH",), "low"] == ("high" if acts else "low")
    assert outputs(behaviour)[("PUSH",), "high"] == ("low" if acts else "high")
    assert bool(of_rule(behaviour, "capacitor-on-inputs")) != acts


# --- on the control pin ---


@pytest.mark.parametrize(("family", "each"), [("bipolar", 5e3), ("cmos", 100e3)])
def test_resistor_from_the_control_pin_moves_both_levels(family: str, each: float) -> None:
    """A resistor of twice ``each`` to ground: the control pin at V/2, so the one-shot takes RC ln 2."""
    parts = {
        "RP": "{resistor: 10k, between: [vcc, go]}",
        "RT": "{resistor: 100k, between: [vcc, time]}",
        "CT": "{capacitor: 1u, between: [time, gnd]}",
        "RC": f"{{resistor: {2 * each:.0f}, between: [ctl, gnd]}}",
    }
    pins = "{trigger: go, threshold: time, discharge: time, reset: vcc, output: out, control: ctl}"
    values = IDEAL.replace("}", f", divider: {each:.0f}, discharge_resistance: 1m}}")
    text = spec(parts, {"GO": "{between: [go, gnd]}"}, pins, "9 V", family, values, "")
    run = edges(text, [(0.0, []), (0.01, ["GO"]), (0.011, [])], 1.0, start="settled")

    assert [q for _, q in run] == [0, 1, 0]
    assert run[2][0] - run[1][0] == pytest.approx(RC * math.log(2), rel=1e-6)
    levels = {level.name: level.volts.nominal for level in derive(text).levels}
    assert levels["threshold level"] == pytest.approx(4.5)
    assert levels["trigger level"] == pytest.approx(2.25)


def test_slow_control_pin_changes_nothing_at_rest() -> None:
    plain, slow = (
        derive(toggle({"CC": c}, pins=CONTROL)) for c in (None, "{capacitor: 100u, between: [ctl, gnd]}")
    )

    assert outputs(plain) == outputs(slow)
    for a, b in zip(plain.windows, slow.windows, strict=True):
        assert (a.seconds.nominal or 0) == pytest.approx(b.seconds.nominal or 0, rel=1e-9)


# --- on reset ---


@pytest.mark.parametrize(("milliampere", "least", "most"), [(0.0, 0.99, 1.01), (0.4, 8, 10), (1.5, 25, 40)])
def test_reset_pin_shortens_its_rc(milliampere: float, least: float, most: float) -> None:
    """The bipolar pin gives 0.4 mA typical, 1.5 mA most, at 0 V (TI SLFS022A p.4): beside 100 kohm at 5 V
    that is 12.5 kohm or 3.33 kohm, so that the reset ends an order of magnitude sooner than the drawn RC says.
    """
    values = IDEAL.replace("reset_current: 0 A", f"reset_current: {milliampere} mA").replace(
        "reset_level: 1 V", "reset_level: 0.7 V"
    )
    parts = {"R2": "{resistor: 100k, between: [vcc, clear]}", "CR": "{capacitor: 10u, between: [clear, gnd]}"}
    run = edges(latch(parts, supply="5 V", values=values), [(0.0, ["SET"])], 10.0)
    pin = 5 / (milliampere * 1e-3) if milliampere else math.inf
    ohm = 1 / (1 / 100e3 + 1 / pin)

    released = run[-1][0]
    assert run[-1][1] == 1
    assert released == pytest.approx(ohm * 10e-6 * math.log(5 / 4.3), rel=1e-6)
    assert least <= 100e3 / ohm <= most


def test_a_weak_pull_down_cannot_reset_a_bipolar_part() -> None:
    """0.4 mA at 0 V through 12 V / 0.4 mA = 30 kohm beside the pull-up of 10 kohm: 7.5 kohm.

    Below 0.7 V the pull-down must be under 7.5 k x 0.7 / 11.3 = 464.6 ohm.
    """
    values = IDEAL.replace("reset_current: 0 A", "reset_current: 0.4 mA").replace(
        "reset_level: 1 V", "reset_level: 0.7 V"
    )
    for ohm, resets in ((460, True), (469, False)):
        buttons = {"CLEAR": f"{{between: [clear, gnd], resistance: {ohm}}}"}
        behaviour = derive(latch(buttons=buttons, values=values))
        assert outputs(behaviour)[("CLEAR",), "high"] == ("low" if resets else "high")
        assert outputs(behaviour)[("SET",), "low"] == "high"
        assert bool(of_rule(behaviour, "reset-not-low-enough")) != resets


# --- leaks ---


@pytest.mark.parametrize(("leak", "works"), [("202k", True), ("198k", False)])
def test_leaky_memory_makes_turning_off_impossible(leak: str, works: bool) -> None:
    """The memory ends at ``V leak / (Rf + leak)``; two thirds need a leak above twice Rf."""
    behaviour = derive(toggle({"CM": f"{{capacitor: 1u, leak: {leak}, between: [store, gnd]}}"}))

    assert outputs(behaviour)[("PUSH",), "low"] == "high"
    assert outputs(behaviour)[("PUSH",), "high"] == ("low" if works else "high")
    assert bool(of_rule(behaviour, "leak-too-high")) != works


def test_leak_moves_the_re_arm_time() -> None:
    """Toward V leak / (Rf + leak) with tau = C (Rf || leak): 300 kohm, so 0.75 V and 75 ms."""
    behaviour = derive(toggle({"CM": "{capacitor: 1u, leak: 300k, between: [store, gnd]}"}))
    held = (1 / 10e3 + 1 / 100e3) / (2 / 10e3 + 1 / 100e3 + 1 / 300e3)  # with the output high, of the supply
    window = next(w for w in behaviour.windows if (w.window, w.start) == ("re-arm-after-hold", "high"))

    assert window.seconds.nominal == pytest.approx(0.075 * math.log((0.75 - held) / (0.75 - 2 / 3)), rel=1e-5)


# --- unequal dividers ---


def test_uneven_divider_makes_a_one_shot() -> None:
    """Inputs idling at 0.75 V: the output rests low alone. A press lets it be high until the memory,
    from 0 V, reaches two thirds while held.
    """
    text = toggle({"RB": "{resistor: 30k, between: [mid, gnd]}"})
    siemens = 1 / 10e3 + 1 / 30e3 + 1 / 100e3
    end, tau = (1 / 10e3 + 1 / 100e3) / siemens, 1e-6 / siemens
    run = edges(text, [(0.0, []), (0.1, ["PUSH"])], 1.0, start="settled")

    assert [q for _, q in run] == [0, 1, 0]
    assert run[2][0] - run[1][0] == pytest.approx(tau * math.log(end / (end - 2 / 3)), rel=1e-5)
    assert {r.start for r in derive(text).held} == {"low"}
    assert of_rule(derive(text), "divider-uneven")


def test_even_enough_divider_stays_a_latch() -> None:
    """Inputs just below two thirds: ``RB < 2 RA``."""
    behaviour = derive(toggle({"RB": "{resistor: 19.8k, between: [mid, gnd]}"}))

    assert {r.start for r in behaviour.held} == {"low", "high"}


# --- two buttons on one node ---

PAIR = {"UP": "{between: [vcc, up], resistance: 1m}", "DOWN": "{between: [down, gnd], resistance: 1m}"}


def pair(up: str, down: str, spread: str = "") -> str:
    """One node, held at half the supply by 100 kohm each, that two buttons pull up and down."""
    parts = {
        "RA": "{resistor: 100k, between: [vcc, mid]}",
        "RB": "{resistor: 100k, between: [mid, gnd]}",
        "RU": f"{{resistor: {up}{spread}, between: [up, mid]}}",
        "RD": f"{{resistor: {down}{spread}, between: [down, mid]}}",
        "C1": "{capacitor: 100n, between: [vcc, gnd]}",
    }
    pins = "{trigger: mid, threshold: mid, reset: vcc, output: out}"
    return spec(parts, PAIR, pins, "9 V", "cmos", IDEAL, "port: {power_on: low}\n")


def level(up: float, down: float) -> float:
    """Both held: the node as a part of the supply."""
    a, b = 1 / 100e3 + 1 / up, 1 / 100e3 + 1 / down
    return a / (a + b)


@pytest.mark.parametrize(
    ("up", "down", "low", "high"),
    [
        ("1k", "1k", "low", "high"),  # half: keeps
        ("1k", "2.1k", "low", "low"),  # above two thirds: resets
        ("2.1k", "1k", "high", "high"),  # below one third: sets
        ("1k", "1.9k", "low", "high"),  # just inside: keeps
    ],
)
def test_two_buttons_on_one_node_meet_in_a_divider(up: str, down: str, low: str, high: str) -> None:
    behaviour = derive(pair(up, down))
    found = outputs(behaviour)
    at = level(*(float(v.rstrip("k")) * 1e3 for v in (up, down)))

    assert (found[("UP", "DOWN"), "low"], found[("UP", "DOWN"), "high"]) == (low, high)
    assert (found[("UP",), "high"], found[("DOWN",), "low"]) == ("low", "high")
    assert (low == high == "low") == (at > 2 / 3) and (low == high == "high") == (at < 1 / 3)
    assert not of_rule(behaviour, "supply-short")


def test_two_buttons_on_one_node_differ_from_unit_to_unit() -> None:
    """1 k and 1.9 k of 5 % lie on both sides of two thirds; of 1 % they don't."""
    wide = {(r.held, r.start): r for r in derive(pair("1k", "1.9k", " ±5%")).held}
    tight = {(r.held, r.start): r for r in derive(pair("1k", "1.9k", " ±1%")).held}

    assert wide[("UP", "DOWN"), "high"].corners == "either"
    assert tight[("UP", "DOWN"), "high"].corners == "same"
    assert wide[("UP",), "high"].corners == wide[("DOWN",), "low"].corners == "same"


def test_two_buttons_on_one_node_without_resistors_short_the_supply() -> None:
    text = pair("1k", "1k").replace("[vcc, up]", "[vcc, mid]").replace("[down, gnd]", "[mid, gnd]")
    text = text.replace("[up, mid]", "[vcc, mid]").replace("[down, mid]", "[mid, gnd]")

    assert [f.severity for f in of_rule(derive(text), "supply-short")] == ["error"]


def test_bipolar_half_supply_is_held_by_some_units_only() -> None:
    """At 5 V the published least threshold is 0.48 of the supply (TI SLFS022A p.4)."""
    rows = {(r.held, r.start): r for r in derive(toggle(family="bipolar", values="")).held}

    assert rows[(), "high"].corners == "same"
    assert rows[(), "high"].guaranteed == "either"
    assert np.all([r.guaranteed == "same" for r in derive(toggle(values="")).held])
