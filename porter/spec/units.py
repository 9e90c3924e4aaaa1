"""Values as people write them to `Spread`.

``4k7``, ``0.1 µF``, ``10 kΩ ±5%``, ``100n +80% -20%``, ``3.3 V ±0.2 V``, ``2/3``.
Source of the letter codes: IEC 60062 (a letter in place of the point; trailing tolerance
letters).  Decimal texts are converted with a decimal exponent, so that two ways to write a
value give the same float.
"""

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

from quantiphy import QuantiPhyError, Quantity
from rkm_codes import from_rkm

from porter.spec.model import Spread


class QuantityError(ValueError):
    """A value can't be used; `rule`, `message` and `mend` as in a `Finding`."""

    def __init__(self, rule: str, message: str, mend: str) -> None:
        super().__init__(message)
        self.rule, self.message, self.mend = rule, message, mend
        self.part = ""  # of the three, the one that is meant


@dataclass(frozen=True, slots=True)
class Kind:
    """What a value measures and how large it may sensibly be.

    Args:
        noun: with article, ``a resistance``.
        unit: ``ohm``, ``V``, ``A``, ``F``, ``s``, or empty for a ratio.
        low, high: the sanity range in SI; `low` of 0 allows zero.
        example: a value that is fine, for hints.
    """

    noun: str
    unit: str
    low: float
    high: float
    example: str


RESISTANCE: Final = Kind("a resistance", "ohm", 1e-3, 1e12, "10k")
CAPACITANCE: Final = Kind("a capacitance", "F", 1e-15, 1.0, "100n")
SUPPLY: Final = Kind("a supply voltage", "V", 0.5, 60.0, "5 V ±5%")
FORWARD: Final = Kind("a forward voltage", "V", 0.05, 60.0, "2.0 V")
LEVEL: Final = Kind("a voltage", "V", 0.0, 60.0, "0.7 V")
SERIES: Final = Kind("a resistance", "ohm", 0.0, 1e9, "80")
CURRENT: Final = Kind("a current", "A", 0.0, 10.0, "2 uA")
LOAD_CURRENT: Final = Kind("a current", "A", 1e-15, 10.0, "20 mA")
TIME: Final = Kind("a time", "s", 1e-9, 1e4, "6.2 ms")
BOUNCE: Final = Kind("a time", "s", 0.0, 10.0, "6.2 ms")
DRIVE: Final = Kind("a current", "A", 1e-5, 10.0, "8 mA")
TICK: Final = Kind("a time", "s", 1e-6, 10.0, "1 ms")
RATIO: Final = Kind("a ratio", "", 1e-3, 0.999, "2/3")
TOLERANCE: Final = Kind("a tolerance", "", 0.0, 0.5, "±2%")

_UNITS: Final[Mapping[str, str]] = {
    **dict.fromkeys(("Ω", "ohm", "ohms", "Ohm", "Ohms", "OHM", "R"), "ohm"),
    **dict.fromkeys(("V", "volt", "volts", "Volt", "v"), "V"),
    **dict.fromkeys(("A", "amp", "amps", "ampere", "Amp"), "A"),
    **dict.fromkeys(("F", "farad", "farads", "Farad"), "F"),
    **dict.fromkeys(("s", "sec", "second", "seconds", "S"), "s"),
    **dict.fromkeys(("H", "henry"), "H"),
    **dict.fromkeys(("Hz", "hertz"), "Hz"),
    **dict.fromkeys(("W", "watt"), "W"),
    "%": "%",
}
_NOUNS: Final = {
    "ohm": "a resistance",
    "V": "a voltage",
    "A": "a current",
    "F": "a capacitance",
    "s": "a time",
    "H": "an inductance",
    "Hz": "a frequency",
    "W": "a power",
    "%": "a percentage",
}
_UNIT_NAMES: Final = {
    "ohm": "ohms",
    "V": "volts",
    "A": "amperes",
    "F": "farads",
    "s": "seconds",
    "": "no unit",
}
_PREFIX: Final = "fpnumkKMGT"

