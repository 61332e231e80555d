"""Spreadsheets and .csv files → cells with their places."""

import datetime
import zipfile
from pathlib import Path

import openpyxl
import pytest
import xlsxwriter
from hypothesis import given
from hypothesis import strategies as st
from openpyxl.styles import Font
from pytest import approx

from reconcile.campaign.campaign import Table
from reconcile.campaign.refusal import Place, Refusal
from reconcile.read.delimited import read_text
from reconcile.read.tables import SheetRead, in_si, name_in, number, read_table
from reconcile.read.workbook import read_workbook

SPECS = {"shot": None, "value": "m", "uncertainty": "m", "count": "1", "note": None}
COLUMNS = {"shot": "Shot", "value": "Depth (um)"}


def table(**more) -> Table:
    return Table(kind="crater-depth", name="1", place=Place("campaign.toml"), **({"columns": COLUMNS} | more))


def read(path: Path, **more) -> SheetRead:
    (sheet,) = read_table(path, path.name, table(**more), SPECS)
    return sheet


def values(sheet: SheetRead, key: str = "value") -> list[float | None]:
    column = sheet.columns[key]
    found = [number(row.cells.get(key), column) for row in sheet.rows]
    return [None if one is None else in_si(one, column) for one in found]


def csv(tmp_path: Path, text: str, encoding: str = "utf-8") -> Path:
    path = tmp_path / "t.csv"
    path.write_bytes(text.encode(encoding))
    return path


def book(tmp_path: Path, rows: list[list[object]], change=lambda sheet: None) -> Path:
    """Write a workbook with these rows, changed by a function of its sheet."""
    workbook = openpyxl.Workbook()
    sheet = workbook.active
    sheet.title = "profiler"
    for row in rows:
        sheet.append(row)
    change(sheet)
    path = tmp_path / "t.xlsx"
    workbook.save(path)
    return path


def rewrite(path: Path, old: bytes, new: bytes) -> None:
    """Change the XML of a workbook's first sheet."""
    with zipfile.ZipFile(path) as archive:
        parts = {name: archive.read(name) for name in archive.namelist()}
    part = "xl/worksheets/sheet1.xml"
    assert old in parts[part]
    parts[part] = parts[part].replace(old, new)
    with zipfile.ZipFile(path, "w") as archive:
        for name, content in parts.items():
            archive.writestr(name, content)


# --- .csv -------------------------------------------------------------------------------------------------------


def test_a_csv_gives_cells_with_their_lines(tmp_path):
    sheet = read(csv(tmp_path, "Shot,Depth (um)\ns1,0.4\n\ns2,0.5\n"))
    assert values(sheet) == [approx(0.4e-6), approx(0.5e-6)]
    assert [str(row.cells["value"].place) for row in sheet.rows] == ["t.csv!line 2", "t.csv!line 4"]
    assert sheet.notes == ()


@pytest.mark.parametrize("delimiter", [",", ";", "\t", "|"])
def test_the_delimiter_is_found(tmp_path, delimiter):
    text = "Depths, taken on Monday; by hand\nShot|Depth (um)|Remark\ns1|0.5|ok\n".replace("|", delimiter)
    assert values(read(csv(tmp_path, text))) == [approx(0.5e-6)]


def test_a_delimiter_that_the_first_line_names_is_taken(tmp_path):
    sheet = read(csv(tmp_path, "sep=;\r\nShot;Depth (um)\r\ns1;0,5\r\n"))
    assert values(sheet) == [approx(0.5e-6)]
    assert str(sheet.rows[0].place) == "t.csv!line 3"


def test_a_windows_file_with_semicolons_and_decimal_commas_is_read_with_notes(tmp_path):
    text = "Messung für Müller\r\nShot;Depth (µm)\r\ns1;0,412\r\ns2;12,5\r\n"
    sheet = read(csv(tmp_path, text, "cp1252"))
    assert values(sheet) == [approx(0.412e-6), approx(12.5e-6)]
    notes = [note.note for note in sheet.notes]
    assert any("Windows-1252" in note for note in notes)
    assert any("decimal comma" in note for note in notes)


@pytest.mark.parametrize("encoding", ["utf-8-sig", "utf-16", "utf-8"])
def test_unicode_files_need_no_note(tmp_path, encoding):
    sheet = read(csv(tmp_path, "Shot,Depth (µm)\ns1,0.5\n", encoding))
    assert values(sheet) == [approx(0.5e-6)]
    assert sheet.notes == ()


