"""The interface sheet: resistors by hand, every shipped spec, each finding with a circuit just inside it."""

import re
from functools import cache
from pathlib import Path

import eseries
import pytest
from hypothesis import given
from hypothesis import strategies as st

from porter.behaviour.derive import derive
from porter.port.plan import plan
from porter.sheet import Sheet, render_text, sheet
from porter.sheet.contacts import divides, pull_resistor
from porter.sheet.drivers import base_resistor
from porter.sheet.resistors import E24, e24_at_least, e24_at_most
from porter.spec.model import Spread
from porter.spec.read import read_text

SPECS = Path(__file__).parents[2] / "specs"
NAMES = sorted(path.stem for path in SPECS.glob("*.yaml"))


@cache
def made(text: str, name: str = "any_latch.yaml") -> Sheet:
    """Return the sheet of a spec."""
    circuit = read_text(text, name)
    behaviour = derive(circuit)
    return sheet(circuit, behaviour, plan(circuit, behaviour))


def shipped(name: str, *changes: tuple[str, str]) -> Sheet:
    """Return the sheet of a shipped spec with some of its text changed."""
    text = (SPECS / f"{name}.yaml").read_text()
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    return made(text, f"{name}.yaml")


def rules(found: Sheet) -> set[str]:
    """Return the rules that a sheet's findings name."""
    return {finding.rule for finding in found.findings}


# --- preferred values ---


@given(ohm=st.floats(1.0, 10e6))
def test_e24_values_are_next_to_what_was_asked(ohm):
    """The two E24 values beside a resistance hold it between them (PyPI eseries 1.2 has the same)."""
    below, above = e24_at_most(ohm), e24_at_least(ohm)
    assert below <= ohm * (1 + 1e-9) and above >= ohm * (1 - 1e-9)
    assert below == pytest.approx(eseries.find_less_than_or_equal(eseries.E24, ohm * (1 + 1e-9)))
    assert sorted(eseries.erange(eseries.E24, 10, 99)) == pytest.approx(E24)


# --- by hand ---


def test_pull_up_by_hand():
    """5 V / 1 mA = 5 kohm, less 5 % of tolerance 4762 ohm: 4.7 kohm. 3.3 V: 3143 ohm, so 3 kohm."""
    assert pull_resistor(Spread.exact(5.0)) == 4700
    assert pull_resistor(Spread.exact(3.3)) == 3000


def test_relay_by_hand():
    """A 12 V relay behind an NPN transistor.

    Most current: 13.2 V / (0.9 * 390 ohm) = 37.6 mA, so 3.76 mA of base current. The pin loses
    0.9 V * 3.76 / 20 = 0.169 V: (5 - 0.9 - 0.169) V / 3.76 mA / 1.05 = 995 ohm, E24 below: 910 ohm.
    The pin then gives at most (5 - 0.6) V / (0.95 * 910 ohm) = 5.09 mA.
    """
    (driver,) = shipped("cellar_pump").drivers
    assert driver.stage == "npn"
    assert driver.load_a == pytest.approx(13.2 / 351)
    assert driver.resistor_ohm == 910
    assert driver.pin_a == pytest.approx(4.4 / 864.5)
    assert (
        driver.active == 1
    )  # the timer's output was low while the relay pulled; the transistor turns that over
    assert driver.bias_to == "gnd"  # the port starts with the relay released


def test_lamp_by_hand():
    """An LED straight from the pin, as bright as before.

    Before: (9 - 2) V / (4700 + 10) ohm = 1.486 mA. The pin loses 0.9 V * 1.486 / 20 = 0.067 V:
    (5 - 2 - 0.067) V / 1.486 mA = 1973 ohm, E24 above: 2 kohm. Most: 3 V / 1900 ohm = 1.58 mA.
    """
    (driver,) = shipped("aquarium_light").drivers
    assert (driver.stage, driver.resistor_ohm, driver.active) == ("pin", 2000, 1)
    assert driver.pin_a == pytest.approx(3 / 1900)


def test_memory_contact_goes_to_ground():
    """A contact between two free nodes is wired to ground, with a pull-up; parts of the old memory go."""
    found = shipped("aquarium_light")
    (network,) = found.inputs
    assert (network.to, network.moved, network.level) == ("gnd", True, 0)
    assert {"the timer", "R1", "R2", "R3", "C1"} <= set(found.removed)
    assert set(found.kept) == {"D1", "C2"}  # R4 gets another value


def test_contact_to_a_higher_supply_gets_a_divider():
    """9 V ±10 % to a 5 V pin: between 3.5 V and 5 V for every resistor within 5 %, at 1 mA or more."""
    (network,) = shipped("goose_buzzer").inputs
    low, top = network.pull_ohm, network.top_ohm
    assert 9.9 * 1.05 * low / (1.05 * low + 0.95 * top) <= 5.0
    assert 8.1 * 0.95 * low / (0.95 * low + 1.05 * top) >= 3.5
    assert 8.1 / (1.05 * (low + top)) >= 1e-3
    assert network.level == 1