_NUMBER: Final = r"(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_PLAIN: Final = re.compile(rf"([+-]?)({_NUMBER})\s*([{_PREFIX}]?)\s*([A-Za-zΩ%]*)")
#: Letter in place of the point, as IEC 60062 writes it: 4k7, R47, 2u2, 470R.
_RKM: Final = re.compile(r"(\d*)([RLfpnumkKMGTFEV])(\d+)\s*(Ω|[A-Za-z]*)")
_SIGN: Final = r"(?:±|\+/-|\+-|-/\+|-\+)"
_ENDS: Final = re.compile(rf"([+-])\s*({_NUMBER}[^+\-/,]*?)\s*[/,]?\s*([+-])\s*({_NUMBER}[^+\-]*?)\s*")
_PERCENT: Final = re.compile(rf"({_NUMBER})\s*(%|ppm)")
#: IEC 60062 tolerance letters in per cent (minus, plus).  Letters that could also be a unit here
#: (H, S, T, …) are left out, and F counts only on a resistor.
_LETTERS: Final = {"F": (1, 1), "G": (2, 2), "J": (5, 5), "K": (10, 10), "M": (20, 20), "Z": (20, 80)}
_LETTERED: Final = {
    "ohm": re.compile(r"(\d*[RkKMG]\d*|\d+(?:\.\d+)?[kKMG])([FGJKMZ])"),
    "F": re.compile(r"(\d*[pnum]\d*|\d+(?:\.\d+)?[pnum])([GJKMZ])"),
}


def normalise(text: str) -> str:
    """Return *text* with one code point for each sign that has several (micro, ohm, minus, spaces)."""
    table: dict[str, str | int | None] = {
        "µ": "u",
        "μ": "u",
        "\u2126": "Ω",
        "−": "-",
        "–": "-",
        "％": "%",
        "\u00a0": " ",
        "\u202f": " ",
        "\u2009": " ",
    }
    return " ".join(text.translate(str.maketrans(table)).split())


def _unreadable(text: str, kind: Kind, mend: str = "") -> QuantityError:
    hint = mend or f"write it like `{kind.example}`; the prefixes are p n u m k M"
    return QuantityError("value-unreadable", f"`{text}` can't be read as {kind.noun}", hint)


def _known_traps(text: str, kind: Kind) -> None:
    """Raise for the spellings that other programs read as something else."""
    if re.fullmatch(r"[\d.]+\s*meg\w*(?:Ω)?", text, re.IGNORECASE):
        number = re.match(r"[\d.]+", text)
        raise _unreadable(text, kind, f"write `{number.group() if number else 1}M`; M is mega, m is milli")
    if re.search(r"\d,\d", text):
        raise _unreadable(text, kind, f"write a point for the decimals: `{text.replace(',', '.', 1)}`")
    if match := re.fullmatch(rf"(.*\S)\s+({_NUMBER}\s*%)", text):
        raise _unreadable(text, kind, f"write `{match[1]} ±{match[2]}`")
    if re.match(r"[+-]?0\d", text):
        raise _unreadable(text, kind, f"leave out the leading zero: `{text.lstrip('+-0') or '0'}`")


def _convert(digits: str, prefix: str) -> float:
    """Return the float nearest to *digits* times *prefix*."""
    try:
        return float(Quantity(f"{digits}{prefix}"))
    except QuantiPhyError:
        return math.nan


def _rkm(text: str) -> tuple[float, str] | None:
    """Return value and unit of a letter code such as ``4k7``, or None where it isn't one."""
    match = _RKM.fullmatch(text)
    if not match:
        return None
    whole, letter, part, unit = match.groups()
    if letter in "FEV":  # 3V3, 4F7: the letter is the unit
        return float(f"{whole or 0}.{part}"), {"E": "ohm"}.get(letter, letter)
    if len(part) > 4:
        return None
    known = _UNITS.get(unit, unit)
    if letter in "RL":
        known = known or "ohm"
    letter = {"L": "m"}.get(letter, letter)
    found = from_rkm(f"{whole or 0}{letter}{part}")
    return None if found is None else (float(found), known)


def _plain(text: str) -> tuple[float, str] | None:
    """Return value and unit of ``10``, ``10k``, ``10 kΩ``, or None where it isn't one."""
    match = _PLAIN.fullmatch(text)
    if not match:
        return None
    sign, digits, prefix, unit = match.groups()
    if unit and unit not in _UNITS:
        return None
    return _convert(sign + digits, prefix.replace("K", "k")), _UNITS.get(unit, "")


