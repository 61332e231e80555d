"""Pulse energies as a person writes them: ``20 uJ``, or evenly spaced, ``5 uJ:50 uJ:10``."""

from __future__ import annotations

from decimal import Decimal

from reconcile.campaign.number_text import to_float
from reconcile.campaign.quantity import parse_quantity
from reconcile.campaign.refusal import Refusal

MOST_STEPS = 1000


def parse_energy(text: str, place: str) -> float:
    """Return a pulse energy [J]; raises Refusal for what is none, or not above 0."""
    quantity = parse_quantity(text, "J", place)
    if quantity.value <= 0 or quantity.u is not None:
        raise Refusal(
            place,
            found=f"'{text}'",
            expected='one energy above 0, such as "20 uJ"',
            remedy="Give it without ±." if quantity.u is not None else "Give an energy above 0.",
        )
    return quantity.value


def parse_energies(text: str, place: str) -> tuple[float, ...]:
    """Return evenly spaced energies [J] from FROM:TO:STEPS, both ends among them; raises Refusal.

    FROM without a unit has that of TO.
    """
    parts = [part.strip() for part in text.split(":")]
    steps = int(parts[2]) if len(parts) == 3 and parts[2].isascii() and parts[2].isdigit() else 0
    if not 2 <= steps <= MOST_STEPS:
        raise Refusal(
            place,
            found=f"'{text}'",
            expected=f'FROM:TO:STEPS such as "5 uJ:50 uJ:10", of 2 to {MOST_STEPS} energies',
            remedy="Write it so.",
        )
    high = parse_energy(parts[1], place)
    low = parse_energy(_with_unit(parts[0], parts[1]), place)
    if not low < high:
        raise Refusal(place, found=f"'{text}'", expected="FROM below TO", remedy="Turn them round.")
    first, last = Decimal(repr(low)), Decimal(repr(high))  # so that 20 uJ comes out as 2e-05 J and not its neighbour
    return tuple(float(first + (last - first) * number / (steps - 1)) for number in range(steps))


def _with_unit(low: str, high: str) -> str:
    """Return `low` with the unit of `high` where it is a bare number."""
    try:
        to_float(low)
    except ValueError:
        return low
    return low + " " + high.lstrip("+0123456789.eE- ")
