"""What a user can do wrong in files: each message names the file, the row, the value and the remedy.

Rows are lines as an editor counts them: a header is line 1, comments and blank lines count.
"""

import gzip

import pytest

import kernelfit as kf
from kernelfit.errors import ArgumentError, Fault, RecordingError, TableError

SPIKES = "unit,time_s\nu1,0.5\nu2,0.25\nu1,2.125\n"
SITES = "unit,x_um,y_um\nu1,0,10\nu2,100,20\n"

# What is wrong -> the table as given, and pieces that its message must hold. Other tables are sound.
BAD_SPIKES = {
    "not a number": ("unit,time_s\nu1,abc\n", "spikes.csv, row 2, column time_s: 'abc': Not a number. Write a number"),
    "decimal comma": (
        "unit;time_s\nu1;12,350\n",
        "row 2, column time_s: '12,350': Not a number. Write 12.350, or load with decimal=','.",
    ),
    "comma as delimiter and as mark": (
        "unit,time_s\nu1,12,350\n",
        "row 2: The row has 3 cells, the header 2.",
        "decimal=','",
    ),
    "empty time": ("unit,time_s\nu1,\n", "row 2, column time_s: '': Empty cell", "Fill it in, or delete the row."),
    "blank time": ("unit,time_s\nu1,0.1\nu1,  \n", "row 3, column time_s: '  ': Empty cell"),
    "nan": ("unit,time_s\nu1,NaN\n", "row 2, column time_s: 'NaN': Missing value.", "delete the row"),
    "NA": ("unit,time_s\nu1,NA\n", "row 2, column time_s: 'NA': Missing value."),
    "infinite": ("unit,time_s\nu1,inf\n", "row 2, column time_s: 'inf': Not a finite number."),
    "minus infinite": ("unit,time_s\nu1,-Infinity\n", "'-Infinity': Not a finite number."),
    "overflow": ("unit,time_s\nu1,1e999\n", "row 2, column time_s: '1e999': Not a finite number."),
    "beyond any clock": (
        "unit,time_s\nu1,1.7e12\n",
        "row 2, column time_s: '1.7e12': Beyond 1e+10 s",
        "check time_unit",
    ),
    "hexadecimal": ("unit,time_s\nu1,0x1F\n", "row 2, column time_s: '0x1F': Not a decimal number."),
    "thousands": ('unit,time_s\nu1,"1,234.5"\n', "'1,234.5': Not a number: it seems to hold separators of thousands."),
    "thousands with blanks": ("unit,time_s\nu1,1 234.5\n", "'1 234.5': Not a number: it seems to hold separators"),
    "underscores": ("unit,time_s\nu1,1_000\n", "'1_000': Not a number: it seems to hold separators of thousands."),
    "clock time": ("unit,time_s\nu1,00:01:02.5\n", "'00:01:02.5': A clock time, not a number.", "seconds"),
    "number with unit": ("unit,time_s\nu1,12 ms\n", "'12 ms': A number with a unit of measure", "time_unit"),
    "a dash for a minus": ("unit,time_s\nu1,\u22125\n", "'\u22125': Not a number: it holds a dash", "hyphen"),
    "other digits": ("unit,time_s\nu1,\u0661\u0662\n", "row 2, column time_s: '\u0661\u0662': Not a number."),
    "two marks": ("unit,time_s\nu1,1.2.3\n", "'1.2.3': Not a number"),
    "double quotes missing": (
        'unit,time_s\nu1,0.5\n"u2,0.25\nu1,2\n',
        "row 3: A quote is opened here and never closed.",
        "Close the quote",
    ),
    "text after a quote": ('unit,time_s\n"u1"x,0.5\n', "row 2: The quotes in this row do not match"),
    "too few cells": ("unit,time_s\nu1,0.5\nu2\n", "row 3: The row has 1 cell, the header 2.", "separated by commas"),
    "too many cells": ("unit\ttime_s\nu1\t0.5\t7\n", "row 2: The row has 3 cells, the header 2.", "separated by tabs"),
    "empty unit": ("unit,time_s\n,0.5\n", "row 2, column unit: '': Empty cell where an id is needed."),
    "blank unit": ("unit,time_s\nu1,0.1\n  ,0.5\n", "row 3, column unit: '  ': Empty cell where an id is needed."),
    "control character": ("unit,time_s\nu\x071,0.5\n", "row 2, column unit: 'u\\x071'", "control character"),
    "line break in an id": ('unit,time_s\n"u\n1",0.5\n', "row 2, column unit: 'u\\n1': The text holds a line break"),
    "unknown unit": (
        "unit,time_s\nu1,0.5\nu9,1\nu9,2\n",
        "row 3, column unit: 'u9': The unit is not in sites.csv (2 spikes of it).",
        "Add the unit there",
    ),
    "unit in capitals": ("unit,time_s\nU1,0.5\n", "'U1': The unit is not in sites.csv", "The closest id there is 'u1'"),
    "exact duplicate": (
        SPIKES + "u1,0.50\n",
        "row 5, column time_s: '0.50': Unit 'u1' has a spike at this time already in row 2.",
        "drop_duplicates=True",
    ),
    "no column of times": (
        "unit,zeit\nu1,0.5\n",
        "spikes.csv: There is no column 'time_s'; found: unit, zeit.",
        "Call the column that holds it 'time_s'",
    ),
    "other name": (
        "unit,time\nu1,0.5\n",
        "There is no column 'time_s'; found: unit, time.",
        "Rename column 'time' to 'time_s'",
    ),
    "capitals": (
        "Unit,Time_s\nu1,0.5\n",
        "There is no column 'unit' and no column 'time_s'; found: Unit, Time_s.",
        "Rename column 'Unit' to 'unit' and column 'Time_s' to 'time_s', if that is what they hold",
    ),
    "milliseconds unsaid": (
        "unit,time_ms\nu1,500\n",
        "There is no column 'time_s'; found: unit, time_ms.",
        "Load with time_unit='ms'",
    ),
    "samples unsaid": ("unit,time_samples\nu1,500\n", "Load with time_unit='samples' and sampling_rate_hz=..."),
    "no header": ("u1,0.5\nu2,0.25\n", "no column 'time_s'; found: u1, 0.5.", "Line 1 looks like data: put a header"),
    "no header and ragged rows": ("u1,0.5\nu2\nu1,x,2\n", "found: u1, 0.5.", "Line 1 looks like data: put a header"),
    "names of another kind": (
        "cluster_id,spike_times\n1,0.5\n",
        "Rename column 'cluster_id' to 'unit' and column 'spike_times' to 'time_s', if that is what they hold",
    ),
    "another unit in another name": (
        "unit,Time [ms]\nu1,500\n",
        "Rename column 'Time [ms]' to 'time_ms' and load with time_unit='ms', if that is what it holds",
    ),
    "a title above the header": (
        "Retina, day 11\n\nunit,time_s\nu1,0.5\n",
        "found: Retina, day 11.",
        "Line 3 seems to be the header: delete what is above, or put # before it.",
    ),
    "sites in the place of spikes": (
        SITES,
        "There is no column 'time_s'; found: unit, x_um, y_um. These are the columns of a sites table: give a spikes "
        "table here. The spikes come first, then the sites.",
    ),
    "thousands of columns": (
        ",".join(f"neuron {k}" for k in range(3000)) + "\n",
        "found: neuron 0, neuron 1,",
        "neuron 11 and 2,988 more.",
    ),
    "a column name without end": ("x" * 500 + ",time_s\nu1,0.5\n", "found: " + "x" * 37 + "..., time_s."),
    "header commented out": ("# unit,time_s\nu1,0.5\n", "Line 1 holds column names behind a comment sign"),
    "separated by blanks": (
        "unit time_s\nu1 0.5\n",
        "found: unit time_s.",
        "Separate the columns by commas, semicolons or tabs",
    ),
    "column twice": ("unit,time_s,time_s\nu1,0.5,0.6\n", "column time_s: There are 2 columns of this name."),
    "empty file": (b"", "spikes.csv: The file is empty.", "It needs a header"),
    "only blanks": (b"\n \r\n", "spikes.csv: The file is empty."),
    "only comments": ("# one\n# two\n", "spikes.csv: The file is nothing but comments."),
    "only a header": ("unit,time_s\n", "spikes.csv: The table has no rows.", "Give one row for each spike."),
    "not UTF-8": (
        "unit,time_s\nu1,0.5\nÄ,0.6\n".encode("latin-1"),
        "row 3: The text is not UTF-8 (byte 0xc4).",
        "Save the file as CSV in UTF-8.",
    ),
    "UTF-16 without mark": (SPIKES.encode("utf-16-le"), "The file holds zero bytes", "UTF-8"),
    "UTF-16 cut short": (SPIKES.encode("utf-16")[:-1], "The text is not UTF-16"),
    "gzip cut short": (
        gzip.compress(SPIKES.encode())[:-9],
        "spikes.csv: The gzip file is damaged or cut short",
        "again",
    ),
    "gzip damaged": (gzip.compress(SPIKES.encode() * 50)[:20] + b"\xff" * 40, "The gzip file is damaged"),
    "workbook": (b"PK\x03\x04 and so on", "This is an Excel workbook or another zip archive", "Save the sheet as CSV"),
    "HDF5": (b"\x89HDF\r\n\x1a\n", "This is an HDF5 file", "Export"),
    "web page": ("<!DOCTYPE html>\n<html></html>\n", "This is a web page or an XML file", "as CSV"),
    "JSON": ('{"unit": ["u1", "u2"], "time_s": [1, 2]}', "This is a JSON file, not a text table.", "Export"),
    "list of JSON": ('\n [{"unit": "u1"}]', "This is a JSON file, not a text table."),
    "PDF": (b"%PDF-1.4\n1 0 obj\n", "This is a PDF document, not a text table.", "as CSV"),
    "picture": (b"\x89PNG\r\n\x1a\n\x00\x00", "This is a picture, not a text table."),
    "Parquet under another name": (b"PAR1....", "This is a Parquet file", "ending .parquet"),
    "a huge cell": ('unit,time_s\n"' + "u" * 140_000 + '",0.5\n', "row 2: A cell is longer than 131072 characters."),
    "row number after comments": ("# a\n\nunit,time_s\n# b\nu1,0.5\n\nu2,x\n", "row 7, column time_s: 'x'"),
    "row number after CR": ("unit,time_s\ru1,0.5\ru2,x\r", "row 3, column time_s: 'x'"),
    "row number after a cell of two lines": ('unit,note,time_s\nu1,"a\nb",0.5\nu2,,x\n', "row 4, column time_s: 'x'"),
}

