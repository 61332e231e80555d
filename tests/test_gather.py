"""A campaign folder → shots and readings."""

import openpyxl
import pytest
from campaign_folder import CRATERS, LOG, gathered, write
from openpyxl.styles import Font
from pytest import approx

from reconcile.campaign.files import sha256_of, whole_folder
from reconcile.campaign.manifest import load
from reconcile.campaign.refusal import Refusal
from reconcile.gather import gather

FULL_LOG = """Shot,Energy (mJ),N,Level,Sample,Sites,Probe (mm),w (um),T (%),Delay (ns),Time,Remarks
s001,0.010,10,low,A,4,5.1,20,50,800,10:31,first
s002,0.020,,low,A,,,,,,,
s003,0.030,1,high,B,1,4.9,22,100 %,0,,"good, but late"
"""
FULL_COLUMNS = (
    '{ shot = "Shot", energy = "Energy (mJ)", pulses = "N", level = "Level", sample = "Sample", sites = "Sites", '
    'standoff = "Probe (mm)", spot_radius = "w (um)", transmission = "T (%)", delay = "Delay (ns)", time = "Time", '
    'note = "Remarks" }'
)
SHORT_COLUMNS = '{ shot = "Shot", energy = "Energy (uJ)" }'
SAMPLES = ('energy = "Energy (uJ)"', 'energy = "Energy (uJ)", sample = "Sample"')
SAMPLE_LOG = "Shot,Energy (uJ),Sample\ns001,10,A\ns002,20,A\ns003,30,B\n"


def test_the_log_becomes_shots_in_its_order(tmp_path):
    shots = gathered(write(tmp_path, (SHORT_COLUMNS, FULL_COLUMNS), log=FULL_LOG)).shots
    first, second, third = shots
    assert (first.name, first.metered_energy, first.pulses, first.sites) == ("s001", approx(10e-6), 10, 4)
    assert (first.level, first.sample, first.time, first.note) == ("low", "A", "10:31", "first")
    assert (first.standoff, first.spot_radius) == (approx(5.1e-3), approx(20e-6))
    assert (first.transmission, first.delay) == (approx(0.5), approx(800e-9))
    assert (second.pulses, second.sites, second.standoff, second.transmission) == (1, 1, None, 1.0)
    assert (second.delay, second.note) == (None, None)
    assert (third.transmission, third.delay, third.note) == (1.0, 0.0, "good, but late")
    assert str(first.place) == "shots.csv!line 2"


def test_a_logged_power_becomes_the_energy_of_one_pulse(tmp_path):
    changes = [
        ('energy = "Energy (uJ)"', 'power = "P (mW)"'),
        ("[energy_meter]", 'repetition_rate = "2 kHz"\n[energy_meter]'),
    ]
    shots = gathered(write(tmp_path, *changes, log="Shot,P (mW)\ns001,40\ns002,60\n")).shots
    assert [shot.metered_energy for shot in shots] == [approx(20e-6), approx(30e-6)]


def test_a_table_becomes_readings_in_the_rows_order(tmp_path):
    found = gathered(write(tmp_path, more='name = "profiler"\n'))
    first, second = found.readings
    assert (first.kind, first.shot, first.sample, first.table) == ("crater-depth", "s001", None, "profiler")
    assert (first.value, first.u, first.limit, first.delay) == (approx(0.412e-6), approx(0.020e-6), None, None)
    assert str(second.place) == "craters.csv!line 3"
    assert found.refused == ()
    assert found.notes == ()
    assert [file.path for file in found.files] == ["campaign.toml", "shots.csv", "craters.csv"]
    assert found.files[1].sha256 == sha256_of(tmp_path / "shots.csv")


def test_a_row_without_an_energy_takes_its_readings_along(tmp_path):
    for bad in ("0", "-5", "", "n/a", "NaN"):
        folder = write(tmp_path / f"e{bad.replace('/', '')}", log=LOG.replace("s002,20", f"s002,{bad}"))
        found = gathered(folder)
        assert [shot.name for shot in found.shots] == ["s001", "s003"]
        assert [reading.shot for reading in found.readings] == ["s001"]
        assert [refused.source for refused in found.refused] == ["shots.csv!line 3", "craters.csv!line 3"]
        assert "which was refused (shots.csv!line 3)" in found.refused[1].reason


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ("0.010,10", "0.010,2.5", "whole number from 1"),
        ("A,4", "A,0", "whole number from 1"),
        ("20,50", "20,150", "at most 1"),
        ("5.1,", "-1,", "standoff above 0"),
        ("50,800", "50,-1", "0 or later"),
        ("5.1,", "near,", "'near'"),
    ],
)
def test_a_cell_of_the_log_that_the_model_needs_and_cannot_read_takes_its_shot_along(tmp_path, old, new, says):
    found = gathered(write(tmp_path, (SHORT_COLUMNS, FULL_COLUMNS), log=FULL_LOG.replace(old, new, 1)))
    assert [shot.name for shot in found.shots] == ["s002", "s003"]
    assert says in found.refused[0].reason


