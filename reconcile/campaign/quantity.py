"""Text to quantity and back: the only place that knows a unit other than SI, and the only rounding."""

from __future__ import annotations

import math
import re
import unicodedata
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Decimal
from functools import lru_cache

from reconcile.campaign.campaign import Quantity
from reconcile.campaign.number_text import plain, to_float
from reconcile.campaign.refusal import Place, Refusal, nearest

Dimension = tuple[int, int, int, int, int, int, int]  # powers of kg, m, s, A, K, px, rad

_PREFIXES = {
    "T": 1e12, "G": 1e9, "M": 1e6, "k": 1e3, "h": 1e2, "": 1.0,
    "d": 1e-1, "c": 1e-2, "m": 1e-3, "u": 1e-6, "n": 1e-9, "p": 1e-12, "f": 1e-15, "a": 1e-18,
}  # fmt: skip


def _exact(number: float) -> Decimal:
    """Return a number as it is written, so that 20 uJ becomes 2e-05 J and not its neighbour."""
    return Decimal(repr(number))


# symbol: (size in SI, dimension, prefixes that it is used with)
_BASES: dict[str, tuple[float, Dimension, tuple[str, ...]]] = {
    "m": (1.0, (0, 1, 0, 0, 0, 0, 0), ("k", "", "d", "c", "m", "u", "n", "p", "f")),
    "g": (1e-3, (1, 0, 0, 0, 0, 0, 0), ("k", "", "m", "u", "n")),
    "s": (1.0, (0, 0, 1, 0, 0, 0, 0), ("", "m", "u", "n", "p", "f", "a")),
    "A": (1.0, (0, 0, 0, 1, 0, 0, 0), ("k", "", "m", "u", "n", "p")),
    "K": (1.0, (0, 0, 0, 0, 1, 0, 0), ("k", "", "m")),
    "Hz": (1.0, (0, 0, -1, 0, 0, 0, 0), ("T", "G", "M", "k", "", "m")),
    "N": (1.0, (1, 1, -2, 0, 0, 0, 0), ("M", "k", "", "m", "u", "n")),
    "Pa": (1.0, (1, -1, -2, 0, 0, 0, 0), ("T", "G", "M", "k", "h", "", "m", "u")),
    "bar": (1e5, (1, -1, -2, 0, 0, 0, 0), ("M", "k", "", "m", "u")),
    "J": (1.0, (1, 2, -2, 0, 0, 0, 0), ("G", "M", "k", "", "m", "u", "n", "p", "f")),
    "W": (1.0, (1, 2, -3, 0, 0, 0, 0), ("T", "G", "M", "k", "", "m", "u", "n", "p")),
    "V": (1.0, (1, 2, -3, -1, 0, 0, 0), ("M", "k", "", "m", "u", "n")),
    "px": (1.0, (0, 0, 0, 0, 0, 1, 0), ("",)),
    "rad": (1.0, (0, 0, 0, 0, 0, 0, 1), ("", "m", "u")),
    "deg": (math.pi / 180, (0, 0, 0, 0, 0, 0, 1), ("",)),
    "%": (1e-2, (0, 0, 0, 0, 0, 0, 0), ("",)),
}
_SYMBOLS: dict[str, tuple[Decimal, Dimension]] = {
    prefix + symbol: (_exact(_PREFIXES[prefix]) * _exact(size), dimension)
    for symbol, (size, dimension, prefixes) in _BASES.items()
    for prefix in prefixes
}
_NONE: Dimension = (0, 0, 0, 0, 0, 0, 0)
_KELVIN: Dimension = (0, 0, 0, 0, 1, 0, 0)
_LEVEL = "dB re 1 V/uPa"  # of a voltage per pressure, 20 log10 of it (IEC 60050-801 form; from memory)

