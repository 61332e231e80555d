"""The manifest's tables of files: [shots] and every [[readings]]."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from reconcile.campaign.campaign import Quantity, Table
from reconcile.campaign.document import Section, described
from reconcile.campaign.kinds import KINDS, TABLE_KINDS
from reconcile.campaign.patterns import check_pattern, relative_path
from reconcile.campaign.quantity import EXAMPLES, UnknownUnit, parse_quantity, parse_unit
from reconcile.campaign.refusal import Refusal, nearest
from reconcile.campaign.schema import (
    ABOUT,
    EDGES,
    FILE_KINDS,
    LOG_COLUMNS,
    QUANTITIES,
    TABLE_KEYS,
    Key,
    table_columns,
    table_keys,
)

_OWN_PERCENT = "%"


def log_table(section: Section) -> Table:
    """Return the log's entry; raises Refusal."""
    section.refuse_unknown(TABLE_KEYS)
    shared = _shared(section, "log", LOG_COLUMNS)
    columns = shared["columns"]
    if "shot" not in columns or not {"energy", "power"} & set(columns):
        missing = "shot" if "shot" not in columns else "energy"
        raise Refusal(
            section.place("columns"),
            found=f"no column '{missing}' in [shots]",
            expected='columns = { shot = "…", energy = "…" } (or power)',
            remedy=f"Name the column that holds the {missing}.",
        )
    if {"energy", "power"} <= set(columns):
        raise Refusal(
            section.place("columns"),
            found="both energy and power",
            expected="the column of one of them",
            remedy="Keep the one that was logged.",
        )
    return Table(kind="log", name="log", place=section.place(), file=_file(section), **shared)


def readings_tables(root: Section, unused: list[str]) -> tuple[Table, ...]:
    """Return every [[readings]] entry, in the manifest's order; raises Refusal."""
    entries = root.content.get("readings")
    if not isinstance(entries, list) or not entries:
        raise Refusal(
            root.document.place("readings"),
            found="no [[readings]]" if entries is None else f"readings as {described(entries)}",
            expected="at least one [[readings]] table",
            remedy="Add [[readings]] with kind, file and columns.",
        )
    tables = [
        _readings(Section(root.document, f"readings.{number}", entry, unused), str(number))
        for number, entry in enumerate(entries, start=1)
    ]
    return _sharing(tables)


def _readings(section: Section, number: str) -> Table:
    kind = section.text("kind", "what the table holds", required=True) or ""
    known = [*KINDS, *TABLE_KINDS]
    if kind not in known:
        near = nearest(kind, known)
        raise Refusal(
            section.place("kind"),
            found=f"the kind '{kind}'",
            expected=f"one of {', '.join(known)}",
            remedy=f"Write '{near}' if that is meant." if near else "Choose one of these.",
        )
    section.refuse_unknown(table_keys(kind))
    name = section.text("name", "a name for the table") or number
    if len(name) > 80 or not name.isprintable() or "/" in name or "\\" in name:
        raise Refusal(
            section.place("name"),
            found=described(name),
            expected="up to 80 characters without / and \\",
            remedy="Shorten it.",
        )
    shared = _shared(section, kind, table_columns(kind))
    keys = QUANTITIES["readings"]
    options: dict[str, Any] = {}
    if kind in FILE_KINDS:
        _check_source(section)
        options = _options(section, kind)
    else:
        _check_columns(section, kind, shared["columns"])
    return Table(
        kind=kind,
        name=name,
        place=section.place(),
        file=None if kind in FILE_KINDS else _file(section),
        files=_pattern(section) if "files" in section.content else None,
        listed=_listed(section) if "list" in section.content else None,
        uncertainty=_uncertainty(section, kind),
        detection_limit=_limit(section, kind),
        not_detected=section.texts("not_detected", "words for a reading below the limit"),
        scale=section.quantity("scale", keys["scale"]),
        pixel_pitch=section.quantity("pixel_pitch", keys["pixel_pitch"]),
        options=options,
        about={key: text for key in ABOUT if (text := section.text(key, ABOUT[key])) is not None},
        **shared,
    )


def _file(section: Section) -> str:
    file = section.text("file", "a spreadsheet, .xlsx or .csv, relative to the campaign folder", required=True) or ""
    return relative_path(file, section.place("file"))


def _pattern(section: Section) -> str:
    return check_pattern(section.text("files", "a pattern of file names", required=True) or "", section.place("files"))


