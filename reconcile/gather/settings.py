"""A manifest's table of files → the plain settings with which each of its files is measured."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping

from reconcile.campaign.campaign import Campaign, Probe, Quantity, Table
from reconcile.campaign.materials import properties_of_liquid
from reconcile.campaign.quantity import parse_unit
from reconcile.campaign.refusal import Place, Refusal
from reconcile.gather.collected import Collected, spreadsheets
from reconcile.gather.measuring import Settings, read_background
from reconcile.measure.bubble import Side
from reconcile.measure.trace import RESPONSE_SPREAD, ProbeSetup
from reconcile.read.traces import TraceSettings

DEFAULT_EDGE: Side = "bottom"


def settings_of(campaign: Campaign, table: Table, collected: Collected) -> Settings:
    """Return the settings of a table's files.

    Raises
    ------
    Refusal
        The table or the probe lacks what its files need, or its background cannot be read.
    """
    return _SETTINGS[table.kind](campaign, table, collected)


def _of_frames(campaign: Campaign, table: Table, collected: Collected) -> Settings:
    edge = table.options.get("target_edge")
    if edge is None:
        edge = DEFAULT_EDGE
        collected.note(table.place, f"no target_edge stated: the target is taken to lie at the {edge} of the frames")
    return Settings(
        table.kind,
        pixel_pitch=_pitch(table),
        target_edge=edge,
        background=_background(campaign, table, collected),
        frame_interval=_value(table.options.get("frame_interval")),
    )


def _of_traces(campaign: Campaign, table: Table, collected: Collected) -> Settings:
    options = table.options
    start = _value(options.get("start"))
    full_scale = _value(options.get("full_scale"))
    return Settings(
        table.kind,
        trace=TraceSettings(
            columns=dict(table.columns),
            units=dict(table.units),
            sample_interval=_value(options.get("sample_interval")),
            start=0.0 if start is None else start,
            full_scale=full_scale,
            decimal=table.decimal,
            delimiter=table.delimiter,
            encoding=table.encoding,
        ),
        probe=_probe(campaign, table),
    )


def _of_maps(campaign: Campaign, table: Table, collected: Collected) -> Settings:
    unit = table.options.get("height_unit")
    if unit is None:
        raise Refusal(
            table.place,
            found="no height_unit for crater-map",
            expected="the unit of the heights in the files",
            remedy='Add height_unit = "um" (yours).',
        )
    return Settings(
        table.kind,
        pixel_pitch=_pitch(table),
        height_unit=parse_unit(unit).size,
        decimal=table.decimal,
        delimiter=table.delimiter,
        encoding=table.encoding,
    )


def _of_micrographs(campaign: Campaign, table: Table, collected: Collected) -> Settings:
    return Settings(table.kind, pixel_pitch=_pitch(table))


_SETTINGS: Mapping[str, Callable[[Campaign, Table, Collected], Settings]] = {
    "shadowgraph": _of_frames,
    "probe-trace": _of_traces,
    "crater-map": _of_maps,
    "micrograph": _of_micrographs,
}


def _value(quantity: Quantity | None) -> float | None:
    return None if quantity is None else quantity.value


def _pitch(table: Table) -> float:
    if table.pixel_pitch is None:
        graticule = "graticule" in table.options
        raise Refusal(
            table.place,
            found="a graticule, which this version does not measure" if graticule else "no pixel_pitch",
            expected="the size of one pixel at the object",
            remedy='Add pixel_pitch = "… um ± … um"'
            + (" in its place: the spacing over the number of pixels from line to line." if graticule else "."),
        )
    return table.pixel_pitch.value


def _background(campaign: Campaign, table: Table, collected: Collected) -> tuple[str, str] | None:
    """Return the path and address of the empty frame; it is read here to be refused before any work."""
    name = table.options.get("background")
    if name is None:
        return None
    spreadsheets(campaign, name, table.place)
    path = collected.read(campaign.folder, name, table.place)
    read_background.cache_clear()  # of an earlier campaign in this process
    read_background(str(path), name)
    return str(path), name


def _probe(campaign: Campaign, table: Table) -> ProbeSetup:
    """Return what is known of the probe, with the manifest's standoff; raises Refusal."""
    probe = campaign.probe or Probe()
    if probe.sensitivity is None and probe.sensitivity_file is not None:
        raise Refusal(
            Place(table.place.file, key="probe.sensitivity_file"),
            found="a sensitivity that depends on frequency, which this version does not apply to traces",
            expected='sensitivity = "… V/MPa ± … %", the same at all frequencies',
            remedy="State the sensitivity at the frequencies of the first pulse, or measure the traces elsewhere and give tables.",
        )
    liquid = properties_of_liquid(campaign)
    needed = {name: getattr(probe, name) for name in ("sensitivity", "standoff", "bandwidth", "trigger_offset")}
    missing = [name for name, quantity in needed.items() if quantity is None]
    if missing:
        raise Refusal(
            table.place,
            found=f"traces of a probe without {' and '.join(missing)}",
            expected=f"[probe] with {', '.join(needed)}",
            remedy=f"Add {' and '.join(missing)} to [probe].",
        )
    bandwidth = needed["bandwidth"]
    return ProbeSetup(
        sensitivity=needed["sensitivity"].value,
        standoff=needed["standoff"].value,
        sound_speed=liquid.sound_speed,
        trigger_offset=needed["trigger_offset"].value,
        response_time=1.0 / (2.0 * math.pi * bandwidth.value),
        response_spread=RESPONSE_SPREAD if bandwidth.u is None else bandwidth.u / bandwidth.value,
    )