def _fraction(text: str) -> float | None:
    """Return the value of ``2/3``, or None where it isn't one."""
    match = re.fullmatch(rf"({_NUMBER})\s*/\s*({_NUMBER})", text)
    if not match or float(match[2]) == 0:
        return None
    return float(match[1]) / float(match[2])


def number(text: str, kind: Kind) -> float:
    """Return one value in SI, without tolerance and without a look at its range.

    Args:
        text: as `normalise` returns it.
        kind: what it should measure.

    Raises:
        QuantityError: ``value-unreadable`` or ``unit-mismatch``.
    """
    _known_traps(text, kind)
    if kind.unit == "" and (ratio := _fraction(text)) is not None:
        return ratio
    found = _plain(text) or _rkm(text)
    if found is None or not math.isfinite(found[0]):
        raise _unreadable(text, kind, _near_unit(text))
    value, unit = found
    if kind.unit == "" and unit == "%":
        return value / 100
    if unit not in ("", kind.unit):
        raise QuantityError(
            "unit-mismatch",
            f"`{text}` is {_NOUNS.get(unit, 'something else')}, but {kind.noun} is needed here",
            f"write {_UNIT_NAMES[kind.unit]}, like `{kind.example}`",
        )
    return value


def _near_unit(text: str) -> str:
    """Return a hint where only the case of the unit is wrong, else an empty text."""
    match = re.fullmatch(rf"({_NUMBER})\s*([A-Za-z]+)", text)
    if not match:
        return ""
    for spelling in (match[2][:-1] + match[2][-1:].upper(), match[2][:1].lower() + match[2][1:].upper()):
        if _plain(match[1] + spelling):
            return f"write `{match[1]}{spelling}`"
    return ""


def _percent(text: str) -> float | None:
    match = _PERCENT.fullmatch(text)
    return float(match[1]) / (100 if match[2] == "%" else 1e6) if match else None


def _step(text: str, nominal: float, kind: Kind) -> float:
    """Return the size of one side's tolerance in SI."""
    share = _percent(text)
    if share is not None:
        return abs(nominal) * share
    if kind.unit and re.fullmatch(_NUMBER, text):
        raise QuantityError(
            "tolerance-unusable",
            f"`{text}` is neither per cent nor {_UNIT_NAMES[kind.unit]}",
            f"write `{text}%` or `{text} {kind.unit}`",
        )
    return abs(number(text, kind))


def _bad_tolerance(text: str) -> QuantityError:
    return QuantityError(
        "tolerance-unusable", f"`{text}` isn't a tolerance", "write `±5%`, `+80% -20%` or `±0.2 V`"
    )


def _two_ends(ends: str, nominal: float, kind: Kind) -> tuple[float, float]:
    """Return (minus, plus) in SI of ``+80% -20%``, ``-20/+80%``, ``-0.1 V +0.2 V``."""
    match = _ENDS.fullmatch(ends)
    if not match or match[1] == match[3]:
        raise _bad_tolerance(ends)
    first, second = match[2].strip(), match[4].strip()
    if second.endswith("%") and re.fullmatch(_NUMBER, first):
        first += "%"  # -20/+80%
    steps = {match[1]: _step(first, nominal, kind), match[3]: _step(second, nominal, kind)}
    return steps["-"], steps["+"]


def _split(text: str) -> tuple[str, str, str]:
    """Return the value's text, the text after ``±``, and the text of unequal ends; both may be empty."""
    cut = re.search(rf"(?<=\S)\s*{_SIGN}|(?<=[^\seE])\s*[+-]|\s[+-]", text)
    if cut is None:
        return text, "", ""
    head, tail = text[: cut.start()].strip(), text[cut.start() :].strip()
    both = re.fullmatch(rf"{_SIGN}\s*(.+)", tail)
    return (head, both[1].strip(), "") if both else (head, "", tail)


