"""Bad input: each message says where it is, what was found or expected, and what to do."""

import re
import zipfile

import pytest
from campaign_folder import CRATERS, LOG, gathered, write

from reconcile.campaign.refusal import Refusal

PRIORS = "\n[priors]\n"
SOUND = """
[[readings]]
kind = "pressure-integral"
file = "craters.csv"
columns = { shot = "Shot", value = "I (Pa2 s)" }
uncertainty = "6 %"
"""
ARRIVAL = SOUND.replace("pressure-integral", "arrival-time").replace("I (Pa2 s)", "t (us)").replace("6 %", "3 ns")
FRAMES = """
[[readings]]
kind = "shadowgraph"
files = "frames/{shot}_{delay}ns.png"
pixel_pitch = "1.85 um ± 0.02 um"
"""
SIZES = """
[[readings]]
kind = "size-counts"
file = "craters.csv"
columns = { sample = "Sample", lower = "From (nm)", upper = "To (nm)", count = "Count" }
"""
RADII = """
[[readings]]
kind = "bubble-radius"
file = "craters.csv"
columns = { shot = "Shot", value = "R (um)" }
uncertainty = "1 um"
"""
SCALED = """name = "profiler"
scale = "1.00 ± 0.02"

[[readings]]
kind = "crater-diameter"
name = "profiler"
file = "craters.csv"
columns = { shot = "Shot", value = "Depth (um)" }
uncertainty = "0.5 um"
scale = "1.00 ± 0.03"
"""

