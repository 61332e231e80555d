"""Text to number: signs, powers of ten, groups of thousands, and which sign is the decimal one."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable

DASHES = frozenset("-–—−‐‑‒―")
MINUS = str.maketrans(dict.fromkeys("−–‐‑‒﹣－", "-"))
_GROUP_BLANKS = "\u00a0\u2009\u202f\u2007' ’"
_POWER = r"(?:[eE][+-]?[0-9]+|[ ]*[×x*·⋅][ ]*10\^?[+-]?[0-9]+)?"
_SHAPE = re.compile(rf"([+-]?)((?:[0-9][0-9.,{_GROUP_BLANKS}]*)?(?:[.,]?[0-9]+)?[.,]?)({_POWER})")
_SUPERSCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻", "0123456789+-")
_SUPERSCRIPT_RUN = re.compile("[⁺⁻]?[⁰¹²³⁴⁵⁶⁷⁸⁹]+")


def plain(text: str) -> str:
    """Return text with one kind of minus sign and powers raised by ``^``, blanks at its ends taken off."""
    raised = _SUPERSCRIPT_RUN.sub(lambda run: "^" + run.group().translate(_SUPERSCRIPTS), text)
    return raised.translate(MINUS).strip()


def is_blank(text: str) -> bool:
    """Return whether a cell's text is empty or nothing but dashes."""
    return all(sign in DASHES or sign.isspace() for sign in text)


def decimal_evidence(text: str) -> str | None:
    """Say what one number tells about the decimal sign of its column.

    Returns
    -------
    "," or "."
        The number can only be read with this decimal sign.
    "?,"
        A comma with three digits behind it: a decimal comma, or thousands.
    "?."
        A point with three digits behind it: a decimal point, or thousands where the comma is the decimal sign.
    None
        The number reads the same either way, or is no number.
    """
    match = _SHAPE.fullmatch(plain(text).lstrip("<≤= "))
    if match is None:
        return None
    digits, power = match.group(2), match.group(3)
    commas, points = digits.count(","), digits.count(".")
    if not commas and not points:
        return None
    if commas and points:
        return "," if digits.rfind(",") > digits.rfind(".") else "."
    sign = "," if commas else "."
    other = "." if commas else ","
    if commas + points > 1:
        return other  # 1,234,567: groups of thousands
    before, after = re.split("[.,]", digits)
    grouped = len(after) == 3 and re.fullmatch("[1-9][0-9]{0,2}", before) and not power
    return f"?{sign}" if grouped else sign


def settle_decimal(texts: Iterable[str]) -> str | None:
    """Return the decimal sign of a column of numbers typed as text.

    Parameters
    ----------
    texts : the numbers of one column, as typed

    Returns
    -------
    "." or ","; None where no number holds either sign.

    Raises
    ------
    ValueError
        Both signs are needed, or a comma could be either; the message holds the number that leaves it open.
    """
    seen: dict[str, str] = {}
    for text in texts:
        evidence = decimal_evidence(text)
        if evidence is not None:
            seen.setdefault(evidence, text)
    if "," in seen and "." in seen:
        raise ValueError(f"'{seen[',']}' and '{seen['.']}'")
    if "," in seen or "." in seen:
        return "," if "," in seen else "."
    if "?," in seen:
        raise ValueError(f"'{seen['?,']}'")
    return "." if seen else None


def to_float(text: str, decimal: str = ".") -> float:
    """Return the number that a text says.

    Parameters
    ----------
    text : such as ``12.5``, ``-3e-6``, ``1.5×10⁹``, ``1 234.5``
    decimal : the decimal sign, "." or ","; the other one may group thousands

    Raises
    ------
    ValueError
        The text is no finite number.
    """
    match = _SHAPE.fullmatch(plain(text))
    if match is None or not any(sign.isdigit() for sign in match.group(2)):
        raise ValueError(text)
    sign, digits, power = match.groups()
    whole, mark, fraction = digits.partition(decimal)
    grouping = "," if decimal == "." else "."
    grouped = re.search(f"[{_GROUP_BLANKS}{grouping}]", whole)
    if grouped and not re.fullmatch(rf"[0-9]{{1,3}}(?:{re.escape(grouped.group())}[0-9]{{3}})+", whole):
        raise ValueError(text)
    if re.search("[^0-9]", fraction):
        raise ValueError(text)
    exponent = re.sub(r"^(?:[eE]|[ ]*[×x*·⋅][ ]*10\^?)", "", power) or "0"
    number = float(f"{sign}{re.sub(r'[^0-9]', '', whole) or '0'}{'.' if mark else ''}{fraction}e{exponent}")
    if not math.isfinite(number):
        raise ValueError(text)
    return number