BAD_SITES = {
    "unit twice": (
        SITES + "u1,5,5\n",
        "sites.csv, row 4, column unit: 'u1': The unit is listed already in row 2.",
        "List each unit once.",
    ),
    "z without y": (
        "unit,x_um,z_um\nu1,0,1\nu2,1,1\n",
        "column z_um: There is a z coordinate without a y coordinate.",
        "rename z_um to y_um",
    ),
    "no x": ("unit,pos\nu1,0\nu2,1\n", "There is no column 'x_um'; found: unit, pos."),
    "only y": (
        "unit,y_um\nu1,0\nu2,1\n",
        "no column 'x_um'; found: unit, y_um.",
        "Call the column that holds it 'x_um'",
    ),
    "x without unit of measure": ("unit,x\nu1,0\nu2,1\n", "no column 'x_um'", "Rename column 'x' to 'x_um'"),
    "millimetres unsaid": ("unit,x_mm\nu1,0\nu2,1\n", "no column 'x_um'", "Load with length_unit='mm'"),
    "missing coordinate": ("unit,x_um\nu1,\nu2,1\n", "row 2, column x_um: '': Empty cell"),
    "infinite coordinate": ("unit,x_um\nu1,1e400\nu2,1\n", "row 2, column x_um: '1e400': Not a finite number."),
    "coordinate beyond reason": (
        "unit,x_um\nu1,1e200\nu2,1\n",
        "row 2, column x_um: '1e200': Beyond 1e+09 µm",
        "check length_unit",
    ),
    "empty id": ("unit,x_um\nu1,0\nu2,1\n,2\n", "row 4, column unit: '': Empty cell where an id is needed."),
    "source_only unclear": (
        "unit,x_um,source_only\nu1,0,maybe\nu2,1,no\n",
        "row 2, column source_only: 'maybe': Neither yes nor no.",
    ),
    "group twice": ("unit,x_um,group,group\nu1,0,a,b\nu2,1,a,b\n", "column group: There are 2 columns of this name."),
    "only a header": ("unit,x_um\n", "sites.csv: The table has no rows.", "Give one row for each unit."),
    "zeros lost in a spreadsheet": ("unit,x_um\n01,0\nu1,0\nu2,1\n1,0\n001,2,3\n", "row 6: The row has 3 cells"),
}

