"""Preferred resistors: E24, with the 5 % that they may be off."""

import math

#: IEC 60063:2015, E24.
E24 = (10, 11, 12, 13, 15, 16, 18, 20, 22, 24, 27, 30, 33, 36, 39, 43, 47, 51, 56, 62, 68, 75, 82, 91)
TOLERANCE = 0.05
_LEAST, _MOST = 1.0, 10e6


def e24_at_most(ohm: float) -> float:
    """Return the largest E24 value not above *ohm*, within 1 ohm to 10 megohm.

    >>> e24_at_most(4761.9)
    4700.0
    """
    return max((value for value in _near(ohm) if value <= ohm * (1 + 1e-9)), default=_LEAST)


def e24_at_least(ohm: float) -> float:
    """Return the smallest E24 value not below *ohm*, within 1 ohm to 10 megohm."""
    return min((value for value in _near(ohm) if value >= ohm * (1 - 1e-9)), default=_MOST)


def _near(ohm: float) -> list[float]:
    decade = math.floor(math.log10(min(max(ohm, _LEAST), _MOST)))
    values = [float(f"{e}e{d - 1}") for d in (decade - 1, decade, decade + 1) for e in E24]
    return [value for value in values if _LEAST <= value <= _MOST]


def least(ohm: float) -> float:
    """Return what a resistor of a value has at least."""
    return ohm * (1 - TOLERANCE)


def most(ohm: float) -> float:
    """Return what a resistor of a value has at most."""
    return ohm * (1 + TOLERANCE)
