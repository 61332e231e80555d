"""Priors as a person writes them: ``lognormal(100 nm, 45 %)``."""

from __future__ import annotations

import re
from typing import Literal, TypeAlias

from reconcile.campaign.campaign import Prior
from reconcile.campaign.inputs import Input, describe
from reconcile.campaign.quantity import parse_quantity
from reconcile.campaign.refusal import Place, Refusal, nearest

Family: TypeAlias = Literal["normal", "lognormal", "beta", "uniform", "loguniform", "logitnormal", "fixed"]

# What each family takes. "own": in the unit of the input; "1": a pure number.
_ARGUMENTS: dict[Family, tuple[tuple[str, str], ...]] = {
    "normal": (("mean", "own"), ("sd", "own")),
    "lognormal": (("median", "own"), ("standard deviation of the logarithm", "1")),
    "beta": (("a", "1"), ("b", "1")),
    "uniform": (("low", "own"), ("high", "own")),
    "loguniform": (("low", "own"), ("high", "own")),
    "logitnormal": (("median", "own"), ("standard deviation of the logit", "1")),
    "fixed": (("value", "own"),),
}
_FARTHEST = 6.0  # a normal prior whose mean lies this many sd outside the physical range leaves nothing of itself


def parse_prior(name: str, text: str | float, place: Place | None = None) -> Prior:
    """Return the prior of one input.

    Parameters
    ----------
    name : of the input, one that `describe` knows
    text : the family and its numbers, in the unit of the input
    place : where it stands; None: the package's own default

    Raises
    ------
    Refusal
        An unknown family, a wrong number of arguments or unit, or a prior that lies outside the physical range.
    """
    entry, where = describe(name), place or name
    match = re.fullmatch(r"\s*([A-Za-z]\w*)\s*\((.*)\)\s*", text) if isinstance(text, str) else None
    if match is None:
        raise Refusal(
            where,
            found=f"'{text}'",
            expected=f"a distribution: {_forms()}",
            remedy=f'Write "fixed({text})" to fix the input at that value.',
        )
    family = next((known for known in _ARGUMENTS if known == match.group(1)), None)
    if family is None:
        near = nearest(match.group(1), _ARGUMENTS)
        raise Refusal(
            where,
            found=f"the distribution '{match.group(1)}'",
            expected=f"one of {_forms()}",
            remedy=f"Write '{near}' if that is meant." if near else "Choose one of these.",
        )
    names = _ARGUMENTS[family]
    parts = [part.strip() for part in match.group(2).split(",")]
    if len(parts) != len(names):
        raise Refusal(
            where,
            found=f"'{text}' with {len(parts)} number{'s' if len(parts) != 1 else ''}",
            expected=_form(family),
            remedy="Separate the numbers by a comma, and write decimals with a point.",
        )
    units = [entry.unit if unit == "own" else "1" for _, unit in names]
    numbers = [parse_quantity(part, unit, where).value for part, unit in zip(parts, units, strict=True)]
    _refuse_impossible(entry, family, numbers, str(text), where)
    return Prior(family, numbers[0], numbers[1] if len(numbers) == 2 else 0.0, str(text), place)


def _form(family: Family) -> str:
    return f"{family}({', '.join(word for word, _ in _ARGUMENTS[family])})"


def _forms() -> str:
    return ", ".join(_form(family) for family in _ARGUMENTS)


def _refuse_impossible(entry: Input, family: Family, numbers: list[float], text: str, where: Place | str) -> None:
    """Refuse numbers that make no distribution, or one with nothing in the input's physical range."""
    a, b = numbers[0], numbers[-1]
    wrong = None
    if family in {"normal", "lognormal", "logitnormal"} and b <= 0:
        wrong = "a spread above 0; fixed(value) fixes the input"
    elif family in {"lognormal", "loguniform"} and a <= 0:
        wrong = "a first number above 0"
    elif family in {"uniform", "loguniform"} and a >= b:
        wrong = "the lower end first, and the upper one above it"
    elif family in {"beta", "logitnormal"} and (entry.unit, entry.low, entry.high) != ("1", 0, 1) and entry.high > 1:
        wrong = "a distribution that fits an input which may pass 1"
    elif family == "beta" and (a <= 0 or b <= 0):
        wrong = "two numbers above 0"
    elif family == "logitnormal" and not 0 < a < 1:
        wrong = "a median between 0 and 1"
    elif (family == "normal" and not entry.low - _FARTHEST * b < a < entry.high + _FARTHEST * b) or (
        family in {"uniform", "loguniform"} and (b <= entry.low or a >= entry.high)
    ):
        wrong = f"some of it {_range(entry)}"
    elif family in {"fixed", "lognormal"} and not _inside(a, entry):
        wrong = f"a value {_range(entry)}"
    if wrong is not None:
        raise Refusal(where, found=f"'{text}'", expected=wrong, remedy="Correct the numbers.")


def _inside(value: float, entry: Input) -> bool:
    """Return whether a value lies in the physical range; its lower end 0 counts only where 0 means something."""
    return entry.low <= value <= entry.high and (value > 0 or entry.scale == "linear")


def _range(entry: Input) -> str:
    return f"in the physical range of {entry.name}, {entry.low:g} to {entry.high:g} {'' if entry.unit == '1' else entry.unit}".rstrip()