BAD_WINDOWS = {
    "stop before start": (
        "start_s,stop_s\n5,1\n",
        "windows.csv, row 2, column stop_s: '1': The stretch does not stop after its start at 5.",
    ),
    "stop at start": ("start_s,stop_s\n0,3\n4,4\n", "row 3, column stop_s: '4': The stretch does not stop after"),
    "overlap": (
        "start_s,stop_s\n0,2\n1.5,3\n",
        "row 3, column start_s: '1.5': The window starts before the one in row 2 stops (2.0 s).",
    ),
    "overlap out of order": (
        "start_s,stop_s\n1,2\n0,9\n",
        "row 2, column start_s: '1': The window starts before the one in row 3",
    ),
    "the same twice": ("start_s,stop_s\n0,2\n0,2\n", "row 3, column start_s: '0': The window starts before"),
    "no stop": (
        "start_s,end_s\n0,2\n",
        "There is no column 'stop_s'; found: start_s, end_s.",
        "Rename column 'end_s' to 'stop_s'",
    ),
    "milliseconds unsaid": (
        "start_ms,stop_ms\n0,2\n",
        "There is no column 'start_s' and no column 'stop_s'; found: start_ms, stop_ms. Load with time_unit='ms', or "
        "convert 'start_ms' and 'stop_ms' and write 'start_s' and 'stop_s' in the header.",
    ),
    "empty": ("start_s,stop_s\n", "windows.csv: The table has no rows.", "or leave the table out"),
    "not a number": ("start_s,stop_s\n0,end\n", "row 2, column stop_s: 'end': Not a number."),
    "missing": ("start_s,stop_s\n,5\n", "row 2, column start_s: '': Empty cell"),
}

