"""A pause of the acquisition that no windows table names is said aloud: it would be taken for silence."""

from __future__ import annotations

import numpy as np
import pytest

import kernelfit as kf

POSITIONS = np.array([[0.0, 0.0], [100.0, 0.0], [0.0, 100.0], [100.0, 100.0]])
MODEL = kf.CouplingModel(kernel="flat", bin_width=0.01, leak_rate=20.0, after_spike="none")


def trains(pause: bool) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(5)
    times = [np.sort(rng.uniform(0.0, 60.0, 300)) for _ in POSITIONS]
    return {f"u{k}": t[(t < 20.0) | (t > 32.0)] if pause else t for k, t in enumerate(times)}


@pytest.mark.parametrize("pause", [True, False])
def test_a_pause_without_windows_is_a_warning(pause: bool) -> None:
    fit = MODEL.fit(kf.Recording.from_arrays(trains(pause), POSITIONS))
    said = [n for n in fit.notes if n.severity == "warning" and "No unit fires from" in n.what]
    assert len(said) == pause
    if pause:
        assert "windows table" in said[0].remedy


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
@pytest.mark.parametrize(
    ("shift_s", "window", "pause"),
    [
        (0.0, "from 0 s (floor of the first spike) to 60 s", "from 19.9"),
        (112_595.0, "from 112,595 s (floor of the first spike) to 112,655 s", "from 112,615 s to 112,627 s"),
        (1.7e9, "from 1,700,000,000 s (floor of the first spike) to 1,700,000,060 s", "from 1,700,000,020 s to"),
    ],
)
def test_times_of_notes_are_written_out(shift_s: float, window: str, pause: str) -> None:
    moved = {unit: times + shift_s for unit, times in trains(True).items()}
    said = " ".join(n.what for n in MODEL.fit(kf.Recording.from_arrays(moved, POSITIONS)).notes)
    assert f"the window runs {window}" in said
    assert f"No unit fires {pause}" in said
    assert "e+" not in said


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_counts_of_notes_have_their_thousands_apart() -> None:
    fast = {unit: np.linspace(0.001, 59.999, 2_000) for unit in ("u0", "u1", "u2", "u3")}
    recording = kf.Recording.from_arrays(fast, POSITIONS, [(0.0, 30.0)], exclusions=[(10.0, 25.0)])
    said = " ".join(n.what for n in MODEL.fit(recording).notes)
    assert "4,000 spikes lie outside the windows" in said
    assert "1,996 spikes lie inside exclusions" in said  # 499 of each unit, a spike every 30 ms
    one = {unit: times[:900] for unit, times in fast.items()}
    one["u0"] = np.append(one["u0"], 45.0)
    said = " ".join(n.what for n in MODEL.fit(kf.Recording.from_arrays(one, POSITIONS, [(0.0, 30.0)])).notes)
    assert "1 spike lies outside the windows" in said


def test_stated_windows_are_taken_at_their_word() -> None:
    fit = MODEL.fit(kf.Recording.from_arrays(trains(True), POSITIONS, [(0.0, 60.0)]))
    assert not any("No unit fires from" in n.what for n in fit.notes)
