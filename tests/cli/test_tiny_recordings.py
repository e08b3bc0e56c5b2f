"""Recordings with next to nothing in them: every command ends with a result or a refusal in words.

No numbers are expected of such recordings; what is checked is the contract of the exit status: 0 done, 2 refused with
what to do, 3 not converged; never 1, a fault of kernelfit.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import kernelfit as kf
from kernelfit.cli import main

PLACES = [[0.0, 0.0], [100.0, 0.0], [0.0, 130.0]]


def steady(seed: int, n_spikes: int) -> list[float]:
    """Times within 20 s, to 0.1 ms."""
    return np.unique(np.round(np.random.default_rng(seed).uniform(0.0, 20.0, n_spikes), 4)).tolist()


WHOLE = [(0.0, 20.0)]
TINY: dict[str, tuple[list[list[float]], list[tuple[float, float]]]] = {
    "one unit": ([steady(1, 50)], WHOLE),
    "two units": ([steady(1, 50), steady(2, 50)], WHOLE),
    "two units of one spike": ([[3.0], [3.004]], WHOLE),
    "three units with five spikes": ([[1.0, 5.0], [1.01, 9.0], [7.0]], WHOLE),
    "one spike": ([[1.0], [], []], WHOLE),
    "all spikes in one unit": ([steady(1, 200), [], []], WHOLE),
    "all spikes in one bin": ([[1.0001, 1.0002], [1.0003], [1.0004]], WHOLE),
    "all spikes in the first bin": ([[0.0001], [0.0003], [0.0004]], WHOLE),
    "all spikes in the last bin": ([[19.9991], [19.9993], [19.9994]], WHOLE),
    "the same spikes in all units": ([[1.0, 2.0, 3.0, 4.0]] * 3, WHOLE),
    "many spikes of one unit in one bin": ([(1 + 1e-6 * np.arange(500)).tolist(), steady(1, 50), steady(2, 50)], WHOLE),
    "a spike in every bin": ([(0.0005 + 0.001 * np.arange(1000)).tolist()] * 3, [(0.0, 1.0)]),
    "a window of one bin": ([[1.0001, 1.0002], [1.0003], [1.0004]], [(1.0, 1.001)]),
    "a window of two bins": ([[1.0001, 1.0012], [1.0003], [1.0014]], [(1.0, 1.002)]),
    "windows of one bin, one unit in them": ([[1.0005, 4.0005], [0.9, 3.99], [3.9]], [(1.0, 1.001), (4.0, 4.001)]),
}


def recording(name: str) -> kf.Recording:
    trains, windows = TINY[name]
    return kf.Recording.from_arrays(dict(zip("abc", trains, strict=False)), PLACES[: len(trains)], windows)


def tables(recording: kf.Recording, folder: Path) -> list[str]:
    """The recording as tables, and the arguments that name them."""
    kf.write_recording(recording, folder)
    spikes, sites, windows = (str(folder / f"{name}.csv") for name in ("spikes", "sites", "windows"))
    return [spikes, sites, "--windows", windows]


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
@pytest.mark.parametrize("name", TINY)
def test_a_tiny_recording_is_shown_and_fitted_or_refused_in_words(
    name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    named = tables(recording(name), tmp_path / "t")
    assert main(["inspect", *named]) == 0
    status = main(["fit", *named, "--threads", "1", "--out", str(tmp_path / "out")])
    said = capsys.readouterr().err
    assert status in (0, 2, 3), said
    assert "Traceback" not in said
    assert (tmp_path / "out" / "report.html").is_file() is (status != 2)


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
@pytest.mark.parametrize("name", TINY)
@pytest.mark.parametrize(
    "model",
    [
        kf.CouplingModel(kernel="flat", after_spike="none"),
        kf.CouplingModel(kernel="power-law", leak_rate=50.0),
        kf.CouplingModel(kernel=kf.kernels.Spline(n_basis=4, smoothing=1.0)),
    ],
    ids=["flat", "power-law", "spline"],
)
def test_everything_of_such_a_fit_can_be_asked_for(name: str, model: kf.CouplingModel) -> None:
    try:
        fit = model.fit(recording(name), threads=1)
    except kf.KernelfitError as refused:
        assert str(refused).endswith((".", "?"))  # noqa: PT017 - either outcome is right
        return
    assert fit.summary()
    assert len(fit.baselines) == len(fit.unit_ids)
    assert len(fit.kernel_band([100.0, 150.0], simultaneous=True)) == 2
    assert len(fit.goodness().units) == len(fit.unit_ids)


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
@pytest.mark.parametrize("bin_ms", ["1000", "10000", "20000"])
def test_bins_as_wide_as_the_recording(bin_ms: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    times = {u: steady(k, 60) for k, u in enumerate("abc")}
    named = tables(kf.Recording.from_arrays(times, PLACES, WHOLE), tmp_path / "t")
    status = main(["fit", *named, "--bin-ms", bin_ms, "--out", str(tmp_path / "o")])
    assert status in (0, 2, 3), capsys.readouterr().err
