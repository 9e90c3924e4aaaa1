"""What circuits do, against closed forms worked out by hand and against each other."""

import math

import numpy as np
import pytest
from behaviour_circuits import IDEAL, TOGGLE_PARTS, derive, latch, of_rule, spec, toggle
from hypothesis import given, settings
from hypothesis import strategies as st

from porter.behaviour.measure import measure
from porter.behaviour.model import Behaviour, Window
from porter.circuit.engine import Engine
from porter.circuit.values import columns, samples
from porter.spec.read import read_text

C1 = {"C1": "{capacitor: 100n, between: [vcc, gnd]}"}
SET_WINS = "{trigger: set, threshold: off, reset: vcc, output: out}"
RC = 100e3 * 1e-6  # s, the toggle's feedback resistor and memory


def window(behaviour: Behaviour, button: str, start: str, kind: str) -> Window:
    return next(w for w in behaviour.windows if (w.button, w.start, w.window) == (button, start, kind))


def seconds(behaviour: Behaviour, button: str, start: str, kind: str) -> float:
    value = window(behaviour, button, start, kind).seconds.nominal
    assert value is not None
    return value


def held(behaviour: Behaviour) -> dict[tuple[tuple[str, ...], str], str]:
    return {(row.held, row.start): row.output for row in behaviour.held}


def set_wins() -> str:
    parts = {**C1, "R1": "{resistor: 10k, between: [vcc, set]}", "R2": "{resistor: 10k, between: [off, gnd]}"}
    buttons = {"SET": "{between: [set, gnd]}", "OFF": "{between: [off, vcc]}"}
    return spec(parts, buttons, SET_WINS, "5 V", "cmos", IDEAL, "")


# --- two buttons ---


def test_two_button_latch_holds_what_it_was_told() -> None:
    table = held(derive(latch()))

    assert table == {
        ((), "low"): "low",
        ((), "high"): "high",
        (("SET",), "low"): "high",
        (("SET",), "high"): "high",
        (("CLEAR",), "low"): "low",
        (("CLEAR",), "high"): "low",
        (("SET", "CLEAR"), "low"): "low",
        (("SET", "CLEAR"), "high"): "low",
    }


@pytest.mark.parametrize(
    ("text", "dominance", "output", "winner"),
    [(latch(), "reset-dominant", "low", "CLEAR"), (set_wins(), "set-dominant", "high", "SET")],
    ids=["reset", "set"],
)
def test_priority(text: str, dominance: str, output: str, winner: str) -> None:
    behaviour = derive(text)

    assert behaviour.dominance == dominance
    assert [(row.output, row.winner) for row in behaviour.priority] == [(output, winner)]


@pytest.mark.parametrize("text", [latch(), set_wins()], ids=["reset", "set"])
def test_last_button_released_decides(text: str) -> None:
    behaviour = derive(text)

    assert len(behaviour.releases) == 2
    for row in behaviour.releases:
        assert row.output == ("high" if row.order[-1] == "SET" else "low")


@pytest.mark.parametrize(
    ("extra", "output"),
    [
        ({}, "undetermined"),
        ({"CR": "{capacitor: 1u, between: [clear, gnd]}"}, "low"),
        ({"CS": "{capacitor: 1u, between: [set, gnd]}"}, "high"),
        # Both are forced: reset lets go after 0.0602 RC, trigger after 0.405 RC.
        (
            {"CR": "{capacitor: 1u, between: [clear, gnd]}", "CS": "{capacitor: 1u, between: [set, gnd]}"},
            "high",
        ),
    ],
)
def test_power_on(extra: dict[str, str], output: str) -> None:
    assert derive(latch(extra)).power_on.output == output


def test_straight_buttons_act_at_once_and_need_no_re_arming() -> None:
    behaviour = derive(latch())

    assert seconds(behaviour, "SET", "low", "shortest-press") == 0
    assert window(behaviour, "SET", "high", "shortest-press").seconds.nominal is None
    assert window(behaviour, "SET", "low", "stray-gap").seconds.nominal is None


