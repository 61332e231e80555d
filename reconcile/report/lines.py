"""Each number formatted once: rounded with its uncertainty, in the unit that a person would choose."""

from __future__ import annotations

import math
import unicodedata
from collections.abc import Iterable
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Decimal

from reconcile.campaign.quantity import rounded
from reconcile.inference.outcome import Summary

ABSENT = "–"

# Where no uncertainty goes with a number, this many digits are shown.
DIGITS = 4

# Display units by SI unit: label and size in SI, growing. A person writes the largest one that is not above the number.
_UNITS: dict[str, tuple[tuple[str, float], ...]] = {
    "m": (("nm", 1e-9), ("µm", 1e-6), ("mm", 1e-3), ("m", 1.0)),
    "m3": (("µm³", 1e-18), ("mm³", 1e-9)),
    "s": (("fs", 1e-15), ("ps", 1e-12), ("ns", 1e-9), ("µs", 1e-6), ("ms", 1e-3), ("s", 1.0)),
    "J": (("nJ", 1e-9), ("µJ", 1e-6), ("mJ", 1e-3), ("J", 1.0)),
    "J/m2": (("J/m²", 1.0), ("kJ/m²", 1e3), ("MJ/m²", 1e6)),
    "J/m3": (("MJ/m³", 1e6), ("GJ/m³", 1e9)),
    "Pa": (("Pa", 1.0), ("kPa", 1e3), ("MPa", 1e6), ("GPa", 1e9)),
    "Pa2 s": (("Pa²·s", 1e0), ("kPa²·ms", 1e3), ("MPa²·µs", 1e6), ("MPa²·ms", 1e9)),
    "Pa s": (("mPa·s", 1e-3), ("Pa·s", 1.0)),
    "N/m": (("mN/m", 1e-3), ("N/m", 1.0)),
    "V/Pa": (("µV/MPa", 1e-12), ("mV/MPa", 1e-9), ("V/MPa", 1e-6)),
    "V": (("µV", 1e-6), ("mV", 1e-3), ("V", 1.0)),
    "Hz": (("Hz", 1.0), ("kHz", 1e3), ("MHz", 1e6)),
    "W": (("mW", 1e-3), ("W", 1.0), ("kW", 1e3), ("MW", 1e6), ("GW", 1e9)),
    "rad": (("°", math.pi / 180),),
    "1/m2": (("kJ/m² per µJ", 1e9),),
    "m2/J": (("m²/kJ", 1e-3),),
    "1": (("", 1.0),),
    "%": (("%", 0.01),),
}

# The names of quantities that a person states in per cent though their SI unit is 1.
_PER_CENT = ("scatter.", "energy_jitter", "stray_rate", "misread_rate")


@dataclass(frozen=True, slots=True)
class Scale:
    """A unit to show numbers in: its label (empty for 1) and its size in SI."""

    label: str
    size: float

    def with_unit(self, text: str) -> str:
        """Put the unit behind a number already in words."""
        return f"{text} {self.label}".rstrip() if self.label != "°" else f"{text}°"

    def heading(self, text: str) -> str:
        """Put the unit in brackets behind a column's name."""
        return f"{text} ({self.label})" if self.label else text


def scale_for(unit: str, values: Iterable[float | None], name: str = "") -> Scale:
    """Choose the unit for numbers of one SI unit shown together, by the middle one of their sizes.

    Parameters: `unit` in SI; `values` in that unit, None and 0 are passed over; `name` of an input, for those stated in per cent.
    """
    if unit == "1" and name.startswith(_PER_CENT):
        unit = "%"
    ladder = _UNITS.get(unit)
    if ladder is None:
        return Scale(unit, 1.0)
    sizes = sorted(abs(value) for value in values if value is not None and math.isfinite(value) and value != 0)
    if not sizes:
        return Scale(*next((step for step in ladder if step[1] == 1.0), ladder[0]))
    middle = sizes[len(sizes) // 2]
    fitting = [step for step in ladder if step[1] <= middle * (1 + 1e-9)]
    return Scale(*(fitting[-1] if fitting else ladder[0]))


def scale_of(summary: Summary, unit: str, name: str = "") -> Scale:
    """Choose the unit for one distribution: by its median, or by its spread where that is larger."""
    return scale_for(unit, [max(abs(summary.median), summary.sd)], name)


def _fixed(value: float, place: int) -> str:
    """Return a number rounded to 10^place, ties to even, never in powers of ten, with a proper minus sign."""
    rounded = Decimal(repr(value)).quantize(Decimal(1).scaleb(place), rounding=ROUND_HALF_EVEN)
    if place > 0:
        rounded = rounded.quantize(Decimal(1))
    text = format(rounded, "f")
    if rounded == 0:
        text = text.lstrip("-")
    return text.replace("-", "−")


def alone(value: float | None, scale: Scale = Scale("", 1.0), digits: int = DIGITS) -> str:
    """Show a number that carries no uncertainty, to so many significant digits."""
    if value is None or not math.isfinite(value):
        return ABSENT
    shown = float(value) / scale.size
    if shown == 0:
        return "0"
    exponent = Decimal(repr(shown)).adjusted()
    if not -5 <= exponent <= 7:
        mantissa = (
            _trimmed(_fixed(shown / 10.0**exponent, 1 - digits)) if abs(exponent) < 300 else f"{shown:.{digits - 1}e}"
        )
        return f"{mantissa} × 10{_raised(exponent)}"
    return _trimmed(_fixed(shown, exponent - digits + 1))


def _trimmed(text: str) -> str:
    return text.rstrip("0").rstrip(".") if "." in text else text


def _raised(exponent: int) -> str:
    return str(exponent).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))


