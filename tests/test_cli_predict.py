"""`reconcile predict`: its table, its files, what it says of where its numbers come from, and what it refuses."""

from __future__ import annotations

import csv
import json
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import numpy as np
import pytest
from campaign_folder import write

from reconcile.campaign.files import checksum_lines, sha256_of, write_checksums
from reconcile.campaign.kinds import FITTED
from reconcile.cli import main
from reconcile.inference.outcome import Posterior
from reconcile.report.machine import write_posterior

PROBE = """
[probe]
standoff = "5.0 mm ± 0.1 mm"
bandwidth = "30 MHz"
"""
CSV, SVG = Path("reports/small-1-prediction.csv"), Path("reports/small-1-prediction.svg")
ABSORBED, JITTER = 0.2, 1e-6


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """Stand in an empty folder beside a small campaign."""
    monkeypatch.chdir(tmp_path)
    return write(Path("campaign"))


def close_out(campaign: Path, status: str = "final", **fixed: float) -> Path:
    """Write by hand what a close-out leaves for programs: known draws, and inputs that were held."""
    out = Path("reports/small-1")
    out.mkdir(parents=True)
    rng = np.random.default_rng(7)
    columns = {
        "absorbed_fraction": np.full((4, 500), ABSORBED),
        "absorption_exponent": np.zeros((4, 500)),
        "delivery": rng.normal(0.82, 0.01, (4, 500)),
        "meter_calibration": np.ones((4, 500)),
        "spot_radius": np.full((4, 500), 20e-6),
        "energy_jitter": np.full((4, 500), JITTER),
        "coupling": np.full((4, 500), 0.164),
    }
    posterior = Posterior(tuple(columns), np.stack(list(columns.values()), axis=-1), np.zeros((4, 500)))
    write_posterior(posterior, "small-1", out / "posterior.nc", "2026-01-01T00:00:00+00:00")
    results = {
        "contract": 1,
        "campaign": "small-1",
        "status": status,
        "inputs": {name: {"median": value, "mean": value, "sd": 0} for name, value in fixed.items()},
        "shots": [{"shot": f"s{number}", "metered_energy": number * 1e-5} for number in (1, 2, 3)],
        "readings": [],
    }
    (out / "results.json").write_text(json.dumps(results), encoding="utf-8")
    files = {path.name: sha256_of(path) for path in campaign.iterdir()}
    (out / "inputs.sha256").write_text(checksum_lines(files), encoding="utf-8")
    write_checksums(out)
    return out


def table(path: Path = CSV) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def test_before_a_fit_it_predicts_from_the_priors_and_says_so(folder, capsys):
    assert main(["predict", str(folder), "--energy", "20 uJ"]) == 0
    out = capsys.readouterr().out
    assert "before any fit" in out
    assert "largest bubble radius" in out
    assert "68 %" in out
    assert "95 %" in out
    assert CSV.as_posix() in out
    assert SVG.as_posix() in out
    assert {row["from"] for row in table()} == {"prior"}


def test_the_table_holds_every_digit_in_si_and_the_ranges_in_order(folder):
    assert main(["predict", str(folder), "--energies", "10 uJ:30 uJ:3", "--pulses", "5"]) == 0
    rows = table()
    silent = [kind for kind in FITTED if kind not in ("pressure-integral", "arrival-time")]
    assert {row["quantity"] for row in rows} == {"absorbed-fluence", "incident-fluence", *silent}
    assert {row["energy_J"] for row in rows} == {"1e-05", "2e-05", "3e-05"}
    assert {row["pulses"] for row in rows} == {"5"}
    for row in rows:
        bounds = [float(row[name]) for name in ("q025", "q16", "median", "q84", "q975")]
        assert bounds == sorted(bounds)
    # 2 × 0.82 × 20 µJ/(π (21 µm)²) at the manifest's numbers; its median may lie a little off.
    (incident,) = [
        float(row["median"]) for row in rows if row["quantity"] == "incident-fluence" and row["energy_J"] == "2e-05"
    ]
    assert incident == pytest.approx(2 * 0.82 * 20e-6 / (np.pi * 21e-6**2), rel=0.02)
    assert {row["unit"] for row in rows if row["quantity"] == "crater-depth"} == {"m"}


def test_the_figure_is_a_drawing_that_opens(folder):
    for words in (["--energy", "20 uJ"], ["--energies", "5:20 uJ:4"]):
        assert main(["predict", str(folder), *words]) == 0
        assert ElementTree.parse(SVG).getroot().tag.endswith("svg")  # noqa: S314 - written by this test