def _check_range(value: float, text: str, kind: Kind) -> None:
    if value < 0:
        raise QuantityError(
            "value-out-of-range",
            f"`{text}` is negative",
            "leave out the minus; where a direction is meant, swap the two nodes",
        )
    if value == 0 and kind.low > 0:
        raise QuantityError("value-out-of-range", f"`{text}` is zero", _zero_mend(kind))
    if not kind.low <= value <= kind.high:
        raise QuantityError(
            "value-out-of-range",
            f"`{text}` isn't {kind.noun} between {_say(kind.low, kind)} and {_say(kind.high, kind)}",
            f"check the prefix; write it like `{kind.example}`",
        )


def _zero_mend(kind: Kind) -> str:
    if kind.unit == "ohm":
        return "for a wire, give both ends the same node name instead"
    return f"write {kind.noun} above zero, like `{kind.example}`"


def _say(value: float, kind: Kind) -> str:
    return Quantity(value, kind.unit).render(prec="full") if kind.unit else f"{value:g}"


def _spread(nominal: float, minus: float, plus: float, text: str) -> Spread:
    if nominal > 0 and minus >= nominal:
        raise QuantityError(
            "tolerance-unusable",
            f"the tolerance of `{text}` reaches down to zero or below",
            "write a tolerance below 100 % on the low side",
        )
    return Spread(nominal, nominal - minus, nominal + plus)


def _spell_letter(text: str, kind: Kind) -> str:
    """Return *text* with a trailing tolerance letter written out in per cent."""
    pattern = _LETTERED.get(kind.unit)
    match = pattern.fullmatch(text) if pattern else None
    if not match:
        return text
    minus, plus = _LETTERS[match[2]]
    return f"{match[1]} -{minus}% +{plus}%"


def spread(text: str, kind: Kind) -> Spread:
    """Return a value with its tolerance.

    Args:
        text: ``10k ±5%`` and the other forms named at the head of this module.
        kind: what it should measure, and its sanity range.

    Raises:
        QuantityError: with rule ``value-unreadable``, ``unit-mismatch``, ``tolerance-unusable``
            or ``value-out-of-range``.

    >>> spread("4k7 ±10%", RESISTANCE)
    Spread(nominal=4700.0, least=4230.0, most=5170.0)
    """
    clean = normalise(text)
    head, both, ends = _split(_spell_letter(clean, kind))
    nominal = number(head, kind)
    _check_range(nominal, text, kind)
    if both:
        step = _step(both, nominal, kind)
        return _spread(nominal, step, step, text)
    minus, plus = _two_ends(ends, nominal, kind) if ends else (0.0, 0.0)
    return _spread(nominal, minus, plus, text)


def _one_of_three(key: str, text: str, kind: Kind) -> float:
    try:
        value = number(normalise(text), kind)
        _check_range(value, text, kind)
    except QuantityError as error:
        error.part = key
        raise
    return value


def three(texts: Mapping[str, str], kind: Kind) -> Spread:
    """Return the value of ``{nominal: …, least: …, most: …}``; a missing end is the nominal.

    Raises:
        QuantityError: as `spread`, and ``tolerance-unusable`` where the three aren't in order.
    """
    values = {key: _one_of_three(key, text, kind) for key, text in texts.items()}
    nominal = values["nominal"]
    least, most = values.get("least", nominal), values.get("most", nominal)
    if not least <= nominal <= most:
        raise QuantityError(
            "tolerance-unusable",
            "least, nominal and most aren't in this order of size",
            "give least <= nominal <= most",
        )
    return Spread(nominal, least, most)


def relative(text: str) -> float:
    """Return the tolerance of ``±2%``, ``2%``, ``50 ppm`` or ``-4% +3%`` as a fraction, the larger side.

    Raises:
        QuantityError: as `spread`.
    """
    clean = normalise(text)
    bare = re.sub(rf"^{_SIGN}\s*", "", clean)
    found = _percent(bare)
    if found is None and re.match(r"[+-]", bare):
        found = max(_two_ends(bare, 1.0, TOLERANCE))
    if found is None:
        found = number(bare, TOLERANCE)
    _check_range(found, text, TOLERANCE)
    return found


def unit_of(text: str) -> str:
    """Return the unit written in *text* (``ohm``, ``A``, …), empty where none is or it can't be read."""
    head = _split(normalise(text))[0]
    found = _plain(head) or _rkm(head)
    return found[1] if found else ""