BAD_EXCLUSIONS = {
    "stop before start": (
        "start_s,stop_s\n5,1\n",
        "exclusions.csv, row 2, column stop_s: '1': The stretch does not stop",
    ),
    "infinite": ("start_s,stop_s\n0,inf\n", "row 2, column stop_s: 'inf': Not a finite number."),
}

BAD_PAIRS = {
    "unknown unit": (
        "unit_a,unit_b\nu1,u7\n",
        "pairs.csv, row 2, column unit_b: 'u7': The unit is not in sites.csv.",
        "Correct the id",
    ),
    "one unit": (
        "unit_a,unit_b\nu1,u2\nu1,u1\n",
        "row 3, column unit_b: 'u1': Both ends of the pair are the same unit.",
    ),
    "empty id": ("unit_a,unit_b\nu1,\n", "row 2, column unit_b: '': Empty cell"),
    "other names": (
        "a,b\nu1,u2\n",
        "There is no column 'unit_a' and no column 'unit_b'; found: a, b.",
        "Rename column 'a' to 'unit_a' and column 'b' to 'unit_b'",
    ),
}

CASES = [
    (role, case)
    for role, cases in (
        ("spikes", BAD_SPIKES),
        ("sites", BAD_SITES),
        ("windows", BAD_WINDOWS),
        ("exclusions", BAD_EXCLUSIONS),
        ("exclude_pairs", BAD_PAIRS),
    )
    for case in cases
]
FILES = {
    "spikes": "spikes.csv",
    "sites": "sites.csv",
    "windows": "windows.csv",
    "exclusions": "exclusions.csv",
    "exclude_pairs": "pairs.csv",
}
CASES_BY_ROLE = {
    "spikes": BAD_SPIKES,
    "sites": BAD_SITES,
    "windows": BAD_WINDOWS,
    "exclusions": BAD_EXCLUSIONS,
    "exclude_pairs": BAD_PAIRS,
}


def write(folder, **tables):
    paths = {"spikes": SPIKES, "sites": SITES} | tables
    for role, text in paths.items():
        path = folder / FILES[role]
        path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))
        paths[role] = path
    return paths


def message_of(folder, **tables):
    with pytest.raises(TableError) as caught:
        kf.read_recording(**write(folder, **tables))
    return str(caught.value)


def test_there_are_many_cases():
    assert len(CASES) >= 80


