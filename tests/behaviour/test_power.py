"""What comes of every way in which the supply comes, goes and dips, against closed forms."""

import json
import math

import numpy as np
import pytest
from behaviour_circuits import IDEAL, derive, latch, toggle
from click.testing import CliRunner

import porter
from porter.behaviour.model import Behaviour, PowerRow
from porter.circuit.power import Powered, Profile, dip, follow, pieces, ramp, step
from porter.cli import cli
from porter.show.machine import derived
from porter.show.play import PressError, read_supply
from porter.spec.read import read_text
from porter.supply_run import simulate_supply

ON_RESET = {"CR": "{capacitor: 1u, between: [clear, gnd]}"}
SLOW = latch(ON_RESET, supply="10 V", family="cmos", values=IDEAL)
WORKS = 2.0  # V, least published supply of the class (TI SLFS043C)
CONTROL = "{trigger: mid, threshold: mid, reset: vcc, output: out, control: ctl}"


def outcome(text: str, profile: Profile, *, start: int | None = None, held: int = 0) -> set[int]:
    """Return the latch at last, for a chip that wakes low and for one that wakes high."""
    engine = Powered(read_text(text, "piece.yaml"), 2)
    wakes = np.array([0, 1])
    lanes = engine.dark(2, held) if start is None else engine.settled(np.full(2, start), held)[0]
    follow(engine, lanes, [profile, profile], wakes)
    return set(lanes.q.tolist())


def row(behaviour: Behaviour, profile: str, held: tuple[str, ...] = (), start: str | None = None) -> PowerRow:
    return next(r for r in behaviour.power if (r.profile, r.held, r.start) == (profile, held, start))


# --- coming up ---


def reset_at_wake(rise_s: float) -> float:
    """10 kohm and 1 uF on a ramp of 10 V: ``s (t - RC (1 - exp(-t / RC)))`` when it passes 2 V."""
    slope, rc = 10 / rise_s, 10e-3
    t = WORKS / slope
    return slope * (t - rc * -math.expm1(-t / rc))


def test_capacitor_on_reset_forces_low_up_to_a_rise_time() -> None:
    """Forced while the reset pin is below its level (1 V) when the chip starts to work."""
    low, high = 1e-3, 10.0
    for _ in range(60):
        middle = math.sqrt(low * high)
        low, high = (middle, high) if reset_at_wake(middle) < 1.0 else (low, middle)

    assert outcome(SLOW, ramp(10, low * 0.999)) == {0}
    assert outcome(SLOW, ramp(10, high * 1.001)) == {0, 1}


def test_rows_say_how_the_start_depends_on_the_rise() -> None:
    behaviour = derive(SLOW)

    assert row(behaviour, "step").output == "low"
    assert row(behaviour, "ramp 1 s").output == "undetermined"
    assert any(
        "low after step to ramp 10 ms; undetermined after ramp 100 ms to ramp 1 s" in n
        for n in behaviour.notes
    )
    assert f"reset {(1 - reset_at_wake(1e-3)) * 1e3:.4g} mV below" in row(behaviour, "ramp 1 ms").why
    assert f"starts to work at {WORKS:.0f} V" in row(behaviour, "ramp 1 ms").why


@pytest.mark.parametrize("family", ["cmos", "bipolar"])
def test_nothing_forces_a_plain_latch_and_a_held_button_does(family: str) -> None:
    behaviour = derive(latch(family=family, more="port: {power_on: low}\n"))

    for profile in ("step", "ramp 1 µs", "ramp 1 ms", "ramp 1 s"):
        assert row(behaviour, profile).output == "undetermined"
        assert row(behaviour, profile, ("SET",)).output == "high"
        assert row(behaviour, profile, ("CLEAR",)).output == "low"
    assert row(behaviour, "step").port == "starts low"
    assert row(behaviour, "step", ("SET",)).port == "starts low, then turns high"