def _shared(section: Section, kind: str, known: dict[str, str | None]) -> dict[str, Any]:
    """Return what every table may say, as arguments of Table."""
    columns = section.words("columns", "a column's header")
    units = section.words("units", "a unit")
    if known:
        for part, given in (("columns", columns), ("units", units)):
            _refuse_unknown_words(section, part, given, list(known))
    for name, unit in units.items():
        _check_unit(section, name, unit, known.get(name))
    decimal = section.text("decimal", "the decimal sign")
    if decimal not in {None, ",", "."}:
        raise Refusal(
            section.place("decimal"), found=f"'{decimal}'", expected='"," or "."', remedy="Write one of them."
        )
    delimiter = section.content.get("delimiter")
    if delimiter is not None and (not isinstance(delimiter, str) or len(delimiter) != 1 or delimiter in '\n\r"'):
        raise Refusal(
            section.place("delimiter"),
            found=described(delimiter),
            expected='one character, such as ";"',
            remedy="Write one.",
        )
    return {
        "sheets": section.texts("sheet", "a sheet's name"),
        "only": section.words("only", "the text that a row must hold in that column"),
        "columns": columns,
        "units": units,
        "decimal": decimal,
        "delimiter": delimiter,
        "encoding": section.text("encoding", "the encoding of the file"),
    }


def _refuse_unknown_words(section: Section, part: str, given: dict[str, str], known: list[str]) -> None:
    for name in given:
        if name not in known:
            near = nearest(name, known)
            raise Refusal(
                section.place(f"{part}.{name}"),
                found=f"the unknown name '{name}' in {part}",
                expected=f"one of {', '.join(known)}",
                remedy=f"Write '{near}' if that is meant." if near else "Take it out.",
            )


def _check_unit(section: Section, name: str, unit: str, si: str | None) -> None:
    try:
        fits = si is None or parse_unit(unit).dimension == parse_unit(si).dimension
        fits = fits or (name == "uncertainty" and unit.strip() == _OWN_PERCENT)
        remedy = "Correct the unit."
    except UnknownUnit as unknown:
        fits, remedy = False, f"Write '{unknown.known}' if that is meant." if unknown.known else "Correct the unit."
    if not fits:
        raise Refusal(
            section.place(f"units.{name}"),
            found=f"the unit '{unit}' for '{name}'",
            expected=f'a unit such as that of "{EXAMPLES.get(si or "1", si or "1")}"',
            remedy=remedy,
        )


def _check_columns(section: Section, kind: str, columns: dict[str, str]) -> None:
    """Refuse a table without a column that its kind needs."""
    optional = {"uncertainty", "delay"}
    for name in table_columns(kind):
        if name not in columns and name not in optional:
            raise Refusal(
                section.place("columns"),
                found=f"no column '{name}' for {kind}",
                expected=f"columns = {{ {', '.join(f'{one} = …' for one in table_columns(kind))} }}",
                remedy=f"Name the column that holds the {name}.",
            )
    if kind in KINDS and "uncertainty" not in columns and "uncertainty" not in section.content:
        raise Refusal(
            section.place(),
            found="no uncertainty",
            expected="the readings' own standard uncertainty, as a column or as a key of this table",
            remedy='Add uncertainty = "…" to its columns, or for all rows to the table.',
        )


def _uncertainty(section: Section, kind: str) -> Quantity | None:
    """Return the table's uncertainty; with unit "%" its value is a share of each reading."""
    if "uncertainty" not in section.content or kind not in KINDS:
        return None
    place, raw, unit = section.place("uncertainty"), section.content["uncertainty"], KINDS[kind].unit
    relative = unit != "1" and isinstance(raw, str) and raw.strip().endswith(_OWN_PERCENT) and "±" not in raw
    if not isinstance(raw, (str, int, float)):
        raise Refusal(place, found=described(raw), expected="a quantity in quotes", remedy="Write it with its unit.")
    quantity = parse_quantity(raw, "1" if relative else unit, place)
    if quantity.value <= 0:
        raise Refusal(
            place,
            found=f"'{quantity.text}'",
            expected="an uncertainty above 0: what would differ on measuring again",
            remedy="State how far repeated readings scatter.",
        )
    if quantity.u is not None:
        section.unused.append(section.key("uncertainty"))
    return replace(quantity, unit=_OWN_PERCENT) if relative else quantity


