"""A campaign from Python: README's example runs as it stands, and what it hands out agrees with the files."""

from __future__ import annotations

import csv
import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from campaign_folder import write

import reconcile
from reconcile.campaign.refusal import Refusal

README = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")
EXAMPLE = README.split("<!-- example: python -->\n```python\n", 1)[1].split("\n```", 1)[0]


@pytest.fixture(scope="module")
def ran(tmp_path_factory):
    """Run README's example beside a small campaign; its names and its folder."""
    place = tmp_path_factory.mktemp("notebook")
    write(place / "my_folder")
    names: dict[str, object] = {}
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(place)
        exec(compile(EXAMPLE, "README.md", "exec"), names)  # noqa: S102 - the example is ours
    return names, place / "reports" / "small-1"


def test_the_example_of_the_readme_is_some_ten_lines_and_gives_what_it_says(ran):
    names, out = ran
    assert len([line for line in EXAMPLE.splitlines() if line]) <= 10
    assert (out / "results.json").is_file()
    assert isinstance(names["shots"], pd.DataFrame)
    assert isinstance(names["expected"], pd.DataFrame)
    assert names["fraction"].ndim == 1


def test_frames_hold_what_the_close_out_wrote(ran):
    names, out = ran
    campaign, results = names["campaign"], json.loads((out / "results.json").read_text(encoding="utf-8"))
    shots = campaign.shots()
    assert shots["shot"].tolist() == ["s001", "s002", "s003"]
    assert shots["absorbed_fluence_q16"].tolist() == [shot["absorbed_fluence"]["q16"] for shot in results["shots"]]
    assert shots["energy_ratio"].tolist() == [shot["energy_ratio"]["mean"] for shot in results["shots"]]
    assert shots.attrs["units"]["absorbed_fluence_sd"] == "J/m2"
    with (out / "readings.csv").open(encoding="utf-8-sig", newline="") as stream:
        written = list(csv.DictReader(stream))
    readings = campaign.readings()
    assert readings["value"].tolist() == [float(row["value"]) for row in written]
    assert readings["source"].tolist() == [row["source"] for row in written]
    inputs = campaign.inputs()
    assert list(inputs.index) == list(results["inputs"])
    assert inputs.loc["heated_depth", "unit"] == "m"


def test_draws_are_those_that_the_summaries_were_made_of(ran):
    campaign = ran[0]["campaign"]
    inputs = campaign.inputs()
    for name in ("absorbed_fraction", "coupling", "scatter.crater-depth"):
        draws = campaign.draws(name)
        assert draws.mean() == pytest.approx(inputs.loc[name, "mean"], rel=1e-9, abs=0)
        assert draws.std() == pytest.approx(inputs.loc[name, "sd"], rel=1e-9, abs=0)
    assert np.array_equal(campaign.draws("coupling"), campaign.draws("absorbed_fraction") * campaign.draws("delivery"))


def test_what_was_held_is_known_exactly(ran):
    campaign = ran[0]["campaign"]
    assert campaign.inputs().loc["bubble_gas", ["mean", "median", "sd"]].tolist() == [0.003, 0.003, 0.0]
    assert set(campaign.draws("bubble_gas")) == {0.003}
    assert len(campaign.draws("bubble_gas")) == len(campaign.draws("absorbed_fraction"))


def test_an_unknown_input_is_refused_with_the_nearest_one(ran):
    with pytest.raises(Refusal, match="absorbed_fraction"):
        ran[0]["campaign"].draws("absorbd_fraction")


def test_a_prediction_after_the_fit_follows_it_and_writes_nothing(ran):
    names, out = ran
    before = sorted(out.parent.iterdir())
    campaign, expected = names["campaign"], names["expected"]
    assert set(expected["from"]) == {"fit"}
    assert sorted(set(expected["energy_J"])) == [1e-5, 2e-5]
    assert not any("does not hold" in note for note in expected.attrs["notes"])
    depths = expected[expected["quantity"] == "crater-depth"]["median"].tolist()
    assert depths == pytest.approx([0.412e-6, 0.515e-6], rel=0.15)  # what the two craters of the campaign showed
    again = campaign.predict(2e-5)
    assert again["median"].tolist() == expected[expected["energy_J"] > 1.5e-5]["median"].tolist()
    assert sorted(out.parent.iterdir()) == before


def test_without_a_close_out_tables_are_refused_and_predictions_come_from_the_priors(tmp_path):
    campaign = reconcile.open(write(tmp_path / "c"), out=tmp_path / "out")
    for ask in (campaign.shots, campaign.readings, campaign.inputs, lambda: campaign.draws("delivery")):
        with pytest.raises(Refusal, match="closeout"):
            ask()
    assert set(campaign.predict("20 uJ", pulses=3)["from"]) == {"prior"}
    with pytest.raises(Refusal, match="energies"):
        campaign.predict(-1.0)


def test_a_folder_without_a_manifest_is_refused(tmp_path):
    with pytest.raises(Refusal, match=r"campaign\.toml"):
        reconcile.open(tmp_path)


def test_importing_the_package_stays_light():
    code = "import sys, reconcile; reconcile.__version__; print(sorted(sys.modules))"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    assert "'reconcile'" in loaded
    assert not [name for name in ("numpy", "pandas", "scipy", "matplotlib") if f"'{name}'" in loaded]
    with pytest.raises(AttributeError, match="no attribute 'opne'"):
        _ = reconcile.opne