def test_works_from_the_familys_least_supply() -> None:
    """Bipolar: 4.5 V (SNAS548C); the pull-up holds the reset pin above its level by then."""
    assert "starts to work at 4.5 V" in row(derive(latch()), "ramp 1 ms").why


def test_filtered_trigger_forces_high_on_a_step_and_not_on_a_slow_ramp() -> None:
    """The trigger lags by the slope times 10 ms: below a third of 2 V at once, no more at 1 V/s."""
    text = latch({"CS": "{capacitor: 1u, between: [set, gnd]}"}, supply="10 V", family="cmos", values=IDEAL)

    assert outcome(text, step(10)) == {1}
    assert outcome(text, ramp(10, 10.0)) == {0, 1}


def test_step_row_agrees_with_power_on() -> None:
    for text in (latch(), SLOW, toggle(), latch({"CS": "{capacitor: 1u, between: [set, gnd]}"})):
        behaviour = derive(text)
        assert row(behaviour, "step").output == behaviour.power_on.output


# --- a capacitor on the control pin ---


def test_capacitor_on_the_control_pin_forces_the_start() -> None:
    """Empty, it puts both levels at 0 V: the joined inputs are above the threshold, so low."""
    text = toggle({"CC": "{capacitor: 10n, between: [ctl, gnd]}"}, pins=CONTROL)

    assert outcome(toggle(), step(5)) == {0, 1}
    assert outcome(text, step(5)) == {0}
    assert row(derive(text), "step").output == "low"


@pytest.mark.parametrize(("part", "turned"), [(0.65, {1}), (0.69, {0})])
def test_capacitor_on_the_control_pin_answers_a_dip(part: float, turned: set[int]) -> None:
    """It keeps the trigger level at a third of the full supply; the inputs follow at half of the dip's.

    So a dip below two thirds turns the output on; without the capacitor nothing does.
    """
    text = toggle({"CC": "{capacitor: 10u, between: [ctl, gnd]}"}, pins=CONTROL)

    assert outcome(text, dip(5, 5 * part, 1e-3), start=0) == turned
    assert outcome(toggle(), dip(5, 5 * part, 1e-3), start=0) == {0}


def test_rows_tell_of_a_dip_that_is_answered() -> None:
    behaviour = derive(toggle({"CC": "{capacitor: 10u, between: [ctl, gnd]}"}, pins=CONTROL))
    answered = row(behaviour, "dip to 60% for 1 ms", start="low")

    assert answered.output == "high"
    assert "lagging voltages turn it high" in answered.why
    assert answered.port == "keeps low while its own supply holds, else starts low"
    assert any(
        n.startswith("a low output is high after: ") and answered.profile in n for n in behaviour.notes
    )
    assert row(derive(toggle()), "dip to 60% for 1 ms", start="low").output == "low"


# --- dropouts ---


def test_dropout_must_empty_the_reset_capacitor() -> None:
    """10 V on 10 ms falls below the reset level of 1 V after RC ln 10 = 23.03 ms."""
    for start in (0, 1):
        assert outcome(SLOW, dip(10, 0, 23.1e-3), start=start) == {0}
        assert outcome(SLOW, dip(10, 0, 22.9e-3), start=start) == {0, 1}
    behaviour = derive(SLOW)
    assert row(behaviour, "dropout 100 ms", start="high").output == "low"
    assert row(behaviour, "dropout 10 ms", start="high").output == "undetermined"


def test_latch_survives_a_dip_that_leaves_the_chip_working_and_no_other() -> None:
    assert outcome(latch(supply="12 V"), dip(12, 4.6, 1.0), start=1) == {1}
    assert outcome(latch(supply="12 V"), dip(12, 4.4, 1e-6), start=1) == {0, 1}


# --- profiles ---