def test_readings_below_a_limit_blank_cells_and_dashes_are_told_apart(tmp_path):
    rows = "s001,0.412,0.02\ns001,0.019,0.02\ns002,<0.05,\ns002,N. D.,\ns003,none,\ns003,,0.02\ns003,-,0.02\ns003,–,\n"
    more = 'detection_limit = "20 nm"\nnot_detected = ["none", "nothing seen"]\n'
    found = gathered(write(tmp_path, more=more, craters="Shot,Depth (um),u (um)\n" + rows))
    assert [(one.shot, one.value, one.limit) for one in found.readings] == [
        ("s001", approx(0.412e-6), None),
        ("s001", None, 20e-9),
        ("s002", None, approx(50e-9)),
        ("s002", None, 20e-9),
        ("s003", None, 20e-9),
    ]
    assert [one.u for one in found.readings][1:] == [None] * 4
    assert found.refused == ()


def test_only_below_limit_readings_are_readings_too(tmp_path):
    found = gathered(write(tmp_path, craters="Shot,Depth (um),u (um)\ns001,<0.05,\n"))
    assert len(found.readings) == 1


def test_a_large_negative_depth_is_a_wrong_sign_and_not_a_shallow_crater(tmp_path):
    rows = "Shot,Depth (um),u (um)\ns001,-0.010,0.02\ns002,-0.5,0.02\ns003,0.3,0.02\n"
    found = gathered(write(tmp_path, more='detection_limit = "20 nm"\n', craters=rows))
    assert [one.limit for one in found.readings] == [20e-9, None]
    assert "sign" in found.refused[0].reason


@pytest.mark.parametrize(
    ("columns", "key", "row", "u"),
    [
        (', uncertainty = "u (um)"', "", "s001,0.5,0.02", 0.02e-6),
        (', uncertainty = "u (um)"', 'uncertainty = "30 nm"', "s001,0.5,", 30e-9),
        (', uncertainty = "u (um)"', 'uncertainty = "30 nm"', "s001,0.5,0.02", 0.02e-6),
        ("", 'uncertainty = "5 %"', "s001,0.5,", 0.025e-6),
        (', uncertainty = "u (um)"', 'units = { uncertainty = "%" }', "s001,0.5,4", 0.02e-6),
        (', uncertainty = "u (um)"', 'units = { uncertainty = "%" }', "s001,0.5,4 %", 0.02e-6),
        (', uncertainty = "u (um)"', 'units = { uncertainty = "nm" }', "s001,0.5,20", 20e-9),
    ],
)
def test_an_uncertainty_comes_from_its_column_or_the_table(tmp_path, columns, key, row, u):
    changes = [(', uncertainty = "u (um)"', columns)]
    found = gathered(write(tmp_path, *changes, more=key + "\n", craters=f"Shot,Depth (um),u (um)\n{row}\n"))
    assert found.readings[0].u == approx(u)


def test_a_share_has_its_uncertainty_in_percent_points(tmp_path):
    changes = [("crater-depth", "reflected-fraction"), ("Depth (um)", "R (%)"), ("u (um)", "u (%)")]
    found = gathered(write(tmp_path, *changes, craters="Shot,R (%),u (%)\ns001,80,2\ns002,180,2\n"))
    assert (found.readings[0].value, found.readings[0].u) == (approx(0.8), approx(0.02))
    assert "share from 0 to 1" in found.refused[0].reason


