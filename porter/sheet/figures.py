"""Figures of controllers, drivers and regulators that the sheet computes with, each with its source.

"Read" figures were read in the named document; the others are usual ones *from memory*, to be
checked against the data sheet of the part that is fitted.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, slots=True)
class Figure:
    """A number in SI units and where it comes from."""

    value: float
    source: str


_MEMORY = "from memory"
_OLD_8_BIT = "read in data sheets of common 8-bit controllers"

#: Pins.
LOW_MOST = Figure(0.3, f"input low at most 0.3 of the supply, {_OLD_8_BIT}")
HIGH_LEAST = Figure(0.7, f"input high at least 0.7 of the supply, {_OLD_8_BIT}")
DROP_AT_20_MA = Figure(0.9, f"pin drop 0.9 V at 20 mA and 5 V, {_OLD_8_BIT}")
LEAK = Figure(1e-6, f"pin leakage at most 1 uA, {_OLD_8_BIT}")
ALL_PINS = Figure(0.1, "all pins together 100 mA, read in data sheets of common 32-bit controllers")
INJECTION = Figure(0.5e-3, "current into a pin beyond its supply at most 0.5 mA, read for a 32-bit class")
SUPPLY_RANGE = (1.8, 5.5)  # volt, of the common classes; from memory
PULL_UP = (20e3, 60e3)  # ohm, inside the controller; read

#: Contacts.
WETTING = Figure(1e-3, "silver contacts want 1 mA to stay clean, read in makers' sheets of push-buttons")
SERIES_OHM = 1e3  # into each input: limits what a spark or a plug brings; common practice

#: Drivers.
FORCED_GAIN = Figure(10.0, "a saturated transistor gets a tenth of its load current, common practice")
BASE_LEAST_V, BASE_MOST_V = 0.6, 0.9  # base to emitter, cold at rest and saturated; from memory
SATURATED_V = 0.3  # collector to emitter, from memory
SMALL_TRANSISTOR_A = 0.3  # beyond it a MOSFET, common practice
LOGIC_GATE_V = 2.5  # what a logic-level MOSFET's gate needs at least, from memory
GATE_OHM, GATE_BIAS_OHM, BIAS_OHM = 100.0, 100e3, 10e3  # common practice

#: Currents.
AWAKE = Figure(2e-3, f"controller awake at 1 MHz to 8 MHz below 2 mA, {_MEMORY}")
ASLEEP = Figure(10e-6, f"controller asleep with the watchdog on below 10 uA, {_MEMORY}")
REGULATOR = Figure(50e-6, f"a small linear regulator's own current 50 uA, {_MEMORY}")
REGULATOR_DROP_V = 0.5  # low-dropout type, from memory

#: Brown-out levels on offer (typical, most while falling), volt; read in data sheets of 8-bit controllers.
BROWN_OUT = ((4.0, 4.5), (2.6, 2.9), (1.8, 2.0))

#: The timer's own current by family: (supply, typical, most); output low.
_ICC: Mapping[str, tuple[tuple[float, float, float], ...]] = {
    "bipolar": ((5.0, 3e-3, 6e-3), (15.0, 10e-3, 15e-3)),
    "cmos": ((5.0, 170e-6, 350e-6), (15.0, 360e-6, 600e-6)),
    "cmos-ts": ((3.0, 90e-6, 230e-6), (5.0, 110e-6, 250e-6), (12.0, 170e-6, 400e-6)),
    "cmos-lmc": ((1.5, 50e-6, 150e-6), (5.0, 100e-6, 250e-6), (12.0, 150e-6, 400e-6)),
    "cmos-icm": ((3.0, 50e-6, 200e-6), (16.0, 180e-6, 300e-6)),
}
_ICC_SOURCE: Mapping[str, str] = {
    "bipolar": "TI SLFS022A, output low, without load",
    "cmos": "TI SLFS043C and SLFS043F at 5 V; 15 V from memory",
    "cmos-ts": "ST TS555",
    "cmos-lmc": "TI SNAS558J",
    "cmos-icm": "Philips ICM7555 (1994)",
}


def timer_current(family: str, supply_v: float) -> tuple[float, float, str]:
    """Return the timer's own current, typical and most (A), between its published points, and their source.

    A family without published points gets those of its class: ``cmos``, or ``bipolar``.
    """
    name = family if family in _ICC else "bipolar" if family.startswith("bipolar") else "cmos"
    volts, typical, most = zip(*_ICC[name], strict=True)
    return (
        float(np.interp(supply_v, volts, typical)),
        float(np.interp(supply_v, volts, most)),
        _ICC_SOURCE[name],
    )
