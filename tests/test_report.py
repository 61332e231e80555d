"""The report as a whole: every file, in every rendering, with text and numbers that try to break out."""

from __future__ import annotations

import hashlib
import html
import re
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from html.parser import HTMLParser
from pathlib import Path

import openpyxl
import pikepdf
import pytest
from report_fixture import FORMULA, LONG, SCRIPT, invented_campaign, invented_close_out, without_a_number

from reconcile.campaign.readings import Gathered
from reconcile.inference.outcome import CloseOut
from reconcile.report import content, document, machine
from reconcile.report.blocks import Drawing, Table, as_data
from reconcile.report.write import copy_overlays, write, write_gathered

NOW = datetime(2026, 3, 20, 9, 30, tzinfo=UTC)


@dataclass(frozen=True)
class Written:
    """A close-out and the folder that it was written into."""

    close_out: CloseOut
    folder: Path


@pytest.fixture(scope="module")
def hostile(tmp_path_factory: pytest.TempPathFactory) -> Written:
    close_out = without_a_number(invented_close_out(12, hostile=True))
    folder = tmp_path_factory.mktemp("hostile")
    overlay = folder.parent / "found.png"
    overlay.write_bytes(b"picture")
    close_out = replace(close_out, gathered=replace(close_out.gathered, overlays={"frames/s001_2us.png": overlay}))
    write(close_out, folder, now=NOW)
    return Written(close_out, folder)


@pytest.fixture(scope="module")
def small(tmp_path_factory: pytest.TempPathFactory) -> Written:
    close_out = replace(invented_close_out(3, status="final"), bands=(), kinds=(), strained=(), warnings=(), budget={})
    folder = tmp_path_factory.mktemp("small")
    write(close_out, folder, now=NOW)
    return Written(close_out, folder)


@pytest.fixture(scope="module")
def large(tmp_path_factory: pytest.TempPathFactory) -> Written:
    close_out = invented_close_out(300)
    folder = tmp_path_factory.mktemp("large")
    write(close_out, folder, now=NOW)
    return Written(close_out, folder)


EXPECTED = {
    "report.pdf", "report.html", "results.json", "results.xlsx", "inputs.toml", "posterior.nc",
    "readings.csv", "refused.csv", "checksums.sha256", "inputs.sha256",
}  # fmt: skip


@pytest.mark.parametrize("name", ["hostile", "small", "large"])
def test_every_file_is_written_and_has_its_checksum(name: str, request: pytest.FixtureRequest) -> None:
    folder = request.getfixturevalue(name).folder
    assert {path.name for path in folder.iterdir()} >= EXPECTED | {"figures"}
    listed = dict(
        reversed(line.split("  ", 1)) for line in (folder / "checksums.sha256").read_text("utf-8").splitlines()
    )
    present = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    assert set(listed) == present - {"checksums.sha256"}
    for path, digest in listed.items():
        assert hashlib.sha256((folder / path).read_bytes()).hexdigest() == digest


def test_the_same_close_out_and_date_give_the_same_files(small: Written, tmp_path: Path) -> None:
    write(small.close_out, tmp_path, now=NOW)
    differing = [
        path.relative_to(tmp_path).as_posix()
        for path in tmp_path.rglob("*")
        if path.is_file() and path.read_bytes() != (small.folder / path.relative_to(tmp_path)).read_bytes()
    ]
    assert differing == []


class _Outside(HTMLParser):
    """Collects the elements of a page, and every attribute that may fetch something."""

    def __init__(self) -> None:
        super().__init__()
        self.elements: list[str] = []
        self.addresses: list[str] = []
        self.alternatives: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append(tag)
        for name, value in attrs:
            if name in ("src", "href", "srcset", "data", "action", "poster", "background"):
                self.addresses.append(value or "")
            if tag == "img" and name == "alt":
                self.alternatives.append(value or "")
            assert not name.startswith("on")


