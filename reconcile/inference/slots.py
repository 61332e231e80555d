"""Readings arranged for weighing: cells of repeats, gathered into slots that touch each shot at most once."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.kinds import KINDS
from reconcile.campaign.readings import Reading
from reconcile.inference.mixture import LIMIT_SPREAD
from reconcile.inference.model import Array

Index = NDArray[np.intp]

_Sort = tuple[str, bool, tuple[int, ...]]  # kind, below a limit, table of each repeat
_Member = tuple[int, float | None, tuple[int, ...]]  # target, delay, rows of the repeats


@dataclass(frozen=True, slots=True)
class Slot:
    """Cells of one kind with equally many repeats, at most one a target.

    c is the number of cells, r that of repeats in each.
    """

    kind: str
    censored: bool
    target: Index  # (c,) index of the shot or sample
    rows: Index  # (r, c) which reading
    tables: tuple[int, ...]  # (r,) which table each repeat of every cell came from
    value: Array  # (r, c) reading, or its limit where censored; in the logarithm for logarithmic kinds
    u: Array  # (r, c) on the same scale
    delay: Array | None  # (c,) [s]


def arrange(readings: Sequence[Reading], target_of: dict[str, int], table_of: dict[tuple[str, str], int]) -> list[Slot]:
    """Arrange the readings of one kind of target.

    Parameters
    ----------
    readings : with their row, every one of a fitted kind
    target_of : index of each shot or sample by name
    table_of : index of each table by its name and kind

    Readings of one target, kind and delay are repeats; those below a limit stand in cells of their own.
    """
    cells: dict[tuple[str, int, float | None, int], list[int]] = defaultdict(list)
    for row, reading in enumerate(readings):
        name = reading.shot if reading.shot is not None else reading.sample
        if name not in target_of:
            continue
        alone = -1 if reading.limit is None else row
        cells[reading.kind, target_of[name], reading.delay, alone].append(row)
    waves: dict[tuple[_Sort, int], list[_Member]] = defaultdict(list)
    seen: dict[tuple[_Sort, int], int] = defaultdict(int)
    for (kind, target, delay, alone), unsorted in cells.items():
        tables, rows = zip(*sorted((_table_of(readings[row], table_of), row) for row in unsorted), strict=True)
        sort = (kind, alone >= 0, tables)
        waves[sort, seen[sort, target]].append((target, delay, rows))
        seen[sort, target] += 1
    return [_slot(sort, members, readings) for (sort, _), members in waves.items()]


def _table_of(reading: Reading, table_of: dict[tuple[str, str], int]) -> int:
    return table_of[reading.table, reading.table_kind or reading.kind]


def _slot(sort: _Sort, members: list[_Member], readings: Sequence[Reading]) -> Slot:
    kind, censored, tables = sort
    members = sorted(members, key=lambda member: member[0])
    rows = np.array([member[2] for member in members], dtype=np.intp).T
    value, u = np.empty(rows.shape), np.empty(rows.shape)
    for place, row in np.ndenumerate(rows):
        value[place], u[place] = _on_scale(readings[int(row)])
    delay = np.array([member[1] for member in members], dtype=float) if KINDS[kind].has_delay else None
    target = np.array([member[0] for member in members], dtype=np.intp)
    return Slot(kind, censored, target, rows, tables, value, u, delay)


def _on_scale(reading: Reading) -> tuple[float, float]:
    """Value and uncertainty on the scale of the kind's residuals."""
    logarithmic = KINDS[reading.kind].logarithmic
    if reading.limit is not None:
        if logarithmic:
            return float(np.log(reading.limit)), LIMIT_SPREAD
        return reading.limit, LIMIT_SPREAD * reading.limit
    assert reading.value is not None
    assert reading.u is not None
    if logarithmic:
        return float(np.log(reading.value)), reading.u / reading.value
    return reading.value, reading.u