@pytest.mark.parametrize(("role", "case"), CASES)
def test_the_message_names_place_value_and_remedy(tmp_path, role, case):
    table, *pieces = CASES_BY_ROLE[role][case]
    message = message_of(tmp_path, **{role: table})
    for piece in (FILES[role], *pieces):
        assert piece in message
    for line in message.splitlines():
        assert line.startswith(FILES[role])  # the sound tables are not blamed
        assert line.endswith((".", "?"))  # ends with a remedy, a sentence


@pytest.mark.parametrize(
    ("role", "table", "missing"),
    [
        ("spikes", "unit,when\nu1,0.5,7\nu2\nzz,x\n,\n", "no column 'time_s'; found: unit, when."),
        ("spikes", "cell;when\n\nu1\nu2,5\n", "no column 'unit' and no column 'time_s'; found: cell, when."),
        ("sites", "unit,y_um\nu1\nu1,oops\nu1,1\n", "no column 'x_um'; found: unit, y_um."),
        ("windows", "start_s\n0,2\nx\n9,1\n", "no column 'stop_s'; found: start_s."),
        ("exclusions", "stop_s,note\n0\nx,y,z\n", "no column 'start_s'; found: stop_s, note."),
        ("exclude_pairs", "unit_a,other\nu1\nu77,u2\n", "no column 'unit_b'; found: unit_a, other."),
    ],
)
def test_without_its_columns_a_table_is_not_blamed_for_its_rows(tmp_path, role, table, missing):
    with pytest.raises(TableError) as caught:
        kf.read_recording(**write(tmp_path, **{role: table}))
    (fault,) = caught.value.faults
    assert missing in fault.problem
    assert fault.row is None


def test_a_table_with_its_columns_still_names_every_row(tmp_path):
    message = message_of(tmp_path, spikes="unit,time_s\nu1\nu2,0.5,7\n")
    assert [line.partition(":")[0] for line in message.splitlines()] == ["spikes.csv, row 2", "spikes.csv, row 3"]


def test_faults_carry_their_parts(tmp_path):
    with pytest.raises(TableError) as caught:
        kf.read_recording(**write(tmp_path, spikes="# x\nunit;time_s\nu1;1,5\n"))
    (fault,) = caught.value.faults
    assert (fault.table, fault.row, fault.column, fault.value) == ("spikes.csv", 3, "time_s", "1,5")


def test_all_faults_of_all_files_come_together_in_order(tmp_path):
    message = message_of(
        tmp_path,
        spikes="unit,time_s\nu1,x\nu2,0.5\n,0.7\nu2,0.5\nu8,0.9\nu1\n",
        sites=SITES + "u2,oops,3\n",
        windows="start_s,stop_s\n3,1\n",
        exclude_pairs="unit_a,unit_b\nu1,u1\n",
    )
    places = [line.split(":")[0] for line in message.splitlines()]
    assert places == [
        "spikes.csv, row 2, column time_s",
        "spikes.csv, row 4, column unit",
        "spikes.csv, row 5, column time_s",
        "spikes.csv, row 6, column unit",
        "spikes.csv, row 7",
        "sites.csv, row 4, column x_um",
        "sites.csv, row 4, column unit",
        "windows.csv, row 2, column stop_s",
        "pairs.csv, row 2, column unit_b",
    ]


def test_a_flood_of_faults_is_cut_short(tmp_path):
    lines = message_of(tmp_path, spikes="unit,time_s\n" + "u1,?\n" * 500).splitlines()
    assert [line.partition(":")[0] for line in lines[:3]] == [f"spikes.csv, row {k}, column time_s" for k in (2, 3, 4)]
    assert lines[3:] == ["spikes.csv, column time_s: 497 more like row 2."]


def test_a_flood_of_one_kind_leaves_room_for_the_others(tmp_path):
    rows = [f"u{k},0.5" for k in range(10, 40)] + ["u1,", "u1,", "u1,soon", "u1,1e99", "u2,0.5", "u2,0.5"]
    lines = message_of(tmp_path, spikes="unit,time_s\n" + "\n".join(rows)).splitlines()
    assert len(lines) == 9
    for piece in ("'u10'", "'u12'", "'soon'", "'1e99'", "row 32", "row 33", "a spike at this time already in row 36"):
        assert any(piece in line for line in lines), piece
    assert lines[-1] == "spikes.csv, column unit: 27 more like row 2."


def test_faults_of_very_many_kinds_are_cut_short():
    error = TableError([Fault(f"t{k}.csv", "Wrong.", "Mend it.", row=k) for k in range(50)])
    assert str(error).count("\n") == 20
    assert str(error).endswith("... and 30 more faults of other kinds or in other places.")
    assert len(error.faults) == 50


