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


def test_stated_windows_are_taken_at_their_word() -> None:
    fit = MODEL.fit(kf.Recording.from_arrays(trains(True), POSITIONS, [(0.0, 60.0)]))
    assert not any("No unit fires from" in n.what for n in fit.notes)
