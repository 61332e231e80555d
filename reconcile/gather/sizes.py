"""Tables of particle sizes → median diameter and geometric standard deviation of each sample."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

from reconcile.campaign.campaign import Table
from reconcile.campaign.readings import Reading
from reconcile.campaign.refusal import Place, Refusal
from reconcile.gather.collected import Collected
from reconcile.gather.values import Known, check_whole
from reconcile.measure.particles import Sizes, from_counts, from_diameters
from reconcile.read.tables import SheetRead, TableRow, in_si, name_in, number


@dataclass(slots=True)
class _Sample:
    """What was read of one sample so far."""

    place: Place  # of its first row
    numbers: list[tuple[float, ...]] = field(default_factory=list)  # (lower, upper, count) or (diameter,)
    broken: Refusal | None = None  # a bin that cannot be read: without it the others would lie about the sample
    struck: Place | None = None


class SizeTable:
    """Particle sizes of one table, sheet after sheet, file after file."""

    def __init__(self, table: Table, known: Known, collected: Collected) -> None:
        self.table, self.known, self.collected = table, known, collected
        self.samples: dict[str, _Sample] = {}
        self.seen: set[object] = set()

    def read(self, sheet: SheetRead) -> None:
        """Take in the rows of one sheet."""
        counted = "count" in sheet.columns
        key = "count" if counted else "value"
        for row in sheet.rows:
            if key not in row.cells:
                continue
            try:
                sample = self._sample(row, key)
            except Refusal as refusal:
                self.collected.refuse_reading(refusal)
                continue
            if counted and row.whole in self.seen:
                self.collected.note(row.cells[key].place, "a row equal to an earlier one; it counts once")
                continue
            self.seen.add(row.whole)
            try:
                numbers = self._numbers(row, sheet)
            except Refusal as refusal:
                self.collected.refuse(refusal)
                sample.broken = refusal if counted else sample.broken
                continue
            if numbers is not None:
                sample.numbers.append(numbers)

    def readings(self) -> list[Reading]:
        """Return what the sizes of each sample say, in the order in which the samples were met."""
        found: list[Reading] = []
        for name, sample in self.samples.items():
            try:
                found.extend(self._measured(name, sample))
            except Refusal as refusal:
                self.collected.refuse_reading(refusal)
        return found

    def _sample(self, row: TableRow, key: str) -> _Sample:
        cell = row.cells["sample"]
        name = self.known.target("sample", name_in(cell, "sample") or "", cell.place, self.collected)
        sample = self.samples.setdefault(name, _Sample(row.cells[key].place))
        if cell.struck or row.cells[key].struck:
            sample.struck = sample.struck or row.cells[key].place
        return sample

    def _numbers(self, row: TableRow, sheet: SheetRead) -> tuple[float, ...] | None:
        check_whole(row)
        if "count" not in sheet.columns:
            cell = row.cells["value"]
            value = number(cell, sheet.columns["value"])
            diameter = None if value is None else in_si(value, sheet.columns["value"])
            if diameter is not None and diameter <= 0:
                raise Refusal(
                    cell.place,
                    found=f"'{cell.text}'",
                    expected="a diameter above 0",
                    remedy="Correct or clear the cell.",
                )
            return None if diameter is None else (diameter,)
        found = {key: number(row.cells.get(key), sheet.columns[key]) for key in ("lower", "upper", "count")}
        lower, upper, count = found["lower"], found["upper"], found["count"]
        if count is None:
            return None
        if lower is None or upper is None or not 0 <= lower < upper or count < 0 or not float(count).is_integer():
            raise Refusal(
                row.cells["count"].place,
                found=f"the bin from {lower} to {upper} with the count {count}",
                expected="a lower edge, a higher upper edge and a whole number",
                remedy="Correct the row.",
            )
        return in_si(lower, sheet.columns["lower"]), in_si(upper, sheet.columns["upper"]), count

    def _measured(self, name: str, sample: _Sample) -> list[Reading]:
        if sample.broken is not None:
            raise Refusal(
                sample.place,
                found=f"a bin of sample '{name}' that cannot be read ({sample.broken.place})",
                expected="every bin of the sample",
                remedy="Correct it: a histogram without one of its bins has another median.",
            )
        try:
            sizes = _measure(self.table.kind, sample.numbers)
        except ValueError as sentence:
            raise Refusal(
                sample.place,
                found=f"sizes of sample '{name}' that cannot be measured: {sentence}",
                expected="particles of one fine population, enough to tell its median",
                remedy="Add particles, or correct the rows.",
            ) from None
        if sizes.note:
            self.collected.note(sample.place, f"sample '{name}': {sizes.note}")
        aside = f"struck through at {sample.struck}" if sample.struck else None
        return [
            Reading(
                kind,
                None,
                name,
                self.table.name,
                sample.place,
                value=value,
                u=u,
                set_aside=aside,
                table_kind=self.table.kind,
            )
            for kind, value, u in (
                ("median-diameter", sizes.median, sizes.median_u),
                ("geometric-sd", sizes.geometric_sd, sizes.geometric_sd_u),
            )
        ]


def _measure(kind: str, numbers: list[tuple[float, ...]]) -> Sizes:
    """Measure one sample; raises ValueError with a sentence where that cannot be done."""
    if not numbers:
        raise ValueError("there is no particle.")
    return _MEASURED[kind](*(list(column) for column in zip(*numbers, strict=True)))


_MEASURED: dict[str, Callable[..., Sizes]] = {"size-counts": from_counts, "particle-list": from_diameters}
