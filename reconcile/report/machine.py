"""What programs read: results.json, inputs.toml, posterior.nc, readings.csv, refused.csv, inputs.sha256. SI, every digit kept."""

from __future__ import annotations

import csv
import hashlib
import json
import math
import re
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from reconcile import __version__
from reconcile.campaign.files import checksum_lines
from reconcile.campaign.inputs import describe
from reconcile.campaign.kinds import KINDS
from reconcile.campaign.readings import FileRead, Reading
from reconcile.campaign.refusal import Refused
from reconcile.inference.outcome import (
    CloseOut,
    InputResult,
    KindResult,
    Posterior,
    ReadingResult,
    Sampling,
    ShotResult,
    Summary,
    Warned,
)

CONTRACT = 1

# Which model the inputs belong to: a modeller's deck is of no use without it.
MODEL_NAME = "reconcile reduced model"
MODEL_VERSION = "1"

READING_COLUMNS = (
    "shot",
    "sample",
    "kind",
    "delay",
    "value",
    "unit",
    "u",
    "verdict",
    "predicted",
    "predicted_sd",
    "p_stray",
    "source",
    "limit",
)


def number(value: float | None) -> float | None:
    """Return a plain float, or None where the value is absent, not a number or infinite."""
    return None if value is None or not math.isfinite(value) else float(value)


def results(close_out: CloseOut) -> dict[str, Any]:
    """Return the whole of results.json as plain lists, dictionaries, text, numbers and None."""
    names, matrix = close_out.correlation
    gathered = close_out.gathered
    return {
        "contract": CONTRACT,
        "software": {"name": "reconcile", "version": __version__},
        "campaign": gathered.campaign.name,
        "status": close_out.status,
        "status_reasons": list(close_out.status_reasons),
        "seed": int(close_out.seed),
        "inputs": {result.entry.name: _input(result) for result in close_out.inputs},
        "correlation": {"names": list(names), "matrix": [[number(cell) for cell in row] for row in matrix]},
        "budget": {
            name: [{"source": part.source, "share": number(part.share)} for part in parts]
            for name, parts in close_out.budget.items()
        },
        "shots": [_shot(result) for result in close_out.shots],
        "readings": [_reading(result) for result in close_out.readings],
        "refused": [{"source": refused.source, "reason": refused.reason} for refused in gathered.refused],
        "notes": [{"source": note.source, "note": note.note} for note in gathered.notes],
        "kinds": {result.kind: _kind(result) for result in close_out.kinds},
        "strained": [{"input": item.input, "prior_tail": number(item.prior_tail)} for item in close_out.strained],
        "warnings": [_warning(item) for item in close_out.warnings],
        "could_not_tell": list(close_out.could_not_tell),
        "sampling": _sampling(close_out.sampling),
    }


def _shot(result: ShotResult) -> dict[str, Any]:
    return {
        "shot": result.shot.name,
        "metered_energy": number(result.shot.metered_energy),
        "pulses": int(result.shot.pulses),
        "absorbed_fluence": _summary(result.absorbed_fluence),
        "incident_fluence": _summary(result.incident_fluence),
        "energy_ratio": {"mean": number(result.energy_ratio), "sd": number(result.energy_ratio_sd)},
        "p_misread": number(result.p_misread),
        "verdict": result.verdict,
        "reasons": list(result.reasons),
    }


def _kind(result: KindResult) -> dict[str, Any]:
    agrees = None if result.agrees is None else bool(result.agrees)
    return {"n": int(result.n), "p_value": number(result.p_value), "agrees": agrees}


def _warning(item: Warned) -> dict[str, Any]:
    return {
        "where": item.where,
        "what": item.what,
        "value": number(item.value),
        "limit": number(item.limit),
        "unit": item.unit,
        "advice": item.advice,
    }


def _sampling(sampling: Sampling) -> dict[str, Any]:
    return {
        "min_ess": number(sampling.min_ess),
        "max_rhat": number(sampling.max_rhat),
        "draws": int(sampling.draws),
        "seconds": number(sampling.seconds),
        "converged": bool(sampling.converged),
        "target_ess": int(sampling.target_ess),
        "integral_error": number(sampling.integral_error),
        "evaluations": int(sampling.evaluations),
    }


def _summary(summary: Summary) -> dict[str, float | None]:
    return {name: number(getattr(summary, name)) for name in ("mean", "sd", "q025", "q16", "median", "q84", "q975")}