def test_quiescent_current_by_hand():
    """Aquarium: 9 V across two 12 kohm is 0.375 mA beside the timer's own current."""
    row = next(row for row in shipped("aquarium_light").rows if row.item == "before")
    assert "resistors at the supply 0.375 mA" in row.why


def test_two_rails_of_the_same_lamp():
    """The sign's lamps, one lit in each state, each get a pin; one is on from the start."""
    first, second = shipped("door_sign").drivers
    assert {first.bias_to, second.bias_to} == {"gnd", "vcc"}


def test_flyback_diode_is_kept_or_added():
    """With the diode in the drawing it stays; without it the sheet asks for one."""
    with_diode = render_text(shipped("cellar_pump"))
    without = render_text(shipped("cellar_pump", ("  D1: {diode: 0.7 V, between: [out, vcc]}\n", "")))
    assert "keep D1" in with_diode and "add one" in without


# --- findings ---


def test_weak_pins_are_an_error():
    """A pin that can't even turn on a transistor is an error; the usual 10 mA are enough."""
    weak = shipped("map_lamp", ("  supply: 3.3 V\n", "  supply: 3.3 V\n  pin_drive: 50 uA\n"))
    assert rules(weak) == {"pin-overloaded"}
    assert rules(shipped("map_lamp")) == set()


@pytest.mark.parametrize(
    ("supply", "expected"), [("9 V", {"level-not-met"}), ("5.6 V", {"level-not-met"}), ("5.5 V", set())]
)
def test_supply_that_no_common_controller_takes(supply, expected):
    """The common controllers end at 5.5 V."""
    assert rules(shipped("kiln_vent", ("  supply: 5 V\n", f"  supply: {supply}\n"))) >= expected
    assert bool(expected) == bool(rules(shipped("kiln_vent", ("  supply: 5 V\n", f"  supply: {supply}\n"))))


@pytest.mark.parametrize(("ohm", "expected"), [("2.5k", {"level-not-met"}), ("1.8k", set())])
def test_contact_resistance(ohm, expected):
    """0.3 of the supply at most is low: with at least 4465 ohm above it, up to 1913 ohm are."""
    found = shipped(
        "kiln_vent", ("between: [close, gnd], bounce", f"between: [close, gnd], resistance: {ohm}, bounce")
    )
    assert rules(found) == expected


def test_divider_that_can_not_be():
    """A supply that spreads over more than the input's band can't be divided surely."""
    found = shipped("goose_buzzer", ("supply: 9 V ±10%", "supply: 9 V ±25%"))
    assert "level-not-met" in rules(found)
    assert not divides(3600, 3900, Spread(9, 6.75, 11.25), Spread.exact(5))


# --- properties ---


@given(load=st.floats(1e-6, 0.3), volts=st.floats(1.8, 5.5), off=st.floats(0, 0.1))
def test_base_current_saturates_and_stays_within_the_pin(load, volts, off):
    """A tenth of the load's current flows at the least supply, and the most is what the formula says."""
    supply = Spread(volts, volts * (1 - off), volts * (1 + off))
    ohm, pin_a = base_resistor(supply, load)
    drop = 0.9 * max(load / 10, 1e-4) / 20e-3
    if supply.least - 0.9 - drop > 0.1 and ohm > 1:
        assert (supply.least - 0.9 - drop) / (1.05 * ohm) >= max(load / 10, 1e-4) * (1 - 1e-9)
    assert pin_a == pytest.approx((supply.most - 0.6) / (0.95 * ohm))


@pytest.mark.parametrize("name", NAMES)
def test_every_shipped_spec_renders(name):
    """Each shipped spec has a sheet with every topic, within its pins' limits; sound ones without a finding."""
    found = shipped(name)
    text = render_text(found)
    assert re.findall(r"^(\w[\w ]*)\n-+$", text, re.M) == [
        "Supply",
        "Inputs",
        "Outputs",
        "Undriven time",
        "Decoupling",
        "Current",
        "Parts",
        "Settings",
        "Pins",
        "Cautions",
    ]
    assert max(map(len, text.splitlines())) <= 100
    limit = read_text((SPECS / f"{name}.yaml").read_text(), f"{name}.yaml").port.pin_drive_a
    assert all(driver.pin_a <= limit for driver in found.drivers)
    assert not rules(found)
    assert text == render_text(found)


@pytest.mark.parametrize("name", NAMES)
def test_every_part_is_accounted_for(name):
    """Each part of the drawing stays or goes, and none does both."""
    circuit = read_text((SPECS / f"{name}.yaml").read_text(), f"{name}.yaml")
    found = shipped(name)
    assert sorted([*found.kept, *found.removed]) == sorted([*(p.name for p in circuit.parts), "the timer"])