def test_a_stated_encoding_and_delimiter_are_followed(tmp_path):
    path = csv(tmp_path, "Shot:Depth (ám)\ns1:0.5\n", "cp1250")
    sheet = read(
        path, encoding="cp1250", delimiter=":", columns={"shot": "Shot", "value": "Depth (ám)"}, units={"value": "um"}
    )
    assert values(sheet) == [approx(0.5e-6)]
    with pytest.raises(Refusal, match="utf-8 text"):
        read_text(path, "t.csv", "utf-8")


def test_quoted_cells_may_hold_delimiters_and_line_breaks(tmp_path):
    sheet = read(csv(tmp_path, 'Shot,Remark,Depth (um)\n"s1, left","two\nlines",0.5\ns2,,0.6\n'))
    assert [row.cells["shot"].text for row in sheet.rows] == ["s1, left", "s2"]
    assert [row.place.line for row in sheet.rows] == [2, 4]


def test_an_unquoted_decimal_comma_tears_its_row(tmp_path):
    sheet = read(csv(tmp_path, "Shot,Depth (um)\ns1,0,5\ns2,0.5\n"))
    assert [row.fault is not None for row in sheet.rows] == [True, False]


# --- headers and units ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("header", ["Depth (um)", "  depth   (UM) ", "DEPTH (µm)", "Depth (μm)", "Depth\n(um)"])
def test_headers_match_without_regard_to_case_blanks_and_micro_sign(tmp_path, header):
    path = book(tmp_path, [["Shot", header], ["s1", 0.5]])
    if "UM" in header:
        with pytest.raises(Refusal, match="unit 'UM'.*'um'"):
            read(path)
    else:
        assert values(read(path)) == [approx(0.5e-6)]


def test_titles_logos_and_merged_headers_are_passed_over(tmp_path):
    def merge(sheet):
        sheet.merge_cells("A1:C1")
        sheet.merge_cells("A3:A4")
        sheet.merge_cells("B3:C3")

    rows = [["Laboratory of depth"], [], ["Shot", "Crater"], [None, "Depth (um)", "u (um)"], ["s1", 0.5, 0.02]]
    sheet = read(book(tmp_path, rows, merge), columns=COLUMNS | {"uncertainty": "u (um)"})
    assert values(sheet) == [approx(0.5e-6)]
    assert str(sheet.rows[0].cells["value"].place) == "t.xlsx!profiler!B5"


@pytest.mark.parametrize("units", [[None, "nm"], ["", "[nm]"], ["-", "(nm)"]])
def test_a_row_of_units_goes_before_the_header(tmp_path, units):
    sheet = read(book(tmp_path, [["Shot", "Depth (um)"], units, ["s1", 500]]))
    assert values(sheet) == [approx(0.5e-6)]
    assert "read in nm" in sheet.notes[0].note


def test_the_manifest_goes_before_the_row_of_units(tmp_path):
    path = book(tmp_path, [["Shot", "Depth"], [None, "nm"], ["s1", 0.5]])
    sheet = read(path, columns={"shot": "Shot", "value": "Depth"}, units={"value": "um"})
    assert values(sheet) == [approx(0.5e-6)]
    assert len(sheet.rows) == 1


def test_a_quantity_without_a_unit_anywhere_is_refused(tmp_path):
    with pytest.raises(Refusal, match=r"t.xlsx!profiler!B1: found the header 'Depth' without a unit.*units = "):
        read(book(tmp_path, [["Shot", "Depth"], ["s1", 0.5]]), columns={"shot": "Shot", "value": "Depth"})


@pytest.mark.parametrize(
    ("header", "unit"),
    [
        ("Depth (max) (um)", "um"),
        ("Depth [nm] (profiler)", "nm"),
        ("Depth (1e3 counts) [mm]", "mm"),
        ("Depth (um) (s)", "um"),
    ],
)
def test_of_several_brackets_the_unit_is_taken(tmp_path, header, unit):
    sheet = read(book(tmp_path, [["Shot", header], ["s1", 1]]), columns={"shot": "Shot", "value": header})
    assert sheet.columns["value"].unit == unit


def test_an_uncertainty_without_a_unit_has_its_values_and_a_share_stays_one(tmp_path):
    rows = [["Shot", "Depth (nm)", "u", "u (%)"], ["s1", 500, 20, 4]]
    columns = {"shot": "Shot", "value": "Depth (nm)"}
    assert read(book(tmp_path, rows), columns=columns | {"uncertainty": "u"}).columns["uncertainty"].unit == "nm"
    assert read(book(tmp_path, rows), columns={"uncertainty": "u (%)"} | columns).columns["uncertainty"].unit == "%"