def test_delays_come_from_the_table_or_else_from_the_log(tmp_path):
    changes = [
        ("crater-depth", "bubble-radius"),
        (SHORT_COLUMNS, '{ shot = "Shot", energy = "Energy (uJ)", delay = "Delay (us)" }'),
    ]
    log = "Shot,Energy (uJ),Delay (us)\ns001,10,2\ns002,20,\ns003,30,4\n"
    found = gathered(write(tmp_path / "a", *changes, log=log))
    assert [one.delay for one in found.readings] == [approx(2e-6)]
    assert "no delay" in found.refused[0].reason
    with_delay = [*changes, ('value = "Depth (um)"', 'value = "Depth (um)", delay = "t (us)"')]
    table = "Shot,Depth (um),u (um),t (us)\ns001,50,1,3\ns001,60,1,6\ns002,50,1,-3\n"
    found = gathered(write(tmp_path / "b", *with_delay, log=log, craters=table))
    assert [one.delay for one in found.readings] == [approx(3e-6), approx(6e-6)]
    assert "'-3'" in found.refused[0].reason


def test_names_fit_without_regard_to_case_blanks_and_zeros_only_where_one_fits(tmp_path):
    log = "Shot,Energy (uJ)\ns001,10\ns002,20\nS 2,30\n"
    rows = "Shot,Depth (um),u (um)\nS1,0.3,0.02\ns 01,0.4,0.02\ns02,0.5,0.02\nS 2,0.6,0.02\n"
    found = gathered(write(tmp_path, log=log, craters=rows))
    assert [one.shot for one in found.readings] == ["s001", "s001", "S 2"]
    assert [note.note for note in found.notes] == [
        "'S1' taken as the shot 's001' of the log",
        "'s 01' taken as the shot 's001' of the log",
    ]
    assert "fits 's002' and 'S 2'" in found.refused[0].reason


def test_equal_rows_are_one_and_repeats_are_several(tmp_path):
    found = gathered(write(tmp_path, log=LOG + "s002,20\n", craters=CRATERS + "s001,0.412,0.020\ns001,0.413,0.020\n"))
    assert len(found.shots) == 3
    assert [one.shot for one in found.readings] == ["s001", "s002", "s001"]
    assert [note.source for note in found.notes] == ["shots.csv!line 5", "craters.csv!line 4"]


def test_kinds_for_information_are_gathered_too(tmp_path):
    changes = [("crater-depth", "crater-volume"), ("Depth (um)", "V (um3)"), ("u (um)", "u")]
    found = gathered(write(tmp_path, *changes, craters="Shot,V (um3),u\ns001,90,3\n"))
    assert (found.readings[0].value, found.readings[0].u) == (approx(90e-18), approx(3e-18))


# --- sizes ------------------------------------------------------------------------------------------------------


def sizes(folder, kind, columns, rows):
    changes = [
        SAMPLES,
        ("crater-depth", kind),
        ('{ shot = "Shot", value = "Depth (um)", uncertainty = "u (um)" }', columns),
    ]
    return gathered(write(folder, *changes, log=SAMPLE_LOG, craters=rows))


LIST_COLUMNS = '{ sample = "Sample", value = "d (nm)" }'
COUNT_COLUMNS = '{ sample = "Sample", lower = "From (nm)", upper = "To (nm)", count = "Count" }'
# Diameters spread evenly in ln d about 12 nm, so that the median is 12 nm by symmetry.
DIAMETERS = [12.0 * 1.3 ** (step / 10) for step in range(-15, 16)]


def test_a_list_of_particles_becomes_the_median_of_its_sample(tmp_path):
    rows = "".join(f"A,{d:.6g}\n" for d in DIAMETERS) + "A,big\nA,\nA,12\nA,12\nC,12\n"
    found = sizes(tmp_path, "particle-list", LIST_COLUMNS, "Sample,d (nm)\n" + rows)
    median, spread = found.readings
    assert (median.kind, median.sample, median.shot) == ("median-diameter", "A", None)
    assert median.value == approx(12e-9, rel=0.01)
    assert 0 < median.u < 0.1 * median.value
    assert spread.kind == "geometric-sd"
    assert spread.value > 1
    assert str(median.place) == "craters.csv!line 2"
    assert [refused.source for refused in found.refused] == ["craters.csv!line 33", "craters.csv!line 37"]


def test_a_histogram_becomes_the_median_of_its_sample_and_a_broken_bin_refuses_it(tmp_path):
    bins = "A,4,8,10\nA,8,12.5,40\nA,12.5,18,38\nA,18,30,12\nA,30,40,\n"
    found = sizes(
        tmp_path, "size-counts", COUNT_COLUMNS, "Sample,From (nm),To (nm),Count\n" + bins + "B,4,8,few\nB,8,16,30\n"
    )
    (median, _) = found.readings
    assert 10e-9 < median.value < 15e-9
    assert "'few'" in found.refused[0].reason
    assert "a histogram without one of its bins" in found.refused[1].reason