# What is changed in the manifest, what is added to it; where the message must point, what it must say.
MANIFESTS = {
    "a misspelt key": (
        [("spot_radius", "spot_radious")],
        "",
        "line 16!beam.spot_radious",
        "'spot_radius' if that is meant",
    ),
    "a misspelt table": ([("[energy_meter]", "[energymeter]")], "", "line 19!energymeter", "'energy_meter'"),
    "no contract": ([("contract = 1", "")], "", "campaign.toml: found no 'contract'", "Add contract = "),
    "a later contract": ([("contract = 1", "contract = 2")], "", "line 1!contract", "newer version of reconcile"),
    "a missing table": ([("[energy_meter]\ncalibration", "[campaign.x]\ny")], "", "energy_meter", "Add energy_meter"),
    "a missing key": ([('delivery = "0.82 ± 0.02"', "")], "", "line 13!beam", "Add delivery = "),
    "an input without ±": ([('"0.82 ± 0.02"', '"0.82"')], "", "line 17!beam.delivery", "± 0 makes it exact"),
    "no unit": ([('"21 um ± 1 um"', '"21 ± 1"')], "", "line 16!beam.spot_radius", "without a unit"),
    "a bare number": ([('"1030 nm"', "1030")], "", "line 14!beam.wavelength", "in quotes"),
    "a unit of another quantity": ([('"350 fs"', '"350 nm"')], "", "line 15!beam.pulse_duration", '"350 fs"'),
    "an unknown unit": ([('"1030 nm"', '"1.03 micron"')], "", "line 14!beam.wavelength", "Write 'um'"),
    "a decimal comma": ([('"0.82 ± 0.02"', '"0,82 ± 0,02"')], "", "line 17!beam.delivery", "20.5, not 20,5"),
    "an unquoted comma": ([('"1030 nm"', "1030,5")], "", "campaign.toml!line 14", "20.5, not 20,5"),
    "an unquoted unit": ([('"1030 nm"', "1030 nm")], "", "campaign.toml!line 14", "in quotes"),
    "a value out of range": ([('"0.82 ± 0.02"', '"1.2 ± 0.02"')], "", "line 17!beam.delivery", "at most 1"),
    "a negative length": ([('"6.0 mm"', '"-6.0 mm"')], "", "line 11!liquid.height", "above 0"),
    "a name of a folder": ([('"small-1"', '"run 1/2"')], "", "line 4!campaign.name", "letters"),
    "an unknown material": ([('"gold"', '"golld"')], "", "material", "gold"),
    "an unknown liquid": ([('"water"', '"watter"')], "", "material", "water"),
    "a backslash": ([('"shots.csv"', '"c:\\data\\shots.csv"')], "", "line 23", "single quotes"),
    "an absolute path": ([('"shots.csv"', '"/data/shots.csv"')], "", "line 23!shots.file", "into the campaign folder"),
    "a drive": ([('"shots.csv"', "'C:\\data\\shots.csv'")], "", "line 23!shots.file", "into the campaign folder"),
    "a path that leaves": ([('"shots.csv"', '"../shots.csv"')], "", "line 23!shots.file", "does not leave it"),
    "a missing log": ([('"shots.csv"', '"shots2.csv"')], "", "campaign.toml!line 22!shots", "Write 'shots.csv'"),
    "a pattern for nothing": (
        [('"craters.csv"', '"crater_*.csv"')],
        "",
        "line 26!readings.1",
        "matches 'crater_*.csv'",
    ),
    "an unknown kind": ([('"crater-depth"', '"crater depht"')], "", "line 27!readings.1.kind", "'crater-depth'"),
    "no readings": ([("[[readings]]", "[priors]")], "", "campaign.toml!readings", "Add [[readings]]"),
    "a key of another kind": (
        [("[[readings]]", '[[readings]]\ntarget_edge = "top"')],
        "",
        "readings.1.target_edge",
        "one of",
    ),
    "a missing column": ([(', value = "Depth (um)"', "")], "", "readings.1.columns", "column that holds the value"),
    "an unknown column": (
        [("uncertainty =", "uncertanty =")],
        "",
        "readings.1.columns.uncertanty",
        "Write 'uncertainty'",
    ),
    "no uncertainty": ([(', uncertainty = "u (um)"', "")], "", "line 26!readings.1", "Add uncertainty"),
    "an uncertainty of 0": (
        [(', uncertainty = "u (um)"', "")],
        'uncertainty = "0 um"',
        "readings.1.uncertainty",
        "above 0",
    ),
    "energy and power": ([("energy =", 'power = "P (mW)", energy =')], "", "line 24!shots.columns", "Keep the one"),
    "power without a rate": ([("energy =", "power =")], "", "beam.repetition_rate", "Add repetition_rate"),
    "a log without energy": ([(', energy = "Energy (uJ)"', "")], "", "line 24!shots.columns", "holds the energy"),
    "columns for frames": (
        [],
        FRAMES + 'columns = { shot = "Shot" }',
        "line 35!readings.2.columns",
        "Take it out",
    ),
    "a bad unit for a column": ([], 'units = { value = "uJ" }', "readings.1.units.value", "Correct the unit"),
    "a bad decimal sign": ([], 'decimal = ";"', "readings.1.decimal", "Write one of them"),
    "sound without a probe": ([], SOUND, "probe.standoff", "pressure-integral"),
    "an arrival without an offset": (
        [],
        ARRIVAL + '[probe]\nstandoff = "5 mm ± 0.1 mm"',
        "probe.trigger_offset",
        "Add it to [probe]",
    ),
    "radii without a delay": ([], RADII, "line 31!readings.2", "Add delay"),
    "sizes without a sample": ([], SIZES, "shots.columns", "Add sample"),
    "an unknown field": ([], FRAMES.replace("{delay}", "{dealy}"), "readings.2.files", "Write {delay}"),
    "a delay without a unit": ([], FRAMES.replace("}ns", "}"), "readings.2.files", "{delay}ns"),
    "frames for nothing": ([], FRAMES, "line 31!readings.2", "no file that matches"),
    "frames without a pitch": ([], FRAMES.partition("pixel")[0], "line 31!readings.2", "Add pixel_pitch"),
    "a scale that differs": ([], SCALED, "line 33!readings.2", "different names"),
    "the same table twice": (
        [],
        '\n[[readings]]\nkind = "crater-depth"\nfile = "*.csv"\ncolumns = { shot = "shot", value = "Depth (um)" }\n'
        'uncertainty = "1 um"',
        "line 31!readings.2",
        "keep them apart",
    ),
    "a prior on an unknown input": (
        [],
        PRIORS + 'heated_deph = "fixed(1 um)"',
        "priors.heated_deph",
        "Write 'heated_depth'",
    ),
    "a prior on a derived input": ([], PRIORS + 'coupling = "beta(2, 4)"', "priors.coupling", "derived"),
    "a prior on no table": ([], PRIORS + '"scale.afm" = "fixed(1)"', "priors.scale.afm", "Write 'scale.1'"),
    "a prior on no kind": ([], PRIORS + '"scatter.crater" = "fixed(1)"', "scatter.crater", "scatter.crater-depth"),
    "a prior of no family": (
        [],
        PRIORS + 'heated_depth = "gamma(1, 2)"',
        "line 32!priors.heated_depth",
        "normal(mean, sd)",
    ),
    "a key twice": ([], 'file = "b.csv"', "campaign.toml!line 30", "stands twice"),
    "a sheet as a number": ([], "sheet = 3", "readings.1.sheet", "text"),
}


