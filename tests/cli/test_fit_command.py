"""`kernelfit fit` and `kernelfit demo` from tables to a results folder, with the real engine.

Expected values: the contract of the results folder and the truths the recordings were simulated from.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
from pathlib import Path
from typing import NoReturn

import numpy as np
import pandas as pd
import pytest

import kernelfit as kf
from kernelfit.cli import main
from kernelfit.demo import load_demo_truth

FILES = ("report.html", "fit.json", "parameters.csv", "baselines.csv", "kernel.csv", "goodness.csv")
BIN = ["--bin-ms", "5"]


@pytest.fixture(scope="module")
def tables(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with spikes.csv and sites.csv of nine coupled units, one minute."""
    folder = tmp_path_factory.mktemp("tables")
    place = 100.0 * np.stack(np.meshgrid(np.arange(3), np.arange(3)), axis=-1).reshape(-1, 2)
    law = kf.kernels.Exponential().at(amplitude=0.3, length_um=120.0, reference_um=100.0)
    recording = kf.simulate_recording(place, law, 3.0, 30.0, 60.0, 5, bin_width=0.005)
    recording.spikes.to_csv(folder / "spikes.csv", index=False)
    recording.units[["x_um", "y_um"]].to_csv(folder / "sites.csv")
    return folder


@pytest.fixture
def here(tables: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """An empty folder to run in, with the tables in it."""
    monkeypatch.chdir(tmp_path)
    for name in ("spikes.csv", "sites.csv"):
        (tmp_path / name).write_bytes((tables / name).read_bytes())
    return tmp_path


def names_in(folder: Path) -> list[str]:
    return sorted(p.name for p in folder.iterdir())


def interrupt(*_: object, **__: object) -> NoReturn:
    raise KeyboardInterrupt


def test_results_folder_is_whole_and_the_result_is_five_lines(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["fit", "spikes.csv", "sites.csv", "--kernel", "exponential", *BIN, "--out", "a b/[results] ü"]) == 0
    folder = here / "a b" / "[results] ü"
    assert set(FILES) <= set(names_in(folder))
    assert any((folder / "figures").iterdir())
    lines = capsys.readouterr().out.splitlines()
    assert lines[5] == ""
    assert all(lines[:5])
    assert lines[6:] == [f"Report: {folder / 'report.html'}", f"Tables, figures and the fit: {folder}"]
    assert list(pd.read_csv(folder / "kernel.csv").columns[:4]) == ["distance_um", "estimate", "lower", "upper"]


def test_options_reach_the_model(here: Path) -> None:
    options = ["--kernel", "spline", "--spline-basis", "4", "--smoothing", "2", "--leak-rate", "25"]
    options += ["--same-site", "own", "--after-spike", "none", "--max-distance-um", "250", "--warm-up-s", "0.5"]
    options += ["--intervals", "model", "--seed", "3", "--units", "u01,u02,u03"]
    options += ["--units", "u04,u05,u06,u07,u08", "--leave-out", "u08"]
    options += ["--source-only", "u07", "--start-s", "5", "--stop-s", "50", "--threads", "1"]
    assert main(["fit", "spikes.csv", "sites.csv", *BIN, *options, "--out", "o"]) == 0
    fit = kf.load_fit(here / "o" / "fit.json")
    assert fit.model.kernel == kf.kernels.Spline(n_basis=4, smoothing=2.0)
    assert fit.model.bin_width == 0.005
    assert fit.model.leak_rate == fit.leak_rate == 25.0
    assert fit.model.same_site == "own"
    assert fit.model.after_spike.name == "none"
    assert fit.model.max_distance == 250.0
    assert fit.model.warm_up_s == 0.5
    assert fit.covariance_kind == "model"
    assert fit.seed == 3
    assert fit.unit_ids == ("u01", "u02", "u03", "u04", "u05", "u06", "u07")
    assert len(fit.targets) == 6
    assert fit.window_bounds.tolist() == [[5.0, 50.0]]


def test_same_call_gives_the_same_numbers(here: Path) -> None:
    for out, threads in (("one", "1"), ("two", "2")):
        call = ["fit", "spikes.csv", "sites.csv", *BIN, "--out", out, "--threads", threads]
        assert main(call) == 0
    for name in ("parameters.csv", "baselines.csv", "kernel.csv", "goodness.csv"):
        assert (here / "one" / name).read_bytes() == (here / "two" / name).read_bytes()


def test_without_out_the_results_are_in_the_current_folder(here: Path) -> None:
    call = ["fit", "spikes.csv", "sites.csv", *BIN, "--after-spike", "none"]
    assert main(call) == 0
    assert (here / "kernelfit-results" / "report.html").is_file()
    assert main(call) == 2, "earlier results are not replaced unasked"
    assert main([*call, "--overwrite"]) == 0
    assert names_in(here) == ["kernelfit-results", "sites.csv", "spikes.csv"], "nothing else is left behind"


def test_other_units_of_measure_give_the_same_fit(here: Path) -> None:
    spikes, sites = pd.read_csv("spikes.csv"), pd.read_csv("sites.csv")
    spikes["time_s"] = np.round(spikes["time_s"] * 1e6).astype(int)
    sites[["x_um", "y_um"]] /= 1000.0
    spikes.to_csv("spikes_us.csv", index=False)
    sites.to_csv("sites_mm.csv", index=False)
    assert main(["fit", "spikes.csv", "sites.csv", *BIN, "--after-spike", "none", "--out", "s"]) == 0
    converted = ["--time-unit", "us", "--length-unit", "mm", "--after-spike", "none", "--out", "us"]
    assert main(["fit", "spikes_us.csv", "sites_mm.csv", *BIN, *converted]) == 0
    first, second = (pd.read_csv(here / o / "parameters.csv", index_col=0) for o in ("s", "us"))
    # Spikes lie at least 5 µs inside their bins, so rounding to 1 µs moves none to another bin.
    np.testing.assert_allclose(second["estimate"], first["estimate"], rtol=1e-6)


@pytest.mark.parametrize("name", ["a b.csv", "[bold]x.csv", "%s.csv", "ü-漢.csv", "$(ls).csv", "-dash.csv"])
def test_hostile_names_of_tables_are_fine(name: str, here: Path) -> None:
    (here / "spikes.csv").rename(here / name)
    options = [*BIN, "--after-spike", "none", "--kernel", "flat", "--out", "o"]
    assert main(["fit", *options, "--", name, "sites.csv"]) == 0
    assert kf.load_fit(here / "o" / "fit.json").origin.name("spikes") == name


def test_not_converged_is_status_3_and_all_is_written_and_marked(
    here: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from kernelfit.fitting import search

    usual = search.maximise

    def two_steps(*args: object, **named: object) -> object:
        return usual(*args, **{**named, "max_iterations": 2})  # type: ignore[arg-type]

    monkeypatch.setattr(search, "maximise", two_steps)
    assert main(["fit", "spikes.csv", "sites.csv", *BIN, "--out", "o"]) == 3
    assert set(FILES) <= set(names_in(here / "o"))
    printed = capsys.readouterr()
    assert "did not converge" in printed.err
    assert "did not converge" in (here / "o" / "report.html").read_text(encoding="utf-8")
    assert not kf.load_fit(here / "o" / "fit.json").converged


@pytest.mark.parametrize(
    "place", ["kernelfit.cli._console.ProgressLine.__call__", "kernelfit.report.fit_page.render_page"]
)
def test_interruption_leaves_nothing(
    place: str, here: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(place, interrupt)
    assert main(["fit", "spikes.csv", "sites.csv", *BIN, "--after-spike", "none", "--out", "deep/er/o"]) == 130
    assert names_in(here) == ["sites.csv", "spikes.csv"]
    assert "No results were written" in capsys.readouterr().err


@pytest.mark.skipif(os.name != "posix", reason="signals to a process")
def test_ctrl_c_during_a_fit_ends_the_process_cleanly(here: Path) -> None:
    program = (
        "import os, signal, sys\n"
        "from kernelfit.cli import _console, main\n"
        f"_console.ProgressLine.__call__ = lambda self, report: os.kill(os.getpid(), {int(signal.SIGINT)})\n"
        "sys.exit(main())\n"
    )
    command = [sys.executable, "-c", program, "fit", "spikes.csv", "sites.csv", *BIN]
    result = subprocess.run(command, capture_output=True, text=True, check=False, timeout=300)
    assert result.returncode == 130, result.stderr
    assert "Traceback" not in result.stderr
    assert names_in(here) == ["sites.csv", "spikes.csv"]


def test_folder_is_checked_before_the_tables_are_read(
    here: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("kernelfit.cli.fit.read_inputs", interrupt)
    assert main(["fit", "spikes.csv", "sites.csv", "--out", "."]) == 2
    assert "not empty" in capsys.readouterr().err


def test_demo_finds_its_truth(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Source: datasets/README.md. The seed is fixed, so the intervals that hold the truth today hold it always."""
    assert main(["demo", "--out", str(tmp_path / "o")]) == 0
    truth = load_demo_truth().parameters["value"]
    found = pd.read_csv(tmp_path / "o" / "parameters.csv", index_col=0)
    assert list(found.index) == list(truth.index)
    assert (found["lower"] < truth).all()
    assert (truth < found["upper"]).all()
    goodness = pd.read_csv(tmp_path / "o" / "goodness.csv")
    assert len(goodness) >= 42
    page = (tmp_path / "o" / "report.html").read_text(encoding="utf-8")
    assert "invented" in page.lower()
    assert "glass drummer" in page
    printed = capsys.readouterr()
    assert "invented" in printed.err
    assert json.loads((tmp_path / "o" / "fit.json").read_text(encoding="utf-8"))
