"""Values against published conventions and two independent libraries.

Sources: IEC 60062:2016 (letter codes) and IEC 60063:2015 (preferred numbers).  Worked
codes as printed in common extracts of IEC 60062; the series come from the `eseries`
package and from the rule of the standard itself.
"""

from pathlib import Path

import eseries
import pytest
from rkm_codes import from_rkm, to_rkm

from porter.spec import units
from porter.spec.read import read
from porter.spec.units import spread

#: IEC 60063, E24: numbers that the rounding rule doesn't give.
E24_EXCEPTIONS = {26: 27, 29: 30, 32: 33, 35: 36, 38: 39, 42: 43, 46: 47, 83: 82}


@pytest.mark.parametrize(
    ("code", "ohms"),
    [
        *(("R47", 0.47), ("4R7", 4.7), ("470R", 470), ("4K7", 4700), ("47K", 47e3)),
        *(("47K3", 47.3e3), ("470K", 470e3), ("4M7", 4.7e6), ("0R1", 0.1)),
    ],
)
def test_letter_codes_as_printed(code: str, ohms: float) -> None:
    """IEC 60062's own examples."""
    assert ohms == spread(code, units.RESISTANCE).nominal


@pytest.mark.parametrize(
    ("letter", "low", "high"),
    [("F", 1, 1), ("G", 2, 2), ("J", 5, 5), ("K", 10, 10), ("M", 20, 20), ("Z", 20, 80)],
)
def test_tolerance_letters_as_printed(letter: str, low: float, high: float) -> None:
    """IEC 60062's tolerance letters, in per cent below and above."""
    found = spread(f"1k0{letter}", units.RESISTANCE)

    assert (1000 - 10 * low, 1000 + 10 * high) == pytest.approx((found.least, found.most))


@pytest.mark.parametrize("decade", [1e3, 1e4, 1e5, 1e6])
def test_letter_codes_of_the_whole_e24_series(decade: float) -> None:
    """Every E24 value, coded by `rkm-codes`, reads back; `rkm-codes` reads it as we do."""
    for base in eseries.series(eseries.E24):
        code = to_rkm(base / 10 * decade)

        assert float(from_rkm(code)) == spread(code, units.RESISTANCE).nominal
        assert base / 10 * decade == pytest.approx(spread(code, units.RESISTANCE).nominal, rel=1e-12)


def test_e24_is_the_rounding_rule_with_eight_exceptions() -> None:
    """IEC 60063: round(10 * 10^(i/24)), but for eight historical numbers."""
    rule = [round(10 * 10 ** (i / 24)) for i in range(24)]

    assert [E24_EXCEPTIONS.get(number, number) for number in rule] == list(eseries.series(eseries.E24))


def test_shipped_specs_use_preferred_values() -> None:
    """Every resistor and capacitor of a shipped spec can be bought: it is in the E24 series."""
    for path in sorted((Path(__file__).parents[2] / "specs").glob("*.yaml")):
        for part in read(path).parts:
            if part.kind in ("resistor", "capacitor"):
                nearest = eseries.find_nearest(eseries.E24, part.value.nominal)
                assert nearest == pytest.approx(part.value.nominal, rel=1e-6), (path.name, part.name)
