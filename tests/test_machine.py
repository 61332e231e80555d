"""What programs read: results.json, inputs.toml, posterior.nc, the CSV files."""

from __future__ import annotations

import csv
import json
import math
import tomllib
from pathlib import Path

import h5py
import jsonschema
import numpy as np
import pytest
from report_fixture import FORMULA, FREE, invented_close_out, without_a_number

import reconcile.report
from reconcile.campaign.readings import FileRead
from reconcile.campaign.refusal import Refused
from reconcile.inference.outcome import CloseOut, Posterior
from reconcile.report import machine

COLUMNS = [
    "shot", "sample", "kind", "delay", "value", "unit", "u", "verdict", "predicted", "predicted_sd", "p_stray", "source",
]  # fmt: skip
SCHEMA = json.loads(Path(reconcile.report.__file__).with_name("results.schema.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def close_out() -> CloseOut:
    return invented_close_out(12, hostile=True)


@pytest.mark.parametrize("count", [3, 300])
def test_results_validate_against_the_schema(count: int, tmp_path: Path) -> None:
    machine.write_results(invented_close_out(count, hostile=True), tmp_path / "results.json")
    found = json.loads((tmp_path / "results.json").read_text(encoding="utf-8"))
    jsonschema.validate(found, SCHEMA, cls=jsonschema.Draft202012Validator)
    assert len(found["shots"]) == count


def test_the_schema_refuses_what_it_should(close_out: CloseOut) -> None:
    for change in (
        {"status": "done"},
        {"contract": 2},
        {"seed": None},
        {"shots": [machine.results(close_out)["shots"][0] | {"verdict": "doubtful"}]},
    ):
        with pytest.raises(jsonschema.ValidationError):
            jsonschema.validate(machine.results(close_out) | change, SCHEMA)


def test_numbers_that_are_none_become_null(close_out: CloseOut, tmp_path: Path) -> None:
    machine.write_results(without_a_number(close_out), tmp_path / "results.json")

    def refuse(word: str) -> None:
        raise AssertionError(word)

    found = json.loads((tmp_path / "results.json").read_text(encoding="utf-8"), parse_constant=refuse)
    jsonschema.validate(found, SCHEMA)
    assert found["shots"][0]["energy_ratio"]["mean"] is None
    assert found["shots"][0]["absorbed_fluence"]["q975"] is None
    assert found["sampling"]["max_rhat"] is None


def test_results_keep_every_digit_and_every_state(close_out: CloseOut) -> None:
    found = machine.results(close_out)
    assert found["inputs"]["heated_depth"]["q16"] == close_out.input("heated_depth").summary.q16
    assert found["inputs"]["bubble_gas"] | {"mean": 0.003, "sd": 0.0, "informed": None} == found["inputs"]["bubble_gas"]
    below = [reading for reading in found["readings"] if reading["verdict"] == "below-limit"]
    assert below and all(
        reading["value"] is None and reading["u"] is None and reading["limit"] > 0 for reading in below
    )
    assert found["kinds"]["median-diameter"] == {"n": 1, "p_value": None, "agrees": None}
    assert {shot["verdict"] for shot in found["shots"]} == {"kept", "misread", "stray", "set-aside"}


def test_text_that_is_no_unicode_survives_in_results(close_out: CloseOut, tmp_path: Path) -> None:
    from dataclasses import replace

    odd = replace(close_out, gathered=replace(close_out.gathered, refused=(Refused("caf\udce9.csv", "no table"),)))
    machine.write_results(odd, tmp_path / "results.json")
    assert json.loads((tmp_path / "results.json").read_bytes())["refused"][0]["source"] == "caf\udce9.csv"


def test_the_input_deck_loads_with_equal_numbers_and_correlations(close_out: CloseOut, tmp_path: Path) -> None:
    machine.write_inputs_toml(close_out, "ab" * 32, tmp_path / "inputs.toml")
    deck = tomllib.loads((tmp_path / "inputs.toml").read_text(encoding="utf-8"))
    assert deck["contract"] == 1 and deck["results_sha256"] == "ab" * 32 and deck["model"]["name"]
    for result in close_out.inputs:
        entry = deck["inputs"][result.entry.name]
        assert entry["mean"] == result.summary.mean and entry["sd"] == result.summary.sd
        assert entry["scale"] == result.entry.scale and entry["scale_mean"] == result.scale_mean
        assert ("informed" in entry) == (result.informed is not None)
    names, matrix = close_out.scale_correlation
    assert deck["correlation"]["names"] == list(names) == list(FREE)
    assert np.array_equal(np.array(deck["correlation"]["matrix"]), matrix)


def test_a_modeller_can_draw_correlated_inputs_from_the_deck(close_out: CloseOut, tmp_path: Path) -> None:
    machine.write_inputs_toml(close_out, "ab" * 32, tmp_path / "inputs.toml")
    deck = tomllib.loads((tmp_path / "inputs.toml").read_text(encoding="utf-8"))
    names = deck["correlation"]["names"]
    sd = np.array([deck["inputs"][name]["scale_sd"] for name in names])
    centre = np.array([deck["inputs"][name]["scale_mean"] for name in names])
    draws = np.random.default_rng(3).multivariate_normal(
        centre, np.array(deck["correlation"]["matrix"]) * np.outer(sd, sd), 20_000
    )
    depth = np.exp(draws[:, names.index("heated_depth")])
    # 20 000 draws: relative error of a median of a distribution 20 % wide is 0.2 %.
    assert np.median(depth) == pytest.approx(deck["inputs"]["heated_depth"]["median"], rel=0.02)


def test_toml_text_of_any_kind_comes_back() -> None:
    for text in ('quote " and \\ and', "tab\tline\nbell\x07del\x7f", "Δ µ 气泡 😀", FORMULA):
        assert tomllib.loads(f"a = {machine.toml_text(text)}")["a"] == text


def test_the_posterior_loads_back_with_equal_draws_units_and_layout(close_out: CloseOut, tmp_path: Path) -> None:
    machine.write_posterior(close_out.posterior, "tarn-02", tmp_path / "posterior.nc", "2026-03-20T00:00:00+00:00")
    with h5py.File(tmp_path / "posterior.nc") as file:
        for name in close_out.posterior.names:
            assert np.array_equal(file["posterior"][name][()].ravel(), close_out.posterior[name])
        depth = file["posterior"]["heated_depth"]
        assert depth.attrs["units"] == "m"
        assert [depth.dims[i][0].name for i in (0, 1)] == ["/posterior/chain", "/posterior/draw"]
        assert np.array_equal(file["sample_stats"]["lp"][()], close_out.posterior.log_prob)
        assert file.attrs["inference_library"] == "reconcile"


def test_names_that_netcdf_cannot_hold_are_made_plain_and_stay_apart(tmp_path: Path) -> None:
    names = ("scale.a/b", "scale.a_b", "scale.größe")
    posterior = Posterior(names, np.arange(12.0).reshape(2, 2, 3), np.zeros((2, 2)))
    machine.write_posterior(posterior, "x", tmp_path / "posterior.nc", "2026-03-20T00:00:00+00:00")
    with h5py.File(tmp_path / "posterior.nc") as file:
        found = {
            file["posterior"][name].attrs["long_name"]: name
            for name in file["posterior"]
            if name not in ("chain", "draw")
        }
        assert set(found) == set(names) and all(name.isascii() for name in found.values())
        assert np.array_equal(file["posterior"][found["scale.a_b"]][()].ravel(), posterior["scale.a_b"])


def _rows(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8-sig", newline="") as file:
        return list(csv.DictReader(file))


def test_readings_csv_keeps_every_digit_and_guards_text_only(close_out: CloseOut, tmp_path: Path) -> None:
    machine.write_readings(close_out.readings, tmp_path / "readings.csv")
    rows = _rows(tmp_path / "readings.csv")
    assert list(rows[0])[:12] == COLUMNS
    for row, result in zip(rows, close_out.readings, strict=True):
        value = result.reading.value
        assert row["value"] == "" if value is None else float(row["value"]) == value
        assert not row["source"].startswith(("=", "+", "-", "@"))
    assert rows[0]["source"] == "'" + str(close_out.readings[0].reading.place)
    assert {row["shot"] for row in rows} >= {"'+7 " + "n" * 60}
    assert rows[-1]["sample"] == "c1" and rows[-1]["shot"] == ""


def test_a_negative_number_is_not_taken_for_a_formula(close_out: CloseOut, tmp_path: Path) -> None:
    from dataclasses import replace

    reading = replace(close_out.readings[0].reading, value=-4.2e-8)
    machine.write_readings([replace(close_out.readings[0], reading=reading)], tmp_path / "readings.csv")
    assert _rows(tmp_path / "readings.csv")[0]["value"] == "-4.2e-08"


def test_before_a_fit_the_fit_columns_stay_empty(close_out: CloseOut, tmp_path: Path) -> None:
    machine.write_unfitted_readings(close_out.gathered.readings, tmp_path / "readings.csv")
    rows = _rows(tmp_path / "readings.csv")
    assert len(rows) == len(close_out.gathered.readings)
    assert all(row[column] == "" for row in rows for column in ("verdict", "predicted", "predicted_sd", "p_stray"))
    assert math.isclose(float(rows[0]["value"]), close_out.gathered.readings[0].value or 0, rel_tol=0)


@pytest.mark.parametrize("start", ["=", "+", "-", "@", "\t", "\r"])
def test_refused_csv_guards_each_start_of_a_formula(start: str, tmp_path: Path) -> None:
    machine.write_refused([Refused(f"{start}1+1", "why")], tmp_path / "refused.csv")
    assert _rows(tmp_path / "refused.csv")[0]["source"] == f"'{start}1+1"


def test_input_checksums_are_as_sha256sum_writes_them(tmp_path: Path) -> None:
    files = (FileRead("a b.xlsx", "0" * 64), FileRead("odd\\name\n.csv", "f" * 64))
    machine.write_input_checksums(files, tmp_path / "inputs.sha256")
    # GNU coreutils manual, "md5sum invocation": backslash and newline escaped, the line then starts with a backslash.
    assert (
        tmp_path / "inputs.sha256"
    ).read_bytes() == b"0" * 64 + b"  a b.xlsx\n\\" + b"f" * 64 + b"  odd\\\\name\\n.csv\n"
