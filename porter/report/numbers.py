"""Numbers as a reader of the report wants them: engineering notation, SI units, four digits."""

import math

from quantiphy import Quantity

from porter.behaviour.model import Band
from porter.spec.model import Spread

#: What a window says that never ends (`Band` holds None there).
NEVER = "never"
#: What stands where a number is no number: a report must not print one.
UNKNOWN = "not known"
NBSP = "\N{NO-BREAK SPACE}"


def _figures(prefixes: str) -> type[Quantity]:
    """Return a number class with the report's own preferences, so that nobody else's change."""
    kind = type("_Figure", (Quantity,), {})
    kind.set_prefs(  # type: ignore[attr-defined]  # quantiphy carries no types
        spacer=NBSP,
        map_sf=Quantity.map_sf_to_sci_notation,
        minus=Quantity.minus_sign,
        output_sf=prefixes,
    )
    return kind


#: Prefixes that a reader meets with each unit; nobody writes kiloseconds or megavolts here.
_PREFIXES = {"s": "munpf", "V": "munp", "A": "munpf", "ohm": "GMkmu", "F": "munpf", "%": ""}
_FIGURES = {unit: _figures(prefixes) for unit, prefixes in _PREFIXES.items()}
_OTHER = _figures("GMkmunp")
_SYMBOL = {"ohm": "Ω"}


def quantity(value: float | None, unit: str, digits: int = 4) -> str:
    """Return *value* with an SI prefix, such as ``4.7 kΩ``; None and infinity are ``never``.

    Args:
        value: in the SI unit itself, None = an infinite time.
        unit: ``s``, ``V``, ``A``, ``ohm``, ``F`` or any other text.
        digits: significant digits; trailing zeros are dropped.
    """
    if value is None or math.isinf(value):
        return NEVER
    if math.isnan(value):
        return UNKNOWN
    symbol = _SYMBOL.get(unit, unit)
    if unit == "s" and 1000 <= abs(value) < 1e6:
        return f"{value:,.0f}{NBSP}s".replace(",", NBSP)
    figure = _FIGURES.get(unit, _OTHER)(value, symbol)
    return str(figure.render(prec=digits - 1))


def seconds(value: float | None) -> str:
    """Return a time in seconds as text."""
    return quantity(value, "s")


def volts(value: float | None) -> str:
    """Return a voltage as text."""
    return quantity(value, "V")


def reach(least: float | None, most: float | None, unit: str) -> str:
    """Return ``least to most``, or one number where both read the same."""
    low, high = quantity(least, unit), quantity(most, unit)
    return low if low == high else f"{low} to {high}"


def band_range(band: Band, unit: str) -> str:
    """Return the least and most of a band as text."""
    return reach(band.least, band.most, unit)


def spread(value: Spread, unit: str) -> str:
    """Return a drawing's value with its range, such as ``10 kΩ (9.5 kΩ to 10.5 kΩ)``."""
    nominal = quantity(value.nominal, unit)
    return f"{nominal} ({reach(value.least, value.most, unit)})" if value.toleranced else nominal


def percent(ratio: float) -> str:
    """Return a ratio as a percentage, such as ``2 %``."""
    return quantity(ratio * 100, "%", 3)


def count(number: int) -> str:
    """Return a whole number with its thousands set apart."""
    return f"{number:,}".replace(",", NBSP)


def plural(number: int, one: str, many: str | None = None) -> str:
    """Return ``1 case`` or ``12 cases``."""
    return f"{count(number)} {one if number == 1 else many or one + 's'}"