def test_filtered_press_takes_its_time_constant() -> None:
    """From the supply to a third of it: RC ln 3."""
    parts = {
        "RS": "{resistor: 10k, between: [knob, set]}",
        "CS": "{capacitor: 1u, between: [set, gnd]}",
        "R1": "{resistor: 1k, between: [vcc, knob]}",
    }
    buttons = {"SET": "{between: [knob, gnd], resistance: 1m}"}
    behaviour = derive(latch(parts, buttons, family="cmos", values=IDEAL))

    assert seconds(behaviour, "SET", "low", "shortest-press") == pytest.approx(10e-3 * math.log(3), rel=1e-5)


# --- one button ---


@pytest.mark.parametrize("supply", [3, 5, 9, 15])
def test_ideal_toggle_re_arms_the_same_at_any_supply(supply: int) -> None:
    """Held level 10/21 of the supply; RC ln(3 x 10/21) after a hold, RC ln 3 after a tap."""
    behaviour = derive(toggle(supply=f"{supply} V"))

    for start in ("low", "high"):
        hold = seconds(behaviour, "PUSH", start, "re-arm-after-hold")
        assert hold == pytest.approx(RC * math.log(30 / 21), rel=1e-5)
        assert seconds(behaviour, "PUSH", start, "re-arm-after-tap") == pytest.approx(
            RC * math.log(3), rel=1e-5
        )
        assert seconds(behaviour, "PUSH", start, "stray-gap") == hold


@pytest.mark.parametrize("supply", [3, 5, 15])
def test_cmos_toggle_re_arms_nearly_so(supply: int) -> None:
    """The same but for the output's resistance, below a percent of the feedback's."""
    behaviour = derive(toggle(supply=f"{supply} V", values=""))

    for start in ("low", "high"):
        hold = seconds(behaviour, "PUSH", start, "re-arm-after-hold")
        assert hold == pytest.approx(0.35667 * RC, rel=0.01)


@pytest.mark.parametrize(("volts", "works"), [(4.85, False), (4.95, True), (9.0, True), (15.0, True)])
def test_bipolar_toggle_needs_three_times_the_drop(volts: float, works: bool) -> None:
    """A drop of 1.63 V: the memory reaches supply - drop and must pass two thirds of the supply."""
    values = IDEAL.replace("high_drop: 0 V", "high_drop: 1.63 V")
    behaviour = derive(toggle(supply=f"{volts} V", family="bipolar", values=values))

    assert (held(behaviour)[("PUSH",), "high"] == "low") == works
    assert bool(of_rule(behaviour, "high-level-too-low")) != works


def test_bipolar_toggle_re_arms_later_after_it_was_turned_on() -> None:
    """A high level further from its rail than the low one from its own."""
    behaviour = derive(toggle(supply="12 V", family="bipolar", values=""))

    on = seconds(behaviour, "PUSH", "high", "re-arm-after-hold")
    assert on > 1.3 * seconds(behaviour, "PUSH", "low", "re-arm-after-hold")
    assert behaviour.verdict == "sound"


def test_bipolar_toggle_at_5_v_is_not_guaranteed() -> None:
    """The published least threshold is 0.48 of the supply, the most 0.84 (TI SLFS022A p.4)."""
    behaviour = derive(toggle(family="bipolar", values=""))
    messages = [f.message for f in of_rule(behaviour, "hold-not-guaranteed")]

    assert behaviour.verdict == "typical-only"
    assert any("no button held, output high" in m and "least, 0.48" in m for m in messages)
    assert any("must turn it low" in m and "most, 0.84" in m for m in messages)


@pytest.mark.parametrize("family", ["cmos", "bipolar"])
def test_hold_is_guaranteed_at_15_v(family: str) -> None:
    """Middle of two 5 % resistors within the published levels at 15 V."""
    parts = {
        "RA": "{resistor: 10k ±5%, between: [vcc, mid]}",
        "RB": "{resistor: 10k ±5%, between: [mid, gnd]}",
    }
    behaviour = derive(toggle(parts, supply="15 V", family=family, values=""))

    rest = [m for m in behaviour.margins if m.where.startswith("no button")]
    assert rest and all(m.guaranteed.least is not None and m.guaranteed.least > 0 for m in rest)


def test_off_button_beside_a_toggle_wins() -> None:
    parts = {"R2": "{resistor: 10k, between: [vcc, clear]}"}
    buttons = {"OFF": "{between: [clear, gnd]}"}
    pins = "{trigger: mid, threshold: mid, reset: clear, output: out}"
    behaviour = derive(toggle(parts, buttons, pins=pins))

    assert held(behaviour)[("PUSH", "OFF"), "high"] == "low"
    assert held(behaviour)[("PUSH", "OFF"), "low"] == "low"
    assert [row.winner for row in behaviour.priority] == ["OFF"]


