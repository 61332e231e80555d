"""Text to quantity and back."""

import math
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pytest import approx

from reconcile.campaign.number_text import decimal_evidence, settle_decimal, to_float
from reconcile.campaign.quantity import UnknownUnit, convert, parse_quantity, parse_unit, rounded, shown, unit_label
from reconcile.campaign.refusal import Refusal

# Sizes by the definitions of the SI prefixes and units (SI Brochure, 9th edition), worked by hand.
SIZES = {
    "um": 1e-6, "µm": 1e-6, "μm": 1e-6, "nm": 1e-9, "mm": 1e-3, "fs": 1e-15, "uJ": 1e-6, "mJ": 1e-3, "kPa": 1e3,
    "mbar": 100.0, "bar": 1e5, "J/cm2": 1e4, "J/cm²": 1e4, "J·cm⁻²": 1e4, "J cm-2": 1e4, "J*cm^-2": 1e4, "mJ/cm^2": 10.0,
    "W/cm2": 1e4, "V/MPa": 1e-6, "mV/MPa": 1e-9, "V/uPa": 1e6, "Pa2 s": 1.0, "Pa²·s": 1.0, "kPa2 us": 1.0, "um3": 1e-18,
    "kg/m3": 1.0, "g/cm3": 1e3, "mPa s": 1e-3, "mPa·s": 1e-3, "W/(m K)": 1.0, "MHz": 1e6, "%": 1e-2, "1": 1.0,
    "deg": math.pi / 180, "°": math.pi / 180, "km/s": 1e3, "1/cm2": 1e4, "Âµm": 1e-6,
}  # fmt: skip


@pytest.mark.parametrize(("text", "size"), SIZES.items())
def test_a_unit_has_its_size(text, size):
    assert parse_unit(text).size == approx(size, rel=1e-15)


@pytest.mark.parametrize(
    ("text", "known"),
    [
        ("micron", "um"), ("Um", "um"), ("UM", "um"), ("C", "degC"), ("mPas", "mPa s"), ("sec", "s"), ("J/kg K", "J/(kg K)"),
        ("J/cm2/s", "J/(cm2 s)"), ("dB", "dB re 1 V/uPa"), ("dB re 1 uPa", "dB re 1 V/uPa"), ("MJoule", None),
        ("J/Cm2", "J/cm2"), ("pixel", "px"), ("MJ degC", "K"),
    ],
)  # fmt: skip
def test_an_unknown_or_ambiguous_unit_is_refused_with_the_nearest_known_one(text, known):
    with pytest.raises(UnknownUnit) as caught:
        parse_unit(text)
    assert known is None or known in str(caught.value.known)


@pytest.mark.parametrize(
    ("text", "unit", "value", "u"),
    [
        ("21 um ± 1 um", "m", 21e-6, 1e-6),
        ("21 ± 1 um", "m", 21e-6, 1e-6),
        ("21 um ± 5 %", "m", 21e-6, 1.05e-6),
        ("21 um ± 1", "m", 21e-6, 1e-6),
        ("21 um +/- 2 um (k=2)", "m", 21e-6, 1e-6),
        ("21 um ± 2 um (k = 2)", "m", 21e-6, 1e-6),
        ("21µm±1000nm", "m", 21e-6, 1e-6),
        ("0.82 ± 0.02", "1", 0.82, 0.02),
        ("82 % ± 2 %", "1", 0.82, 0.02),
        ("82 % ± 2", "1", 0.82, 0.02),
        ("0.82 ± 0", "1", 0.82, 0.0),
        ("22 degC", "K", 295.15, None),
        ("22 °C ± 1 degC", "K", 295.15, 1.0),
        ("295 K", "K", 295.0, None),
        ("−20 ns ± 5 ns", "s", -20e-9, 5e-9),
        ("6e9 J/m3", "J/m3", 6e9, None),
        ("1.5×10⁹ J/m³ ± 10 %", "J/m3", 1.5e9, 1.5e8),
        ("0 deg ± 5 deg", "rad", 0.0, 5 * math.pi / 180),
        (0.75, "1", 0.75, None),
        (3, "1", 3.0, None),
    ],
)
def test_a_quantity_is_read_in_si(text, unit, value, u):
    quantity = parse_quantity(text, unit, "key")
    assert quantity.value == approx(value, rel=1e-14, abs=1e-300)
    assert quantity.u == (None if u is None else approx(u, rel=1e-14))
    assert quantity.unit == unit