def test_brackets_of_a_count_are_no_unit(tmp_path):
    rows = [["Shot", "Depth (um)", "Pulses (N)"], ["s1", 1, 3]]
    sheet = read(book(tmp_path, rows), columns=COLUMNS | {"count": "Pulses (N)"})
    assert values(sheet, "count") == [3.0]


def test_a_missing_column_is_named_with_the_nearest_header(tmp_path):
    path = book(tmp_path, [["Shot", "Depht (um)"], ["s1", 1]])
    with pytest.raises(Refusal, match=r"no header 'Depth \(um\)' in row 1: Shot, Depht \(um\).*Write 'Depht \(um\)'"):
        read(path)


def test_a_sheet_is_found_without_regard_to_case_or_named(tmp_path):
    path = book(tmp_path, [["Shot", "Depth (um)"], ["s1", 1]])
    assert read_workbook(path, "t.xlsx", ("Pro filer",))[0].place.sheet == "profiler"
    with pytest.raises(Refusal, match=r"no sheet 'profile2'.*profiler.*sheet = \"profiler\""):
        read_workbook(path, "t.xlsx", ("profile2",))


# --- cells ------------------------------------------------------------------------------------------------------


def test_cells_that_cannot_be_read_are_refused_by_address(tmp_path):
    def spoil(sheet):
        sheet["B2"] = "=B3*2"
        sheet["B3"] = "#DIV/0!"
        sheet["B4"] = datetime.date(2026, 3, 1)
        sheet["B5"] = True
        sheet["A6"] = datetime.datetime(2026, 1, 3, tzinfo=None)  # noqa: DTZ001 - what a spreadsheet makes of 3-1

    sheet = read(book(tmp_path, [["Shot", "Depth (um)"], *([f"s{n}", n] for n in range(1, 7))], spoil))
    told = []
    for row in sheet.rows[:4]:
        with pytest.raises(Refusal) as caught:
            number(row.cells["value"], sheet.columns["value"])
        told.append(str(caught.value))
    assert told[0].startswith("t.xlsx!profiler!B2: found a formula without a stored value")
    assert "let it calculate" in told[0]
    assert told[1].startswith("t.xlsx!profiler!B3: found the error #DIV/0!")
    assert told[2].startswith("t.xlsx!profiler!B4: found a date or time")
    assert "'TRUE'" in told[3]
    with pytest.raises(Refusal, match=r"t.xlsx!profiler!A6: found a date.*name of a shot.*Format the cell as text"):
        name_in(sheet.rows[4].cells["shot"], "shot")


def test_a_formula_with_a_stored_value_is_read(tmp_path):
    path = tmp_path / "t.xlsx"
    workbook = xlsxwriter.Workbook(path)
    sheet = workbook.add_worksheet("profiler")
    sheet.write_row(0, 0, ["Shot", "Depth (um)"])
    sheet.write_row(1, 0, ["s1"])
    sheet.write_formula(1, 1, "=1/2", None, 0.5)
    sheet.write_row(2, 0, ["s2"])
    sheet.write_formula(2, 1, '=IF(1,"","x")', None, "nothing")
    workbook.close()
    rewrite(path, b"<v>nothing</v>", b"<v></v>")  # a stored empty text is a value: a blank cell
    assert values(read(path)) == [approx(0.5e-6), None]
    rewrite(path, b't="str"', b"")  # while an empty value of a number is none
    with pytest.raises(Refusal, match="B3: found a formula without a stored value"):
        values(read(path))


def test_hidden_and_struck_rows_names_with_zeros_and_percentages_are_kept_as_shown(tmp_path):
    def change(sheet):
        sheet.row_dimensions[2].hidden = True
        sheet["A3"].font = Font(strike=True)
        sheet["A4"].number_format = "000"
        sheet["C4"].number_format = "0.0%"

    rows = [["Shot", "Depth (um)", "u (%)"], ["s1", 1, 4], ["s2", 1, 4], [7, 1, 0.04]]
    sheet = read(book(tmp_path, rows, change), columns=COLUMNS | {"uncertainty": "u (%)"})
    assert [note.note for note in sheet.notes] == ["1 hidden row was read (2)"]
    assert [row.cells["shot"].struck for row in sheet.rows] == [False, True, False]
    assert sheet.rows[2].cells["shot"].text == "007"
    assert number(sheet.rows[2].cells["uncertainty"], sheet.columns["uncertainty"]) == approx(4.0)