def test_sizes_too_few_to_measure_are_refused_with_a_sentence(tmp_path):
    with pytest.raises(Refusal, match="cannot be measured"):
        sizes(tmp_path, "particle-list", LIST_COLUMNS, "Sample,d (nm)\nA,12\nA,13\n")


# --- decisions --------------------------------------------------------------------------------------------------

HEADER = "shot,sample,kind,source,decision,reason,by,on\n"


def decided(folder, lines, header=HEADER):
    write(folder, craters=CRATERS + "s001,0.43,0.02\n")
    (folder / "decisions.csv").write_text(header + lines, encoding="utf-8")
    return gathered(folder)


def test_a_shot_that_is_set_aside_takes_its_readings_along(tmp_path):
    found = decided(tmp_path, "s001,,,,set-aside,bubble on the window,A. B.,2026-03-15\n")
    assert [shot.set_aside for shot in found.shots] == ["bubble on the window", None, None]
    assert [one.set_aside is not None for one in found.readings] == [True, False, True]
    assert (found.decisions[0].by, found.decisions[0].on) == ("A. B.", "2026-03-15")
    assert "decisions.csv" in [file.path for file in found.files]


def test_the_last_line_for_a_target_holds(tmp_path):
    lines = "s001,,,,set-aside,dust,me,1\ns002,,,,set-aside,dust,me,1\ns001,,,,undecided,,me,2\ns002,,,,keep,seen again,me,2\n"
    found = decided(tmp_path, lines)
    assert [shot.set_aside for shot in found.shots] == [None, None, None]
    assert [shot.kept for shot in found.shots] == [None, "seen again", None]
    assert [one.decision for one in found.decisions] == ["undecided", "keep"]


def test_a_word_on_one_reading_goes_before_one_on_its_kind(tmp_path):
    lines = "s001,,crater-depth,,set-aside,rough,me,1\ns001,,crater-depth,craters.csv!line 4,keep,fine,me,1\n"
    found = decided(tmp_path, lines)
    assert [(one.set_aside, one.kept) for one in found.readings] == [("rough", None), (None, None), (None, "fine")]


def test_a_spreadsheet_program_may_save_the_decisions(tmp_path):
    header = "Shot;Kind;Decision;Reason;By;On\r\n"
    found = decided(tmp_path, "S 1;;set-aside;Fenster schmutzig, übel;Müller;15.3.\r\n", header)
    assert found.shots[0].set_aside == "Fenster schmutzig, übel"
    (tmp_path / "decisions.csv").write_bytes((header + "s001;;keep;übel;Müller;15.3.\r\n").encode("cp1252"))
    assert gathered(tmp_path).shots[0].kept == "übel"


def test_a_decision_on_a_refused_shot_is_no_mistake(tmp_path):
    folder = write(tmp_path, log=LOG.replace("s003,30", "s003,x"))
    (folder / "decisions.csv").write_text(HEADER + "s003,,,,set-aside,dust,me,1\n", encoding="utf-8")
    assert len(gathered(folder).decisions) == 1


# --- files ------------------------------------------------------------------------------------------------------


def test_no_pattern_looks_into_an_output_folder(tmp_path):
    folder = write(tmp_path, ('"craters.csv"', '"**craters*.csv"'))
    with whole_folder(folder / "reports" / "old") as staging:
        (staging / "craters.csv").write_text("Shot,Depth (um),u (um)\ns003,9,9\n", encoding="utf-8")
    (folder / "more").mkdir()
    (folder / "more" / "craters_2.csv").write_text("Shot,Depth (um),u (um)\ns003,0.6,0.02\n", encoding="utf-8")
    (folder / "~$craters.csv").write_text("lock", encoding="utf-8")
    found = gathered(folder)
    assert [str(one.place) for one in found.readings][-1] == "more/craters_2.csv!line 2"
    assert len(found.readings) == 3
    assert found.unasked == ()


def test_progress_is_told_and_workers_change_nothing(tmp_path):
    told = []
    campaign = load(write(tmp_path))
    found = gather(campaign, workers=4, progress=lambda stage, done, total: told.append((stage, done, total)))
    assert told == [("reading", 0, 1), ("reading", 1, 1)]
    assert found == gather(campaign)


