"""How the rules say numbers, and the mends that a spec can take literally."""

import math

from quantiphy import Quantity

from porter.spec.model import Circuit, Spread

#: IEC 60063, E12.
_E12 = (1.0, 1.2, 1.5, 1.8, 2.2, 2.7, 3.3, 3.9, 4.7, 5.6, 6.8, 8.2)
_LEVELS = ("low", "high")


class _Figure(Quantity):
    """Numbers with the rules' own preferences, so that nobody else's change."""


_Figure.set_prefs(output_sf="GMkmunpf", map_sf=Quantity.map_sf_to_sci_notation)


def figure(value: float, unit: str, digits: int = 4) -> str:
    """Return a number in engineering notation with its unit, ``4.7 kΩ``.

    Args:
        unit: ``V``, ``A``, ``ohm``, ``F``, ``s`` or empty.
    """
    if math.isinf(value):
        return "never"
    if unit == "" or (unit == "V" and abs(value) >= 1000):
        return f"{value:.{digits}g}" + (f" {unit}" if unit else "")
    return str(_Figure(value, {"ohm": "Ω"}.get(unit, unit)).render(prec=digits - 1))


def volts(value: float) -> str:
    """Return a voltage; what rounding leaves of zero is zero."""
    return figure(0.0 if abs(value) < 1e-9 else value, "V")


def plain(value: float, digits: int = 6) -> str:
    """Return a number as a spec takes it, ``4.7k``."""
    return str(_Figure(value, "").render(prec=digits - 1)).replace(" ", "").replace("µ", "u")


def with_tolerance(value: float, spread: Spread, unit: str = "") -> str:
    """Return a new nominal value with the relative tolerance that the old one had."""
    up, down = spread.most / spread.nominal - 1, 1 - spread.least / spread.nominal
    text = f"{plain(value)}{unit}"
    if up < 1e-12 and down < 1e-12:
        return text
    if math.isclose(up, down, rel_tol=1e-6):
        return f"{text} ±{up * 100:.6g}%"
    return f"{text} +{up * 100:.6g}% -{down * 100:.6g}%"


def three(nominal: float, least: float, most: float, unit: str = "") -> str:
    """Return a value with its range as a spec takes it; a ratio has the unit ``1``."""
    named = (("nominal", nominal), ("least", least), ("most", most))
    if unit == "1":
        return "{" + ", ".join(f"{name}: {v:.6g}" for name, v in named) + "}"
    return "{" + ", ".join(f"{name}: {plain(v)}{unit}" for name, v in named) + "}"


def series(value: float, up: bool, factor: float = 100.0) -> list[float]:
    """Return the E12 values above (or below) a value, the nearest first, up to a factor away."""
    decade = math.floor(math.log10(value))
    all_values = [round(m * 10.0**d, 15) for d in range(decade - 3, decade + 4) for m in _E12]
    if up:
        return [v for v in all_values if value * 1.001 < v <= value * factor]
    return [v for v in reversed(all_values) if value / factor <= v < value * 0.999]


def at_least(value: float) -> float:
    """Return the next E12 value that is not smaller."""
    return series(value * 0.998, True)[0]


def two_digits(value: float, up: bool) -> float:
    """Round a positive value up (or down) to two digits."""
    step = 10.0 ** (math.floor(math.log10(value)) - 1)
    count = math.ceil(value / step * (1 - 1e-9)) if up else math.floor(value / step * (1 + 1e-9))
    return count * step


def new_name(circuit: Circuit, stem: str) -> str:
    """Return a part, button or node name that is not taken yet."""
    taken = {p.name for p in circuit.parts} | {b.name for b in circuit.buttons} | set(circuit.nodes)
    taken |= set(circuit.timer.pins.values())
    lower = {name.lower() for name in taken}
    return next(n for n in (stem, *(f"{stem}{k}" for k in range(1, 999))) if n.lower() not in lower)


def add_part(name: str, kind: str, value: str, a: str, b: str) -> str:
    """Word the mend that adds a part."""
    return f"add `{name}: {{{kind}: {value}, between: [{a}, {b}]}}` to the parts"


def move(name: str, a: str, b: str) -> str:
    """Word the mend that puts a part or button between other nodes."""
    return f"put `{name}` between `[{a}, {b}]`"


def change(name: str, value: str) -> str:
    """Word the mend that gives a part another value."""
    return f"change `{name}` to `{value}`"


def level(q: int) -> str:
    """Return ``low`` or ``high``."""
    return _LEVELS[q]


def held_words(circuit: Circuit, mask: int) -> str:
    """Return ``no button held`` or ``A and B held``."""
    names = [b.name for i, b in enumerate(circuit.buttons) if mask >> i & 1]
    return f"{' and '.join(names)} held" if names else "no button held"