def _together(values: Iterable[float], u: float, scale: Scale) -> list[str] | None:
    """Return numbers rounded to the place that two digits of u reach, then u itself; None where that would take a long row of zeros."""
    spread = u / scale.size
    if not -8 <= math.floor(math.log10(spread)) <= 8:
        return None
    texts = [rounded(value / scale.size, spread)[0].replace("-", "−") for value in values]
    return [*texts, rounded(0.0, spread)[1]]


def pair(value: float | None, u: float | None, scale: Scale) -> str:
    """Show `value ± u` without its unit: two digits of u, the value to the same place (JCGM 100:2008, 7.2.6).

    Parameters: value and u in SI, u one standard uncertainty; u None: not stated; u 0: exact.
    """
    if value is None or not math.isfinite(value):
        return ABSENT
    if u is None or not math.isfinite(u):
        return alone(value, scale)
    if u == 0:
        return f"{alone(value, scale, 7)} (exact)"
    texts = _together([value], u, scale) or [alone(value, scale), alone(u, scale, 2)]
    return " ± ".join(texts)


def span(low: float, high: float, sd: float, scale: Scale) -> str:
    """Show an interval `low to high` without its unit, to the place that two digits of sd reach."""
    if not (math.isfinite(low) and math.isfinite(high)):
        return ABSENT
    texts = _together([low, high], sd, scale) if math.isfinite(sd) and sd > 0 else None
    texts = texts or [alone(low, scale), alone(high, scale)]
    return f"{texts[0]} to {texts[1]}"


def skewed(summary: Summary) -> bool:
    """Tell whether ± would mislead.

    It does where the halves of the 95 % interval differ by more than a fifth, or its width from 3.92 sd by more than a tenth.
    Tighter bounds would answer to noise: at an effective sample size of 1 000 a normal distribution's halves differ by 6 % (one sd).
    """
    if not summary.sd > 0:
        return False
    below, above = summary.median - summary.q025, summary.q975 - summary.median
    if min(below, above) <= 0:
        return True
    return max(below, above) / min(below, above) > 1.2 or abs((below + above) / (2 * 1.96 * summary.sd) - 1) > 0.1


def estimate(summary: Summary, scale: Scale) -> str:
    """Show the mean ± standard deviation, or the median with its 68 % bounds where the distribution is skewed; without the unit."""
    if not skewed(summary):
        return pair(summary.mean, summary.sd, scale)
    numbers = (summary.median, summary.q16, summary.q84)
    if not all(math.isfinite(number) for number in numbers):
        return ABSENT
    texts = _together(numbers, summary.sd, scale) or [alone(number, scale) for number in numbers]
    return f"{texts[0]} ({texts[1]} to {texts[2]})"


def interval(summary: Summary, scale: Scale) -> str:
    """Show the 95 % interval without its unit."""
    if summary.sd == 0:
        return ABSENT
    return span(summary.q025, summary.q975, summary.sd, scale)


def probability(value: float | None) -> str:
    """Show a probability so that 0 and 1 are never claimed."""
    if value is None or not math.isfinite(value):
        return ABSENT
    if value < 0.001:
        return "< 0.001"
    if value > 0.999:
        return "> 0.999"
    return f"{value:.3f}"


def share(value: float | None) -> str:
    """Show a share in whole per cent."""
    if value is None or not math.isfinite(value):
        return ABSENT
    return f"{100 * value:.0f} %"


def count(number: int, singular: str, plural: str | None = None) -> str:
    """Show a number of things: `1 shot`, `3 shots`."""
    return f"{number} {singular if number == 1 else plural or singular + 's'}"


def plain(text: str, limit: int | None = None) -> str:
    """Return a person's text as one line of characters that print: control, direction and unpaired surrogate characters out.

    Parameters: `limit` shortens to so many characters, the last one then "…".
    """
    kept = []
    for character in text:
        category = unicodedata.category(character)
        if category in ("Cc", "Zl", "Zp"):
            kept.append(" " if character.isspace() else "")
        elif category == "Cs":
            kept.append("\ufffd")
        elif character in _UNSEEN:
            continue
        else:
            kept.append(character)
    line = " ".join("".join(kept).split())
    return line if limit is None or len(line) <= limit else line[: limit - 1] + "…"


# Characters that turn the direction of text: harmless in themselves, but they can make one sentence look like another.
# And the byte-order mark, which archival documents may not hold.
_UNSEEN = frozenset("\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069\ufeff")
