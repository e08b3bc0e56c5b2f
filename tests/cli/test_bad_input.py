"""Every kind of bad input and bad call ends with status 2 and a message that names place and remedy.

What is expected is the command line's contract: plain lines on standard error, no traceback, nothing written.
"""

from __future__ import annotations

import gzip
import os
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from kernelfit.cli import main
from kernelfit.cli._usage import OPTIONS, option_lines

UNITS = ("a1", "a2", "b1", "b2")
PLACES = {"a1": (0, 0), "a2": (100, 0), "b1": (0, 100), "b2": (100, 130)}
DURATION_S = 20


def spikes_text() -> str:
    """Twenty seconds of four units, each firing a few times a second at times of its own."""
    rows = [(round(k * step + offset, 4), u) for u, (step, offset) in _trains().items() for k in range(80)]
    rows = sorted((t, u) for t, u in rows if t < DURATION_S)
    return "unit,time_s\n" + "".join(f"{u},{t}\n" for t, u in rows)


def _trains() -> dict[str, tuple[float, float]]:
    return {"a1": (0.31, 0.02), "a2": (0.27, 0.11), "b1": (0.41, 0.05), "b2": (0.37, 0.17)}


def sites_text() -> str:
    return "unit,x_um,y_um\n" + "".join(f"{u},{x},{y}\n" for u, (x, y) in PLACES.items())


@dataclass(frozen=True)
class Case:
    """One kind of mistake.

    Parameters
    ----------
    call : the arguments; files are named relative to the folder the command runs in
    says : what the message must hold: the place, and the remedy
    files : files that differ from the good ones
    """

    call: str
    says: tuple[str, ...]
    files: dict[str, str | bytes] = field(default_factory=dict)


FIT = "fit spikes.csv sites.csv"


def spikes(text: str, *says: str, options: str = "") -> Case:
    return Case(f"{FIT} {options}", ("spikes.csv", *says), {"spikes.csv": text})


def sites(text: str, *says: str) -> Case:
    return Case(FIT, ("sites.csv", *says), {"sites.csv": text})


def windows(text: str, *says: str) -> Case:
    return Case(f"{FIT} --windows windows.csv", ("windows.csv", *says), {"windows.csv": text})


def exclusions(text: str, *says: str) -> Case:
    return Case(f"{FIT} --exclusions cut.csv", ("cut.csv", *says), {"cut.csv": text})


def pairs(text: str, *says: str) -> Case:
    return Case(f"{FIT} --exclude-pairs pairs.csv", ("pairs.csv", *says), {"pairs.csv": text})


def option(options: str, *says: str) -> Case:
    return Case(f"{FIT} {options}", says)


GOOD_SPIKES = spikes_text()
GOOD_SITES = sites_text()