def test_a_level_becomes_a_sensitivity_once():
    # -220 dB re 1 V/uPa is 10^(-220/20) V/uPa = 1e-11 V / 1e-6 Pa = 1e-5 V/Pa; 1 dB is a factor 10^(1/20), to first
    # order ln(10)/20 = 11.5 % of it.
    quantity = parse_quantity("-220 dB re 1 V/uPa ± 1 dB", "V/Pa", "key")
    assert quantity.value == approx(1e-5, rel=1e-12)
    assert quantity.u == approx(1e-5 * math.log(10) / 20, rel=1e-12)


def test_a_number_times_a_power_of_ten_is_the_float_that_a_person_would_write():
    assert parse_quantity("20 uJ", "J", "key").value == 20e-6
    assert parse_quantity("82 %", "1", "key").value == 0.82
    assert parse_quantity("90 um3", "m3", "key").value == 90e-18


@pytest.mark.parametrize(
    ("text", "unit", "says"),
    [
        ("20,5 um", "m", "Write 20.5, not 20,5"),
        ("1,000 um", "m", "decimal point"),
        ("21", "m", "without a unit"),
        (21, "m", "21 um"),
        (True, "1", "true"),
        ("21 uJ", "m", "21 um"),
        ("5 um", "1", "pure number"),
        ("1.00 ± 3 %", "1", "two ways"),
        ("3 ± 1 %", "1", '"3 % ± 1 %"'),
        ("21 um ± 1 uJ", "m", "in um or in %"),
        ("21 um ± -1 um", "m", "0 or more"),
        ("21 um ± 1 um ± 2 um", "m", "more than one ±"),
        ("21 um (k=2)", "m", "behind a ±"),
        ("21 um ± 2 um (k=0)", "m", "behind a ±"),
        ("about 21 um", "m", "number first"),
        ("21 micron", "m", "'um'"),
        ("1e999 um", "m", "number"),
        ("nan um", "m", "number"),
        ("", "m", "number"),
        ("-30 dB", "V/Pa", "V/MPa"),
        ("5 degC", "m", "21 um"),
        ("0.3 rad", "1", "pure number"),
    ],
)
def test_what_is_no_such_quantity_is_refused_with_its_remedy(text, unit, says):
    with pytest.raises(Refusal) as caught:
        parse_quantity(text, unit, "campaign.toml!beam.spot_radius")
    assert says in str(caught.value)
    assert str(caught.value).startswith("campaign.toml!beam.spot_radius: found ")


def test_a_value_converts_only_within_its_quantity():
    assert convert(1.0, "J/cm2", "J/m2") == 1e4
    with pytest.raises(ValueError, match="not a unit of the same quantity"):
        convert(1.0, "J", "J/m2")


@given(st.floats(min_value=1e-12, max_value=1e12), st.sampled_from(["nm", "um", "mm", "m"]))
def test_a_quantity_written_out_reads_the_same(number, unit):
    quantity = parse_quantity(f"{number!r} {unit}", "m", "key")
    size = {"nm": "1e-9", "um": "1e-6", "mm": "1e-3", "m": "1"}[unit]
    assert quantity.value == float(Decimal(repr(number)) * Decimal(size))


# --- numbers ----------------------------------------------------------------------------------------------------


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_float_reads_back_with_either_decimal_sign(number):
    assert to_float(repr(number)) == number
    assert to_float(repr(number).replace(".", ","), ",") == number


@given(st.integers(0, 10**9), st.integers(0, 999))
def test_groups_of_thousands_do_not_change_a_number(whole, thousandths):
    grouped = f"{whole:,}"
    assert to_float(f"{grouped}.{thousandths:03d}", ".") == approx(whole + thousandths / 1000, rel=1e-15)
    swapped = f"{grouped.replace(',', '.')},{thousandths:03d}"
    assert to_float(swapped, ",") == approx(whole + thousandths / 1000, rel=1e-15)
    blanks = f"{grouped.replace(',', ' ')}.{thousandths:03d}"
    assert to_float(blanks, ".") == approx(whole + thousandths / 1000, rel=1e-15)


@given(st.text(max_size=12))
def test_any_text_is_a_finite_number_or_a_value_error(text):
    try:
        number = to_float(text)
    except ValueError:
        return
    assert math.isfinite(number)
    assert any(sign.isdigit() for sign in text)


@given(st.lists(st.decimals(-1000, 1000, places=2).map(str), min_size=1))
def test_a_column_of_hundredths_settles_its_decimal_sign(numbers):
    assert settle_decimal(numbers) == "."
    assert settle_decimal([number.replace(".", ",") for number in numbers]) == ","