@pytest.mark.parametrize("name", ["hostile", "small", "large"])
def test_the_page_holds_no_script_and_no_outside_reference(name: str, request: pytest.FixtureRequest) -> None:
    text = (request.getfixturevalue(name).folder / "report.html").read_text("utf-8")
    found = _Outside()
    found.feed(text)
    assert not {"script", "link", "iframe", "object", "embed", "form", "base"} & set(found.elements)
    assert all(address.startswith(("data:image/", "#")) for address in found.addresses)
    assert found.alternatives and all(len(words) > 20 for words in found.alternatives)
    assert "url(" not in text and "@import" not in text
    assert "default-src 'none'" in text


def test_what_a_person_wrote_shows_as_text_on_the_page(hostile: Written) -> None:
    text = (hostile.folder / "report.html").read_text("utf-8")
    assert SCRIPT not in text
    assert str(html.escape(SCRIPT, quote=False)).replace("'", "&#39;") in text
    for part in (LONG.strip(), "проверка зеркала", "气泡异常", "😀", "#panic(", "bell escape[31m null turnback"):
        assert html.escape(part, quote=False) in text
    assert not re.search("[\x00-\x08\x0b-\x1f\x7f\u202a-\u202e]", text)
    assert "nan" not in re.findall(r"(?<![\w-])nan(?![\w-])", text.lower())


def test_the_page_names_every_flagged_shot_and_every_refusal(large: Written) -> None:
    text = html.unescape((large.folder / "report.html").read_text("utf-8"))
    for result in large.close_out.shots:
        if result.verdict in ("misread", "stray"):
            assert f"<h3>{result.shot.name}: " in text
    aside = text[text.index("<caption>Shots set aside") :]
    aside = aside[: aside.index("</table>")]
    for result in large.close_out.shots:
        assert (result.verdict == "set-aside") == (f">{result.shot.name}<" in aside)
    for refused in large.close_out.gathered.refused:
        assert refused.source in text and refused.reason in text
    assert "1.830 ± 0.030" in text  # the misread shot's energy ratio, as the fixture sets it


def _pdf_text(path: Path) -> str:
    """Return the text of a PDF by way of its own character maps."""
    with pikepdf.open(path) as pdf:
        found = []
        for page in pdf.pages:
            maps = {name: _to_unicode(font) for name, font in page.Resources.Font.items()}
            font: dict[int, str] = {}
            for operands, operator in pikepdf.parse_content_stream(page):
                if str(operator) == "Tf":
                    font = maps[str(operands[0])]
                elif str(operator) in ("Tj", "TJ"):
                    pieces = operands[0] if str(operator) == "TJ" else operands
                    for piece in pieces:
                        if isinstance(piece, pikepdf.String):
                            raw = bytes(piece)
                            found.append(
                                "".join(font.get(int.from_bytes(raw[i : i + 2]), "") for i in range(0, len(raw), 2))
                            )
    return "".join(found)


def _to_unicode(font: pikepdf.Object) -> dict[int, str]:
    if "/ToUnicode" not in font:
        return {}
    pairs = re.findall(rb"<([0-9A-Fa-f]{4})>\s*<([0-9A-Fa-f]+)>", font.ToUnicode.read_bytes())
    return {int(code, 16): bytes.fromhex(text.decode()).decode("utf-16-be", "replace") for code, text in pairs}


@pytest.mark.parametrize("name", ["hostile", "small", "large"])
def test_the_document_is_tagged_titled_and_dated(name: str, request: pytest.FixtureRequest) -> None:
    written = request.getfixturevalue(name)
    with pikepdf.open(written.folder / "report.pdf") as pdf:
        root = pdf.Root
        assert root.MarkInfo.Marked
        assert "/StructTreeRoot" in root
        assert str(root.Lang).lower().startswith("en")
        title = written.close_out.gathered.campaign.title
        assert str(pdf.docinfo["/Title"]) == title.strip()
        assert str(pdf.docinfo["/CreationDate"]).startswith("D:20260320")
        assert len(pdf.pages) >= 5


def test_what_a_person_wrote_shows_as_text_in_the_document(hostile: Written) -> None:
    text = _pdf_text(hostile.folder / "report.pdf").replace("\u200b", "").replace(" ", "")
    for part in (SCRIPT, '#panic("x")$`*_<a>@b', "проверказеркала", "Δίοδος", "bellescape[31mnullturnback"):
        assert part.replace(" ", "") in text
    assert "□" in text and "standsforacharacter" in text