def test_margin_of_a_press_that_shares_charge_is_taken_at_its_peak() -> None:
    """5 V on 1 uF laid on half that voltage on 1.9 uF: (5 + 2.5 x 1.9) / 2.9 V, above 10 / 3 V."""
    behaviour = derive(toggle({"CX": "{capacitor: 1.9u, between: [mid, gnd]}"}))
    press = [m.volts.nominal for m in behaviour.margins if m.where.startswith("press of PUSH")]

    assert press == [pytest.approx(9.75 / 2.9 - 10 / 3, abs=1e-5)] * 2
    assert behaviour.verdict == "sound"


# --- circuits with one lasting output, or none ---


def test_one_shot_comes_back_by_itself() -> None:
    parts = {
        **C1,
        "RP": "{resistor: 10k, between: [vcc, go]}",
        "RT": "{resistor: 100k, between: [vcc, time]}",
        "CT": "{capacitor: 10u, between: [time, gnd]}",
    }
    pins = "{trigger: go, threshold: time, discharge: time, reset: vcc, output: out}"
    behaviour = derive(spec(parts, {"GO": "{between: [go, gnd]}"}, pins, "9 V", "bipolar", "", ""))

    assert held(behaviour) == {((), "low"): "low", (("GO",), "low"): "high"}
    assert behaviour.power_on.output == "low"
    assert [f for f in behaviour.findings if f.severity == "error"] == []


def test_delayed_off_needs_a_press_that_empties_its_capacitor() -> None:
    """100 ohm and 10 uF to a third of the supply: RC ln 3, but for the 1 Mohm that goes on charging."""
    parts = {
        **C1,
        "RT": "{resistor: 1M, between: [vcc, time]}",
        "CT": "{capacitor: 10u, between: [time, gnd]}",
        "RS": "{resistor: 100, between: [time, knob]}",
    }
    pins = "{trigger: time, threshold: time, reset: vcc, output: out}"
    buttons = {"GO": "{between: [knob, gnd], resistance: 1m}"}
    behaviour = derive(spec(parts, buttons, pins, "9 V", "cmos", IDEAL, ""))

    assert held(behaviour) == {((), "low"): "low", (("GO",), "low"): "high"}
    assert seconds(behaviour, "GO", "low", "shortest-press") == pytest.approx(1e-3 * math.log(3), rel=5e-4)


def test_gated_oscillator_is_told_with_its_period_and_left_in_peace() -> None:
    """Period ln 2 (RA + 2 RB) C, the formula of TI SLFS022I p.11."""
    parts = {
        **C1,
        "RE": "{resistor: 1k, between: [gate, gnd]}",
        "RA": "{resistor: 10k, between: [vcc, dis]}",
        "RB": "{resistor: 47k, between: [dis, time]}",
        "CT": "{capacitor: 1u, between: [time, gnd]}",
    }
    pins = "{trigger: time, threshold: time, discharge: dis, reset: gate, output: out}"
    values = IDEAL.replace("}", ", discharge_resistance: 1m}")
    behaviour = derive(spec(parts, {"RUN": "{between: [vcc, gate]}"}, pins, "9 V", "bipolar", values, ""))

    row = next(r for r in behaviour.held if r.held == ("RUN",))
    assert row.output == "oscillates"
    assert row.period_s == pytest.approx(math.log(2) * 104e-3, rel=1e-5)
    assert behaviour.findings == ()


# --- what must not matter, and what must ---


@settings(max_examples=12, deadline=None)
@given(order=st.permutations(sorted(TOGGLE_PARTS)), stem=st.sampled_from(["n", "zz_", "A"]))
def test_names_and_order_do_not_matter(order: list[str], stem: str) -> None:
    plain = toggle(values="", family="bipolar", supply="12 V")
    parts = {f"{stem}{name}": TOGGLE_PARTS[name] for name in order}
    text = toggle({**dict.fromkeys(TOGGLE_PARTS), **parts}, values="", family="bipolar", supply="12 V")
    for k, node in enumerate(("mid", "store", "out")):
        text = text.replace(f"[{node},", f"[{stem}{k},").replace(f", {node}]", f", {stem}{k}]")
        text = text.replace(f": {node},", f": {stem}{k},").replace(f": {node}}}", f": {stem}{k}}}")
    one, other = derive(plain), derive(text)

    assert held(one) == held(other)
    assert [f.rule for f in one.findings] == [f.rule for f in other.findings]
    for a, b in zip(one.windows, other.windows, strict=True):
        assert (a.seconds.nominal or 0) == pytest.approx(b.seconds.nominal or 0, rel=1e-9)
        assert (a.guaranteed.most or 0) == pytest.approx(b.guaranteed.most or 0, rel=1e-9)


