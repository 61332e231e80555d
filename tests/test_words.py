"""The words that a person meets: help, README and the package agree, and help comes at once."""

import re
import subprocess
import sys
from pathlib import Path

import pytest
from openpyxl import Workbook

from reconcile.campaign.inputs import INPUTS
from reconcile.campaign.kinds import KINDS, TABLE_KINDS
from reconcile.campaign.manifest import load
from reconcile.campaign.materials import PROPERTY_NAMES, known_liquids, known_materials
from reconcile.cli import VERBS, main
from reconcile.gather import gather

README = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")
HEAVY = {"numpy", "pandas", "scipy", "matplotlib", "emcee", "openpyxl", "h5py", "xlsxwriter", "jinja2", "typst", "tqdm"}


@pytest.mark.parametrize("verb", VERBS)
def test_each_verb_has_help_and_stands_in_the_readme(verb, capsys):
    assert main([verb, "--help"]) == 0
    text = capsys.readouterr().out
    assert VERBS[verb].operand in text
    for option in ("--out", "--seed", "--workers", "--quiet", "--version", "--help"):
        assert option in text
    assert re.search(rf"^\| `{verb} ", README, re.MULTILINE)


def test_the_readme_lists_no_verb_that_does_not_exist():
    assert set(re.findall(r"^\| `([a-z]+) [A-Z_]+`", README, re.MULTILINE)) == set(VERBS)


@pytest.mark.parametrize("option", ["--resume", "--effort", "--without"])
def test_what_only_a_close_out_takes_stands_in_its_help_and_in_the_readme(option, capsys):
    assert main(["closeout", "--help"]) == 0
    assert option in capsys.readouterr().out
    assert option in README


def test_help_comes_without_loading_anything_heavy():
    run = subprocess.run(
        [sys.executable, "-X", "importtime", "-m", "reconcile", "--help"], capture_output=True, text=True, check=True
    )
    loaded = {line.rpartition("|")[2].strip().partition(".")[0] for line in run.stderr.splitlines()}
    assert "argparse" in loaded  # the list is what it should be
    assert loaded & HEAVY == set()


@pytest.mark.parametrize("kind", [*KINDS, *TABLE_KINDS])
def test_each_kind_of_table_stands_in_the_readme(kind):
    assert f"`{kind}`" in README


@pytest.mark.parametrize(
    ("table", "name"), [(table, name) for table, names in PROPERTY_NAMES.items() for name in names]
)
def test_each_property_that_a_manifest_may_state_stands_in_the_readme_with_its_unit(table, name):
    section = README.split(f"`[{table}]`", 1)[1]
    assert re.search(rf"^\| `{name}` \|", section, re.MULTILINE)


@pytest.mark.parametrize("material", [*known_materials(), *known_liquids()])
def test_each_material_that_the_package_knows_stands_in_the_readme(material):
    assert f"`{material}`" in README


@pytest.mark.parametrize("name", INPUTS)
def test_each_input_stands_in_the_readme(name):
    assert f"`{name}`" in README


@pytest.mark.parametrize("status", [0, 1, 2, 3, 130])
def test_each_exit_status_stands_in_the_readme(status):
    assert re.search(rf"^\| {status} \|", README, re.MULTILINE)


@pytest.mark.parametrize("mark", ["closeout", "tests"])
def test_the_readme_gives_its_two_commands_for_every_system(mark):
    block = README.split(f"<!-- command: {mark} -->\n```sh\n", 1)[1].split("\n```", 1)[0]
    assert "venv" in block
    assert "pip install" in block
    windows = README.split(f"<!-- command on Windows: {mark} -->\n", 1)[1].split("\n```\n", 1)[0]
    words = [word for word in block.split() if word in ("closeout", "example_campaign", "pytest", "-n", "--quiet")]
    assert words  # the same work is done on Windows
    assert [word for word in windows.split() if word in words] == words


def test_the_campaign_that_the_readme_shows_is_taken_as_it_stands(tmp_path):
    manifest = README.split("```toml\n", 1)[1].split("\n```", 1)[0]
    (tmp_path / "campaign.toml").write_text(manifest, encoding="utf-8")
    shots = [[f"s{number}", 5 + number, 1] for number in range(20)]
    depths = [[f"s{number}", 0.1 + 0.02 * number, 0.01] for number in range(20)]
    write_workbook(tmp_path / "shots.xlsx", "log", [["Shot", "Energy (uJ)", "Pulses"], *shots])
    write_workbook(tmp_path / "craters.xlsx", "profiler", [["Shot", "Depth (um)", "u (um)"], *depths])
    (tmp_path / "radii.csv").write_text("Shot,Delay (us),Radius (um),u (um)\ns3,4.0,80,2\n", encoding="utf-8")
    gathered = gather(load(tmp_path))
    assert len(gathered.shots) == 20
    assert len(gathered.readings) == 21
    assert gathered.refused == ()


def test_the_tables_of_images_and_traces_that_the_readme_shows_are_taken_as_they_stand(tmp_path):
    first, second = (part.split("\n```", 1)[0] for part in README.split("```toml\n")[1:3])
    (tmp_path / "campaign.toml").write_text(f"{first}\n{second}\n", encoding="utf-8")
    tables = load(tmp_path).tables
    assert [table.kind for table in tables[2:]] == ["shadowgraph", "shadowgraph", "probe-trace", "crater-map"]
    assert tables[2].options["target_edge"] == "bottom"
    assert tables[3].options["frame_interval"].value == pytest.approx(1e-6, abs=0)


def write_workbook(path, sheet, rows):
    workbook = Workbook()
    workbook.active.title = sheet
    for row in rows:
        workbook.active.append(row)
    workbook.save(path)
