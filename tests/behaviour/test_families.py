"""The timer families: published points, what lies between them, and what they make of known circuits."""

import math

import numpy as np
import pytest
from behaviour_circuits import IDEAL, derive, latch, toggle

from porter.behaviour.model import Behaviour
from porter.circuit.family import FAMILIES, KEYS, figures, sources
from porter.findings import Position
from porter.single_run import simulate
from porter.spec.model import Spread, Timer
from porter.spec.read import read_text

TS, LMC = "ST TS555 table", "TI SNAS558J p.4"
ICM, PHILIPS = "Intersil ICM7555 p.8-172", "Philips ICM7555 (1994)"
NE = "TI SLFS022A p.4"

# family, supply, level, least, typical, most (volt), source
LEVELS = [
    ("cmos-ts", 3.0, "threshold_ratio", 1.8, 2.0, 2.2, TS),
    ("cmos-ts", 5.0, "threshold_ratio", 2.9, 3.3, 3.8, TS),
    ("cmos-ts", 12.0, "threshold_ratio", 7.4, 8.0, 8.6, TS),
    ("cmos-ts", 3.0, "trigger_ratio", 0.9, 1.0, 1.1, TS),
    ("cmos-ts", 5.0, "trigger_ratio", 1.36, 1.67, 1.96, TS),
    ("cmos-ts", 12.0, "trigger_ratio", 3.2, 4.0, 4.8, TS),
    ("cmos-lmc", 1.5, "threshold_ratio", 0.8, 1.0, 1.2, LMC),
    ("cmos-lmc", 5.0, "threshold_ratio", 2.9, 3.3, 3.8, LMC),
    ("cmos-lmc", 1.5, "trigger_ratio", 0.4, 0.5, 0.6, LMC),
    ("cmos-lmc", 12.0, "trigger_ratio", 3.7, 4.0, 4.3, LMC),
    ("cmos-icm", 10.0, "threshold_ratio", 6.3, 6.5, 6.7, PHILIPS),
    ("cmos-icm", 10.0, "trigger_ratio", 2.9, 3.1, 3.4, PHILIPS),
]

# family, supply, ampere, low output typical and most (volt), source
LOW = [
    ("cmos", 15.0, 0.1, 1.28, 3.2, "TI SLFS043C p.8"),
    ("cmos", 15.0, 0.05, 0.63, 1.0 * 1.6, "TI SLFS043C p.8; its most at 50 mA is 1.0 V, the line's 1.6 V"),
    ("cmos", 5.0, 8e-3, 0.21, 0.4, "TI SLFS043C p.9"),
    ("cmos-ts", 3.0, 1e-3, 0.1, 0.3, TS),
    ("cmos-ts", 5.0, 8e-3, 0.3, 0.6, TS),
    ("cmos-ts", 12.0, 50e-3, 1.2, 2.0, TS),
    ("cmos-lmc", 1.5, 1e-3, 0.2, 0.4, LMC),
    ("cmos-lmc", 5.0, 8e-3, 0.3, 0.6, LMC),
    ("cmos-lmc", 12.0, 50e-3, 1.0, 2.0, LMC),
    ("cmos-icm", 5.0, 3.2e-3, 0.2, 0.4, ICM),
    ("cmos-icm", 15.0, 20e-3, 0.4, 1.0, ICM),
    ("bipolar", 5.0, 5e-3, 0.1, 0.35, NE),
    ("bipolar", 5.0, 8e-3, 0.15, 0.4, NE),
    ("bipolar", 15.0, 10e-3, 0.1, 0.25, NE),
    ("bipolar", 15.0, 50e-3, 0.4, 0.75, NE),
]
# the same of the drop from the supply to the high output
HIGH = [
    ("cmos", 15.0, 10e-3, 0.8, 2.5, "TI SLFS043C p.8"),
    ("cmos", 5.0, 1e-3, 0.2, 0.9, "TI SLFS043C p.9"),
    ("cmos-ts", 5.0, 2e-3, 0.4, 0.6, TS),
    ("cmos-ts", 12.0, 10e-3, 1.0, 1.5, TS),
    ("cmos-lmc", 5.0, 2e-3, 0.3, 0.6, LMC),
    ("cmos-lmc", 12.0, 10e-3, 0.7, 1.5, LMC),
    ("cmos-icm", 5.0, 0.8e-3, 0.7, 1.0, ICM),
    ("cmos-icm", 15.0, 0.8e-3, 0.4, 0.7, ICM),
    ("bipolar", 15.0, 0.1, 1.7, 2.25, NE),
    ("bipolar", 5.0, 0.1, 1.7, 2.25, NE),
]


