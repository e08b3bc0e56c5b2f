"""The demo recording is what its README and its truth say. Expected values: datasets/README.md."""

from __future__ import annotations

import gzip
import importlib.machinery
import importlib.util
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from kernelfit import load_demo
from kernelfit.demo import _table, load_demo_truth

ROOT = Path(__file__).resolve().parent.parent
DATASETS = ROOT / "datasets"
SCRIPT = ROOT / "scripts" / "make_demo_recording"


def test_recording_is_as_described() -> None:
    recording = load_demo()
    assert recording.n_units == 42
    assert recording.n_coordinates == 2
    assert recording.windows.to_numpy().tolist() == [[0.0, 150.0], [170.0, 320.0]]
    assert recording.units["n_spikes"].eq(0).sum() == 1
    assert recording.units.loc["d39", "n_spikes"] == 0
    assert np.unique(recording.positions, axis=0).shape == (41, 2)
    np.testing.assert_array_equal(
        recording.positions[recording.index_of("d24")], recording.positions[recording.index_of("d25")]
    )
    assert recording.n_spikes == sum(t.size for t in recording.trains), "nothing was heard in the pause"


def test_truth_is_as_described() -> None:
    truth = load_demo_truth()
    assert truth.parameters["value"].to_dict() == {"amplitude": 0.2, "length_um": 120.0, "leak_rate": 40.0}
    assert truth.kernel(np.array([truth.reference_um])) == pytest.approx([0.2])
    assert truth.reference_um == pytest.approx(70.9, abs=0.05)
    assert list(truth.baselines.index) == list(load_demo().unit_ids)
    assert truth.baselines.loc["d39", "rate_hz"] == 0.0
    assert truth.unit_ids == load_demo().unit_ids
    assert truth.after_spike_coefficients.tolist() == [-4.0, 0.3]
    assert truth.after_spike_constants_s == pytest.approx([0.00316, 0.0316], rel=1e-2)


def test_files_are_small_and_carry_no_date() -> None:
    assert sum(f.stat().st_size for f in DATASETS.glob("demo.*")) < 3_000_000
    header = (DATASETS / "demo.spikes.csv.gz").read_bytes()[:10]
    assert header[4:8] == b"\0\0\0\0", "bytes 4 to 7 of a gzip file are its time stamp (RFC 1952)"


def test_script_makes_the_same_recording_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    loader = importlib.machinery.SourceFileLoader("make_demo_recording", str(SCRIPT))
    spec = importlib.util.spec_from_loader(loader.name, loader)
    assert spec is not None
    script = importlib.util.module_from_spec(spec)
    monkeypatch.setattr(sys, "dont_write_bytecode", True)  # no __pycache__ in scripts/
    loader.exec_module(script)
    monkeypatch.setattr(sys, "argv", [str(SCRIPT), str(tmp_path)])
    script.main()
    for file in sorted(tmp_path.iterdir()):
        made, kept = file.read_bytes(), (DATASETS / file.name).read_bytes()
        if file.suffix == ".gz":  # how well zlib packs differs from version to version
            made, kept = gzip.decompress(made), gzip.decompress(kept)
        assert made == kept, file.name
    assert len(list(tmp_path.iterdir())) == 4


def test_spikes_are_sorted_and_unrepeated() -> None:
    spikes = pd.read_csv(DATASETS / "demo.spikes.csv.gz")
    assert spikes["time_s"].is_monotonic_increasing
    assert not spikes.duplicated().any()


def test_tables_are_found_in_an_installed_package_first(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    installed = tmp_path / "kernelfit" / "demo_data"
    installed.mkdir(parents=True)
    (installed / "demo.sites.csv").write_text("unit,x_um\n")
    monkeypatch.setattr("kernelfit.demo.files", lambda _: tmp_path / "kernelfit")
    assert _table("demo.sites.csv") == installed / "demo.sites.csv"
