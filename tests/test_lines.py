"""Numbers for eyes: rounding, prefixes, intervals, and a person's text made safe to show."""

from __future__ import annotations

import math

import pytest

from reconcile.inference.outcome import Summary
from reconcile.report import lines
from reconcile.report.lines import Scale

ONE = Scale("", 1.0)


@pytest.mark.parametrize(
    ("value", "u", "unit", "expected"),
    [
        # Worked by hand: two digits of u, the value to the same place.
        (4.1234e-7, 1.97e-8, "m", "412 ± 20 nm"),
        (21.04e-6, 0.996e-6, "m", "21.0 ± 1.0 µm"),
        (6.31e9, 1.74e9, "J/m3", "6.3 ± 1.7 GJ/m³"),
        (12_345.0, 678.0, "J/m2", "12.34 ± 0.68 kJ/m²"),
        (1.172e9, 5.2e7, "1/m2", "1.172 ± 0.052 kJ/m² per µJ"),
        (4.5e-7, 4.5e-8, "V/Pa", "450 ± 45 mV/MPa"),
        (math.radians(5), math.radians(1), "rad", "5.0 ± 1.0°"),
        (-0.177, 0.05, "1", "−0.177 ± 0.050"),
    ],
)
def test_a_value_and_its_uncertainty_are_rounded_together(value: float, u: float, unit: str, expected: str) -> None:
    scale = lines.scale_for(unit, [value])
    assert scale.with_unit(lines.pair(value, u, scale)) == expected


def test_a_column_takes_the_unit_of_its_middle_number() -> None:
    assert lines.scale_for("m", [2e-8, 4e-7, 5e-6, None, math.nan, 0.0]).label == "nm"
    assert lines.scale_for("J", [2e-6, 4e-5, 3e-3]).label == "µJ"
    assert lines.scale_for("furlong", [3.0]) == Scale("furlong", 1.0)
    assert lines.scale_for("1", [0.03], "energy_jitter").label == "%"


def test_a_distribution_about_zero_takes_the_unit_of_its_spread() -> None:
    offset = Summary(1e-11, 1.8e-8, -3.6e-8, -1.8e-8, 0.0, 1.8e-8, 3.6e-8)
    scale = lines.scale_of(offset, "s")
    assert scale.with_unit(lines.estimate(offset, scale)) == "0 ± 18 ns"


def test_absent_and_infinite_numbers_show_as_a_dash() -> None:
    assert lines.pair(None, 1.0, ONE) == lines.pair(math.nan, 1.0, ONE) == lines.alone(math.inf, ONE) == "–"
    assert lines.span(math.nan, 1.0, 1.0, ONE) == lines.probability(None) == lines.share(math.nan) == "–"


def test_an_exact_number_says_so_and_one_without_uncertainty_claims_none() -> None:
    assert lines.pair(0.003, 0.0, ONE) == "0.003 (exact)"
    assert lines.pair(0.25, None, ONE) == "0.25"


def test_a_skewed_distribution_is_given_by_its_median_and_interval() -> None:
    # Lognormal of median 1 and sd of the logarithm 0.5: exp(±1.96·0.5), exp(±0.4945·…) worked with a pocket calculator.
    skewed = Summary(1.133, 0.604, 0.375, 0.608, 1.0, 1.644, 2.664)
    even = Summary(0.310, 0.012, 0.286, 0.298, 0.310, 0.322, 0.334)
    assert lines.skewed(skewed)
    assert not lines.skewed(even)
    assert lines.estimate(skewed, ONE) == "1.00 (0.61 to 1.64)"
    assert lines.interval(skewed, ONE) == "0.38 to 2.66"
    assert lines.estimate(even, ONE) == "0.310 ± 0.012"


def test_probabilities_never_claim_certainty() -> None:
    assert [lines.probability(p) for p in (0.0, 0.0004, 0.41, 0.9999, 1.0)] == [
        "< 0.001",
        "< 0.001",
        "0.410",
        "> 0.999",
        "> 0.999",
    ]


def test_very_large_and_small_numbers_are_written_in_powers_of_ten() -> None:
    assert lines.alone(1.2345e-9) == "1.234 × 10⁻⁹"
    assert lines.alone(-3.2e12) == "−3.2 × 10¹²"
    assert lines.alone(0.0) == "0"


def test_control_and_direction_characters_leave_a_persons_text() -> None:
    assert lines.plain("a\x07b\x1b[31m\tc\nd\u202ee \ud800") == "ab[31m c de \ufffd"
    assert lines.plain("x" * 50, limit=10) == "xxxxxxxxx…"