def _limit(section: Section, kind: str) -> Quantity | None:
    if kind not in KINDS:
        return None
    return section.quantity("detection_limit", Key("the smallest number that counts as a reading", KINDS[kind].unit))


def _check_source(section: Section) -> None:
    given = [key for key in ("files", "list") if key in section.content]
    if len(given) != 1:
        raise Refusal(
            section.place(),
            found="both files and list" if given else "neither files nor list",
            expected="files = a pattern of file names, or list = a table of them",
            remedy="Keep one of the two." if given else 'Add files = "folder/{shot}…".',
        )


def _listed(section: Section) -> dict[str, Any]:
    entry = section.section("list")
    entry.refuse_unknown((*TABLE_KEYS, "folder"))
    columns = {"shot": None, "sample": None, "path": None, "delay": "s", "frame": None}
    shared = _shared(entry, "list", columns)
    if "path" not in shared["columns"] or not {"shot", "sample"} & set(shared["columns"]):
        raise Refusal(
            entry.place("columns"),
            found="a list without its columns",
            expected='columns = { shot = "…", path = "…" }',
            remedy="Name the columns of the shot and of the file.",
        )
    folder = entry.text("folder", "the folder of the listed files")
    return {
        **shared,
        "file": _file(entry),
        "folder": relative_path(folder, entry.place("folder")) if folder else None,
    }


def _options(section: Section, kind: str) -> dict[str, Any]:
    """Return the keys that only some kinds of file have, quantities in SI."""
    found: dict[str, Any] = {}
    for key in FILE_KINDS[kind]:
        if key not in section.content or key in {"files", "list", "pixel_pitch"}:
            continue
        if key in QUANTITIES["readings"]:
            found[key] = section.quantity(key, QUANTITIES["readings"][key])
        elif key == "graticule":
            found[key] = _graticule(section.section(key))
        elif key == "background":
            found[key] = relative_path(section.text(key, "an empty frame", required=True) or "", section.place(key))
        else:
            found[key] = section.text(key, "a word", required=True)
    _check_words(section, found)
    return found


def _check_words(section: Section, found: dict[str, Any]) -> None:
    edge = found.get("target_edge")
    if edge is not None and edge not in EDGES:
        near = nearest(edge, EDGES)
        raise Refusal(
            section.place("target_edge"),
            found=f"'{edge}'",
            expected=f"one of {', '.join(EDGES)}",
            remedy=f"Write '{near}' if that is meant." if near else "Name the side on which the target lies.",
        )
    if "height_unit" in found:
        _check_unit(section, "height_unit", found["height_unit"], "m")


def _graticule(entry: Section) -> dict[str, Any]:
    entry.refuse_unknown(("file", "spacing"))
    return {
        "file": _file(entry),
        "spacing": entry.quantity("spacing", Key("distance from line to line", "m", required=True)),
    }


def _sharing(tables: list[Table]) -> tuple[Table, ...]:
    """Let tables of one name share their scale and pixel pitch; raises Refusal where they contradict each other."""
    shared: dict[tuple[str, str], tuple[Quantity, Table]] = {}
    for table in tables:
        for key in ("scale", "pixel_pitch"):
            stated: Quantity | None = getattr(table, key)
            if stated is None:
                continue
            earlier, first = shared.setdefault((table.name, key), (stated, table))
            if (earlier.value, earlier.u) != (stated.value, stated.u):
                raise Refusal(
                    table.place,
                    found=f"{key} = '{stated.text}', but '{earlier.text}' in the table of the same name at line {first.place.line}",
                    expected=f"one {key} for all tables named '{table.name}', which share it",
                    remedy="Correct one of them, or give the tables different names.",
                )
    done = []
    for table in tables:
        scale = shared.get((table.name, "scale"))
        pitch = shared.get((table.name, "pixel_pitch"))
        pictures = "pixel_pitch" in FILE_KINDS.get(table.kind, ())
        done.append(
            replace(
                table,
                scale=scale[0] if scale else None,
                pixel_pitch=pitch[0] if pitch and pictures and "graticule" not in table.options else None,
            )
        )
        needs_pitch = "graticule" in FILE_KINDS.get(table.kind, ()) and "graticule" not in table.options
        if needs_pitch and done[-1].pixel_pitch is None:
            raise Refusal(
                table.place,
                found=f"neither pixel_pitch nor graticule for {table.kind}",
                expected="the size of one pixel at the object",
                remedy='Add pixel_pitch = "… um ± … um".',
            )
    return tuple(done)