FILE_CASES = {
    "spikes file absent": Case("fit nowhere.csv sites.csv", ("nowhere.csv", "Check")),
    "sites file absent": Case("fit spikes.csv nowhere.csv", ("nowhere.csv", "Check")),
    "windows file absent": Case(f"{FIT} --windows nowhere.csv", ("nowhere.csv", "Check")),
    "exclusions file absent": Case(f"{FIT} --exclusions nowhere.csv", ("nowhere.csv", "Check")),
    "spikes is a folder": Case("fit folder sites.csv", ("folder", "Name the file"), {"folder/inside.txt": ""}),
    "spikes empty": spikes("", "empty"),
    "spikes and sites swapped": Case("fit sites.csv spikes.csv", ("sites.csv", "spikes.csv", "The spikes come first")),
    "windows are the sites": Case(f"{FIT} --windows sites.csv", ("sites.csv", "'start_s'", "give a windows table")),
    "spikes as a matrix": spikes("n1,n2,n3\n0.1,0.2,0.3\n", "'unit'", "one row for each spike"),
    "spikes with other names": spikes(
        "neuron,t\na1,1\n", "Rename column 'neuron' to 'unit' and column 't' to 'time_s'"
    ),
    "spikes are JSON": spikes('{"a1": [1, 2]}', "JSON"),
    "spikes are a page": spikes("<html></html>", "web page"),
    "windows all before the spikes": windows("start_s,stop_s\n-10,-5\n", "-10 to -5 s", "clock"),
    "a window shorter than a bin": windows("start_s,stop_s\n0,0.0001\n1,9\n", "window 1", "take the window out"),
    "spikes header only": spikes("unit,time_s\n", "no"),
    "spikes blank lines only": spikes("\n\n\n", "empty"),
    "spikes without times": spikes("unit,when\na1,1\n", "time_s", "column"),
    "spikes without units": spikes("cell,time_s\na1,1\n", "unit", "column"),
    "spikes column twice": spikes("unit,time_s,time_s\na1,1,1\n", "2 columns", "Keep one"),
    "time is a word": spikes(GOOD_SPIKES + "a1,soon\n", "row", "time_s", "'soon'", "number"),
    "time is missing": spikes(GOOD_SPIKES + "a1,\n", "row", "time_s"),
    "time is infinite": spikes(GOOD_SPIKES + "a1,inf\n", "row", "time_s", "'inf'"),
    "time is not a number": spikes(GOOD_SPIKES + "a1,nan\n", "row", "time_s", "nan"),
    "time with decimal comma": spikes(
        "unit;time_s\na1;12,350\na2;13,5\n", "row 2", "time_s", "'12,350'", "12.350", "--decimal"
    ),
    "row with too many cells": spikes(GOOD_SPIKES + "a1,1.5,9,9\n", "row"),
    "duplicate spike": spikes(GOOD_SPIKES + "a1,0.02\n", "row", "a1", "duplicate", "--drop-duplicates"),
    "spike of unknown unit": spikes(GOOD_SPIKES + "zz9,1.234\n", "row", "'zz9'", "sites.csv"),
    "spike without unit": spikes(GOOD_SPIKES + ",1.234\n", "row", "unit"),
    "spikes not text": Case(FIT, ("spikes.csv",), {"spikes.csv": bytes(range(256)) * 4}),
    "spikes in another encoding": Case(
        FIT, ("spikes.csv", "UTF-8"), {"spikes.csv": "unit,time_s\nµ1,1.0\n".encode("latin-1")}
    ),
    "packed file damaged": Case(
        "fit spikes.csv.gz sites.csv",
        ("spikes.csv.gz",),
        {"spikes.csv.gz": gzip.compress(GOOD_SPIKES.encode())[:-40]},
    ),
    "packed file not packed": Case("fit spikes.csv.gz sites.csv", ("spikes.csv.gz",), {"spikes.csv.gz": GOOD_SPIKES}),
    "not parquet": Case("fit s.parquet sites.csv", ("s.parquet",), {"s.parquet": GOOD_SPIKES}),
    "unknown ending": Case("fit s.xlsx sites.csv", ("s.xlsx",), {"s.xlsx": b"PK\x03\x04\x00\x00\x00"}),
    "sites empty": sites("", "empty"),
    "sites header only": sites("unit,x_um,y_um\n", "no"),
    "sites without positions": sites("unit,y_um\na1,0\n", "x_um", "column"),
    "sites unit twice": sites(GOOD_SITES + "a1,5,5\n", "row 6", "'a1'", "once"),
    "position is a word": sites(GOOD_SITES + "c1,far,5\n", "row 6", "x_um", "'far'", "number"),
    "position is missing": sites(GOOD_SITES + "c1,5,\n", "row 6", "y_um"),
    "position is infinite": sites(GOOD_SITES + "c1,5,-inf\n", "row 6", "y_um", "'-inf'"),
    "sites lack a unit": sites("unit,x_um,y_um\na1,0,0\na2,100,0\nb1,0,100\n", "'b2'", "spikes.csv"),
    "windows end before start": windows("start_s,stop_s\n9,3\n", "row 2", "stop"),
    "windows overlap": windows("start_s,stop_s\n0,10\n8,20\n", "row 3", "Cut or join"),
    "windows not numbers": windows("start_s,stop_s\n0,end\n", "row 2", "stop_s", "'end'"),
    "windows without stop": windows("start_s\n0\n", "stop_s", "column"),
    "windows without rows": windows("start_s,stop_s\n", "no"),
    "exclusions end before start": exclusions("start_s,stop_s\n5,4\n", "row 2", "stop"),
    "exclusions cover all": exclusions("start_s,stop_s\n0,100\n", "no bin"),
    "exclusions not numbers": exclusions("start_s,stop_s\nx,4\n", "row 2", "start_s", "'x'"),
    "pairs of unknown unit": pairs("unit_a,unit_b\na1,q7\n", "row 2", "unit_b", "'q7'"),
    "pairs without column": pairs("unit_a\na1\n", "unit_b", "column"),
    "pair of a unit with itself": pairs("unit_a,unit_b\na1,a1\n", "row 2", "a1"),
    "microseconds as seconds": spikes(
        "unit,time_s\n" + "".join(f"{u},{k}12345\n" for u in UNITS for k in range(20)), "look like", "--time-unit"
    ),
    "no spike inside the windows": windows("start_s,stop_s\n1000,1010\n", "spike"),
}