def test_every_page_of_the_document_carries_the_reports_number_and_its_place(small: Written) -> None:
    digest = hashlib.sha256((small.folder / "results.json").read_bytes()).hexdigest()
    text = _pdf_text(small.folder / "report.pdf").replace("\u200b", "")
    with pikepdf.open(small.folder / "report.pdf") as pdf:
        pages = len(pdf.pages)
    assert text.count(f"tarn-02-{digest[:8]}") >= pages
    for page in (1, 2, pages):
        assert f"page {page} of {pages}" in text


def test_the_workbook_has_no_formula_and_keeps_types(hostile: Written) -> None:
    book = openpyxl.load_workbook(hostile.folder / "results.xlsx")
    assert book.sheetnames == ["inputs", "shots", "readings", "refused", "decisions", "notes", "warnings"]
    for sheet in book:
        assert sheet.freeze_panes == "B2"
        for row in sheet.iter_rows():
            assert all(cell.data_type != "f" and cell.hyperlink is None for cell in row)
    shots = book["shots"]
    header = [cell.value for cell in shots[1]]
    assert [str(title) for title in header[header.index("absorbed fluence (J/m²)") :][:2]] == [
        "absorbed fluence (J/m²)",
        "u (J/m²)",
    ]
    second = dict(zip(header, [cell.value for cell in shots[3]], strict=True))
    assert second["shot"] == "+7 " + "n" * 60
    # The writer keeps 16 significant digits, one more than spreadsheet programs.
    assert second["logged energy (J)"] == pytest.approx(hostile.close_out.shots[1].shot.metered_energy, rel=1e-15)
    assert shots.cell(2, header.index("energy ratio") + 1).value is None  # not a number: an empty cell
    readings = book["readings"]
    assert readings.cell(2, readings.max_column).value == str(hostile.close_out.readings[0].reading.place)
    assert any(FORMULA in str(cell.value) for cell in readings["O"])
    assert not any(
        re.search("[\x00-\x08\x0b-\x1f]", str(cell.value)) for sheet in book for row in sheet for cell in row
    )


def test_a_cell_longer_than_a_spreadsheet_can_hold_is_cut_not_lost(tmp_path: Path) -> None:
    from reconcile.report.workbook import write_workbook

    close_out = invented_close_out(3)
    shot = replace(close_out.shots[0], reasons=("reason " * 9000,))
    write_workbook(replace(close_out, shots=(shot, *close_out.shots[1:])), tmp_path / "a.xlsx", NOW)
    cells = [cell.value for cell in openpyxl.load_workbook(tmp_path / "a.xlsx")["shots"][2]]
    assert any(str(cell).startswith("reason reason") and str(cell).endswith("…") for cell in cells)


def test_figures_are_files_in_both_forms_with_words_for_those_who_cannot_see(hostile: Written, small: Written) -> None:
    names = {path.name for path in (hostile.folder / "figures").iterdir()}
    for kind in ("crater-depth", "bubble-radius", "median-diameter"):
        assert {f"readings-{kind}.svg", f"readings-{kind}.png"} <= names
    assert {"energy-ratio.svg", "prior-to-posterior.svg", "corner.png"} <= names and "corner.svg" not in names
    for path in (small.folder / "figures").glob("*.svg"):
        text = path.read_text("utf-8")
        assert 'href="http' not in text and "<script" not in text


def test_overlays_are_copied_under_safe_names(hostile: Written, tmp_path: Path) -> None:
    assert (hostile.folder / "overlays" / "frames_s001_2us.png.png").read_bytes() == b"picture"
    picture = tmp_path / "a.png"
    picture.write_bytes(b"p")
    copy_overlays({"../../etc/x": picture, "A": picture, "a": picture, "…": picture}, tmp_path)
    assert {path.name for path in (tmp_path / "overlays").iterdir()} == {"etc_x.png", "A.png", "a-2.png", "overlay.png"}