def fitted(family: str, supply: float) -> dict[str, Spread]:
    return figures(Timer(family, {}, {}, Position("x.yaml", 1, 1), {}, {}), supply)


@pytest.mark.parametrize(("family", "supply", "key", "least", "typical", "most", "source"), LEVELS)
def test_published_input_levels(
    family: str, supply: float, key: str, least: float, typical: float, most: float, source: str
) -> None:
    """Typical ones are printed to two digits."""
    got = fitted(family, supply)[key]

    assert (got.least * supply, got.most * supply) == pytest.approx((least, most)), source
    assert got.nominal * supply == pytest.approx(typical, abs=0.04), source


@pytest.mark.parametrize(("family", "supply", "ampere", "typical", "most", "source"), LOW)
def test_published_low_output(
    family: str, supply: float, ampere: float, typical: float, most: float, source: str
) -> None:
    got = fitted(family, supply)
    level, ohm = got["low_level"], got["low_resistance"]

    assert level.nominal + ohm.nominal * ampere == pytest.approx(typical, rel=0.02), source
    assert level.most + ohm.most * ampere == pytest.approx(most, rel=0.005), source


@pytest.mark.parametrize(("family", "supply", "ampere", "typical", "most", "source"), HIGH)
def test_published_high_output(
    family: str, supply: float, ampere: float, typical: float, most: float, source: str
) -> None:
    got = fitted(family, supply)
    drop, ohm = got["high_drop"], got["high_resistance"]

    assert drop.nominal + ohm.nominal * ampere == pytest.approx(typical, rel=0.005), source
    assert drop.most + ohm.most * ampere == pytest.approx(most, rel=0.005), source


@pytest.mark.parametrize(
    ("ampere", "published", "modelled"), [(0.05, 0.4, 0.4), (0.1, 2.0, 0.775), (0.2, 2.5, 1.525)]
)
def test_bipolar_low_output_is_too_kind_beyond_50_ma(
    ampere: float, published: float, modelled: float
) -> None:
    """TI SLFS022A p.4, 15 V, typical. The straight line ends where the notes of `derive` say it does."""
    got = fitted("bipolar", 15.0)

    assert got["low_level"].nominal + got["low_resistance"].nominal * ampere == pytest.approx(modelled)
    assert modelled <= published
    assert (ampere > FAMILIES["bipolar"].modelled_a[0]) == (modelled < published)


@pytest.mark.parametrize(("ohm", "said"), [("150", True), ("300", False)])
def test_derive_says_where_the_output_model_ends(ohm: str, said: bool) -> None:
    """15 V through 150 ohm is near 95 mA into the low output, through 300 ohm near 49 mA."""
    text = latch({"Z1": f"{{load: {ohm} ohm, between: [vcc, out]}}"}, supply="15 V")
    notes = [n for n in derive(text).notes if n.startswith("the low output carries")]

    assert bool(notes) == said
    assert all("more than the 50 mA" in n for n in notes)


@pytest.mark.parametrize("name", FAMILIES)
@pytest.mark.parametrize("supply", [1.5, 3.0, 4.9, 5.0, 9.0, 15.0, 18.0])
def test_figures_are_ordered_and_sourced(name: str, supply: float) -> None:
    for key, spread in fitted(name, supply).items():
        assert 0 <= spread.least <= spread.nominal <= spread.most, key
        assert sources(FAMILIES[name], supply)[key]
    assert set(FAMILIES[name].figures) == set(KEYS)


def test_figures_lie_between_the_published_supplies() -> None:
    low, middle, high = (fitted("cmos-ts", v)["threshold_ratio"].least for v in (5.0, 8.5, 12.0))

    assert middle == pytest.approx((low + high) / 2)
    assert fitted("cmos-ts", 20.0)["threshold_ratio"].least == high
    said = sources(FAMILIES["cmos-ts"], 8.5)["threshold_ratio"]
    assert "5 V column" in said and "12 V column" in said and "3 V column" not in said