def _input(result: InputResult) -> dict[str, Any]:
    return {
        "unit": result.entry.unit,
        **_summary(result.summary),
        "prior_mean": number(result.prior_mean),
        "prior_sd": number(result.prior_sd),
        "informed": number(result.informed),
    }


def _reading(result: ReadingResult) -> dict[str, Any]:
    reading = result.reading
    return {
        "shot": reading.shot,
        "sample": reading.sample,
        "kind": reading.kind,
        "delay": number(reading.delay),
        "source": str(reading.place),
        "value": number(reading.value),
        "unit": KINDS[reading.kind].unit,
        "u": number(reading.u),
        "limit": number(reading.limit),
        "predicted": number(result.predicted),
        "predicted_sd": number(result.predicted_sd),
        "p_stray": number(result.p_stray),
        "verdict": result.verdict,
    }


def write_results(close_out: CloseOut, path: Path) -> str:
    """Write results.json and return its SHA-256."""
    text = json.dumps(results(close_out), ensure_ascii=False, allow_nan=False, indent=1) + "\n"
    # A file name that is no UTF-8 reaches us with unpaired surrogates; written as JSON escapes they survive.
    data = text.encode("utf-8", "backslashreplace")
    path.write_bytes(data)
    return hashlib.sha256(data).hexdigest()


def write_inputs_toml(close_out: CloseOut, results_sha256: str, path: Path) -> None:
    """Write inputs.toml: each input's distribution and the correlations on the scale where it is nearest to normal."""
    lines = [
        f"contract = {CONTRACT}",
        f"campaign = {toml_text(close_out.gathered.campaign.name)}",
        f"model = {{ name = {toml_text(MODEL_NAME)}, version = {toml_text(MODEL_VERSION)} }}",
        f"results_sha256 = {toml_text(results_sha256)}",
    ]
    for result in close_out.inputs:
        lines += ["", f"[inputs.{_toml_key(result.entry.name)}]", *_toml_input(result)]
    names, matrix = close_out.scale_correlation
    known = [i for i in range(len(names)) if np.isfinite(matrix[i, i])]
    lines += ["", "[correlation]", f"names = [{', '.join(toml_text(names[i]) for i in known)}]", "matrix = ["]
    lines += [f"  [{', '.join(_toml_number(matrix[i, j]) for j in known)}]," for i in known]
    lines += ["]", ""]
    path.write_text("\n".join(lines), encoding="utf-8", newline="\n")


def _toml_input(result: InputResult) -> list[str]:
    numbers = {
        "mean": result.summary.mean,
        "sd": result.summary.sd,
        "median": result.summary.median,
        "q025": result.summary.q025,
        "q975": result.summary.q975,
        "informed": result.informed,
        "scale_mean": result.scale_mean,
        "scale_sd": result.scale_sd,
    }
    texts = {
        "unit": result.entry.unit,
        "prior": "derived" if result.prior is None else result.prior.text,
        "belongs_to": result.entry.belongs_to,
        "scale": result.entry.scale,
    }
    lines = [f"{key} = {toml_text(text)}" for key, text in texts.items()]
    # TOML has no null: what is not known is left out.
    return lines + [
        f"{key} = {_toml_number(value)}" for key, value in numbers.items() if value is not None and math.isfinite(value)
    ]


def _toml_number(value: float) -> str:
    return repr(float(value))


def toml_text(text: str) -> str:
    r"""Return text as a TOML basic string; what TOML cannot hold (unpaired surrogates) becomes U+FFFD."""
    escaped = []
    for character in text:
        code = ord(character)
        if character in '"\\':
            escaped.append("\\" + character)
        elif 0xD800 <= code <= 0xDFFF:
            escaped.append("\ufffd")
        elif code < 0x20 or code == 0x7F:
            escaped.append(f"\\u{code:04x}")
        else:
            escaped.append(character)
    return '"' + "".join(escaped) + '"'


def _toml_key(name: str) -> str:
    return name if re.fullmatch(r"[A-Za-z0-9_-]+", name) else toml_text(name)