def test_measured_readings_are_written_without_a_fit(tmp_path: Path) -> None:
    close_out = invented_close_out(3)
    gathered = Gathered(invented_campaign(hostile=False), close_out.gathered.shots, close_out.gathered.readings)
    assert write_gathered(gathered, tmp_path / "out") == tmp_path / "out"
    assert {"readings.csv", "refused.csv", "checksums.sha256"} <= {path.name for path in (tmp_path / "out").iterdir()}


def test_every_table_has_a_cell_for_each_column(hostile: Written, large: Written) -> None:
    drawing = Drawing("kinds", "caption", "alternative", "a.png")
    for written in (hostile, large):
        report = content.build(written.close_out, (drawing,), "ab" * 32, NOW)
        assert sum(block is drawing for section in report.sections for block in section.blocks) == 1
        assert len({section.key for section in report.sections}) == len(report.sections)
        for section in report.sections:
            assert section.blocks
            for block in section.blocks:
                if isinstance(block, Table):
                    assert all(len(row) == len(block.columns) for row in block.rows)


def test_the_first_page_says_what_it_is_asked(large: Written) -> None:
    data = as_data(content.build(large.close_out, (), "ab" * 32, NOW))
    words = str(data["sections"][0]) + str(data["status_reasons"]) + data["status_words"]
    found = {
        verdict: sum(result.verdict == verdict for result in large.close_out.shots)
        for verdict in ("kept", "misread", "stray", "set-aside")
    }
    assert str(["300", *(str(found[verdict]) for verdict in found)]) in words
    for part in (
        "Provisional",
        "p = 0.0004",
        "prior of removal_energy_density 31 %",
        "gold, 1 mm thick under water",
        "kJ/m² per µJ",
    ):
        assert part in words


def test_a_campaign_of_one_shot_and_no_reading_still_has_a_report(tmp_path: Path) -> None:
    close_out = invented_close_out(1)
    bare = replace(
        close_out,
        gathered=Gathered(close_out.gathered.campaign, close_out.gathered.shots, ()),
        readings=(), bands=(), kinds=(), budget={}, strained=(), could_not_tell=(), warnings=(),
        inputs=tuple(replace(result, informed=0.0) for result in close_out.inputs if not result.fixed),
    )  # fmt: skip
    write(bare, tmp_path, now=NOW)
    assert (tmp_path / "report.pdf").stat().st_size > 10_000


def test_the_document_meets_its_archival_and_accessible_profiles_whatever_the_text(
    hostile: Written, tmp_path: Path
) -> None:
    odd = (
        "\u200d\ufe0f\u0301\u00ad\ufeff\u00a0\u2028\U000e0041\ue000\ufffe\U0001f468 "
        "\u0627\u0644\u064e \u1100\u1161 \u0915\u094d\u0937 \ufb01"
    )
    close_out = invented_close_out(3)
    campaign = replace(close_out.gathered.campaign, title=odd, about={"note": odd})
    report = content.build(
        replace(close_out, gathered=replace(close_out.gathered, campaign=campaign)), (), "ab" * 32, NOW
    )
    document.write_document(report, tmp_path, tmp_path / "odd.pdf", NOW)
    for path in (tmp_path / "odd.pdf", hostile.folder / "report.pdf"):
        with pikepdf.open(path) as pdf, pdf.open_metadata() as metadata:
            assert (metadata["pdfaid:part"], metadata["pdfaid:conformance"], metadata["pdfuaid:part"]) == (
                "2",
                "A",
                "1",
            )


def test_long_words_may_break_and_short_ones_may_not() -> None:
    assert document._breakable("crater depth") == "crater depth"
    assert (
        max(
            len(part)
            for part in document._breakable("a" * 64 + " craters.xlsx!profiler!C14")
            .replace(" ", "\u200b")
            .split("\u200b")
        )
        <= 14
    )


def test_the_number_of_the_report_follows_its_results(small: Written) -> None:
    again = machine.write_results(replace(small.close_out, seed=2), small.folder.parent / "other.json")
    first = content.build(small.close_out, (), "0" * 64, NOW).number
    assert content.build(small.close_out, (), again, NOW).number != first