def test_a_value_without_end_is_cut_short(tmp_path):
    message = message_of(tmp_path, spikes="unit,time_s\nu1," + "9x" * 5000 + "\n" + "z" * 5000 + ",1\n")
    assert max(map(len, message.splitlines())) < 250


def test_a_broken_sites_table_does_not_blame_the_spikes(tmp_path):
    assert "spikes.csv" not in message_of(tmp_path, sites="unit,x_um\nu1,0\nu2,1,5\n")


def test_decimal_comma_meets_a_point(tmp_path):
    with pytest.raises(TableError, match=r"'12\.350': Not a number\. Write 12,350, or load with decimal='\.'\."):
        kf.read_recording(**write(tmp_path, spikes="unit;time_s\nu1;12.350\n"), decimal=",")


def test_leading_zeros_lost(tmp_path):
    message = message_of(tmp_path, spikes="unit,time_s\n7,1\n", sites="unit,x_um\n007,0\n")
    assert "'7': The unit is not in sites.csv (1 spike of it). The closest id there is '007' (a spreadsheet" in message


@pytest.mark.parametrize("name", ["spikes.csv", "other.csv", "spikes.parquet"])
def test_a_file_that_is_not_there(tmp_path, name):
    paths = write(tmp_path)
    with pytest.raises(TableError) as caught:
        kf.read_recording(tmp_path / "nowhere" / name, paths["sites"])
    assert f"{name}: There is no file" in str(caught.value)
    assert "There is no folder" in str(caught.value)


def test_a_slip_in_the_file_name(tmp_path):
    paths = write(tmp_path)
    with pytest.raises(TableError, match=r"spike\.csv: There is no file .* Did you mean 'spikes\.csv'"):
        kf.read_recording(tmp_path / "spike.csv", paths["sites"])


def test_a_folder_for_a_file(tmp_path):
    paths = write(tmp_path)
    with pytest.raises(TableError, match="is a folder, not a table"):
        kf.read_recording(tmp_path, paths["sites"])


def test_a_zero_byte_in_a_path(tmp_path):
    with pytest.raises(TableError, match="cannot be read"):
        kf.read_recording("a\x00b.csv", write(tmp_path)["sites"])


def test_gz_in_the_name_only(tmp_path):
    path = tmp_path / "spikes.csv.gz"
    path.write_text(SPIKES)
    with pytest.raises(TableError, match=r"spikes\.csv\.gz: The name ends in \.gz, but the file is not packed"):
        kf.read_recording(path, write(tmp_path)["sites"])


def test_a_damaged_parquet_file(tmp_path):
    path = tmp_path / "spikes.parquet"
    path.write_bytes(b"nonsense" * 10)
    with pytest.raises(TableError, match=r"spikes\.parquet: This is not a Parquet file, or it was cut short"):
        kf.read_recording(path, write(tmp_path)["sites"])
    path.write_bytes(b"PAR1" + bytes(range(100)) + b"PAR1")
    with pytest.raises(TableError, match=r"spikes\.parquet: The Parquet file is damaged \((?!Could not open|.*Buffer)"):
        kf.read_recording(path, write(tmp_path)["sites"])
    path.write_bytes(b"")
    with pytest.raises(TableError, match=r"spikes\.parquet: The file is empty"):
        kf.read_recording(path, write(tmp_path)["sites"])


def test_files_of_one_name_are_told_apart(tmp_path):
    for folder, text in (("a", "unit,time_s\nu1,x\n"), ("b", "unit,x_um\nu1,y\n")):
        (tmp_path / folder).mkdir()
        (tmp_path / folder / "data.csv").write_text(text)
    with pytest.raises(TableError) as caught:
        kf.read_recording(tmp_path / "a" / "data.csv", tmp_path / "b" / "data.csv")
    lines = str(caught.value).splitlines()
    assert lines[0].startswith(str(tmp_path / "a" / "data.csv"))
    assert lines[1].startswith(str(tmp_path / "b" / "data.csv"))


def test_one_file_given_twice(tmp_path):
    path = write(tmp_path)["spikes"]
    with pytest.raises(TableError, match=r"spikes\.csv \(as sites\): There is no column 'x_um'"):
        kf.read_recording(path, path)