def write_posterior(posterior: Posterior, campaign: str, path: Path, created: str) -> None:
    """Write the draws in ArviZ's netCDF layout: groups posterior and sample_stats, dimensions chain and draw.

    Names keep their dot (`scale.profiler`); what netCDF or ASCII cannot hold in a name becomes `_`, with the full name in `long_name`.
    `created` is an ISO 8601 time.
    """
    import h5netcdf

    chains, steps, _ = posterior.draws.shape
    about = {
        "created_at": created,
        "inference_library": "reconcile",
        "inference_library_version": __version__,
        "campaign": campaign,
    }
    taken: set[str] = set()
    with h5netcdf.File(path, "w") as file:
        file.attrs.update(about)
        for group_name in ("posterior", "sample_stats"):
            group = file.create_group(group_name)
            group.attrs.update(about)
            group.dimensions = {"chain": chains, "draw": steps}
            group.create_variable("chain", ("chain",), data=np.arange(chains, dtype=np.int64))
            group.create_variable("draw", ("draw",), data=np.arange(steps, dtype=np.int64))
        for index, name in enumerate(posterior.names):
            variable = file["posterior"].create_variable(
                _netcdf_name(name, taken),
                ("chain", "draw"),
                data=np.ascontiguousarray(posterior.draws[:, :, index], dtype=np.float64),
            )
            variable.attrs["units"] = describe(name).unit
            variable.attrs["long_name"] = name
        log_prob = file["sample_stats"].create_variable(
            "lp", ("chain", "draw"), data=np.asarray(posterior.log_prob, dtype=np.float64)
        )
        log_prob.attrs["units"] = "1"
        log_prob.attrs["long_name"] = "logarithm of the posterior density, up to a constant"


def _netcdf_name(name: str, taken: set[str]) -> str:
    """Return a variable name of printable ASCII without `/` that no other variable has, and remember it."""
    wanted = re.sub(r"[^A-Za-z0-9_.+@-]", "_", name)
    candidate, again = wanted, 2
    while candidate in taken:
        candidate, again = f"{wanted}_{again}", again + 1
    taken.add(candidate)
    return candidate


def printable(text: str) -> str:
    """Return text without the control characters that a spreadsheet cannot hold; unpaired surrogates become U+FFFD."""
    kept = []
    for character in text:
        code = ord(character)
        if 0xD800 <= code <= 0xDFFF or code in (0xFFFE, 0xFFFF):
            kept.append("\ufffd")
        elif character in "\t\r\n" or not (code < 0x20 or 0x7F <= code < 0xA0):
            kept.append(character)
    return "".join(kept)


def spreadsheet_text(text: str) -> str:
    """Return text that a spreadsheet program will not take for a formula when it opens a CSV file."""
    kept = printable(text)
    return "'" + kept if kept.startswith(("=", "+", "-", "@", "\t", "\r")) else kept


def _write_csv(path: Path, header: Sequence[str], rows: Iterable[Sequence[str | float | None]]) -> None:
    """Write a table: text guarded against formulas, numbers with every digit, None as an empty cell."""
    with path.open("w", encoding="utf-8-sig", errors="replace", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(header)
        for row in rows:
            writer.writerow(
                "" if cell is None else spreadsheet_text(cell) if isinstance(cell, str) else repr(cell) for cell in row
            )


def write_readings(readings: Iterable[ReadingResult], path: Path) -> None:
    """Write readings.csv: every reading, used or not, SI units."""
    rows = []
    for result in readings:
        row = _reading(result)
        rows.append([row[column] for column in READING_COLUMNS])
    _write_csv(path, READING_COLUMNS, rows)


def write_unfitted_readings(readings: Iterable[Reading], path: Path) -> None:
    """Write readings.csv as it stands before any fit: the columns that only a fit can fill stay empty."""
    rows = []
    for reading in readings:
        row = _reading(ReadingResult(reading, None, None, None, "used")) | {"verdict": None}
        rows.append([row[column] for column in READING_COLUMNS])
    _write_csv(path, READING_COLUMNS, rows)


def write_refused(refused: Iterable[Refused], path: Path) -> None:
    """Write refused.csv: what was left out, and why."""
    _write_csv(path, ("source", "reason"), ((item.source, item.reason) for item in refused))


def write_input_checksums(files: Iterable[FileRead], path: Path) -> None:
    """Write the SHA-256 of every input file as `sha256sum -c` reads it, paths relative to the campaign folder."""
    text = checksum_lines({file.path: file.sha256 for file in files})
    path.write_bytes(text.encode("utf-8", "surrogateescape"))