def test_sound_is_predicted_where_a_probe_is_described(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    campaign = write(Path("campaign"), more=PROBE)
    assert main(["predict", str(campaign), "--energy", "20 uJ"]) == 0
    assert "arrival time" in capsys.readouterr().out
    (arrival,) = [row for row in table() if row["quantity"] == "arrival-time"]
    assert float(arrival["median"]) == pytest.approx(5e-3 / 1482.0, rel=0.01)  # sound in water of 20 °C


def test_the_seed_decides_the_numbers_and_nothing_else_does(folder):
    texts = []
    for words in (["--seed", "1"], ["--seed", "1", "--workers", "3"], ["--seed", "2"]):
        main(["predict", str(folder), "--energy", "20 uJ", *words])
        texts.append(CSV.read_text(encoding="utf-8"))
    assert texts[0] == texts[1] != texts[2]


# -- after a fit -------------------------------------------------------------------------------------------------------


def test_after_a_fit_it_predicts_from_the_draws(folder, capsys):
    close_out(folder, bubble_gas=0.003)
    assert main(["predict", str(folder), "--energy", "20 uJ"]) == 0
    out = capsys.readouterr().out
    assert "From the fit in reports/small-1" in out
    assert "before any fit" not in out
    rows = {row["quantity"]: row for row in table()}
    assert {row["from"] for row in rows.values()} == {"fit"}
    absorbed, incident = (float(rows[name]["median"]) for name in ("absorbed-fluence", "incident-fluence"))
    assert absorbed / incident == pytest.approx(ABSORBED, rel=1e-9)
    assert incident == pytest.approx(2 * 0.82 * 20e-6 / (np.pi * 20e-6**2), rel=2e-3)
    half = (float(rows["incident-fluence"]["q84"]) - float(rows["incident-fluence"]["q16"])) / 2
    assert half / incident == pytest.approx(0.01 / 0.82, rel=0.1)  # what is left uncertain is the delivery


def test_what_the_close_out_does_not_hold_is_named(folder, capsys):
    close_out(folder)
    main(["predict", str(folder), "--energy", "20 uJ"])
    assert "does not hold heated_depth" in capsys.readouterr().out


def test_a_close_out_of_other_files_or_changed_since_is_named(folder, capsys):
    out = close_out(folder)
    main(["predict", str(folder), "--energy", "20 uJ"])
    clean = capsys.readouterr().out
    assert "not as it was written" not in clean
    assert "not those of that close-out" not in clean
    (folder / "craters.csv").write_text("Shot,Depth (um),u (um)\ns001,0.9,0.02\n", encoding="utf-8")
    (out / "signed.txt").write_text("yes", encoding="utf-8")
    before = {path.name: path.read_bytes() for path in out.iterdir()}
    assert main(["predict", str(folder), "--energy", "20 uJ"]) == 0
    text = capsys.readouterr().out
    assert "craters.csv: changed" in text
    assert "signed.txt: extra" in text
    assert {path.name: path.read_bytes() for path in out.iterdir()} == before


def test_a_provisional_close_out_and_energies_beyond_the_log_are_named(folder, capsys):
    close_out(folder, status="provisional")
    main(["predict", str(folder), "--energy", "20 uJ"])
    text = capsys.readouterr().out
    assert "provisional" in text
    assert "outside those of the log" not in text
    main(["predict", str(folder), "--energy", "90 uJ"])
    assert "outside those of the log" in capsys.readouterr().out


@pytest.mark.parametrize("name", ["posterior.nc", "results.json"])
def test_a_broken_close_out_is_refused_by_name(folder, capsys, name):
    (close_out(folder) / name).write_text("nothing", encoding="utf-8")
    assert main(["predict", str(folder), "--energy", "20 uJ"]) == 1
    assert name in capsys.readouterr().err


# -- files and words ---------------------------------------------------------------------------------------------------


def test_a_file_of_the_users_own_is_left_alone(folder, capsys):
    CSV.parent.mkdir()
    CSV.write_text("my own numbers\n", encoding="utf-8")
    for _ in range(2):
        assert main(["predict", str(folder), "--energy", "20 uJ"]) == 0
    assert CSV.read_text(encoding="utf-8") == "my own numbers\n"
    assert "reports/small-1-prediction-2.csv" in capsys.readouterr().out
    assert sorted(path.name for path in CSV.parent.iterdir()) == [
        "small-1-prediction-2.csv",
        "small-1-prediction-2.svg",
        "small-1-prediction.csv",
    ]


def test_its_own_files_are_replaced(folder):
    main(["predict", str(folder), "--energy", "20 uJ"])
    main(["predict", str(folder), "--energy", "25 uJ"])
    assert {row["energy_J"] for row in table()} == {"2.5e-05"}
    assert len(list(CSV.parent.iterdir())) == 2


def test_files_stand_beside_the_output_folder_and_never_in_the_campaign(folder, capsys):
    assert main(["predict", str(folder), "--energy", "20 uJ", "--out", "elsewhere/mine"]) == 0
    assert sorted(path.name for path in Path("elsewhere").iterdir()) == [CSV.name, SVG.name]
    before = sorted(folder.iterdir())
    assert main(["predict", str(folder), "--energy", "20 uJ", "--out", str(folder / "out")]) == 1
    assert "campaign folder" in capsys.readouterr().err
    assert sorted(folder.iterdir()) == before


@pytest.mark.parametrize(
    "words",
    [
        ["--energy", "20"],
        ["--energy", "20 um"],
        ["--energy", "-5 uJ"],
        ["--energy", "0 uJ"],
        ["--energy", "20 uJ ± 1 uJ"],
        ["--energy", "plenty"],
        ["--energies", "5 uJ:50 uJ"],
        ["--energies", "50 uJ:5 uJ:10"],
        ["--energies", "5 uJ:50 uJ:1"],
        ["--energies", "5 uJ:50 uJ:1000000000"],
        ["--energies", "5 uJ:50 uJ:2.5"],
        ["--energy", "20 uJ", "--pulses", "0"],
        ["--energy", "20 uJ", "--energies", "5 uJ:50 uJ:10"],
        [],
    ],
)
def test_wrong_words_are_wrong_usage(folder, capsys, words):
    assert main(["predict", str(folder), *words]) == 2
    text = capsys.readouterr()
    assert "Traceback" not in text.err
    assert "--energ" in text.err or "--pulses" in text.err
    assert text.out == ""


def test_a_unit_at_the_end_serves_for_both(folder):
    main(["predict", str(folder), "--energies", "5:20 uJ:4"])
    assert {row["energy_J"] for row in table()} == {"5e-06", "1e-05", "1.5e-05", "2e-05"}


def test_no_campaign_is_refused(tmp_path, capsys):
    assert main(["predict", str(tmp_path), "--energy", "20 uJ"]) == 1
    assert "campaign.toml" in capsys.readouterr().err
