"""Checksums, and output folders that are whole or not there."""

import hashlib
import os
import shutil
import subprocess
from pathlib import Path

import pytest

from reconcile.campaign.files import Changed, check_output, sha256_of, verify, whole_folder, write_checksums
from reconcile.campaign.refusal import Refusal


def close_out(path: Path, text: str = "the answer") -> whole_folder:
    """Write a small output folder and return what wrote it."""
    folder = whole_folder(path)
    with folder as staging:
        (staging / "results.json").write_text(text, encoding="utf-8")
        (staging / "figures").mkdir()
        (staging / "figures" / "µ one.svg").write_text("<svg/>", encoding="utf-8")
    return folder


def test_a_folder_is_written_whole_with_its_checksums(tmp_path):
    folder = close_out(tmp_path / "reports" / "run-1")
    assert folder.final == tmp_path / "reports" / "run-1"
    assert "written to" in folder.message
    assert verify(folder.final) == []
    expected = hashlib.sha256(b"the answer").hexdigest()
    lines = (folder.final / "checksums.sha256").read_bytes().decode("utf-8").split("\n")
    assert lines[0].endswith("  figures/µ one.svg")
    assert lines[1] == f"{expected}  results.json"
    assert lines[2:] == [""]
    assert [path.name for path in (tmp_path / "reports").iterdir()] == ["run-1"]


@pytest.mark.skipif(shutil.which("sha256sum") is None, reason="no sha256sum on this machine")
def test_sha256sum_reads_the_checksums(tmp_path):
    folder = close_out(tmp_path / "run").final
    command = [shutil.which("sha256sum"), "--strict", "-c", "checksums.sha256"]
    done = subprocess.run(command, cwd=folder, capture_output=True, check=False)
    assert done.returncode == 0
    (folder / "results.json").write_text("another", encoding="utf-8")
    assert subprocess.run(command, cwd=folder, capture_output=True, check=False).returncode == 1


def test_verify_names_what_changed_is_missing_or_was_added(tmp_path):
    folder = close_out(tmp_path / "run").final
    (folder / "results.json").write_text("another", encoding="utf-8")
    (folder / "figures" / "µ one.svg").unlink()
    (folder / "signed.pdf").write_text("signed", encoding="utf-8")
    (folder / ".DS_Store").write_text("litter", encoding="utf-8")
    assert verify(folder) == [
        Changed("figures/µ one.svg", "missing"),
        Changed("results.json", "changed"),
        Changed("signed.pdf", "extra"),
    ]


def test_verify_refuses_a_folder_without_checksums_or_with_broken_ones(tmp_path):
    with pytest.raises(Refusal, match="checksums.sha256"):
        verify(tmp_path)
    (tmp_path / "checksums.sha256").write_text("no checksum\n", encoding="utf-8")
    with pytest.raises(Refusal, match="line 1.*'no checksum'"):
        verify(tmp_path)


def test_an_untouched_close_out_is_replaced(tmp_path):
    close_out(tmp_path / "run")
    folder = close_out(tmp_path / "run", "a newer answer")
    assert (tmp_path / "run" / "results.json").read_text(encoding="utf-8") == "a newer answer"
    assert "in place of the earlier" in folder.message
    assert [path.name for path in tmp_path.iterdir()] == ["run"]


def test_files_of_others_are_refused_before_any_work(tmp_path):
    out = tmp_path / "run"
    out.mkdir()
    check_output(out)  # an empty folder harms nobody
    (out / "thesis.docx").write_text("years of work", encoding="utf-8")
    with pytest.raises(Refusal, match="thesis.docx.*Choose another --out"):
        check_output(out)
    with pytest.raises(Refusal, match="thesis.docx"), whole_folder(out):
        pytest.fail("the block must not be entered")
    assert (out / "thesis.docx").read_text(encoding="utf-8") == "years of work"


@pytest.mark.parametrize(
    ("harm", "says"),
    [
        (lambda out: (out / "results.json").write_text("signed", encoding="utf-8"), "results.json' is changed since"),
        (lambda out: (out / "note.txt").write_text("look here", encoding="utf-8"), "note.txt' is added since"),
        (lambda out: (out / "results.json").unlink(), "results.json' is missing"),
    ],
)
def test_a_close_out_that_somebody_touched_is_refused(tmp_path, harm, says):
    out = close_out(tmp_path / "run").final
    harm(out)
    with pytest.raises(Refusal, match=says):
        check_output(out)