@pytest.mark.parametrize("case", MANIFESTS)
def test_a_bad_manifest_is_refused_with_place_finding_and_remedy(tmp_path, case):
    changes, more, where, says = MANIFESTS[case]
    with pytest.raises(Refusal) as caught:
        gathered(write(tmp_path, *changes, more=more + "\n"))
    message = str(caught.value)
    assert where in message
    assert says in message
    assert re.search(r"found .*; expected .*\. .", message), message


# The log, the table, what else stands in the manifest; where the message must point, what it must say.
TABLES = {
    "no shots": ("Shot,Energy (uJ)\n", CRATERS, "", "shots.csv", "no row with a shot"),
    "no energies": ("Shot,Energy (uJ)\ns001,0\ns002,x\n", CRATERS, "", "shots.csv", "2 shots, none of them usable"),
    "a log without its header": (
        LOG.replace("Energy", "Pulse energy"),
        CRATERS,
        "",
        "shots.csv",
        "'Pulse energy (uJ)'",
    ),
    "a column without a unit": (LOG.replace(" (uJ)", ""), CRATERS, "", "shots.csv", "no header 'Energy (uJ)'"),
    "a shot twice": (LOG + "s001,11\n", CRATERS, "", "shots.csv!line 5", "which stands at shots.csv!line 2"),
    "an open decimal sign": (LOG, "Shot;Depth (um);u (um)\ns001;1,234;1\n", "", "craters.csv!line 1", "decimal = "),
    "both decimal signs": (
        LOG,
        "Shot;Depth (um);u (um)\ns001;1,2;1\ns002;1.2;1\n",
        "",
        "craters.csv!line 1",
        "two ways",
    ),
    "a point beside commas": (
        LOG,
        "Shot;Depth (um);u (um)\ns001;1,2;1.234\n",
        "",
        "craters.csv!line 1",
        "beside columns",
    ),
    "a header twice": (
        LOG,
        "Shot,Depth (um),Depth (um),u (um)\ns001,1,2,3\n",
        "",
        "craters.csv!line 1",
        "different headers",
    ),
    "a quote that stays open": (LOG, CRATERS + '"s003,1,2\n', "", "craters.csv!line 4", "quotation marks"),
    "an empty file": (LOG, "", "", "craters.csv", "no header"),
    "an unknown encoding": (LOG, CRATERS, 'encoding = "utf-9"', "craters.csv", "Correct the key `encoding`"),
    "another encoding": (LOG, CRATERS + "µ\n", 'encoding = "ascii"', "craters.csv!line 4", "Save the file as UTF-8"),
    "a filter for nothing": (LOG, CRATERS, 'only = { Shot = "s01" }', "craters.csv", "'s001'"),
    "every reading refused": (LOG, "Shot,Depth (um),u (um)\nx1,1,1\nx2,1,1\n", "", "campaign.toml", "2 readings, none"),
    "bytes": (LOG, "\0\0\0\1", "", "craters.csv", "bytes that are no text"),
}


