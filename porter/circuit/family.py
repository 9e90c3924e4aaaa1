"""Published figures of the timer families, at their stated supplies.

A figure is a least / typical / most triple at one supply voltage, with the
document it was read in.  Between two supplies it is interpolated, outside it
is held.  Another variant is another entry in `FAMILIES`; no code knows a name.

Sections: *published* rows come from the named sheet; *derived* rows are
computed from published ones; *assumed* rows stand where the sheets give no
limit, and say so.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from porter.spec.model import Spread, Timer

#: Every figure that a spec may override, with its unit and meaning.
KEYS: Mapping[str, tuple[str, str]] = {
    "trigger_ratio": ("", "trigger level as a part of the supply"),
    "threshold_ratio": ("", "threshold level as a part of the supply"),
    "reset_level": ("V", "reset level, an absolute voltage"),
    "trigger_current": ("A", "current out of the trigger pin"),
    "threshold_current": ("A", "current into the threshold pin"),
    "reset_current": ("A", "current out of the reset pin held at 0 V"),
    "reset_high_current": ("A", "current into the reset pin held at the supply"),
    "high_drop": ("V", "supply less the unloaded high output"),
    "high_resistance": ("ohm", "slope resistance of the high output"),
    "low_level": ("V", "unloaded low output"),
    "low_resistance": ("ohm", "slope resistance of the low output"),
    "divider": ("ohm", "each of the three resistors of the internal divider"),
    "discharge_resistance": ("ohm", "discharge switch when closed"),
    "shortest_pulse": ("s", "shortest input pulse that the chip is sure to notice"),
}


@dataclass(frozen=True, slots=True)
class Point:
    """One published triple: least, typical, most at `supply_v`, and where it stands."""

    supply_v: float
    least: float
    typical: float
    most: float
    source: str


@dataclass(frozen=True, slots=True)
class Family:
    """A timer family: output stage, supply range, output rating, and its figures by key.

    Args:
        modelled_a: the largest published currents into the low and out of the high output that the
            straight lines of the model were drawn through; beyond them it is too kind.
    """

    name: str
    output: Literal["one-way", "resistive"]
    supply_v: tuple[float, float]
    rated_output_a: float
    figures: Mapping[str, tuple[Point, ...]]
    modelled_a: tuple[float, float]


_BIP = "TI SLFS022A p.4, bipolar NE/SA column, 25 °C"
_TLC5 = "TI SLFS043C p.9 and SLFS043F p.8, 5 V, 25 °C"
_TLC15 = "TI SLFS043C p.8, 15 V, 25 °C"
_TLC2 = "2 V column of the same class, from memory"


def _flat(least: float, typical: float, most: float, source: str) -> tuple[Point, ...]:
    return (Point(5.0, least, typical, most, source),)


BIPOLAR = Family(
    name="bipolar",
    output="one-way",
    supply_v=(4.5, 16.0),  # published, National/TI SNAS548C
    rated_output_a=0.2,  # published, same
    modelled_a=(0.05, 0.1),  # published at 100 and 200 mA too: low 2 and 2.5 V, high 12.5 V of 15 V
    figures={
        "threshold_ratio": (
            Point(5.0, 2.4 / 5, 2 / 3, 4.2 / 5, _BIP),
            Point(15.0, 8.8 / 15, 2 / 3, 11.2 / 15, _BIP),
        ),
        "trigger_ratio": (
            Point(5.0, 1.1 / 5, 1 / 3, 2.2 / 5, _BIP),
            Point(15.0, 4.5 / 15, 1 / 3, 5.6 / 15, _BIP),
        ),
        "reset_level": _flat(0.3, 0.7, 1.0, _BIP),
        "trigger_current": _flat(0.0, 0.5e-6, 2e-6, _BIP + "; least assumed 0"),
        "threshold_current": _flat(0.0, 30e-9, 250e-9, _BIP + "; least assumed 0"),
        "reset_current": _flat(0.1e-3, 0.4e-3, 1.5e-3, _BIP + "; least assumed a quarter of typical"),
        "reset_high_current": _flat(0.0, 0.1e-3, 0.4e-3, _BIP + "; least assumed 0"),
        # Two junctions at light load (typical curves, from memory); with the slope below it meets
        # the published 1.7 V typical and 2.25 V most at 100 mA.
        "high_drop": _flat(1.1, 1.3, 1.6, "light-load drop, from memory; " + _BIP + " at 100 mA"),
        "high_resistance": _flat(
            2.0, 4.0, 6.5, "derived: (1.7 - 1.3) V and (2.25 - 1.6) V at 100 mA; " + _BIP
        ),
        # Straight lines through the published VOL pairs: 5 and 8 mA at 5 V, 10 and 50 mA at 15 V.
        "low_level": (
            Point(5.0, 0.0, 0.1 - 5 * 0.05 / 3, 0.35 - 5 * 0.05 / 3, "derived from " + _BIP),
            Point(15.0, 0.0, 0.025, 0.125, "derived from " + _BIP),
        ),
        "low_resistance": (
            Point(5.0, 50 / 6, 50 / 3, 50 / 3 * 1.001, "derived from " + _BIP + "; least assumed half"),
            Point(15.0, 3.75, 7.5, 12.5, "derived from " + _BIP + "; least assumed half"),
        ),
        "divider": _flat(4e3, 5e3, 6e3, "5 kohm in published block diagrams; ±20 % assumed"),
        "discharge_resistance": (
            Point(
                5.0, 8.9, 0.08 / 4.5e-3, 0.2 / 4.5e-3, "ST Doc 2182: 80/200 mV at 4.5 mA; least assumed half"
            ),
            Point(
                15.0, 6.0, 0.18 / 15e-3, 0.48 / 15e-3, "ST Doc 2182: 180/480 mV at 15 mA; least assumed half"
            ),
        ),
        "shortest_pulse": _flat(0.1e-6, 0.3e-6, 0.5e-6, "reset pulse of the class, from memory"),
    },
)

CMOS = Family(
    name="cmos",
    output="resistive",
    supply_v=(2.0, 15.0),  # published, TI SLFS043C
    rated_output_a=0.1,  # sink; the source side is far weaker (figures below)
    modelled_a=(0.1, 0.01),
    figures={
        "threshold_ratio": (
            Point(2.0, 0.95 / 2, 2 / 3, 1.65 / 2, _TLC2),
            Point(5.0, 2.8 / 5, 2 / 3, 3.8 / 5, _TLC5),
            Point(15.0, 9.45 / 15, 2 / 3, 10.55 / 15, _TLC15),
        ),
        "trigger_ratio": (
            Point(2.0, 0.4 / 2, 1 / 3, 0.95 / 2, _TLC2),
            Point(5.0, 1.36 / 5, 1 / 3, 1.96 / 5, _TLC5),
            Point(15.0, 4.65 / 15, 1 / 3, 5.35 / 15, _TLC15),
        ),
        "reset_level": _flat(0.4, 1.1, 1.5, _TLC5),
        "trigger_current": _flat(0.0, 10e-12, 150e-12, _TLC5 + "; most at the industrial temperature limit"),
        "threshold_current": _flat(
            0.0, 10e-12, 150e-12, _TLC5 + "; most at the industrial temperature limit"
        ),
        "reset_current": _flat(0.0, 10e-12, 150e-12, _TLC5 + "; most at the industrial temperature limit"),
        "reset_high_current": _flat(
            0.0, 10e-12, 150e-12, _TLC5 + "; most at the industrial temperature limit"
        ),
        "high_drop": _flat(0.0, 0.0, 0.0, "resistive to the rail"),
        "high_resistance": (
            Point(
                2.0, 167.0, 0.1 / 0.3e-3, 0.5 / 0.3e-3, _TLC2 + ": 1.9/1.5 V at 0.3 mA; least assumed half"
            ),
            Point(5.0, 100.0, 200.0, 900.0, "derived: 4.8/4.1 V at 1 mA; " + _TLC5 + "; least assumed half"),
            Point(
                15.0, 40.0, 80.0, 250.0, "derived: 14.2/12.5 V at 10 mA; " + _TLC15 + "; least assumed half"
            ),
        ),
        "low_level": _flat(0.0, 0.0, 0.0, "resistive to the rail"),
        "low_resistance": (
            Point(2.0, 35.0, 70.0, 300.0, _TLC2 + ": 0.07/0.3 V at 1 mA; least assumed half"),
            Point(5.0, 13.0, 0.21 / 8e-3, 0.4 / 8e-3, _TLC5 + " at 8 mA; least assumed half"),
            Point(15.0, 6.4, 12.8, 32.0, _TLC15 + " at 100 mA; least assumed half"),
        ),
        "divider": _flat(80e3, 100e3, 120e3, "Intersil ICM7555 p.8-172: 100 kohm ±20 % each"),
        "discharge_resistance": (
            Point(5.0, 7.0, 14.0, 50.0, _TLC5 + " at 10 mA; least assumed half"),
            Point(15.0, 3.85, 7.7, 17.0, _TLC15 + " at 100 mA; least assumed half"),
        ),
        "shortest_pulse": _flat(
            0.1e-6, 0.2e-6, 0.35e-6, "ST TS555: minimum reset pulse 350 ns; rest assumed"
        ),
    },
)

_TS = "ST TS555 table, {} V column, 25 °C"
_TS3, _TS5, _TS12 = (_TS.format(v) for v in (3, 5, 12))
_LMC = "TI SNAS558J p.4, {} V rows, 25 °C"
_LMC1, _LMC5, _LMC12 = (_LMC.format(v) for v in ("1.5", "5", "12"))
_ICM = "Intersil ICM7555 p.8-172"
_PH = "Philips ICM7555 (1994)"
_HALF = "; least assumed half of typical"
_PULSE = _flat(0.1e-6, 0.2e-6, 0.35e-6, "ST TS555: minimum reset pulse 350 ns; rest assumed")
_RAIL = _flat(0.0, 0.0, 0.0, "resistive to the rail")
_DIVIDER = _flat(80e3, 100e3, 120e3, "Intersil ICM7555 p.8-172: 100 kohm ±20 % each")


def _picoamperes(source: str) -> dict[str, tuple[Point, ...]]:
    """Input currents of 10 pA typical; the sheets give no most, that of the ``cmos`` class stands in."""
    most = "; most as for the cmos class, at its temperature limit"
    keys = ("trigger_current", "threshold_current", "reset_current", "reset_high_current")
    return {key: _flat(0.0, 10e-12, 150e-12, source + most) for key in keys}


CMOS_TS = Family(
    name="cmos-ts",
    output="resistive",
    supply_v=(2.0, 16.0),  # from memory
    rated_output_a=0.05,  # largest current of the table
    modelled_a=(0.05, 0.01),
    figures={
        "threshold_ratio": (
            Point(3.0, 1.8 / 3, 2 / 3, 2.2 / 3, _TS3 + ", control pin open"),
            Point(5.0, 2.9 / 5, 2 / 3, 3.8 / 5, _TS5 + ", control pin open"),
            Point(12.0, 7.4 / 12, 2 / 3, 8.6 / 12, _TS12 + ", control pin open"),
        ),
        "trigger_ratio": (
            Point(3.0, 0.9 / 3, 1 / 3, 1.1 / 3, _TS3),
            Point(5.0, 1.36 / 5, 1 / 3, 1.96 / 5, _TS5),
            Point(12.0, 3.2 / 12, 1 / 3, 4.8 / 12, _TS12),
        ),
        "reset_level": _flat(0.4, 1.1, 1.5, _TS5 + ", the same at 3 and 12 V"),
        **_picoamperes("assumed as for the cmos class"),
        "high_drop": _RAIL,
        "high_resistance": (
            Point(3.0, 167.0, 0.1 / 0.3e-3, 0.5 / 0.3e-3, _TS3 + ": 2.9/2.5 V at 0.3 mA" + _HALF),
            Point(5.0, 100.0, 0.4 / 2e-3, 0.6 / 2e-3, _TS5 + ": 4.6/4.4 V at 2 mA" + _HALF),
            Point(12.0, 50.0, 1.0 / 10e-3, 1.5 / 10e-3, _TS12 + ": 11/10.5 V at 10 mA" + _HALF),
        ),
        "low_level": _RAIL,
        "low_resistance": (
            Point(3.0, 50.0, 0.1 / 1e-3, 0.3 / 1e-3, _TS3 + ": 0.1/0.3 V at 1 mA" + _HALF),
            Point(5.0, 18.75, 0.3 / 8e-3, 0.6 / 8e-3, _TS5 + ": 0.3/0.6 V at 8 mA" + _HALF),
            Point(12.0, 12.0, 1.2 / 50e-3, 2.0 / 50e-3, _TS12 + ": 1.2/2.0 V at 50 mA" + _HALF),
        ),
        "divider": _DIVIDER,
        "discharge_resistance": (
            Point(3.0, 25.0, 0.05 / 1e-3, 0.2 / 1e-3, _TS3 + " at 1 mA" + _HALF),
            Point(5.0, 10.0, 0.2 / 10e-3, 0.3 / 10e-3, _TS5 + " at 10 mA" + _HALF),
            Point(12.0, 4.7, 9.4, 1.5 / 80e-3, _TS12 + ": 1.5 V at 80 mA at most; rest assumed half"),
        ),
        "shortest_pulse": _PULSE,
    },
)

CMOS_LMC = Family(
    name="cmos-lmc",
    output="resistive",
    supply_v=(1.5, 15.0),  # least: lowest test supply of the table; most: from memory
    rated_output_a=0.05,  # largest current of the table
    modelled_a=(0.05, 0.01),
    figures={
        "threshold_ratio": (
            Point(1.5, 0.8 / 1.5, 2 / 3, 1.2 / 1.5, _LMC1 + ", control pin open"),
            Point(5.0, 2.9 / 5, 2 / 3, 3.8 / 5, _LMC5 + ", control pin open"),
            Point(12.0, 7.4 / 12, 2 / 3, 8.6 / 12, _LMC12 + ", control pin open"),
        ),
        "trigger_ratio": (
            Point(1.5, 0.4 / 1.5, 1 / 3, 0.6 / 1.5, _LMC1),
            Point(12.0, 3.7 / 12, 1 / 3, 4.3 / 12, _LMC12),
        ),
        "reset_level": (Point(1.5, 0.4, 0.7, 1.0, _LMC1), Point(12.0, 0.4, 0.75, 1.1, _LMC12)),
        **_picoamperes(_LMC5),
        "high_drop": _RAIL,
        "high_resistance": (
            Point(1.5, 500.0, 0.25 / 0.25e-3, 0.5 / 0.25e-3, _LMC1 + ": 1.25/1.0 V at 0.25 mA" + _HALF),
            Point(5.0, 75.0, 0.3 / 2e-3, 0.6 / 2e-3, _LMC5 + ": 4.7/4.4 V at 2 mA" + _HALF),
            Point(12.0, 35.0, 0.7 / 10e-3, 1.5 / 10e-3, _LMC12 + ": 11.3/10.5 V at 10 mA" + _HALF),
        ),
        "low_level": _RAIL,
        "low_resistance": (
            Point(1.5, 100.0, 0.2 / 1e-3, 0.4 / 1e-3, _LMC1 + ": 0.2/0.4 V at 1 mA" + _HALF),
            Point(5.0, 18.75, 0.3 / 8e-3, 0.6 / 8e-3, _LMC5 + ": 0.3/0.6 V at 8 mA" + _HALF),
            Point(12.0, 10.0, 1.0 / 50e-3, 2.0 / 50e-3, _LMC12 + ": 1.0/2.0 V at 50 mA" + _HALF),
        ),
        "divider": _DIVIDER,
        "discharge_resistance": (
            Point(1.5, 37.5, 75e-3 / 1e-3, 150e-3 / 1e-3, _LMC1 + " at 1 mA" + _HALF),
            Point(5.0, 7.5, 150e-3 / 10e-3, 300e-3 / 10e-3, _LMC5 + " at 10 mA" + _HALF),
        ),
        "shortest_pulse": _PULSE,
    },
)

CMOS_ICM = Family(
    name="cmos-icm",
    output="resistive",
    supply_v=(3.0, 16.0),  # published, Philips; the other maker says 2 to 18 V, functional
    rated_output_a=0.02,  # largest current of the table
    modelled_a=(0.02, 0.8e-3),
    figures={
        "threshold_ratio": _flat(0.63, 0.65, 0.67, _PH),
        "trigger_ratio": _flat(0.29, 0.31, 0.34, _PH),
        "reset_level": _flat(0.4, 0.7, 1.0, _PH),
        "trigger_current": _flat(0.0, 10e-12, 10e-9, _PH + "; most from memory"),
        "threshold_current": _flat(0.0, 10e-12, 10e-9, _PH + "; most from memory"),
        "reset_current": _flat(0.0, 20e-12, 10e-9, _PH + "; most from memory"),
        "reset_high_current": _flat(0.0, 20e-12, 10e-9, _PH + "; most from memory"),
        "high_drop": _RAIL,
        "high_resistance": (
            Point(5.0, 437.0, 0.7 / 0.8e-3, 1.0 / 0.8e-3, _ICM + ": 4.3/4.0 V at 0.8 mA" + _HALF),
            Point(15.0, 250.0, 0.4 / 0.8e-3, 0.7 / 0.8e-3, _ICM + ": 14.6/14.3 V at 0.8 mA" + _HALF),
        ),
        "low_level": _RAIL,
        "low_resistance": (
            Point(5.0, 31.0, 0.2 / 3.2e-3, 0.4 / 3.2e-3, _ICM + ": 0.2/0.4 V at 3.2 mA" + _HALF),
            Point(15.0, 10.0, 0.4 / 20e-3, 1.0 / 20e-3, _ICM + ": 0.4/1.0 V at 20 mA" + _HALF),
        ),
        "divider": _DIVIDER,
        "discharge_resistance": _flat(6.7, 0.2 / 15e-3, 0.4 / 15e-3, _ICM + " at 15 mA, 5 V" + _HALF),
        "shortest_pulse": _PULSE,
    },
)

FAMILIES: Mapping[str, Family] = {
    family.name: family for family in (BIPOLAR, CMOS, CMOS_TS, CMOS_LMC, CMOS_ICM)
}


def figure(family: Family, key: str, supply_v: float) -> Spread:
    """Return one figure of a family at a supply, interpolated between the published ones."""
    points = family.figures[key]
    at = [p.supply_v for p in points]
    least, typical, most = (
        float(np.interp(supply_v, at, [getattr(p, side) for p in points]))
        for side in ("least", "typical", "most")
    )
    return Spread(typical, least, most)


def figures(timer: Timer, supply_v: float) -> dict[str, Spread]:
    """Return all figures of a fitted timer: the spec's own values before the family's.

    Args:
        supply_v: nominal supply in volt.
    """
    family = FAMILIES[timer.family]
    return {key: timer.values.get(key) or figure(family, key, supply_v) for key in KEYS}


def sources(family: Family, supply_v: float) -> dict[str, str]:
    """Return for each figure the documents that its value at a supply was read in."""
    return {
        key: "; between that and: ".join(dict.fromkeys(p.source for p in _beside(points, supply_v)))
        for key, points in family.figures.items()
    }


def _beside(points: tuple[Point, ...], supply_v: float) -> tuple[Point, ...]:
    """Return the points that a value at a supply is interpolated between, or the one it is."""
    below = [p for p in points if p.supply_v <= supply_v][-1:]
    above = [p for p in points if p.supply_v >= supply_v][:1]
    return tuple(dict.fromkeys((*below, *above)))