# What people write, and the spelling that is known; none of them is taken as it stands.
_MISSPELT = {
    "micron": "um", "microns": "um", "mu": "um", "sec": "s", "secs": "s", "seconds": "s", "usec": "us", "nsec": "ns",
    "psec": "ps", "fsec": "fs", "msec": "ms", "C": "degC", "F": "degC", "degF": "degC", "celsius": "degC", "degK": "K",
    "mPas": "mPa s", "Pas": "Pa s", "pixel": "px", "pixels": "px", "degree": "deg", "degrees": "deg", "percent": "%",
    "dB": _LEVEL, "joule": "J", "watt": "W", "volt": "V", "pascal": "Pa", "metre": "m", "meter": "m", "nM": "nm",
    "Torr": "hPa", "atm": "bar", "psi": "bar", "ppm": "%", "Å": "nm", "A.U.": "1", "a.u.": "1", "arb": "1", "kelvin": "K",
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Unit:
    """A unit as it was spelt, and what it is in SI."""

    text: str  # the known spelling
    size: float  # one of it in SI; of a level: of its reference
    dimension: Dimension
    offset: float = 0.0  # [K] of degC
    level: bool = False  # 20 log10 of the ratio to its reference

    def to_si(self, value: float) -> float:
        """Return a value given in this unit, in SI; raises OverflowError for a level beyond all numbers."""
        if self.level:
            return float(self.size * 10.0 ** (value / 20))
        return float(_exact(value) * _exact(self.size) + _exact(self.offset))

    def spread_to_si(self, u: float, value: float) -> float:
        """Return a standard uncertainty given in this unit at `value` [this unit], in SI."""
        return abs(self.to_si(value)) * u * math.log(10) / 20 if self.level else float(_exact(u) * _exact(self.size))


class UnknownUnit(ValueError):
    """A spelling that is in no table; `known` is the nearest one that is, or None."""

    def __init__(self, text: str, why: str, known: str | None) -> None:
        super().__init__(why)
        self.text = text
        self.why = why
        self.known = known


def _tidy(text: str) -> str:
    """Return a unit's spelling with one micro sign, one degree word, one product sign and single blanks."""
    text = plain(text.replace("Âµ", "u").replace("Âμ", "u").replace("Â°", "°"))  # UTF-8 once read as cp1252
    text = unicodedata.normalize("NFKC", text).replace("μ", "u").replace("µ", "u")
    text = text.replace("°C", "degC").replace("° C", "degC").replace("°", "deg")
    text = re.sub(r"[·⋅*×]", " ", text)
    return " ".join(text.replace(" /", "/").replace("/ ", "/").split())


@lru_cache(maxsize=1024)
def parse_unit(text: str) -> Unit:
    """Return the unit that a text spells.

    Parameters
    ----------
    text : such as ``um``, ``J/cm²``, ``Pa2 s``, ``V/(m s)``, ``dB re 1 V/uPa``; ``1`` and an empty text are the pure number

    Raises
    ------
    UnknownUnit
        Unknown or ambiguous; it holds the nearest known spelling.
    """
    tidy = _tidy(text)
    if tidy in {"", "1", "-"}:
        return Unit("1", 1.0, _NONE)
    if tidy == "degC":
        return Unit("degC", 1.0, _KELVIN, offset=273.15)
    if tidy == _LEVEL:
        reference = parse_unit("V/uPa")
        return Unit(_LEVEL, reference.size, reference.dimension, level=True)
    if tidy.startswith("dB"):
        raise UnknownUnit(text, f"'{text}' does not say the reference that is known here", _LEVEL)
    over, slash, under = tidy.partition("/")
    if "/" in under:
        raise UnknownUnit(text, f"'{text}' divides twice, which can be read in two ways", _one_slash(tidy))
    bracketed = under.startswith("(") and under.endswith(")")
    under = under[1:-1] if bracketed else under
    if " " in under and not bracketed:
        raise UnknownUnit(text, f"'{text}' can be read in two ways", f"{over}/({under})")
    size, dimension = _product(over, text) if over != "1" else (Decimal(1), _NONE)
    if slash:
        size_under, dimension_under = _product(under, text)
        size /= size_under
        dimension = _combined(dimension, dimension_under, -1)
    return Unit(tidy, float(size), dimension)


def _one_slash(tidy: str) -> str:
    over, *under = tidy.split("/")
    return f"{over}/({' '.join(under)})"


def _combined(first: Dimension, second: Dimension, power: int) -> Dimension:
    a, b = first, second
    return (
        a[0] + power * b[0], a[1] + power * b[1], a[2] + power * b[2], a[3] + power * b[3],
        a[4] + power * b[4], a[5] + power * b[5], a[6] + power * b[6],
    )  # fmt: skip


def _product(text: str, whole: str) -> tuple[Decimal, Dimension]:
    size, dimension = Decimal(1), _NONE
    for factor in text.split(" "):
        match = re.fullmatch(r"([A-Za-z%Ω.]+)(?:\^?([+-]?[1-9]))?", factor)
        if match is None or match.group(1) not in _SYMBOLS:
            raise _unknown(factor if match is None else match.group(1), whole)
        power = int(match.group(2) or 1)
        if match.group(1) == "%" and (power != 1 or text != "%"):
            raise UnknownUnit(whole, f"'{whole}' has % in a product", None)
        base, base_dimension = _SYMBOLS[match.group(1)]
        size *= base**power
        dimension = _combined(dimension, base_dimension, power)
    return size, dimension


def _unknown(symbol: str, whole: str) -> UnknownUnit:
    known = _MISSPELT.get(symbol) or _MISSPELT.get(symbol.casefold())
    if known is None:
        same = [name for name in _SYMBOLS if name.casefold() == symbol.casefold()]
        known = " or ".join(same) if same else nearest(symbol, [*_SYMBOLS, "degC"])
    if known is not None and symbol != whole and " or " not in known:
        known = _tidy(whole).replace(symbol, known, 1)
    why = (
        "degC in a product (only a temperature has it)"
        if symbol == "degC"
        else f"'{symbol}', which is no unit known here"
    )
    return UnknownUnit(whole, why, "K" if symbol == "degC" else known)


def convert(value: float, text: str, si_unit: str) -> float:
    """Return a value given in the unit `text`, in the SI unit; raises UnknownUnit, ValueError for another dimension."""
    unit = parse_unit(text)
    if unit.dimension != parse_unit(si_unit).dimension:
        raise ValueError(f"{text} is not a unit of the same quantity as {si_unit}")
    return unit.to_si(value)


EXAMPLES = {
    "1": "0.82", "m": "21 um", "s": "350 fs", "J": "20 uJ", "W": "20 mW", "K": "22 degC", "Pa": "101.3 kPa", "Hz": "1 kHz",
    "rad": "5 deg", "V/Pa": "0.45 V/MPa", "V": "1 V", "J/m3": "6e9 J/m3", "J/m2": "0.1 J/cm2", "N/m": "0.5 N/m",
    "Pa s": "3 mPa s", "Pa2 s": "60 Pa2 s", "m3": "90 um3", "kg/m3": "998.2 kg/m3", "m/s": "1482 m/s",
}  # fmt: skip


def _example(unit: str) -> str:
    return EXAMPLES.get(unit, f"1 {unit}")


def parse_quantity(text: str | float, unit: str, place: Place | str) -> Quantity:
    """Return the quantity that a text says, in SI.

    Parameters
    ----------
    text : such as ``21 um ± 1 um``, ``21 ± 1 um``, ``21 um ± 5 %``, ``0.82 +/- 0.02 (k=2)``; a number where `unit` is "1"
    unit : the SI unit that is expected, "1" for a pure number
    place : where the text stands, for the message

    Raises
    ------
    Refusal
        No number, an unknown unit, one of another quantity, a negative uncertainty, or a spelling that has two readings.
    """
    shown_text = text if isinstance(text, str) else repr(text)
    if not isinstance(text, str):
        if unit != "1" or isinstance(text, bool) or not math.isfinite(text):
            raise Refusal(
                place,
                found=f"{shown_text.lower()} without a unit" if unit != "1" else shown_text.lower(),
                expected=f'a quantity such as "{_example(unit)}"',
                remedy="Write the number and its unit in quotes." if unit != "1" else "Write a number.",
            )
        return Quantity(float(text), None, "1", shown_text)
    body, k = _coverage(text, place)
    value_text, spread_text = _halves(body, text, place)
    value, own = _number_and_unit(value_text, text, unit, place)
    if spread_text is None:
        return _checked(value, own or parse_unit("1"), None, unit, text, place)
    spread, spread_unit = _number_and_unit(spread_text, text, unit, place)
    if spread < 0:
        raise Refusal(
            place, found=f"'{text}'", expected="an uncertainty of 0 or more", remedy="Take the minus sign off."
        )
    if own is None and spread_unit is not None and spread_unit.text == "%":
        both = f'"{value_text.strip()} % ± {spread_text.strip()}" or "{value_text.strip()} ± {spread / 100 * abs(value):g}"'
        raise Refusal(
            place,
            found=f"'{text}', which can be read in two ways",
            expected=f"one of {both}",
            remedy="Write the one that is meant.",
        )
    own = own or spread_unit or parse_unit("1")
    quantity = _checked(value, own, None, unit, text, place)
    u = _spread_in_si(quantity.value, value, own, spread, spread_unit, text, place)
    return Quantity(quantity.value, u / k, unit, text)


def _coverage(text: str, place: Place | str) -> tuple[str, float]:
    match = re.search(r"\(\s*k\s*=\s*([^)]*)\)\s*$", text, flags=re.IGNORECASE)
    if match is None:
        return text, 1.0
    try:
        k = to_float(match.group(1))
    except ValueError:
        k = 0.0
    if k <= 0 or not re.search(r"±|\+/-|\+/−", text):
        raise Refusal(
            place,
            found=f"'{text}'",
            expected="(k=2) behind a ±",
            remedy='Write the expanded uncertainty before it, as in "21 um ± 2 um (k=2)".',
        )
    return text[: match.start()], k


def _halves(body: str, text: str, place: Place | str) -> tuple[str, str | None]:
    parts = re.split(r"±|\+/-|\+/−", body.replace("Â±", "±"))
    if len(parts) > 2:
        raise Refusal(place, found=f"'{text}' with more than one ±", expected="one ±", remedy="Leave one uncertainty.")
    return parts[0], parts[1] if len(parts) == 2 else None


def _number_and_unit(part: str, text: str, unit: str, place: Place | str) -> tuple[float, Unit | None]:
    part = plain(part)
    match = re.match(
        r"[+-]?(?:\d[\d ]*)?[.,]?\d*(?:[.,]\d+)*(?:[eE][+-]?\d+|\s*[×x*·⋅]\s*10\^?[+-]?\d+)?", part, re.ASCII
    )
    number_text = match.group().strip() if match else ""
    try:
        number = to_float(number_text)
    except ValueError:
        number = math.nan
    if "," in number_text or not math.isfinite(number):
        raise Refusal(
            place,
            found=f"'{text}'",
            expected=f'a number with a decimal point and its unit, such as "{_example(unit)}"',
            remedy="Write 20.5, not 20,5." if "," in number_text else "Write the number first, then the unit.",
        )
    rest = part[len(match.group()) if match else 0 :].strip()
    if not rest:
        return number, None
    try:
        return number, parse_unit(rest)
    except UnknownUnit as unknown:
        if rest == "dB":
            return number, Unit("dB", 1.0, _NONE, level=True)
        near = f"Write '{unknown.known}' if that is meant." if unknown.known else f'Write it as in "{_example(unit)}".'
        raise Refusal(
            place, found=unknown.why, expected=f'a unit such as that of "{_example(unit)}"', remedy=near
        ) from None


def _checked(value: float, own: Unit, u: float | None, unit: str, text: str, place: Place | str) -> Quantity:
    if own.dimension != parse_unit(unit).dimension or own.text == "dB":
        found = f"'{text}' without a unit" if own.text == "1" else f"'{text}'"
        raise Refusal(
            place,
            found=found,
            expected="a pure number" if unit == "1" else f'a quantity such as "{_example(unit)}" ({unit})',
            remedy="Give the number without a unit, or in %." if unit == "1" else "Give the unit that belongs to it.",
        )
    try:
        si = own.to_si(value)
    except OverflowError:
        si = math.inf
    if not math.isfinite(si):
        raise Refusal(place, found=f"'{text}'", expected="a number within reason", remedy="Correct the number.")
    return Quantity(si, u, unit, text)


def _spread_in_si(
    si: float, value: float, own: Unit, spread: float, spread_unit: Unit | None, text: str, place: Place | str
) -> float:
    if spread_unit is None:
        return own.spread_to_si(spread, value)
    if spread_unit.text == "dB" and own.level:
        return own.spread_to_si(spread, value)
    if spread_unit.text == "%" and own.text != "%":
        return float(abs(_exact(si)) * _exact(spread) / 100)
    if spread_unit.dimension == own.dimension and not spread_unit.level:
        return float(_exact(spread) * _exact(spread_unit.size))
    raise Refusal(
        place,
        found=f"'{text}'",
        expected=f"an uncertainty in {own.text} or in %",
        remedy="Give value and uncertainty in units of the same quantity.",
    )


# Units in which a person reads each SI unit, from small to large.
_SHOWN_IN: dict[str, tuple[str, ...]] = {
    "m": ("nm", "um", "mm", "m"),
    "m2": ("um2", "mm2", "m2"),
    "m3": ("um3", "mm3", "m3"),
    "s": ("fs", "ps", "ns", "us", "ms", "s"),
    "J": ("nJ", "uJ", "mJ", "J"),
    "W": ("uW", "mW", "W", "kW", "MW", "GW"),
    "Pa": ("Pa", "kPa", "MPa", "GPa"),
    "Hz": ("Hz", "kHz", "MHz", "GHz"),
    "V": ("uV", "mV", "V"),
    "N/m": ("mN/m", "N/m"),
    "Pa s": ("mPa s", "Pa s"),
    "J/m2": ("mJ/cm2", "J/cm2"),
    "J/m3": ("J/m3", "kJ/m3", "MJ/m3", "GJ/m3"),
    "V/Pa": ("mV/MPa", "V/MPa"),
    "m2/J": ("cm2/J",),
    "1/m2": ("1/cm2",),
    "rad": ("deg",),
}


def unit_for(size: float, unit: str) -> str:
    """Return the unit in which a person would write a value of this size.

    Parameters
    ----------
    size : [unit] the value, or the typical one of several that stand together
    unit : SI unit

    Returns
    -------
    A spelling that `parse_unit` knows; the unit itself where nothing else is in use.
    """
    names = _SHOWN_IN.get(unit)
    if names is None:
        return unit
    chosen = names[0]
    for name in names:
        if abs(size) >= 0.9995 * parse_unit(name).size:
            chosen = name
    return chosen


def unit_label(unit: str) -> str:
    """Return a unit as it stands in print: ``um2`` becomes ``µm²``, ``Pa2 s`` becomes ``Pa²·s``, ``1`` nothing."""
    if unit in {"1", ""}:
        return ""
    label = re.sub(
        r"(?<=[A-Za-z])\^?(-?)([1-9])",
        lambda power: ("⁻" if power.group(1) else "") + "⁰¹²³⁴⁵⁶⁷⁸⁹"[int(power.group(2))],
        unit,
    )
    label = re.sub(r"(?<![A-Za-z])u(?=[A-Za-z])", "µ", label)
    return label.replace("degC", "°C").replace("deg", "°").replace(" ", "·")


def rounded(value: float, u: float) -> tuple[str, str]:
    """Round a value and its standard uncertainty together, the uncertainty to two significant digits.

    Ties go to the even digit; with two digits kept, rounding never takes off more than 5 %.

    Raises
    ------
    ValueError
        `u` is not above 0, or a number is not finite.

    Source: JCGM 100:2008, 7.2.6.
    """
    if not (math.isfinite(value) and math.isfinite(u) and u > 0):
        raise ValueError(f"{value} ± {u} cannot be rounded together")
    exact = Decimal(repr(float(u)))
    step = Decimal(1).scaleb(exact.adjusted() - 1)
    spread = exact.quantize(step, rounding=ROUND_HALF_EVEN)
    if spread.adjusted() > exact.adjusted():  # 0.0996 became 0.100
        step = step.scaleb(1)
        spread = spread.quantize(step)
    number = Decimal(repr(float(value))).quantize(step, rounding=ROUND_HALF_EVEN)
    if number == 0:
        number = abs(number)
    return f"{number:f}", f"{spread:f}"


def shown(value: float, u: float | None, unit: str, *, in_unit: str | None = None) -> str:
    """Return value and uncertainty for eyes: ``0.412 ± 0.020 µm``.

    Parameters
    ----------
    value, u : in `unit`; u of None or 0 shows the value alone, to four digits
    unit : SI for the prefix that a person would choose; any other known unit is kept
    in_unit : the unit to show it in, where several numbers stand together; None: chosen by the value

    Raises
    ------
    ValueError
        A number is not finite.
    """
    name = in_unit or unit_for(value if abs(value) >= (u or 0) else (u or 0), unit)
    if not math.isfinite(value):
        raise ValueError(f"{value} cannot be shown")
    factor = _exact(parse_unit(unit).size) / _exact(parse_unit(name).size)
    value, u = float(_exact(value) * factor), None if u is None else float(_exact(u) * factor)
    label = unit_label(name)
    tail = label if label in {"", "°"} else f" {label}"
    largest = max(abs(value), u or 0.0)
    power = math.floor(math.log10(largest)) if largest > 0 else 0
    if -4 <= power < 5:
        return _joined(value, u) + tail if u and tail and tail[0] != "°" else _bracketed(value, u, tail)
    exponent = str(power).replace("-", "⁻").translate(str.maketrans("0123456789", "⁰¹²³⁴⁵⁶⁷⁸⁹"))
    mantissa = _joined(value / 10.0**power, None if u is None else u / 10.0**power)
    return f"{f'({mantissa})' if u else mantissa} × 10{exponent}{tail}"


def _joined(value: float, u: float | None) -> str:
    if not u:
        return f"{value:.4g}"
    return " ± ".join(rounded(value, u))


def _bracketed(value: float, u: float | None, tail: str) -> str:
    text = _joined(value, u)
    return f"({text}){tail}" if u and tail else f"{text}{tail}"