def test_names_at_odds_with_the_time_unit(tmp_path):
    paths = write(tmp_path, spikes="unit,time_ms\nu1,500\n", windows="start_s,stop_s\n0,3\n")
    with pytest.raises(TableError) as caught:
        kf.read_recording(**paths, time_unit="ms")
    assert "windows.csv, column start_s: The name says seconds, while spikes.csv names its times in ms." in str(
        caught.value
    )


def test_ends_of_a_window_in_two_units(tmp_path):
    paths = write(tmp_path, windows="start_ms,stop_s\n0,3\n")
    with pytest.raises(TableError, match="start_ms and stop_s are named in different units"):
        kf.read_recording(**paths, time_unit="ms")


def test_coordinates_in_two_units(tmp_path):
    paths = write(tmp_path, sites="unit,x_mm,y_um\nu1,0,1\nu2,1,1\n")
    with pytest.raises(TableError, match="x_mm, y_um are named in different units"):
        kf.read_recording(**paths, length_unit="mm")


def test_windows_without_a_spike(tmp_path):
    paths = write(tmp_path, windows="start_s,stop_s\n500,600\n")
    with pytest.raises(RecordingError) as caught:
        kf.read_recording(**paths)
    message = str(caught.value)
    for piece in ("windows.csv: none of the 3 spikes of spikes.csv (0.25 to 2.125 s)", "500 to 600 s", "time_unit"):
        assert piece in message


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"time_unit": "min"}, "time_unit='min' is not known. Use one of 's', 'ms', 'us', 'samples'."),
        ({"time_unit": None}, "time_unit=None is not known"),
        ({"length_unit": "nm"}, "length_unit='nm' is not known. Use one of 'um', 'mm'."),
        ({"decimal": ";"}, "decimal=';' is not known. Use one of '.', ','."),
        ({"decimal": ""}, "decimal='' is not known"),
        ({"time_unit": "samples"}, "time_unit='samples' needs sampling_rate_hz"),
        ({"time_unit": "samples", "sampling_rate_hz": 0}, "sampling_rate_hz=0 must be above 0 and finite"),
        ({"time_unit": "samples", "sampling_rate_hz": -5.0}, "sampling_rate_hz=-5.0 must be above 0"),
        ({"time_unit": "samples", "sampling_rate_hz": float("nan")}, "sampling_rate_hz=nan must be above 0"),
        ({"time_unit": "samples", "sampling_rate_hz": float("inf")}, "sampling_rate_hz=inf must be above 0"),
        ({"time_unit": "samples", "sampling_rate_hz": "20 kHz"}, "sampling_rate_hz='20 kHz' is not a number"),
        ({"time_unit": "samples", "sampling_rate_hz": True}, "sampling_rate_hz=True is not a number"),
        ({"sampling_rate_hz": 20_000}, "sampling_rate_hz=20000 goes with time_unit='samples' only"),
    ],
)
def test_options_out_of_range(tmp_path, options, message):
    with pytest.raises(ArgumentError) as caught:
        kf.read_recording(**write(tmp_path), **options)
    assert message in str(caught.value)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        (None, "spikes: None is neither a path nor a DataFrame."),
        (7, "spikes: 7 is neither a path"),
        (["spikes.csv"], "spikes: a list is neither a path"),
        ({"unit": ["u1"], "time_s": [1.0]}, "spikes: a dictionary is neither a path"),
        (b"spikes.csv", "spikes: bytes is neither a path"),
        ("", "spikes: the path is empty."),
        (SPIKES, "looks like a table itself. Give the path of a file, or a DataFrame"),
    ],
)
def test_neither_path_nor_frame(tmp_path, given, words):
    with pytest.raises(ArgumentError) as caught:
        kf.read_recording(given, write(tmp_path)["sites"])
    assert words in str(caught.value)
    assert len(str(caught.value)) < 300


def test_a_word_is_no_truth_value(tmp_path):
    """ "no" counts as true in Python: duplicates would be dropped unasked."""
    with pytest.raises(ArgumentError, match="drop_duplicates: the text 'no' is neither True nor False"):
        kf.read_recording(**write(tmp_path), drop_duplicates="no")
    with pytest.raises(ArgumentError, match="drop_duplicates: 1 is neither True nor False"):
        kf.Recording.from_arrays({"a": [1.0]}, [0.0], drop_duplicates=1)