@pytest.mark.parametrize(
    ("text", "evidence"),
    [
        ("12,5", ","), ("0,412", ","), ("1.234,5", ","), ("1234,567", ","), ("1,234e-3", ","), ("<0,02", ","),
        ("12.5", "."), ("1,234.5", "."), ("1,234,567", "."), ("1.234.567", ","), ("1,234", "?,"), ("1.234", "?."),
        ("-1,234", "?,"), ("12", None), ("n.d.", None), ("abc", None), ("", None),
    ],
)  # fmt: skip
def test_a_number_tells_of_its_decimal_sign(text, evidence):
    assert decimal_evidence(text) == evidence


def test_thousands_that_could_be_decimals_stay_open():
    with pytest.raises(ValueError, match="1,234"):
        settle_decimal(["1,234", "7"])
    with pytest.raises(ValueError, match=r"12,5.*12\.5"):
        settle_decimal(["12,5", "12.5"])
    assert settle_decimal(["1,234", "12,5"]) == ","
    assert settle_decimal(["1,234", "12.5"]) == "."
    assert settle_decimal(["7", "8"]) is None


@pytest.mark.parametrize(
    "text", ["1,23.4", "12,34,567", "1.2.3", "--5", "5-", "0x10", "1_000", "inf", "٣", "1 2", "e5"]
)
def test_what_is_nearly_a_number_is_none(text):
    with pytest.raises(ValueError, match=".*"):
        to_float(text)


# --- rounding ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "u", "expected"),
    [
        # Worked by hand after JCGM 100:2008 7.2.6: two digits of u, the value to the same place, ties to even.
        (0.41234, 0.0197, ("0.412", "0.020")),
        (10.05762, 0.02749, ("10.058", "0.027")),  # the guide's example has 10.057 62 Ω and 27 mΩ
        (1.0, 0.125, ("1.00", "0.12")),
        (1.0, 0.135, ("1.00", "0.14")),
        (12345.0, 678.0, ("12340", "680")),
        (0.5, 0.0996, ("0.50", "0.10")),
        (-0.004, 12.0, ("0", "12")),
        (5.0, 1e-9, ("5.0000000000", "0.0000000010")),
    ],
)
def test_value_and_uncertainty_round_together(value, u, expected):
    assert rounded(value, u) == expected


@given(st.floats(-1e6, 1e6), st.floats(1e-6, 1e6))
def test_rounding_keeps_two_digits_and_moves_nothing_by_more_than_half_a_step(value, u):
    number, spread = rounded(value, u)
    digits = spread.replace(".", "").lstrip("0")
    step = Decimal(1).scaleb(Decimal(repr(u)).adjusted() - 1)
    assert len(digits.rstrip("0")) <= 2
    assert abs(Decimal(spread) - Decimal(repr(u))) <= step / 2 or spread.endswith("0")
    assert abs(Decimal(number) - Decimal(repr(value))) <= 5 * step


@pytest.mark.parametrize(
    ("value", "u", "unit", "expected"),
    [
        (4.1234e-7, 1.97e-8, "m", "412 ± 20 nm"),
        (2.1e-5, 1e-6, "m", "21.0 ± 1.0 µm"),
        (2e-5, 1e-6, "J", "20.0 ± 1.0 µJ"),
        (4.5e-7, 4.5e-8, "V/Pa", "450 ± 45 mV/MPa"),
        (2.0e4, 1e3, "J/m2", "2.00 ± 0.10 J/cm²"),
        (0.153, 0.0203, "1", "0.153 ± 0.020"),
        (0.003, 0.0, "1", "0.003"),
        (0.1, 0.02, "rad", "(5.7 ± 1.1)°"),
        (2e-5, 1e-6, "1", "(2.00 ± 0.10) × 10⁻⁵"),
        (60.0, 3.0, "Pa2 s", "60.0 ± 3.0 Pa²·s"),
        (0.0, 1e-9, "m", "0.0 ± 1.0 nm"),
        (0.41234, 0.0197, "um", "0.412 ± 0.020 µm"),
    ],
)
def test_a_number_is_shown_as_a_person_would_write_it(value, u, unit, expected):
    assert shown(value, u, unit) == expected


def test_numbers_that_stand_together_are_shown_in_one_unit():
    assert shown(4.12e-7, 2e-8, "m", in_unit="um") == "0.412 ± 0.020 µm"
    with pytest.raises(ValueError, match="cannot be shown"):
        shown(math.nan, None, "m")


def test_labels_carry_their_signs():
    assert [unit_label(unit) for unit in ("um2", "1/cm2", "J cm-2", "degC", "1")] == [
        "µm²",
        "1/cm²",
        "J·cm⁻²",
        "°C",
        "",
    ]