@pytest.mark.parametrize("case", TABLES)
def test_a_table_that_cannot_be_read_as_a_whole_refuses_the_campaign(tmp_path, case):
    log, craters, more, where, says = TABLES[case]
    with pytest.raises(Refusal) as caught:
        gathered(write(tmp_path, more=more + "\n", log=log, craters=craters))
    message = str(caught.value)
    assert message.startswith(where + ":")
    assert says in message
    assert re.search(r"found .*; expected .*\. .", message), message


# One row among sound ones; what its refusal must say.
ROWS = {
    "a word for a number": ("s003,deep,0.02", "'deep'"),
    "a missing uncertainty": ("s003,0.3,", "without an uncertainty"),
    "an uncertainty of 0": ("s003,0.3,0", "above 0"),
    "an unknown shot": ("s030,0.3,0.02", "Write 's003'"),
    "a sign": ("s003,-0.3,0.02", "Correct the sign"),
    "a torn row": ("s003,0,3,0,02", "below 3 headers"),
    "a path as a name": ("a/b,0.3,0.02", "without / and"),
    "not detected without a limit": ("s003,n.d.,", "detection_limit"),
    "a limit of nothing": ("s003,<0,", "above 0"),
    "a limit in words": ("s003,<low,", "number above 0"),
    "infinity": ("s003,inf,0.02", "'inf'"),
}


@pytest.mark.parametrize("case", ROWS)
def test_one_bad_row_is_refused_by_name_and_the_rest_goes_on(tmp_path, case):
    row, says = ROWS[case]
    found = gathered(write(tmp_path, craters=CRATERS + row + "\n"))
    assert [reading.shot for reading in found.readings] == ["s001", "s002"]
    (refused,) = found.refused
    assert refused.source == "craters.csv!line 4"
    assert says in refused.reason
    assert re.search(r"found .*; expected .*\. .", refused.reason)


DECISIONS = "shot,sample,kind,source,decision,reason,by,on\n"


@pytest.mark.parametrize(
    ("line", "says"),
    [
        ("s030,,,,set-aside,dust,me,today", "Write 's003'"),
        (",A,,,set-aside,dust,me,today", "the sample 'A'"),
        ("s001,,,,setaside,dust,me,today", "Write 'set-aside'"),
        ("s001,,crater,,keep,fine,me,today", "Write 'crater-depth'"),
        ("s001,,crater-depth,craters.csv!line 9,keep,fine,me,today", "craters.csv!line"),
        (",,,,keep,fine,me,today", "neither a shot nor a sample"),
        ("s001,A,,,keep,fine,me,today", "both a shot and a sample"),
    ],
)
def test_an_unknown_target_or_decision_refuses_the_campaign(tmp_path, line, says):
    folder = write(tmp_path)
    (folder / "decisions.csv").write_text(DECISIONS + line + "\n", encoding="utf-8")
    with pytest.raises(Refusal) as caught:
        gathered(folder)
    assert str(caught.value).startswith("decisions.csv!line 2: found ")
    assert says in str(caught.value)


def test_decisions_without_their_columns_refuse_the_campaign(tmp_path):
    folder = write(tmp_path)
    (folder / "decisions.csv").write_text("shot,kind,decison,reason,by,on\n", encoding="utf-8")
    with pytest.raises(Refusal, match=r"decisions.csv!line 1.*no column 'decision'.*'decison'"):
        gathered(folder)


def test_no_manifest_not_utf8_and_a_missing_folder_are_refused(tmp_path):
    with pytest.raises(Refusal, match="as README shows"):
        gathered(tmp_path / "nowhere")
    folder = write(tmp_path / "a")
    file = folder / "campaign.toml"
    file.write_bytes(file.read_text(encoding="utf-8").encode("cp1252"))
    with pytest.raises(Refusal, match=r"line 16: found a byte that is not UTF-8.*UTF-8"):
        gathered(folder)


def test_a_link_out_of_the_folder_is_refused(tmp_path):
    (tmp_path / "outside.csv").write_text(LOG, encoding="utf-8")
    folder = write(tmp_path / "campaign", log=None)
    try:
        (folder / "shots.csv").symlink_to(tmp_path / "outside.csv")
    except OSError:
        pytest.skip("this machine makes no links")
    with pytest.raises(Refusal, match="leads out of the campaign folder"):
        gathered(folder)