def test_nothing_is_written_into_the_campaign_folder(tmp_path):
    folder = write(tmp_path)
    before = {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()}
    gathered(folder)
    assert {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()} == before


# --- one workbook with everything in it -------------------------------------------------------------------------


def untidy(path):
    """Write a log as a laboratory keeps it: titles, merged headers, a row of units, hidden and struck-through rows."""
    workbook = openpyxl.Workbook()
    sheet = workbook.active
    sheet.title = "log"
    rows = [
        ["Laboratory for craters: run 4"],
        [],
        ["Shot", "Laser", None, "Crater", None],
        [None, "Energy", "Remarks", "Depth", "u"],
        [None, "µJ", None, "µm", None],
        ["s 01", "10,5", "first", "0,412", "0,020"],
        ["S02", "20,5", None, "<0,02", None],
        ["s03", 30, "hidden", 0.5, 0.02],
        ["s04", 40, "struck through", 0.6, 0.02],
        ["s05", 50, None, "n.d.", None],
        ["s06", 60, None, "-", None],
        ["s06", 60, None, "-", None],
        ["s07", "=B12*2", "never calculated", 0.7, 0.02],
        ["s08", "#REF!", None, 0.8, 0.02],
        ["s09", 90, None, "#DIV/0!", 0.02],
        ["s10", 100, None, "=D9", 0.02],
        [None, None, "lunch"],
        ["s11", "110,0", None, 1.1, "0,02"],
        ["s12", 120, None, 1.2, 0.02],
        ["Total", 999, None, 9.99, None],
    ]
    for row in rows:
        sheet.append(row)
    for area in ("A1:E1", "A3:A4", "B3:C3", "D3:E3"):
        sheet.merge_cells(area)
    sheet.row_dimensions[8].hidden = True
    sheet["A9"].font = Font(strike=True)
    sheet["D19"].font = Font(strike=True)
    import datetime

    sheet.append([datetime.date(2026, 1, 3), 130, None, 1.3, 0.02])
    workbook.save(path)


def test_an_untidy_workbook_is_read_as_its_owner_means_it(tmp_path):
    changes = [
        ('file = "shots.csv"', 'file = "run.xlsx"'),
        ("Energy (uJ)", "Energy"),
        ('file = "craters.csv"', 'file = "run.xlsx"'),
        ("Depth (um)", "Depth"),
        ("u (um)", "u"),
    ]
    folder = write(tmp_path, *changes, more='detection_limit = "20 nm"\n', log=None, craters=None)
    untidy(folder / "run.xlsx")
    found = gathered(folder)
    shots = {shot.name: shot for shot in found.shots}
    assert list(shots) == ["s 01", "S02", "s03", "s04", "s05", "s06", "s09", "s10", "s11", "s12"]
    assert [shots[name].metered_energy for name in ("s 01", "s03", "s11")] == [
        approx(1.05e-5),
        approx(3e-5),
        approx(1.1e-4),
    ]
    assert shots["s04"].set_aside == "struck through at run.xlsx!log!A9"
    readings = {one.shot: one for one in found.readings}
    assert list(readings) == ["s 01", "S02", "s03", "s04", "s05", "s11", "s12"]
    assert (readings["s 01"].value, readings["s 01"].u) == (approx(0.412e-6), approx(0.020e-6))
    assert str(readings["s 01"].place) == "run.xlsx!log!D6"
    assert (readings["S02"].limit, readings["s05"].limit) == (approx(20e-9), 20e-9)
    assert readings["s04"].set_aside.startswith("its shot is set aside")
    assert readings["s12"].set_aside == "struck through at run.xlsx!log!D19"
    refused = {one.source: one.reason for one in found.refused}
    assert list(refused) == [
        *("run.xlsx!log!B13", "run.xlsx!log!B14", "run.xlsx!log!A21"),
        *("run.xlsx!log!A13", "run.xlsx!log!A14", "run.xlsx!log!D15", "run.xlsx!log!D16"),
    ]
    assert "formula without a stored value" in refused["run.xlsx!log!B13"]
    assert "the error #REF!" in refused["run.xlsx!log!B14"]
    assert "a date" in refused["run.xlsx!log!A21"]
    notes = " | ".join(note.note for note in found.notes)
    for said in ("1 hidden row was read (8)", "'Total' taken as a row", "decimal comma", "stands twice"):
        assert said in notes