CALL_CASES = {
    "no command": Case("", ("command is missing", "kernelfit demo", "--help")),
    "unknown command": Case("fti spikes.csv sites.csv", ("'fti'", "Did you mean fit?", "--help")),
    "nothing to fit": Case("fit", ("SPIKES is missing", "kernelfit fit SPIKES SITES")),
    "no sites": Case("fit spikes.csv", ("SITES is missing", "kernelfit fit SPIKES SITES")),
    "one argument too many": Case(f"{FIT} more.csv", ("more.csv", "kernelfit fit SPIKES SITES")),
    "option misspelt": option("--kernal gaussian", "--kernal", "Did you mean --kernel"),
    "option unheard of": option("--wavelet 3", "--wavelet", "--help"),
    "option without value": option("--out", "--out", "value"),
    "bin width a word": option("--bin-ms wide", "--bin-ms", "'wide'", "number"),
    "bin width zero": option("--bin-ms 0", "--bin-ms", "above 0"),
    "bin width negative": option("--bin-ms -1", "--bin-ms", "above 0"),
    "bin width not a number": option("--bin-ms nan", "--bin-ms", "above 0"),
    "bin width infinite": option("--bin-ms inf", "--bin-ms", "above 0"),
    "bin width beyond the recording": option("--bin-ms 60000", "spikes.csv", "wider than window", "--bin-ms"),
    "bin width with a comma": option("--bin-ms 1,5", "--bin-ms", "'1,5'", "Write 1.5."),
    "bin width finer than any clock": option("--bin-ms 1e-5", "finer than spikes are timed", "--bin-ms 1."),
    "kernel misspelt": option("--kernel gausian", "--kernel", "Did you mean gaussian?"),
    "kernel with an underscore": option("--kernel Power_Law", "--kernel", "Did you mean power-law?"),
    "kernel unknown": option("--kernel ricker", "--kernel", "'ricker'", "mexican-hat"),
    "link unknown": option("--link probit", "--link", "'probit'", "exp"),
    "leak rate zero": option("--leak-rate 0", "--leak-rate", "above 0", "time constant"),
    "leak rate negative": option("--leak-rate -5", "--leak-rate", "above 0"),
    "largest distance negative": option("--max-distance-um -5", "--max-distance-um", "above 0"),
    "largest distance below the pitch": option("--max-distance-um 5", "5", "distance", "--max-distance-um"),
    "same site unknown": option("--same-site drop", "--same-site", "'drop'", "exclude, own, kernel"),
    "after-spike unknown": option("--after-spike off", "--after-spike", "'off'", "basis, none"),
    "covariance unknown": option("--intervals hac", "--intervals", "'hac'", "robust, jackknife, model, profile"),
    "warm-up negative": option("--warm-up-s -1", "--warm-up-s", "0 or more"),
    "warm-up beyond the window": option("--warm-up-s 100", "spikes.csv", "warm-up", "shorter"),
    "threads none": option("--threads 0", "--threads", "1 or more"),
    "threads a fraction": option("--threads 1.5", "--threads", "'1.5'", "whole number"),
    "seed negative": option("--seed -1", "--seed", "0 or more"),
    "time unit unknown": option("--time-unit minutes", "--time-unit", "'minutes'", "s, ms, us, samples"),
    "samples without a rate": option("--time-unit samples", "--sampling-rate-hz", "Add"),
    "rate without samples": option("--sampling-rate-hz 20000", "--sampling-rate-hz", "--time-unit samples"),
    "sampling rate zero": option("--time-unit samples --sampling-rate-hz 0", "--sampling-rate-hz", "above 0"),
    "length unit unknown": option("--length-unit inch", "--length-unit", "'inch'", "um, mm"),
    "decimal mark unknown": option("--decimal ;", "--decimal", "';'"),
    "least spikes negative": option("--min-spikes -1", "--min-spikes", "0 or more"),
    "least spikes beyond all": option("--min-spikes 5000", "min_spikes", "Widen"),
    "start not a time": option("--start-s nan", "--start-s", "seconds"),
    "stop before start": option("--start-s 9 --stop-s 3", "--stop-s", "later stop"),
    "start after the end": option("--start-s 500", "spikes.csv", "start_s=500", "runs from"),
    "unit unknown": option("--units a1,zz", "'zz'", "closest"),
    "unit to leave out unknown": option("--leave-out zz", "'zz'", "closest"),
    "all units left out": option("--leave-out a1,a2,b1,b2", "--leave-out", "Name fewer"),
    "source unknown": option("--source-only zz", "'zz'", "closest"),
    "every unit source only": option("--source-only a1,a2,b1,b2", "--source-only", "Name fewer"),
    "one unit left": option("--units a1", "sites.csv", "two units at different sites"),
    "spline options without spline": option("--spline-basis 8", "--spline-basis", "--kernel spline"),
    "smoothing without spline": option("--smoothing 1", "--smoothing", "--kernel spline"),
    "spline too small": option("--kernel spline --spline-basis 2", "--spline-basis", "4"),
    "smoothing negative": option("--kernel spline --smoothing -1", "--smoothing", "0 or more"),
    "spline beyond the distances": option("--kernel spline --spline-basis 12", "distances", "--smoothing"),
    "results name too long": option("--out " + "x" * 300, "cannot write there", "another folder"),
    "results place is a file": option("--out sites.csv", "sites.csv", "folder"),
    "results place under a file": option("--out sites.csv/results", "sites.csv", "folder"),
    "results folder not empty": Case(
        f"{FIT} --out full", ("full", "not empty", "--overwrite"), {"full/notes.txt": "mine"}
    ),
    "results folder not ours": Case(
        f"{FIT} --out full --overwrite", ("full", "notes.txt", "another folder"), {"full/notes.txt": "mine"}
    ),
    "demo folder not empty": Case("demo --out full", ("full", "not empty", "--overwrite"), {"full/notes.txt": "mine"}),
    "inspect without sites": Case("inspect spikes.csv", ("SITES is missing", "kernelfit inspect SPIKES SITES")),
    "inspect all excluded": Case(
        "inspect spikes.csv sites.csv --exclusions cut.csv",
        ("cut.csv", "leave nothing", "Use fewer"),
        {"cut.csv": "start_s,stop_s\n-1,100\n"},
    ),
    "inspect raster outside": Case(
        "inspect spikes.csv sites.csv --out look --raster-start-s 500", ("500 s", "0 s to 20 s")
    ),
    "inspect absent file": Case("inspect spikes.csv nowhere.csv", ("nowhere.csv", "Check")),
    "inspect folder not empty": Case(
        "inspect spikes.csv sites.csv --out full", ("full", "not empty"), {"full/notes.txt": "mine"}
    ),
}