# --- workbooks that are none, or worse --------------------------------------------------------------------------


def workbook(folder, parts, name="craters.xlsx"):
    """Write a campaign whose craters stand in a workbook made of these parts."""
    write(folder, ('"craters.csv"', f'"{name}"'), craters=None)
    with zipfile.ZipFile(folder / name, "w", zipfile.ZIP_DEFLATED) as archive:
        for part, text in parts.items():
            archive.writestr(part, text)
    return folder


def sheet(body):
    """Return the parts of a workbook with one sheet of this XML."""
    main = 'xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main"'
    relations = "http://schemas.openxmlformats.org/officeDocument/2006/relationships"
    return {
        "_rels/.rels": '<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships">'
        f'<Relationship Id="rId1" Type="{relations}/officeDocument" Target="xl/workbook.xml"/></Relationships>',
        "xl/workbook.xml": f'<workbook {main} xmlns:r="{relations}"><sheets>'
        '<sheet name="one" sheetId="1" r:id="rId1"/></sheets></workbook>',
        "xl/_rels/workbook.xml.rels": '<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships">'
        f'<Relationship Id="rId1" Type="{relations}/worksheet" Target="worksheets/sheet1.xml"/></Relationships>',
        "xl/worksheets/sheet1.xml": f"<worksheet {main}><sheetData>{body}</sheetData></worksheet>",
    }


@pytest.mark.parametrize(
    ("parts", "says"),
    [
        ({"a.txt": "no workbook"}, "damaged file"),
        (sheet('<row r="1048576"><c r="XFD1048576"><v>1</v></c></row>'), "reaches to row 1048576"),
        (sheet('<row r="900000"><c r="AZ900000"><v>1</v></c></row>'), "reaches to row 900000"),
        (sheet('<row r="1"><c r="A1"><v>1</v></row>'), "broken XML"),
        (
            sheet("") | {"xl/styles.xml": '<!DOCTYPE x [<!ENTITY a "aaaa"><!ENTITY b "&a;&a;">]><x>&b;</x>'},
            "declares a document type",
        ),
        (sheet("") | {"../evil.xml": "<x/>"}, "impossible names"),
    ],
)
def test_a_hostile_or_damaged_workbook_is_refused_before_it_is_unpacked(tmp_path, parts, says):
    with pytest.raises(Refusal) as caught:
        gathered(workbook(tmp_path, parts))
    assert str(caught.value).startswith("craters.xlsx: found ")
    assert says in str(caught.value)


def test_a_part_that_unpacks_to_more_than_any_table_is_refused(tmp_path):
    body = " " * (201 * 1024 * 1024)
    with pytest.raises(Refusal, match="unpacks to more than 200 MB"):
        gathered(workbook(tmp_path, sheet(body)))


@pytest.mark.parametrize(
    ("name", "content", "says"),
    [
        ("craters.xlsx", b"Shot,Depth (um)\n", "damaged file"),
        ("craters.xlsx", b"\xd0\xcf\x11\xe0" + bytes(100), "save it as .xlsx"),
        ("craters.xls", b"\xd0\xcf\x11\xe0", "ends in '.xls'"),
        ("craters.ods", b"PK", "ends in '.ods'"),
    ],
)
def test_other_spreadsheets_are_refused_with_the_way_out(tmp_path, name, content, says):
    folder = write(tmp_path, ('"craters.csv"', f'"{name}"'), craters=None)
    (folder / name).write_bytes(content)
    with pytest.raises(Refusal) as caught:
        gathered(folder)
    assert str(caught.value).startswith(f"{name}: found ")
    assert says in str(caught.value)


def test_a_depth_of_astronomical_size_is_refused_by_its_cell(tmp_path):
    folder = write(tmp_path / "c", craters="Shot,Depth (um),u (um)\ns001,1e308,0.020\ns002,0.515,0.021\n")
    (refused,) = gathered(folder).refused
    assert refused.source == "craters.csv!line 2"
    assert "1e308" in refused.reason
