"""The network's solutions against formulas and rules that need no solver."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from porter.circuit.engine import Engine
from porter.circuit.values import columns
from porter.spec.read import read_text

#: No input currents and rails for output levels, so that only the drawn parts count.
PLAIN = (
    "{high_drop: 0 V, low_level: 0 V, high_resistance: 1m, low_resistance: 1m, "
    "trigger_current: 0 A, threshold_current: 0 A, reset_current: 0 A, reset_high_current: 0 A}"
)
PULLS = ("RT: {resistor: 10k, between: [vcc, t]}", "RO: {resistor: 10k, between: [out, gnd]}")


def _circuit(*parts: str, buttons: str = "GO: {between: [t, gnd]}", supply: str = "10 V"):
    lines = "".join(f"  {part}\n" for part in (*PULLS, *parts))
    return read_text(
        f"circuit: A test piece\nsupply: {supply}\n"
        "timer:\n  family: bipolar\n"
        "  pins: {trigger: t, threshold: gnd, reset: vcc, output: out}\n"
        f"  values: {PLAIN}\nparts:\n{lines}buttons:\n  {buttons}\n",
        "test_piece.yaml",
    )


def _settled(circuit, rows=None) -> tuple[Engine, dict[str, np.ndarray]]:
    """Node voltages with the latch low and no button held, one entry a unit."""
    engine = Engine(circuit, rows)
    lanes = engine.empty(0)
    engine.run(lanes, np.inf, frozen=True)
    return engine, dict(zip(engine.topo.nodes, engine.volts(lanes).T, strict=True))


@given(st.integers(1, 10**7), st.integers(1, 10**7), st.integers(5, 15))
@settings(max_examples=40)
def test_a_divider_divides(top: int, bottom: int, supply: int) -> None:
    """v = V R2 / (R1 + R2)."""
    circuit = _circuit(
        f"R1: {{resistor: {top}, between: [vcc, m]}}",
        f"R2: {{resistor: {bottom}, between: [m, gnd]}}",
        supply=f"{supply} V",
    )
    _, volts = _settled(circuit)
    assert np.isclose(volts["m"][0], supply * bottom / (top + bottom), rtol=1e-12)


@given(*[st.floats(1, 10)] * 2, *[st.floats(1e-5, 1e-3)] * 2)
@settings(max_examples=40)
def test_sources_superpose(supply_a: float, supply_b: float, load_a: float, load_b: float) -> None:
    """With supply and load current added up, every voltage is the sum of the two apart."""
    circuit = _circuit(
        "R1: {resistor: 470, between: [vcc, a]}",
        "R2: {resistor: 220, between: [a, b]}",
        "R3: {resistor: 1k, between: [a, gnd]}",
        "R4: {resistor: 330, between: [b, gnd]}",
        "L1: {load: 0.1 mA, between: [b, gnd]}",
        "C1: {capacitor: 1u, between: [b, gnd]}",
    )
    cols = columns(circuit)
    rows = np.tile(cols.nominal, (3, 1))
    rows[:, cols.index("supply")] = supply_a, supply_b, supply_a + supply_b
    rows[:, cols.index("parts.L1")] = load_a, load_b, load_a + load_b
    _, volts = _settled(circuit, rows)
    # Where a load would pull its node below the other rail it stops drawing: another mode.
    if (volts["b"] > 1e-3).all():
        for node in ("a", "b"):
            assert np.isclose(volts[node][0] + volts[node][1], volts[node][2], rtol=1e-10)


@pytest.mark.parametrize("supply", [1.0, 1.9, 2.1, 5.0, 12.0])
def test_an_led_conducts_above_its_voltage_only(supply: float) -> None:
    """(V - 2.0 V) is shared by resistor and slope above 2.0 V; below, no current flows at all."""
    circuit = _circuit(
        "R1: {resistor: 1k, between: [k, gnd]}", "D1: {led: 2.0 V, between: [vcc, k]}", supply=f"{supply} V"
    )
    _, volts = _settled(circuit)
    slope = next(p.slope.nominal for p in circuit.parts if p.name == "D1")
    expected = max(supply - 2.0, 0.0) * 1000 / (1000 + slope)
    assert np.isclose(volts["k"][0], expected, rtol=1e-12, atol=1e-12)


def test_a_node_behind_an_open_contact_floats_until_it_is_pressed() -> None:
    """Without its pull-up the trigger is fixed by nothing; pressed, the contact fixes it."""
    held = "GO: {between: [t, gnd]}\n  AIM: {between: [t, f]}"
    engine = Engine(_circuit("R1: {resistor: 1M, between: [f, g]}", buttons=held))
    node = engine.topo.node("f")
    lanes = engine.empty(0)
    assert engine.floating(lanes)[0, node]
    assert not engine.floating(lanes)[0, engine.topo.node("t")]
    engine.press(lanes, 0b10)
    assert not engine.floating(lanes)[0, node]


def test_a_charge_fixes_a_node_too() -> None:
    """A node that a capacitor joins to a rail has a voltage of its own for ever."""
    buttons = "GO: {between: [t, gnd]}\n  AIM: {between: [t, f]}"
    engine = Engine(_circuit("C1: {capacitor: 1u, between: [f, gnd]}", buttons=buttons))
    assert not engine.floating(engine.empty(0))[0, engine.topo.node("f")]


NODES = ("vcc", "a", "b", "c", "gnd")
ENDS = st.tuples(st.sampled_from(NODES), st.sampled_from(NODES)).filter(lambda ends: ends[0] != ends[1])


@given(
    st.lists(st.tuples(ENDS, st.integers(3, 30)), min_size=1, max_size=5),
    st.lists(st.integers(10, 10000), min_size=6, max_size=6),
)
@settings(max_examples=40)
def test_the_conducting_set_is_the_one_that_trying_all_finds(leds, ohms: list[int]) -> None:
    """Least-index pivoting ends in a set of one-way branches that is consistent, as trying every set does.

    Where several sets are consistent (a current of exactly nothing) their voltages are the same.
    """
    pulls = [(rail, node) for node in "abc" for rail in ("vcc", "gnd")]
    parts = [
        f"R{k}: {{resistor: {ohm}, between: [{a}, {b}]}}"
        for k, ((a, b), ohm) in enumerate(zip(pulls, ohms, strict=True))
    ]
    parts += [
        f"D{k}: {{led: {tenths / 10} V, between: [{a}, {b}]}}" for k, ((a, b), tenths) in enumerate(leds)
    ]
    engine, volts = _settled(_circuit(*parts, supply="12 V"))
    consistent = []
    for conducts in range(1 << engine.topo.ways):
        mode = engine.mode(0, 0, conducts)
        if (mode.g0[0, 3:] >= -1e-9).all():
            consistent.append(mode.v0[0])
    found = np.array([volts[name][0] for name in engine.topo.nodes])
    assert consistent
    for expected in consistent:
        assert np.allclose(expected, found, atol=1e-7)
