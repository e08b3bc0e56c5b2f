"""`kernelfit inspect`: what it prints, what it writes, and what it refuses."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from kernelfit.cli import main
from kernelfit.cli.inspect import console_lines
from kernelfit.recording.inspection import inspect_recording
from kernelfit.recording.tables import read_recording

CLICKS_S = np.arange(5.0, 100.0, 6.0)


@pytest.fixture
def tables(tmp_path: Path) -> tuple[Path, Path]:
    """Nine units, 100 s, and clicks at which seven of them fire at once."""
    rng = np.random.default_rng(4)
    rows = [(f"u{k}", t) for k in range(9) for t in rng.uniform(0.0, 100.0, 400)]
    rows += [(f"u{k}", t + rng.uniform(0.0, 5e-4)) for t in CLICKS_S for k in rng.permutation(9)[:7]]
    spikes, sites = tmp_path / "spikes.csv", tmp_path / "sites.csv"
    pd.DataFrame(rows, columns=["unit", "time_s"]).to_csv(spikes, index=False)
    places = [(f"u{k}", 100 * (k % 3), 100 * (k // 3)) for k in range(9)]
    pd.DataFrame(places, columns=["unit", "x_um", "y_um"]).to_csv(sites, index=False)
    return spikes, sites


def call(*arguments: object) -> int:
    return main(["inspect", *map(str, arguments)])


def test_findings_are_printed_plainly(tables: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    assert call(*tables) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "\x1b" not in out  # no colours where nobody looks
    lines = out.splitlines()
    assert lines[0].startswith("9 units, ")
    assert any(line.startswith("warning: 16 moments at which ") for line in lines)
    assert any(line.startswith("  where: from 4.99 s to ") for line in lines)
    assert any(line.startswith("  remedy: Leave them out: ") for line in lines)
    assert any(line.startswith("Suggested bin width: ") for line in lines)


def test_the_folder_and_its_use(tables: tuple[Path, Path], tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = tmp_path / "out"
    assert call(*tables, "--out", out) == 0
    assert f"Page: {out / 'inspection.html'}" in capsys.readouterr().out
    exclusions = out / "proposed_exclusions.csv"
    assert len(pd.read_csv(exclusions)) == CLICKS_S.size
    assert call(*tables, "--exclusions", exclusions) == 0
    assert "moments at which" not in capsys.readouterr().out


def test_a_second_run_needs_overwrite(
    tables: tuple[Path, Path], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out = tmp_path / "out"
    assert call(*tables, "--out", out) == 0
    before = (out / "units.csv").read_bytes()
    capsys.readouterr()
    assert call(*tables, "--out", out) == 2
    assert "not empty" in capsys.readouterr().err
    assert call(*tables, "--out", out, "--overwrite", "--raster-start-s", "10") == 0
    assert (out / "units.csv").read_bytes() == before
    assert pd.read_csv(out / "figures" / "raster.csv")["time_s"].iloc[0] == pytest.approx(10.0, abs=0.2)


@pytest.mark.parametrize(
    ("options", "says"),
    [
        (["--raster-start-s", "10"], "Add --out DIR"),
        (["--overwrite"], "Add --out DIR"),
        (["--out", "OUT", "--raster-start-s", "5000"], "no window holds that time"),
        (["--out", "OUT", "--raster-start-s", "soon"], "--raster-start-s: 'soon' is not a number"),
        (["--seed", "-1"], "--seed: -1 is out of range"),
    ],
    ids=["raster without out", "overwrite without out", "raster outside", "raster no number", "seed below 0"],
)
def test_wrong_calls_end_with_2_and_leave_nothing(
    options: list[str], says: str, tables: tuple[Path, Path], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out = tmp_path / "out"
    assert call(*tables, *[str(out) if o == "OUT" else o for o in options]) == 2
    err = capsys.readouterr().err
    assert says in err
    assert "Traceback" not in err
    assert not out.exists()


def test_units_of_measure_are_taken_from_options(tables: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    assert call(*tables, "--length-unit", "mm") == 0
    assert "error: The array measures 283 mm" in capsys.readouterr().out
    assert call(*tables, "--units", "u0,u1,u2,u3", "--leave-out", "u3", "--start-s", "0", "--stop-s", "50") == 0
    assert capsys.readouterr().out.startswith("3 units, ")


def test_lines_are_wrapped_on_a_terminal_only(tables: tuple[Path, Path]) -> None:
    inspection = inspect_recording(read_recording(*tables))
    wrapped = console_lines(inspection, 60)
    assert max(map(len, wrapped)) <= 60
    plain = console_lines(inspection, None)
    assert " ".join(" ".join(wrapped).split()) == " ".join(" ".join(plain).split())
    assert [line for line in plain if line] == [
        line for block in inspection.summary().split("\n\n") for line in block.splitlines()
    ]