@settings(max_examples=12, deadline=None)
@given(factor=st.floats(0.05, 20))
def test_impedance_level_does_not_matter(factor: float) -> None:
    parts = {
        "RA": f"{{resistor: {10e3 * factor:.9g}, between: [vcc, mid]}}",
        "RB": f"{{resistor: {10e3 * factor:.9g}, between: [mid, gnd]}}",
        "RF": f"{{resistor: {100e3 * factor:.9g}, between: [out, store]}}",
        "CM": f"{{capacitor: {1e-6 / factor:.9g}, between: [store, gnd]}}",
    }
    behaviour = derive(toggle(parts))

    assert seconds(behaviour, "PUSH", "low", "re-arm-after-hold") == pytest.approx(
        RC * math.log(30 / 21), rel=1e-4
    )
    assert held(behaviour) == held(derive(toggle()))


PIECES = {
    "toggle": toggle(
        {
            "RA": "{resistor: 10k ±5%, between: [vcc, mid]}",
            "RB": "{resistor: 10k ±5%, between: [mid, gnd]}",
            "RF": "{resistor: 100k ±5%, between: [out, store]}",
            "CM": "{capacitor: 1u ±20%, between: [store, gnd]}",
        },
        supply="12 V ±10%",
        family="bipolar",
        values="",
    ),
    "filter": latch(
        {
            "R1": "{resistor: 1k ±5%, between: [vcc, knob]}",
            "RS": "{resistor: 10k ±5%, between: [knob, set]}",
            "CS": "{capacitor: 1u +80% -20%, between: [set, gnd]}",
        },
        {"SET": "{between: [knob, gnd]}"},
        supply="12 V ±10%",
    ),
}


@pytest.mark.parametrize("name", PIECES)
@pytest.mark.parametrize("published", [False, True], ids=["drawn", "published"])
def test_no_unit_lies_outside_the_corners(name: str, published: bool) -> None:
    circuit = read_text(PIECES[name], "piece.yaml")
    behaviour = derive(PIECES[name])
    cols = columns(circuit)
    units = samples(cols, cols.free(published), 2000, seed=3)
    keys = tuple(measure(Engine(circuit)).margins)
    measured = measure(Engine(circuit, units, cols), keys)

    for w in behaviour.windows:
        band = w.guaranteed if published else w.seconds
        index = behaviour.buttons.index(w.button)
        values = measured.windows[index, ("low", "high").index(w.start), w.window]
        least = np.inf if band.least is None else band.least
        most = np.inf if band.most is None else band.most
        assert (values >= least * (1 - 1e-9)).all() and (values <= most * (1 + 1e-9)).all(), w
    for m, key in zip(behaviour.margins, keys, strict=True):
        band = m.guaranteed if published else m.volts
        assert band.least is not None and band.most is not None
        assert (measured.margins[key] >= band.least - 1e-9).all(), m
        assert (measured.margins[key] <= band.most + 1e-9).all(), m


def test_verdict_sound_means_that_every_sampled_unit_works() -> None:
    behaviour = derive(PIECES["toggle"])
    assert behaviour.verdict == "sound"

    circuit = read_text(PIECES["toggle"], "piece.yaml")
    cols = columns(circuit)
    measured = measure(Engine(circuit, samples(cols, cols.free(True), 2000, seed=4), cols))
    assert (measured.held[0, 1] == 1).all()
    assert (measured.held[1, 1] == 0).all()


def test_band_is_wider_with_the_published_spread() -> None:
    for w in derive(PIECES["toggle"]).windows:
        assert (w.guaranteed.least or 0) <= (w.seconds.least or 0)
        assert (w.guaranteed.most or np.inf) >= (w.seconds.most or np.inf) or w.seconds.most == 0
