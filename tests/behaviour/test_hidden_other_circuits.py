"""Other circuits around one timer: they derive, run, port and prove as latches do."""

import math
from functools import cache

import numpy as np
import pytest

import porter
from porter.behaviour.model import Behaviour
from porter.port.model import Port
from porter.port.step import run
from porter.spec.model import Circuit

Schedule = list[tuple[float, list[str]]]
LN3 = math.log(3)


@cache
def shipped(name: str) -> tuple[Circuit, Behaviour, Port]:
    circuit = porter.read(f"specs/{name}.yaml")
    behaviour = porter.derive(circuit)
    return circuit, behaviour, porter.plan(circuit, behaviour)


def circuit_edges(name: str, schedule: Schedule, end: float) -> list[tuple[float, int]]:
    return list(porter.simulate(shipped(name)[0], schedule, end, start="settled").edges)


def port_edges(name: str, schedule: Schedule, end: float) -> list[tuple[float, int]]:
    """Step the port through a schedule; bit 0 of its answer is the one output."""
    circuit, _, port = shipped(name)
    ticks = np.arange(int(end / port.tick_s)) * port.tick_s
    order = [b.name for b in circuit.buttons]
    masks = np.array([sum(1 << order.index(n) for n in names) for _, names in schedule])
    at = np.searchsorted([t for t, _ in schedule], ticks + 1e-9, side="right") - 1
    out = run(port, masks[at][None, :])[0].astype(int) & 1
    turns = np.flatnonzero(np.diff(out)) + 1
    return [(0.0, int(out[0])), *((float(ticks[k]), int(out[k])) for k in turns)]


RUNS: dict[str, tuple[Schedule, float]] = {
    "wash_door": (
        [(0, []), (1, ["LOCK"]), (1.003, []), (2, ["LOCK"]), (2.2, []), (3, ["FREE"]), (3.5, [])],
        5,
    ),
    "soap_dose": (
        [(0, []), (3, ["DOSE"]), (3.1, []), (6, ["DOSE"]), (6.1, []), (6.6, ["STOP"]), (6.7, [])],
        9,
    ),
    "stair_light": ([(0, []), (4, ["STEP"]), (4.3, []), (5.3, ["STEP"]), (5.6, [])], 9),
    "goose_buzzer": ([(0, []), (0.5, ["SHOO"]), (2.0, [])], 3),
}


@pytest.mark.parametrize("name", RUNS)
def test_circuit_is_sound_and_ports_by_charge(name: str) -> None:
    _, behaviour, port = shipped(name)

    assert behaviour.verdict == "sound"
    assert [f for f in behaviour.findings if f.severity == "error"] == []
    assert port.style == "charge"


@pytest.mark.parametrize("name", RUNS)
def test_port_follows_the_circuit_within_its_ticks(name: str) -> None:
    """An edge may come a tick late at the press and another at the flip inside a tick, and no edge more."""
    schedule, end = RUNS[name]
    tick = shipped(name)[2].tick_s
    ours = circuit_edges(name, schedule, end)
    theirs = port_edges(name, schedule, end)
    if name == "stair_light":  # lights up once at power-on, as its circuit does
        assert [q for _, q in theirs[:2]] == [1, 0]
        theirs = [(0.0, 0), *theirs[2:]]

    assert [q for _, q in theirs] == [q for _, q in ours]
    slack = tick * (2 + len(ours) / 2)  # an oscillator's edges add up their lateness
    assert [t for t, _ in theirs] == pytest.approx([t for t, _ in ours], abs=slack)


@pytest.mark.parametrize("name", ["stair_light", "goose_buzzer"])
def test_port_is_proved(name: str) -> None:
    """The other two take longer: see below."""
    parity = porter.prove(shipped(name)[0], shipped(name)[2], shipped(name)[1])

    assert parity.verdict in ("same", "within")
    assert parity.closure.complete


@pytest.mark.system
@pytest.mark.parametrize("name", ["wash_door", "soap_dose"])
def test_port_of_a_slower_one_is_proved(name: str) -> None:
    test_port_is_proved(name)


# --- each by its formula (CMOS figures: thirds of the supply) ---


def test_one_shot_lasts_rc_ln_3_and_its_cancel_ends_it() -> None:
    """330 kohm and 4.7 uF from the discharge switch's level, a third of a millivolt."""
    edges = circuit_edges("soap_dose", *RUNS["soap_dose"])

    assert [q for _, q in edges] == [0, 1, 0, 1, 0]
    assert edges[2][0] - edges[1][0] == pytest.approx(330e3 * 4.7e-6 * LN3, rel=1e-4)
    assert (edges[3][0], edges[4][0]) == pytest.approx((6.0, 6.6))


def test_delayed_off_starts_anew_with_each_press() -> None:
    """Off when 220 kohm have charged 10 uF to two thirds after the last release, from 1.9 mV of 9 V."""
    edges = circuit_edges("stair_light", *RUNS["stair_light"])

    assert [q for _, q in edges] == [0, 1, 0]
    assert edges[2][0] - 5.6 == pytest.approx(2.2 * LN3, rel=5e-4)


def test_gated_oscillator_beats_and_falls_silent() -> None:
    """ln 2 (R1 + 2 R2) C (TI SLFS022I p.11), the level of the discharge switch within 2e-3."""
    _, behaviour, _ = shipped("goose_buzzer")
    edges = circuit_edges("goose_buzzer", *RUNS["goose_buzzer"])
    rising = [t for t, q in edges[1:] if q]
    row = next(r for r in behaviour.held if r.held == ("SHOO",))

    period = math.log(2) * (10e3 + 2 * 68e3) * 2.2e-6
    assert row.output == "oscillates" and row.period_s == pytest.approx(period, rel=2e-3)
    assert np.diff(rising)[1:] == pytest.approx(period, rel=2e-3)
    assert edges[-1][1] == 0 and edges[-1][0] <= 2.0 + 1e-9


def test_filtered_button_notices_a_press_from_rc_ln_3_on() -> None:
    """10 kohm and 470 nF, from 5 V toward ground until a third."""
    _, behaviour, _ = shipped("wash_door")
    window = next(
        w for w in behaviour.windows if (w.button, w.start, w.window) == ("LOCK", "low", "shortest-press")
    )
    shortest = 4.7e-3 * LN3

    assert window.seconds.nominal == pytest.approx(shortest, rel=1e-3)
    for factor, acts in ((0.99, False), (1.01, True)):
        edges = circuit_edges("wash_door", [(0, []), (1, ["LOCK"]), (1 + shortest * factor, [])], 2)
        assert (len(edges) > 1) == acts
