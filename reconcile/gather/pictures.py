"""Tables of images, traces and maps → readings: each file measured, in processes; micrographs of a sample together."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from reconcile.campaign.campaign import Campaign, Table
from reconcile.campaign.kinds import KINDS
from reconcile.campaign.progress import Progress
from reconcile.campaign.readings import FileRead, Reading
from reconcile.campaign.refusal import Place, Refusal
from reconcile.gather.collected import Collected
from reconcile.gather.crew import Crew
from reconcile.gather.measuring import FAULT, Job, Part, Result, Settings, lost_file, measure_file
from reconcile.gather.settings import settings_of
from reconcile.gather.sources import Source, target_of
from reconcile.gather.values import Known
from reconcile.measure.measured import Measured
from reconcile.measure.particles import from_diameters

FILES_FOR_A_WORKER = 8  # with fewer, a process starts up for longer than it works


@dataclass(slots=True)
class Pictures:
    """The measuring of all tables of files of one campaign.

    Parameters
    ----------
    campaign, known, collected : as for every table
    overlays : existing folder for the drawings; None: none are wanted
    """

    campaign: Campaign
    known: Known
    collected: Collected
    overlays: Path | None
    drawn: dict[str, Path] = field(default_factory=dict)  # drawings by the source of their readings

    def measure(
        self, sources: Mapping[int, Sequence[Source]], workers: int, progress: Progress
    ) -> dict[int, list[Reading]]:
        """Return the readings of every table, by its number from 0.

        Raises
        ------
        Refusal
            A table lacks what its files need, or its background cannot be read.
        """
        tables = {number: self.campaign.tables[number] for number in sources}
        settings = {number: settings_of(self.campaign, table, self.collected) for number, table in tables.items()}
        found: dict[int, list[Reading]] = {}
        worth_starting = 1 + max((len(group) for group in sources.values()), default=0) // FILES_FOR_A_WORKER
        with Crew(min(workers, worth_starting), measure_file, lost_file) as crew:
            for number, table in tables.items():
                jobs = self._jobs(number, settings[number], sources[number])
                results = crew.run(jobs, _Teller(progress, table, len(jobs)))
                found[number] = self._readings(table, sources[number], results)
        return found

    def _jobs(self, number: int, settings: Settings, sources: Sequence[Source]) -> list[Job]:
        shots = self.known.log.shots
        return [
            Job(
                name=source.name,
                path=source.path,
                settings=settings,
                delay=source.delay,
                standoff=shots[source.target].standoff if source.target in shots else None,
                overlay=None if self.overlays is None else self.overlays / f"{number:03d}-{place:06d}",
            )
            for place, source in enumerate(sources)
        ]

    def _readings(self, table: Table, sources: Sequence[Source], results: Sequence[Result]) -> list[Reading]:
        """Take in what each file of a table gave."""
        readings: list[Reading] = []
        samples: dict[str, _Sample] = {}
        firsts: dict[str, Source] = {}  # by the file's checksum
        for source, result in zip(sources, results, strict=True):
            if self._is_copy(source, result, firsts):
                continue
            for part in result.parts:
                for note in part.notes:
                    self.collected.note(note.source, note.note)
                if part.overlay is not None:
                    self.drawn[str(part.place)] = part.overlay
                if part.refusal is not None:
                    self.collected.refuse_reading(part.refusal)
                elif part.particles is not None:
                    samples.setdefault(source.target, _Sample(part.place)).add(part, source)
                else:
                    readings += self._of_one(table, source, part)
        return readings + [
            reading for name, sample in samples.items() for reading in self._of_sample(table, name, sample)
        ]

    def _is_copy(self, source: Source, result: Result, firsts: dict[str, Source]) -> bool:
        """Note the checksum of a file; return whether it is an earlier one again, which counts once."""
        if result.sha256 is None:
            return False
        if result.name not in self.collected.files:
            self.collected.files[result.name] = FileRead(result.name, result.sha256)
        first = firsts.setdefault(result.sha256, source)
        if first is source or any(part.refusal is not None for part in result.parts):
            return False
        if (first.target, first.delay) == (source.target, source.delay):
            self.collected.note(source.name, f"the same file as '{first.name}'; it counts once")
            return True
        self.collected.note(source.name, f"the same file as '{first.name}' of '{first.target}': is one of them a copy?")
        return False

    def _of_one(self, table: Table, source: Source, part: Part) -> list[Reading]:
        """Return the readings of one picture or trace."""
        if not part.measured:
            self.collected.note(part.place, "nothing was measured")
        target = target_of(table).target
        readings = []
        for one in part.measured:
            try:
                _check(one, part.place)
            except Refusal as refusal:
                self.collected.refuse_reading(refusal)
                continue
            readings.append(
                Reading(
                    one.kind,
                    source.target if target == "shot" else None,
                    source.target if target == "sample" else None,
                    table.name,
                    part.place,
                    delay=part.delay if KINDS[one.kind].has_delay else None,
                    value=one.value,
                    u=one.u,
                    limit=one.limit,
                    set_aside=source.set_aside,
                    table_kind=table.kind,
                )
            )
        return readings

    def _of_sample(self, table: Table, name: str, sample: _Sample) -> list[Reading]:
        """Return what the particles of all micrographs of a sample say together; its place is the first of them."""
        try:
            sizes = from_diameters(*_columns(sample.particles))
        except ValueError as sentence:
            self.collected.refuse_reading(
                Refusal(
                    sample.place,
                    found=f"{_counted(sample)} of sample '{name}' that cannot be measured: {sentence}",
                    expected="particles of one fine population, enough to tell its median",
                    remedy="Add micrographs of the sample.",
                )
            )
            return []
        self.collected.note(sample.place, f"sample '{name}': {_counted(sample)} together")
        if sizes.note:
            self.collected.note(sample.place, f"sample '{name}': {sizes.note}")
        return [
            Reading(
                kind,
                None,
                name,
                table.name,
                sample.place,
                value=value,
                u=u,
                set_aside=sample.set_aside,
                table_kind=table.kind,
            )
            for kind, value, u in (
                ("median-diameter", sizes.median, sizes.median_u),
                ("geometric-sd", sizes.geometric_sd, sizes.geometric_sd_u),
            )
        ]


@dataclass(slots=True)
class _Sample:
    """The particles of one sample so far."""

    place: Place  # its first micrograph
    particles: list[tuple[float, float]] = field(default_factory=list)  # diameter [m], weight
    pictures: int = 0
    set_aside: str | None = None

    def add(self, part: Part, source: Source) -> None:
        """Take in one micrograph."""
        self.particles += part.particles or ()
        self.pictures += 1
        self.set_aside = self.set_aside or source.set_aside


def _columns(particles: list[tuple[float, float]]) -> tuple[list[float], list[float]]:
    return [diameter for diameter, _ in particles], [weight for _, weight in particles]


def _counted(sample: _Sample) -> str:
    several = "s" if sample.pictures > 1 else ""
    return f"{len(sample.particles)} particles of {sample.pictures} micrograph{several}"


class _Teller:
    """Tell how many of a table's files are measured."""

    def __init__(self, progress: Progress, table: Table, total: int) -> None:
        self.progress, self.stage, self.total = progress, f"measuring {table.kind} '{table.name}'", total
        self(0)

    def __call__(self, done: int) -> None:
        self.progress(self.stage, done, self.total)


def _check(one: Measured, place: Place) -> None:
    """Refuse a number that no measuring may give: it would spoil the fit without a word."""
    numbers = (one.limit,) if one.value is None else (one.value, one.u)
    if all(number is not None and math.isfinite(number) for number in numbers) and all(
        number is None or number > 0 for number in (one.u, one.limit)
    ):
        return
    raise Refusal(
        place,
        found=f"a {KINDS[one.kind].words} of {one.value} with the uncertainty {one.u} and the limit {one.limit}",
        expected="a finite number with an uncertainty above 0, or a limit above 0",
        remedy=FAULT,
    )
