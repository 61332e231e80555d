"""The command line: exit statuses, wrong usage, consoles that lack characters, interruption."""

import errno
import json
import os
import subprocess
import sys
import types
from pathlib import Path

import pytest
from report_fixture import invented_close_out

from reconcile.campaign.refusal import Place, Refusal
from reconcile.cli import main

PERHAPS = "±µ²⁻⁻³ – … × ≤ Δίοδος"


@pytest.fixture
def asked(monkeypatch):
    """Put an invented close-out in place of the job, and keep what it was asked for."""
    seen = {}

    def closeout(path, **options):
        seen.update(options, path=path)
        return seen["answer"], Path("reports") / "basin-04", "the old one is open elsewhere"

    monkeypatch.setitem(sys.modules, "reconcile.closeout", types.SimpleNamespace(closeout=closeout))
    seen["answer"] = invented_close_out(status="final")
    return seen


def fail_with(monkeypatch, error):
    def closeout(path, **options):
        raise error

    monkeypatch.setitem(sys.modules, "reconcile.closeout", types.SimpleNamespace(closeout=closeout))


def test_a_final_close_out_ends_with_0_and_prints_its_answer(asked, capsys):
    assert main(["closeout", "basin"]) == 0
    out = capsys.readouterr().out
    assert "status: final" in out
    assert "absorbed fraction" in out
    assert "±" in out or " to " in out
    assert "12 shots" in out
    assert "reports/basin-04/report.html" in out
    assert "the old one is open elsewhere" in out


def test_a_provisional_close_out_ends_with_3_and_says_why(asked, capsys):
    asked["answer"] = invented_close_out(status="provisional")
    assert main(["closeout", "basin"]) == 3
    out = capsys.readouterr().out
    assert "status: provisional" in out
    for reason in asked["answer"].status_reasons:
        assert reason in out


def test_misread_shots_are_named(asked, capsys):
    main(["closeout", "basin"])
    out = capsys.readouterr().out
    for result in asked["answer"].shots:
        if result.verdict == "misread":
            assert f"  {result.shot.name}: misread" in out


def test_options_reach_the_job(asked):
    line = "closeout basin --out o --seed 7 --workers 2 --effort quick --without crater-map --without bubble-radius --resume"
    assert main(line.split()) == 0
    assert asked["path"] == Path("basin")
    assert asked["out"] == Path("o")
    assert (asked["seed"], asked["workers"], asked["effort"], asked["resume"]) == (7, 2, "quick", True)
    assert asked["without"] == ("crater-map", "bubble-radius")


def test_options_have_the_defaults_that_the_help_states(asked):
    assert main(["closeout", "basin"]) == 0
    assert asked["out"] is None
    assert (asked["seed"], asked["effort"], asked["resume"], asked["without"]) == (1, "normal", False, ())
    assert asked["workers"] >= 1


def test_refused_input_ends_with_1_and_says_where_what_and_what_to_do(monkeypatch, capsys):
    place = Place("craters.xlsx", sheet="profiler", cell="C14")
    fail_with(monkeypatch, Refusal(place, found="'twelve'", expected="a depth", remedy="Type the number."))
    assert main(["closeout", "basin"]) == 1
    captured = capsys.readouterr()
    assert captured.out == ""
    for part in ("craters.xlsx!profiler!C14", "'twelve'", "a depth", "Type the number."):
        assert part in captured.err


def test_a_file_that_the_system_refuses_ends_with_1_and_its_name(monkeypatch, capsys):
    fail_with(monkeypatch, OSError(errno.ENOSPC, "No space left on device", "posterior.nc"))
    assert main(["closeout", "basin"]) == 1
    assert capsys.readouterr().err == "reconcile: posterior.nc: No space left on device.\n"


def test_an_interruption_ends_with_130_and_says_how_to_go_on(monkeypatch, capsys):
    fail_with(monkeypatch, KeyboardInterrupt())
    assert main(["closeout", "basin"]) == 130
    assert "--resume" in capsys.readouterr().err


def test_an_error_of_our_own_is_not_dressed_up_as_bad_input(monkeypatch):
    fail_with(monkeypatch, ZeroDivisionError("ours"))
    with pytest.raises(ZeroDivisionError, match="ours"):
        main(["closeout", "basin"])


@pytest.mark.parametrize(
    ("line", "sentence"),
    [
        ("", "a verb is missing; verbs are closeout"),
        ("closout basin", "there is no verb 'closout'; did you mean closeout?"),
        ("qqqq", "there is no verb 'qqqq'; verbs are closeout, measure"),
        ("closeout", "CAMPAIGN"),
        ("closeout a b", "'b' is not understood"),
        ("closeout a --sed 3", "'--sed' is not understood; did you mean --seed?"),
        ("closeout a --see 3", "'--see' is not understood; did you mean --seed?"),
        ("measure a --effort quick", "'--effort' is not understood"),
        ("closeout a --seed", "--seed"),
        ("closeout a --seed x", "'x' is not a whole number of 0 or more"),
        ("closeout a --seed -1", "--seed"),
        ("closeout a --workers 0", "'0' is not a whole number of 1 or more"),
        ("closeout a --effort huge", "invalid choice: 'huge'"),
        ("closeout a --without crater-dept", "there is no kind 'crater-dept'; the nearest one is crater-depth"),
        ("--colour", "'--colour' is not understood"),
    ],
)
def test_wrong_usage_ends_with_2_and_a_hint(line, sentence, capsys):
    assert main(line.split()) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert sentence in captured.err
    assert "Traceback" not in captured.err