def test_profile_is_cut_where_the_chip_starts_and_stops_working() -> None:
    cut = pieces(Profile(((0, 0), (1.0, 10.0), (2.0, 0.0))), 2.0)

    assert [(p.volts, p.slope, p.awake) for p in cut] == [
        (0, 10, False), (2, 10, True), (10, -10, True), (2, -10, False), (0, 0, False),
    ]  # fmt: skip
    assert [p.seconds for p in cut] == pytest.approx([0.2, 0.8, 0.8, 0.2, math.inf])


@pytest.mark.parametrize(
    "points", [(), ((1.0, 5.0),), ((0.0, 5.0), (2.0, 5.0), (1.0, 0.0)), ((0.0, -1.0),), ((0.0, math.inf),)]
)
def test_profile_that_is_none(points: tuple[tuple[float, float], ...]) -> None:
    with pytest.raises(ValueError, match="supply"):
        Profile(points)


def test_rows_are_printed_for_machines() -> None:
    rows = json.loads(json.dumps(derived(derive(SLOW))))["power"]

    assert {"profile": "step", "from": None, "held": [], "output": "low"}.items() <= rows[0].items()
    assert set(rows[0]) == {"profile", "from", "held", "output", "why", "port"}


def test_shipped_door_latch() -> None:
    """Its slow reset filter decides: low up to 100 ms of rise; a 100 ms dropout empties the trigger's filter only."""
    behaviour = porter.derive(porter.read("specs/wash_door.yaml"))

    assert [r.output for r in behaviour.power if r.start is None and not r.held] == ["low"] * 5 + [
        "undetermined"
    ]
    assert row(behaviour, "dropout 100 ms", start="low").output == "high"
    assert row(behaviour, "dropout 1 s", start="high").output == "low"


# --- one run ---


def test_run_on_a_ramp_shows_voltages_and_edges() -> None:
    """Nodes lag a ramp of 100 V/s by ``s RC (1 - exp(-t / RC))``; a press on the way is seen."""
    circuit = read_text(SLOW, "piece.yaml")
    times = np.array([0.01, 0.05, 0.09, 0.5])
    result = simulate_supply(
        circuit,
        ramp(10, 0.1),
        [(0.0, []), (0.2, ["SET"]), (0.3, [])],
        1.0,
        nodes=("clear", "vcc"),
        times=times,
    )

    up = 100 * (times[:3] - 10e-3 * -np.expm1(-times[:3] / 10e-3))
    assert result.volts[0, :3] == pytest.approx(up, rel=1e-9)
    assert result.volts[1] == pytest.approx([1, 5, 9, 10])
    assert result.edges == ((0.0, 0), (0.2, 1))


def test_run_through_a_dropout_loses_the_output_and_a_button_brings_it_back() -> None:
    circuit = read_text(SLOW, "piece.yaml")
    supply = Profile(((0.0, 10.0), (0.1, 10.0), (0.1, 0.0), (0.2, 0.0), (0.2, 10.0)))
    result = simulate_supply(circuit, supply, [(0.0, []), (0.15, ["SET"]), (0.4, [])], 1.0, start="high")

    # The reset capacitor, emptied for ten time constants, passes 1 V.
    released = 0.2 + 10e-3 * math.log((10 - 10 * math.exp(-10)) / 9)
    assert result.edges[:2] == ((0.0, 1), (0.1, 0))
    assert result.edges[2] == (pytest.approx(released, rel=1e-6), 1)


@pytest.mark.parametrize("wakes", ["low", "high"])
def test_run_comes_up_as_it_is_told_where_nothing_forces_it(wakes: str) -> None:
    circuit = read_text(latch(family="cmos"), "piece.yaml")
    edges = simulate_supply(circuit, ramp(12, 0.6), [(0.0, [])], 2.0, wakes=wakes).edges  # type: ignore[arg-type]

    assert edges == (((0.0, 0),) if wakes == "low" else ((0.0, 0), (pytest.approx(0.1), 1)))