def test_a_file_and_the_campaign_folder_are_refused_as_output(tmp_path):
    (tmp_path / "file").write_text("", encoding="utf-8")
    with pytest.raises(Refusal, match="found a file"):
        check_output(tmp_path / "file")
    campaign = tmp_path / "campaign"
    campaign.mkdir()
    for out in (campaign, campaign / "reports" / "run", tmp_path):
        with pytest.raises(Refusal, match="campaign folder.*--out"):
            check_output(out, campaign)
    check_output(tmp_path / "campaign-reports", campaign)


def test_a_failure_leaves_nothing_behind_and_the_earlier_close_out_whole(tmp_path):
    close_out(tmp_path / "run")
    with pytest.raises(KeyboardInterrupt), whole_folder(tmp_path / "run") as staging:
        (staging / "half.txt").write_text("half", encoding="utf-8")
        raise KeyboardInterrupt
    assert [path.name for path in tmp_path.iterdir()] == ["run"]
    assert verify(tmp_path / "run") == []


def open_elsewhere(monkeypatch: pytest.MonkeyPatch, refused: set[str]) -> None:
    """Let folders of these names refuse to be moved away or replaced, as Windows does while a file in them is open."""
    replace = os.replace

    def refusing(source, target):
        if Path(source).name in refused or (Path(target).name in refused and not Path(source).name.endswith("-old")):
            raise PermissionError(13, "Access is denied", str(source))
        replace(source, target)

    monkeypatch.setattr(os, "replace", refusing)


def test_a_folder_that_is_open_elsewhere_stays_and_the_new_one_lies_beside_it(tmp_path, monkeypatch):
    close_out(tmp_path / "run")
    open_elsewhere(monkeypatch, {"run"})
    second = close_out(tmp_path / "run", "second")
    third = close_out(tmp_path / "run", "third")
    assert second.final == tmp_path / "run-2"
    assert third.final == tmp_path / "run-3"
    assert "open elsewhere" in second.message
    assert "run-2" in second.message
    assert (tmp_path / "run" / "results.json").read_text(encoding="utf-8") == "the answer"
    assert (tmp_path / "run-2" / "results.json").read_text(encoding="utf-8") == "second"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["run", "run-2", "run-3"]
    assert verify(second.final) == []


def test_the_earlier_one_comes_back_where_only_the_last_step_fails(tmp_path, monkeypatch):
    close_out(tmp_path / "run")
    replace = os.replace

    def refusing(source, target):
        if Path(target).name == "run" and "-old-" not in Path(source).name:
            raise PermissionError(13, "Access is denied", str(source))
        replace(source, target)

    monkeypatch.setattr(os, "replace", refusing)
    folder = close_out(tmp_path / "run", "second")
    assert folder.final == tmp_path / "run-2"
    assert (tmp_path / "run" / "results.json").read_text(encoding="utf-8") == "the answer"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["run", "run-2"]


def test_a_close_out_signed_during_the_run_is_not_replaced(tmp_path):
    close_out(tmp_path / "run")
    folder = whole_folder(tmp_path / "run")
    with folder as staging:
        (staging / "results.json").write_text("second", encoding="utf-8")
        (tmp_path / "run" / "signature.p7s").write_text("signed", encoding="utf-8")
    assert folder.final == tmp_path / "run-2"
    assert "signature.p7s" in folder.message
    assert (tmp_path / "run" / "signature.p7s").is_file()


def test_odd_names_survive_the_list_of_checksums(tmp_path):
    if os.name == "nt":
        pytest.skip("Windows allows no such names")
    (tmp_path / "back\\slash.txt").write_text("1", encoding="utf-8")
    (tmp_path / "new\nline.txt").write_text("2", encoding="utf-8")
    write_checksums(tmp_path)
    assert verify(tmp_path) == []
    (tmp_path / "new\nline.txt").write_text("3", encoding="utf-8")
    assert [change.path for change in verify(tmp_path)] == ["new\nline.txt"]


def test_the_checksum_is_sha256(tmp_path):
    (tmp_path / "abc").write_bytes(b"abc")
    # FIPS 180-2, appendix B.1, the digest of "abc" (from memory)
    digest = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert sha256_of(tmp_path / "abc") == digest