@pytest.mark.parametrize("line", ["--version", "closeout --version", "measure --version"])
def test_the_version_is_told(line, capsys):
    assert main(line.split()) == 0
    assert capsys.readouterr().out.startswith("reconcile 0.")


def run(code: str, encoding: str) -> subprocess.CompletedProcess[bytes]:
    """Run code in a fresh interpreter whose console has the given encoding."""
    environment = os.environ | {
        "PYTHONIOENCODING": encoding,
        "PYTHONPATH": os.pathsep.join(sys.path),
        "PYTHONUTF8": "0",
    }
    return subprocess.run([sys.executable, "-c", code], env=environment, capture_output=True, check=False)


PRINTS = f"""
import sys, types
from pathlib import Path
from report_fixture import invented_close_out
answer = invented_close_out(hostile=True)
def closeout(path, **options):
    options["progress"]("sampling {PERHAPS}", 1, 2)
    return answer, Path("reports/{PERHAPS}"), "{PERHAPS}"
sys.modules["reconcile.closeout"] = types.SimpleNamespace(closeout=closeout)
from reconcile.cli import main
sys.exit(main(["closeout", "basin"]))
"""

REFUSES = f"""
import sys, types
from reconcile.campaign.refusal import Refusal
def closeout(path, **options):
    raise Refusal("{PERHAPS}.csv", found="{PERHAPS} \\udc80", expected="±", remedy="µ")
sys.modules["reconcile.closeout"] = types.SimpleNamespace(closeout=closeout)
from reconcile.cli import main
sys.exit(main(["closeout", "basin"]))
"""


@pytest.mark.parametrize("encoding", ["ascii", "cp437", "cp1252", "utf-8"])
@pytest.mark.parametrize(("code", "status"), [(PRINTS, 3), (REFUSES, 1)], ids=["prints", "refuses"])
def test_no_output_fails_on_a_console_that_lacks_a_character(code, status, encoding):
    done = run(code, encoding)
    assert (done.returncode, b"Traceback" in done.stderr) == (status, False), done.stderr.decode(encoding, "replace")


def test_a_plain_console_shows_plain_letters():
    done = run(PRINTS, "ascii")
    assert b"+/-" in done.stdout
    assert b"reports/+/-u2--3 - ... x <= ??????/report.html" in done.stdout


def test_a_console_that_has_a_character_shows_it():
    done = run(PRINTS, "cp437")
    assert "±".encode("cp437") in done.stdout
    assert b"+/-" not in done.stdout


def test_quiet_leaves_standard_error_empty_and_the_answer_alone():
    loud, quiet = run(PRINTS, "utf-8"), run(PRINTS.replace('"basin"]', '"basin", "--quiet"]'), "utf-8")
    assert loud.stderr.decode("utf-8").startswith("sampling")
    assert quiet.stderr == b""
    assert quiet.stdout == loud.stdout


def test_output_into_a_closed_pipe_ends_without_a_traceback():
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(sys.path)}
    process = subprocess.Popen(
        [sys.executable, "-c", PRINTS], env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    process.stdout.close()
    complaint = process.stderr.read()
    process.stderr.close()
    process.wait()
    assert b"Traceback" not in complaint
    assert b"Exception ignored" not in complaint


def test_python_m_reconcile_is_the_same_command_line():
    done = subprocess.run(
        [sys.executable, "-m", "reconcile", "closeout", "basin", "--sed"], capture_output=True, text=True, check=False
    )
    assert done.returncode == 2
    assert "did you mean --seed?" in done.stderr


def test_a_campaign_that_is_not_there_is_refused_by_name(tmp_path, capsys):
    for verb in ("closeout", "measure"):
        assert main([verb, str(tmp_path / "nowhere"), "--out", str(tmp_path / "out"), "--quiet"]) == 1
        assert "nowhere" in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []


def test_verify_names_what_changed_and_ends_with_1(tmp_path, capsys):
    import hashlib

    folder = tmp_path / "basin-04"
    folder.mkdir()
    sums = []
    for name, text in (("results.json", json.dumps({"contract": 1})), ("readings.csv", "shot\n")):
        (folder / name).write_bytes(text.encode())
        sums.append(f"{hashlib.sha256(text.encode()).hexdigest()}  {name}\n")
    (folder / "checksums.sha256").write_bytes("".join(sums).encode())
    assert main(["verify", str(folder)]) == 0
    (folder / "readings.csv").write_bytes(b"shot\ns001\n")
    assert main(["verify", str(folder)]) == 1
    out = capsys.readouterr().out
    assert "readings.csv" in out
    assert "  results.json" not in out


def test_the_example_is_written_and_an_existing_folder_left_alone(tmp_path, capsys):
    folder = tmp_path / "example"
    assert main(["example", str(folder)]) == 0
    assert (folder / "campaign.toml").is_file()
    assert folder.as_posix() in capsys.readouterr().out
    (folder / "campaign.toml").write_text("mine", encoding="utf-8")
    assert main(["example", str(folder)]) == 1
    assert (folder / "campaign.toml").read_text(encoding="utf-8") == "mine"