def test_oscillator_goes_on_beating_while_the_supply_rises() -> None:
    """Its period is ln 2 of the time constants at any supply; on a slow ramp nearly so."""
    parts = {
        "RA": None, "RB": None, "RF": "{resistor: 10k, between: [out, mid]}",
        "CM": "{capacitor: 100n, between: [mid, gnd]}",
    }  # fmt: skip
    text = toggle(parts, {"PUSH": "{between: [mid, gnd]}"})
    result = simulate_supply(read_text(text, "piece.yaml"), ramp(5, 1.0), [(0.0, [])], 1.2)
    rising = np.array([t for t, q in result.edges if q])

    assert result.oscillates
    assert np.diff(rising[rising > 1.0]) == pytest.approx(2 * math.log(2) * 1e-3, rel=1e-6)
    assert np.diff(rising[rising < 1.0])[1:] == pytest.approx(2 * math.log(2) * 1e-3, rel=0.02)
    assert len(rising) > 500


def test_run_needs_a_schedule_from_zero_on() -> None:
    with pytest.raises(ValueError, match="begin at time 0"):
        simulate_supply(read_text(SLOW, "piece.yaml"), step(10), [(1.0, [])], 2.0)


# --- traced from the command line ---


def trace(*words: str) -> dict[str, list[list[object]]]:
    result = CliRunner().invoke(cli, ["trace", "specs/wash_door.yaml", *words, "--json"])
    assert result.exit_code == 0, result.output
    return json.loads(result.stdout)


def test_trace_follows_the_supply_with_circuit_and_port() -> None:
    """A dropout of 100 ms leaves the reset filter charged and empties the trigger's: the bolt comes back on."""
    both = trace("--press", "LOCK@2+100ms", "--supply", "0:0,1ms:5,3:5,3:0,3.1:0,3.1:5", "--until", "6")
    pressed = 2 + 4.7e-3 * math.log(3)

    assert [q for _, q in both["circuit"]] == ["low", "high", "low", "high"]
    assert [t for t, _ in both["circuit"]] == pytest.approx([0, pressed, 3.0, 3.1], abs=1e-4)
    assert [q for _, q in both["port"]] == ["low", "high", "low"]
    assert [t for t, _ in both["port"]] == pytest.approx([0, 2.006, 3.0], abs=1e-9)


def test_trace_of_a_supply_needs_no_press() -> None:
    assert trace("--supply", "0:0,10ms:5 V") == {"circuit": [[0.0, "low"]], "port": [[0.0, "low"]]}


@pytest.mark.parametrize("text", ["0:0,1ms", "1:5", "0:0,2:5,1:0", "0:-1", "a:5", "0:five", ""])
def test_supply_that_cannot_be_read(text: str) -> None:
    with pytest.raises(PressError, match=r"^--supply: .*write TIME:VOLTS"):
        read_supply(text)


# --- from unit to unit ---


@pytest.mark.parametrize(
    ("farad", "output", "corners"),
    [("1u", "high", "same"), ("4.2u", "high", "either"), ("5.2u", "low", "either"), ("10u", "low", "same")],
)
def test_start_that_two_filters_fight_over(farad: str, output: str, corners: str) -> None:
    """Trigger lets go after ``RC ln(3/2)``, reset after ``RC ln(12/11)``: the later one decides.

    Of one resistance, the capacitors' ratio decides: ln(3/2) / ln(12/11) = 4.66.
    """
    parts = {
        "CR": f"{{capacitor: {farad} ±20%, between: [clear, gnd]}}",
        "CS": "{capacitor: 1u ±20%, between: [set, gnd]}",
    }
    found = derive(latch(parts, values=IDEAL)).power_on

    assert (found.output, found.corners) == (output, corners)
    assert (math.log(1.5) / math.log(12 / 11) > float(farad.rstrip("u"))) == (output == "high")
    assert derived(derive(latch(parts, values=IDEAL)))["power_on"]["corners"] == corners  # type: ignore[index]


def test_start_that_nothing_forces_is_the_same_in_every_unit() -> None:
    found = derive(latch()).power_on

    assert (found.output, found.corners, found.guaranteed) == ("undetermined", "same", "same")
