"""What a recording is worth, by formulas worked out here and by duplicating a recording."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from worlds import model, simulated

import kernelfit as kf


@pytest.fixture(scope="module")
def fit():
    return model("gaussian").fit(simulated(1, duration_s=60.0), threads=2)


def test_worth_by_the_ratio_of_standard_errors(fit):
    worth = fit.worth
    assert list(worth.index) == list(fit.parameters.index)
    ratio = np.maximum(fit.std_errors["ratio"], 1.0)
    np.testing.assert_allclose(worth["spikes"], fit.n_spikes / ratio**2)
    np.testing.assert_allclose(worth["seconds"], fit.duration_s / ratio**2)
    assert (worth["stretches"] <= fit.n_blocks).all()
    assert (worth["stretches"] > 0.3 * fit.n_blocks).all()  # simulated blocks pull about alike


def test_every_unit_recorded_twice_doubles_the_spikes_and_not_their_worth(fit):
    """A copy of each unit at its own site says nothing new: model-based errors shrink by about the square root of 2."""
    rec = fit.recording
    trains = {u: rec.spike_times(u) for u in rec.unit_ids} | {f"{u} again": rec.spike_times(u) for u in rec.unit_ids}
    both = model("gaussian").fit(
        kf.Recording.from_arrays(trains, np.vstack([rec.positions, rec.positions]), rec.windows), threads=2
    )
    assert both.n_spikes == 2 * fit.n_spikes
    np.testing.assert_allclose(both.worth["ratio"] / fit.worth["ratio"], np.sqrt(2.0), rtol=0.12)


@pytest.mark.parametrize(("heavy", "stretches"), [(0.0, 60.0), (1e3, 3.0)])
def test_stretches_count_the_blocks_that_pull(fit, heavy, stretches):
    """Equal pulls count in full (capped at all), a single one that outweighs the rest as three."""
    pull = np.where(np.arange(60) % 2 == 0, 1.0, -1.0)
    pull[0] += heavy
    influence = np.tile(pull[:, None], (1, 3))
    one = dataclasses.replace(fit, uncertainty=dataclasses.replace(fit.uncertainty, block_influence=influence))
    assert one.worth["stretches"].iloc[0] == pytest.approx(stretches, rel=0.1)