CASES = FILE_CASES | CALL_CASES


def everything_under(folder: Path) -> dict[str, bytes]:
    files = (Path(place) / name for place, _, names in os.walk(folder) for name in names)
    return {file.relative_to(folder).as_posix(): file.read_bytes() for file in files}


@pytest.mark.parametrize("case", CASES.values(), ids=CASES.keys())
def test_bad_input_is_refused_with_place_and_remedy(
    case: Case, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tmp_path)
    for name, content in ({"spikes.csv": GOOD_SPIKES, "sites.csv": GOOD_SITES} | case.files).items():
        file = tmp_path / name
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_bytes(content if isinstance(content, bytes) else content.encode())
    before = everything_under(tmp_path)

    status = main(case.call.split())

    printed = capsys.readouterr()
    assert status == 2, printed.err
    for part in case.says:
        assert part in printed.err
    assert "Traceback" not in printed.err
    assert not set("│╭╰\x1b") & set(printed.err), "plain lines, no boxes, no colours"
    lines = printed.err.splitlines()
    assert len(lines) == len(set(lines)), "nothing is said twice"
    assert len(lines) <= 22, "no endless lists"
    assert max(map(len, lines)) < 500
    assert printed.out == ""
    assert everything_under(tmp_path) == before, "nothing is written on failure"


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_positions_in_another_unit_are_questioned_before_the_fit(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Millimetres read as micrometres: a fit is possible, and its lengths would be wrong by a thousand."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "spikes.csv").write_text(GOOD_SPIKES)
    rows = "".join(f"{u},{10 * x},{10 * y}\n" for u, (x, y) in PLACES.items())
    (tmp_path / "sites.csv").write_text("unit,x_um,y_um\n" + rows)
    call = f"{FIT} --length-unit mm --bin-ms 10 --kernel flat --leak-rate 20 --after-spike none"
    assert main(call.split()) == 0
    assert "warning: sites.csv: The array measures" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("message", "line"),
    [
        ("Load with decimal=',' or write 12.3.", ["On the command line: decimal is --decimal."]),
        (
            "Check time_unit, or bin_width=2.",
            ["On the command line: time_unit is --time-unit, bin_width is --bin-ms (in ms)."],
        ),
        ("The kernel needs decimal places. Add --time-unit.", []),
        ("u.csv: no unit 'kernel'.", []),
        ("State their unit when reading (time_unit, --time-unit).", []),
    ],
)
def test_arguments_that_a_message_names_are_also_given_as_typed(message: str, line: list[str]) -> None:
    assert option_lines(message) == line


def test_every_option_that_stands_for_an_argument_exists(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["fit", "--help"]) == 0
    shown = capsys.readouterr().out
    assert [o for o in OPTIONS.values() if o.split()[0] not in shown] == []


def test_there_are_many_kinds() -> None:
    assert len(CASES) >= 40


def test_several_faults_of_one_file_are_reported_together(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "spikes.csv").write_text("unit,time_s\na1,soon\nzz9,1.5\na1,2.5\na1,later\n")
    (tmp_path / "sites.csv").write_text(GOOD_SITES)
    status = main(["fit", str(tmp_path / "spikes.csv"), str(tmp_path / "sites.csv"), "--out", str(tmp_path / "o")])
    said = capsys.readouterr().err
    assert status == 2
    assert "row 2" in said
    assert "row 5" in said