def test_a_percentage_where_a_length_belongs_is_refused(tmp_path):
    def percent(sheet):
        sheet["B2"].number_format = "0%"
        sheet["C2"].number_format = "0%"

    path = book(tmp_path, [["Shot", "Depth (um)", "u"], ["s1", 0.05, 0.04]], percent)
    sheet = read(path, columns=COLUMNS | {"uncertainty": "u"})
    with pytest.raises(Refusal, match=r"B2: found 5 % in 'Depth \(um\)'; expected a number in um"):
        values(sheet)
    with pytest.raises(Refusal, match=r"C2: found 4 % in 'u'.*units = \{ uncertainty = \"%\" \}"):
        values(sheet, "uncertainty")


def test_a_wrong_dimension_tag_loses_no_rows(tmp_path):
    path = book(tmp_path, [["Shot", "Depth (um)"], *([f"s{n}", n] for n in range(1, 50))])
    rewrite(path, b'<dimension ref="A1:B50"', b'<dimension ref="A1:A1"')
    assert len(read(path).rows) == 49


def test_a_name_merged_over_its_repeats_counts_for_each_but_a_value_does_not(tmp_path):
    def merge(sheet):
        sheet.merge_cells("A2:A4")
        sheet.merge_cells("B2:B3")

    sheet = read(book(tmp_path, [["Shot", "Depth (um)"], ["s1", 1], [None, None, "again"], [None, 3]], merge))
    assert [row.cells["shot"].text for row in sheet.rows] == ["s1", "s1", "s1"]
    assert values(sheet) == [approx(1e-6), None, approx(3e-6)]


def test_totals_notes_repeated_headers_and_blank_rows_are_no_readings(tmp_path):
    rows = [["Shot", "Depth (um)"], ["s1", 1], [None, 2], ["-", 3], ["Shot", "Depth (um)"], ["Mean:", 4], [], ["s2", 5]]
    sheet = read(book(tmp_path, rows))
    assert values(sheet) == [approx(1e-6), approx(5e-6)]
    assert "sums up others" in sheet.notes[0].note


def test_only_keeps_rows_and_counts_the_others(tmp_path):
    rows = [["Shot", "Depth (um)", "Target"], ["s1", 1, "Au-2"], ["s2", 2, "Au-1"], ["s3", 3, "Au-2"], ["s4", 4, None]]
    sheet = read(book(tmp_path, rows), only={"target": "Au-2"})
    assert values(sheet) == [approx(1e-6), approx(3e-6)]
    assert sheet.notes[0].note == "2 rows left out: only rows with target = 'Au-2' are kept"


def test_a_decimal_sign_is_settled_by_the_rows_that_count(tmp_path):
    rows = [["Shot", "Depth (um)"], ["s1", "12,5"], ["s2", "1.234,5"], [None, "7.5"]]
    sheet = read(book(tmp_path, rows))
    assert values(sheet) == [approx(12.5e-6), approx(1234.5e-6)]
    with pytest.raises(Refusal, match=r"t.xlsx!profiler!B1.*'1,234'.*decimal = "):
        read(book(tmp_path, [["Shot", "Depth (um)"], ["s1", "1,234"], ["s2", 0.5]]))
    assert values(read(book(tmp_path, [["Shot", "Depth (um)"], ["s1", "1,234"]]), decimal=",")) == [approx(1.234e-6)]
    assert values(read(book(tmp_path, [["Shot", "Depth (um)"], ["s1", "1,234"]]), decimal=".")) == [approx(1234e-6)]


@given(
    depths=st.lists(st.floats(1e-3, 1e3).map(lambda number_: round(number_, 4)), min_size=1, max_size=8),
    names=st.lists(
        st.text(st.characters(codec="utf-8", categories=("L", "N")), min_size=1, max_size=9), min_size=8, max_size=8
    ),
)
def test_what_is_written_to_a_csv_comes_back(tmp_path_factory, depths, names):
    folder = tmp_path_factory.mktemp("csv")
    lines = "".join(f"x{name};{str(depth).replace('.', ',')}\n" for name, depth in zip(names, depths, strict=False))
    sheet = read(csv(folder, "Shot;Depth (um)\n" + lines), decimal=",")
    assert values(sheet) == [approx(depth * 1e-6, rel=1e-12) for depth in depths]
    assert [row.cells["shot"].text for row in sheet.rows] == [f"x{name}" for name in names[: len(depths)]]
