"""Campaigns that say little close out too, say what they could not tell, and repeat to the last digit."""

from __future__ import annotations

import json
from importlib import resources
from pathlib import Path

import jsonschema
import pytest
from campaign_folder import MANIFEST, write

from reconcile.campaign.refusal import Refusal
from reconcile.closeout import closeout
from reconcile.inference.outcome import CloseOut

DEPTHS = MANIFEST[MANIFEST.index("[[readings]]") :]
SIZES = """\
[[readings]]
kind = "median-diameter"
file = "craters.csv"
columns = { sample = "Sample", value = "d (nm)", uncertainty = "u (nm)" }
"""
LIMIT = ('uncertainty = "u (um)" }', 'uncertainty = "u (um)" }\ndetection_limit = "20 nm"')
SAMPLES = ('energy = "Energy (uJ)" }', 'energy = "Energy (uJ)", sample = "Sample" }')


def close_out(folder: Path, out: Path, **options: object) -> tuple[CloseOut, dict]:
    """Close a folder out quickly and return the answer and results.json, checked against its schema."""
    answer, written, _ = closeout(folder, out=out, effort="quick", **options)
    results = json.loads((written / "results.json").read_text(encoding="utf-8"))
    schema = json.loads(resources.files("reconcile.report").joinpath("results.schema.json").read_text(encoding="utf-8"))
    jsonschema.validate(results, schema)
    return answer, results


def said(answer: CloseOut) -> str:
    return " ".join(answer.could_not_tell)


def test_a_log_and_one_table_close_out_and_say_what_one_kind_cannot_tell(tmp_path: Path) -> None:
    answer, results = close_out(write(tmp_path / "c"), tmp_path / "out")
    assert answer.status == "final"
    assert "cannot be told from a stray reading" in said(answer)
    assert results["kinds"]["crater-depth"] == {"n": 2, "p_value": None, "agrees": None}
    assert {share["source"] for share in results["budget"]["absorbed_fraction"]} > {"readings", "absorbed_fraction"}
    assert sum(share["share"] for share in results["budget"]["absorbed_fraction"]) == pytest.approx(1.0, abs=1e-12)


def test_nothing_above_threshold_bounds_the_absorbed_fraction_from_above(tmp_path: Path) -> None:
    craters = "Shot,Depth (um),u (um)\ns001,n.d.,\ns002,n.d.,\ns003,n.d.,\n"
    answer, results = close_out(write(tmp_path / "c", LIMIT, craters=craters), tmp_path / "out")
    assert answer.status == "final"
    assert answer.input("absorbed_fraction").summary.q975 < answer.input("absorbed_fraction").prior_mean
    assert {reading["verdict"] for reading in results["readings"]} == {"below-limit"}
    assert "next to nothing about" in said(answer)


def test_a_single_shot_closes_out(tmp_path: Path) -> None:
    log, craters = "Shot,Energy (uJ)\ns001,20\n", "Shot,Depth (um),u (um)\ns001,0.20,0.02\n"
    answer, results = close_out(write(tmp_path / "c", log=log, craters=craters), tmp_path / "out")
    assert answer.status == "final"
    (shot,) = results["shots"]
    assert shot["absorbed_fluence"]["q025"] < shot["absorbed_fluence"]["median"] < shot["absorbed_fluence"]["q975"]
    assert shot["energy_ratio"]["sd"] > 0.03  # nothing but the log and one depth speaks of it


def test_sizes_alone_close_out(tmp_path: Path) -> None:
    log = "Shot,Energy (uJ),Sample\ns001,10,A\ns002,20,A\ns003,30,B\n"
    sizes = "Sample,d (nm),u (nm)\nA,12,0.5\nB,9,0.4\n"
    answer, results = close_out(
        write(tmp_path / "c", (DEPTHS, SIZES), SAMPLES, log=log, craters=sizes), tmp_path / "out"
    )
    assert answer.status == "final"
    assert "stays as believed before" in said(answer)
    assert [reading["sample"] for reading in results["readings"]] == ["A", "B"]
    assert all(reading["predicted"] > 0 for reading in results["readings"])


def test_kinds_for_information_are_not_fitted_and_the_close_out_is_provisional(tmp_path: Path) -> None:
    changes = [('"crater-depth"', '"crater-volume"'), ("Depth (um)", "V (um3)"), ("u (um)", "u (um3)")]
    craters = "Shot,V (um3),u (um3)\ns001,100,5\n"
    answer, results = close_out(write(tmp_path / "c", *changes, craters=craters), tmp_path / "out")
    assert answer.status == "provisional"
    assert "No reading could be fitted" in answer.status_reasons[0]
    assert results["readings"][0]["verdict"] == "information"
    assert results["readings"][0]["predicted"] is None


def test_a_set_aside_shot_is_not_fitted_and_follows_its_log(tmp_path: Path) -> None:
    folder = write(tmp_path / "c")
    decision = "shot,kind,decision,reason,by,on\ns002,,set-aside,bubble left over,operator A,2026-03-15\n"
    (folder / "decisions.csv").write_text(decision, encoding="utf-8")
    answer, results = close_out(folder, tmp_path / "out")
    shot = next(shot for shot in results["shots"] if shot["shot"] == "s002")
    assert shot["verdict"] == "set-aside"
    assert "bubble left over" in shot["reasons"][0]
    reading = next(reading for reading in results["readings"] if reading["shot"] == "s002")
    assert (reading["verdict"], reading["predicted"]) == ("set-aside", None)


def test_one_seed_gives_the_same_numbers_whatever_the_workers(tmp_path: Path) -> None:
    folder = write(tmp_path / "c")
    _, one = close_out(folder, tmp_path / "one", workers=1, seed=3)
    _, two = close_out(folder, tmp_path / "two", workers=2, seed=3)
    _, other = close_out(folder, tmp_path / "other", workers=1, seed=4)
    for results in (one, two, other):
        results["sampling"].pop("seconds")
    assert one == two
    assert one["inputs"] != other["inputs"]


def test_kinds_left_out_are_read_but_not_fitted(tmp_path: Path) -> None:
    craters = "Shot,Depth (um),u (um)\ns001,0.20,0.02\ns002,0.28,0.02\n"
    more = (
        '\n[[readings]]\nkind = "crater-diameter"\nfile = "d.csv"\nuncertainty = "0.5 um"\n'
        'columns = { shot = "Shot", value = "D (um)" }\n'
    )
    folder = write(tmp_path / "c", more=more, craters=craters)
    (folder / "d.csv").write_text("Shot,D (um)\ns001,31\ns002,38\n", encoding="utf-8")
    _, results = close_out(folder, tmp_path / "out", without=("crater-diameter",))
    fitted = {reading["kind"]: reading["predicted"] is not None for reading in results["readings"]}
    assert fitted == {"crater-depth": True, "crater-diameter": False}


def test_a_close_out_that_somebody_signed_is_not_overwritten(tmp_path: Path) -> None:
    folder = write(tmp_path / "c")
    close_out(folder, tmp_path / "out")
    (tmp_path / "out" / "signed.txt").write_text("operator A", encoding="utf-8")
    with pytest.raises(Refusal, match="signed"):
        close_out(folder, tmp_path / "out")
    assert (tmp_path / "out" / "signed.txt").read_text(encoding="utf-8") == "operator A"
    assert sorted(path.name for path in folder.iterdir()) == ["campaign.toml", "craters.csv", "shots.csv"]
