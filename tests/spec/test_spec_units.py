"""Values as people write them."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from porter.spec import units
from porter.spec.model import Spread
from porter.spec.units import QuantityError, relative, spread, three


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("10k", units.RESISTANCE, 1e4),
        ("10K", units.RESISTANCE, 1e4),
        ("4k7", units.RESISTANCE, 4.7e3),
        ("2R2", units.RESISTANCE, 2.2),
        ("R47", units.RESISTANCE, 0.47),
        ("470R", units.RESISTANCE, 470.0),
        ("4k7Ω", units.RESISTANCE, 4.7e3),
        ("10 k\u2126", units.RESISTANCE, 1e4),  # the ohm sign
        ("10 k\u03a9", units.RESISTANCE, 1e4),  # the Greek letter
        ("10 kohm", units.RESISTANCE, 1e4),
        ("1M", units.RESISTANCE, 1e6),
        ("0.1 \u00b5F", units.CAPACITANCE, 1e-7),  # the micro sign
        ("0.1 \u03bcF", units.CAPACITANCE, 1e-7),  # the Greek letter
        ("0.1uF", units.CAPACITANCE, 1e-7),
        ("100nF", units.CAPACITANCE, 1e-7),
        ("1e-7", units.CAPACITANCE, 1e-7),
        ("2n2", units.CAPACITANCE, 2.2e-9),
        ("3V3", units.SUPPLY, 3.3),
        ("12\u00a0V", units.SUPPLY, 12.0),  # a space that doesn't break
        ("6.2 ms", units.TIME, 6.2e-3),
        ("2/3", units.RATIO, 2 / 3),
        ("66.5%", units.RATIO, 0.665),
        ("2 uA", units.CURRENT, 2e-6),
        ("0", units.CURRENT, 0.0),
    ],
)
def test_a_value_is_read(text: str, kind: units.Kind, value: float) -> None:
    """Each notation gives exactly the float that the number itself gives."""
    assert Spread.exact(value) == spread(text, kind)


@pytest.mark.parametrize(
    ("text", "least", "most"),
    [
        ("100n ±20%", 80e-9, 120e-9),
        ("100n±20%", 80e-9, 120e-9),
        ("100n +-20%", 80e-9, 120e-9),
        ("100n +/- 20 %", 80e-9, 120e-9),
        ("100n +80% -20%", 80e-9, 180e-9),
        ("100n -20% +80%", 80e-9, 180e-9),
        ("100n -20/+80%", 80e-9, 180e-9),
        ("100n \u221220% +80%", 80e-9, 180e-9),  # a true minus sign
        ("100n ±5 nF", 95e-9, 105e-9),
        ("100n +10n -5n", 95e-9, 110e-9),
        ("100nK", 90e-9, 110e-9),
        ("100nZ", 80e-9, 180e-9),
        ("1e-7 ±20%", 80e-9, 120e-9),
    ],
)
def test_a_tolerance_is_read(text: str, least: float, most: float) -> None:
    """Each notation gives the range; an exponent's sign isn't taken for a tolerance."""
    found = spread(text, units.CAPACITANCE)

    assert found.nominal == 1e-7
    assert (least, most) == pytest.approx((found.least, found.most), rel=1e-12)


@pytest.mark.parametrize(
    ("text", "kind", "rule", "mend"),
    [
        ("1 Meg", units.RESISTANCE, "value-unreadable", "`1M`"),
        ("2.2Megohm", units.RESISTANCE, "value-unreadable", "`2.2M`"),
        ("4,7k", units.RESISTANCE, "value-unreadable", "`4.7k`"),
        ("010", units.RESISTANCE, "value-unreadable", "`10`"),
        ("0x10", units.RESISTANCE, "value-unreadable", ""),
        ("1_000", units.RESISTANCE, "value-unreadable", ""),
        ("12:30", units.TIME, "value-unreadable", ""),
        ("nan", units.RESISTANCE, "value-unreadable", ""),
        ("inf", units.RESISTANCE, "value-unreadable", ""),
        ("1e999", units.RESISTANCE, "value-unreadable", ""),
        ("ten", units.RESISTANCE, "value-unreadable", ""),
        ("10k 5%", units.RESISTANCE, "value-unreadable", "`10k ±5%`"),
        ("10nF", units.RESISTANCE, "unit-mismatch", "ohms"),
        ("10nH", units.CAPACITANCE, "unit-mismatch", "farads"),
        ("5 mA", units.SUPPLY, "unit-mismatch", "volts"),
        ("-10k", units.RESISTANCE, "value-out-of-range", ""),
        ("0", units.RESISTANCE, "value-out-of-range", "node"),
        ("2T", units.RESISTANCE, "value-out-of-range", ""),
        ("100kF", units.CAPACITANCE, "value-out-of-range", ""),
        ("61 V", units.SUPPLY, "value-out-of-range", ""),
        ("0.4 V", units.SUPPLY, "value-out-of-range", ""),
        ("100n ±100%", units.CAPACITANCE, "tolerance-unusable", ""),
        ("100n -120% +5%", units.CAPACITANCE, "tolerance-unusable", ""),
        ("100n +5% +5%", units.CAPACITANCE, "tolerance-unusable", ""),
        ("100n -5%", units.CAPACITANCE, "tolerance-unusable", ""),
        ("10k ±5", units.RESISTANCE, "tolerance-unusable", "`5%`"),
        ("3/0", units.RATIO, "value-unreadable", ""),
    ],
)
def test_a_value_that_cannot_be_used_says_so(text: str, kind: units.Kind, rule: str, mend: str) -> None:
    """The rule fits, and the mend says what to write."""
    with pytest.raises(QuantityError) as caught:
        spread(text, kind)

    assert rule == caught.value.rule
    assert mend in caught.value.mend


def test_a_prefix_trap_is_not_a_tolerance_letter() -> None:
    """K, M and F after a number mean kilo, mega and farad; after a letter code they are tolerances."""
    assert Spread.exact(1e4) == spread("10K", units.RESISTANCE)
    assert Spread.exact(1e-7) == spread("100nF", units.CAPACITANCE)
    assert spread("4k7 ±10%", units.RESISTANCE) == spread("4K7K", units.RESISTANCE)
    assert spread("10k ±1%", units.RESISTANCE) == spread("10kF", units.RESISTANCE)


def test_three_figures_must_be_in_order() -> None:
    """Least, nominal, most; one that is missing is the nominal."""
    assert Spread(3.33, 2.4, 4.2) == three(
        {"nominal": "3.33 V", "least": "2.4 V", "most": "4.2 V"}, units.LEVEL
    )
    assert Spread(3.0, 3.0, 4.0) == three({"nominal": "3", "most": "4"}, units.LEVEL)
    with pytest.raises(QuantityError):
        three({"nominal": "3", "least": "3.5"}, units.LEVEL)


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("±2%", 0.02),
        ("2%", 0.02),
        ("+-2 %", 0.02),
        ("0.02", 0.02),
        ("50 ppm", 50e-6),
        ("-4% +3%", 0.04),
        ("-4/+3%", 0.04),
    ],
)
def test_a_clock_tolerance_is_read(text: str, value: float) -> None:
    """The larger side counts."""
    assert value == pytest.approx(relative(text), rel=1e-12)


# --- properties -----------------------------------------------------------------------------

PREFIXES = {"p": -12, "n": -9, "u": -6, "m": -3, "": 0, "k": 3, "M": 6}


@given(digits=st.integers(1, 9999), prefix=st.sampled_from(sorted(PREFIXES)), shift=st.integers(0, 2))
def test_any_value_reads_back_equal_in_every_notation(digits: int, prefix: str, shift: int) -> None:
    """Prefix, exponent, spaces, unit and letter code make no difference, to the last bit."""
    exponent = PREFIXES[prefix]
    value = float(f"{digits}e{exponent}")
    shifted = f"{digits * 10**shift}e{exponent - shift}"
    texts = [
        f"{digits}{prefix}",
        f"{digits} {prefix}ohm",
        f"{digits}{prefix}Ω",
        shifted,
        f"{digits}e{exponent} ohm",
    ]
    if prefix in ("k", "M") and digits > 9:
        texts.append(f"{digits // 10}{prefix}{digits % 10}")
        value_of_code = float(f"{digits}e{exponent - 1}")
        assert value_of_code == units.number(texts.pop(), units.RESISTANCE)

    assert {value} == {units.number(text, units.RESISTANCE) for text in texts}


@given(
    nominal=st.integers(1, 999),
    percent=st.floats(0.01, 99, allow_nan=False).map(lambda p: round(p, 2)),
    prefix=st.sampled_from(["p", "n", "u"]),
)
def test_a_tolerance_holds_its_value(nominal: int, percent: float, prefix: str) -> None:
    """Least <= nominal <= most, symmetric, and the same in both orders of writing."""
    found = spread(f"{nominal}{prefix}F ±{percent}%", units.CAPACITANCE)

    assert 0 < found.least <= found.nominal <= found.most
    assert math.isclose(found.most - found.nominal, found.nominal - found.least, rel_tol=1e-6)
    assert found == spread(f"{nominal}{prefix} -{percent}% +{percent}%", units.CAPACITANCE)
    assert found == spread(f"{nominal}{prefix} +{percent}% -{percent}%", units.CAPACITANCE)


@given(st.text(max_size=80))
def test_any_text_is_a_value_or_a_clear_error(text: str) -> None:
    """Nothing but a `QuantityError` with message and mend; what is accepted is finite and in order."""
    for kind in (units.RESISTANCE, units.CAPACITANCE, units.RATIO, units.CURRENT):
        try:
            found = spread(text, kind)
        except QuantityError as error:
            assert error.message and error.mend
        else:
            assert math.isfinite(found.most) and 0 <= found.least <= found.nominal <= found.most


@given(st.text(alphabet="0123456789.kMunpRFΩ%±+-/ eV", max_size=20))
def test_texts_that_look_like_values(text: str) -> None:
    """The same, with texts near to real ones."""
    test_any_text_is_a_value_or_a_clear_error.hypothesis.inner_test(text)