def test_another_family_is_data_alone() -> None:
    """Every one makes the two-button latch and the one-button toggle work at 9 V."""
    for name in FAMILIES:
        for text in (latch(family=name, supply="9 V"), toggle(family=name, supply="9 V", values="")):
            assert derive(text).verdict == "sound", name


# --- known answers ---


def re_arm(behaviour: Behaviour, start: str) -> float:
    window = next(w for w in behaviour.windows if (w.window, w.start) == ("re-arm-after-hold", start))
    assert window.seconds.nominal is not None
    return window.seconds.nominal


@pytest.mark.parametrize("family", ["cmos", "cmos-ts", "cmos-lmc"])
@pytest.mark.parametrize("supply", [5, 12])
def test_rail_to_rail_part_re_arms_the_same_both_ways(family: str, supply: int) -> None:
    """0.35667 Rf C, whatever the supply; the output's own resistance is within 1 % of the feedback's."""
    behaviour = derive(toggle(family=family, supply=f"{supply} V", values=""))

    for start in ("low", "high"):
        assert re_arm(behaviour, start) == pytest.approx(0.35667 * 0.1, rel=0.01)


def test_levels_off_the_thirds_re_arm_differently() -> None:
    """Levels 0.31 and 0.65 of the supply: RC ln(0.47619 / 0.31) before turning on, RC ln(0.47619 / 0.35) before off."""
    behaviour = derive(toggle(family="cmos-icm", supply="12 V", values=""))

    assert re_arm(behaviour, "low") == pytest.approx(0.1 * math.log(0.47619 / 0.31), rel=0.02)
    assert re_arm(behaviour, "high") == pytest.approx(0.1 * math.log(0.47619 / 0.35), rel=0.02)


def test_bipolar_toggle_is_asymmetric_at_12_v_by_its_closed_form() -> None:
    """Re-arm from the held level toward ``V - drop`` until 2/3 V, and toward the low level until 1/3 V.

    Held levels: ``(V/R + Vout/Rf) / (2/R + 1/Rf)``, R 10 kohm, Rf 100 kohm.
    """
    values = IDEAL.replace("high_drop: 0 V", "high_drop: 1.3 V").replace(
        "low_level: 0 V", "low_level: 0.05 V"
    )
    behaviour = derive(toggle(family="bipolar", supply="12 V", values=values))

    def held(out: float) -> float:
        return (12 / 10e3 + out / 100e3) / (2 / 10e3 + 1 / 100e3)

    high, low = 12 - 1.3, 0.05
    turn_off = 0.1 * math.log((high - held(high)) / (high - 8)) if held(high) < 8 else 0
    # After a press that turned it on, the memory (held at the level for a high output) must charge past 8 V.
    assert re_arm(behaviour, "high") == pytest.approx(turn_off, rel=1e-4)
    assert re_arm(behaviour, "low") == pytest.approx(0.1 * math.log((held(low) - low) / (4 - low)), rel=1e-4)


@pytest.mark.parametrize("family", ["bipolar", "cmos"])
def test_published_reset_level_is_absolute(family: str) -> None:
    for supply in (5.0, 15.0):
        assert fitted(family, supply)["reset_level"] == fitted(family, 10.0)["reset_level"]


def test_a_figure_of_the_spec_goes_before_the_familys() -> None:
    behaviour = derive(
        latch(values="{high_drop: 1.4 V, reset_level: {nominal: 0.6 V, least: 0.5 V, most: 0.7 V}}")
    )
    rows = {f.name: f for f in behaviour.figures}

    assert (rows["high_drop"].least, rows["high_drop"].most) == (1.4, 1.4)
    assert rows["high_drop"].overridden and rows["high_drop"].source == "piece.yaml:6"
    assert (rows["reset_level"].least, rows["reset_level"].most) == (0.5, 0.7)
    assert not rows["trigger_current"].overridden
    assert rows["trigger_current"].source.startswith(NE)
    assert [f.name for f in behaviour.figures] == list(KEYS)


def test_output_level_under_load_is_the_familys() -> None:
    """100 mA from a bipolar output at 15 V: 13.3 V typical (TI SLFS022A p.4)."""
    text = latch({"Z1": "{load: 100 mA, between: [out, gnd]}", "R3": None, "D1": None}, supply="15 V")
    run = simulate(read_text(text, "piece.yaml"), [(0.0, ["SET"])], 1.0, nodes=("out",), times=[0.5])

    assert run.volts[0] == pytest.approx(np.array([13.3]), abs=1e-3)
