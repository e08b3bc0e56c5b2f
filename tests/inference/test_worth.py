"""What a recording is worth, by formulas worked out here and by duplicating a recording."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from scipy.signal import lfilter
from worlds import model, simulated

import kernelfit as kf
from kernelfit.inference.worth import carrying_stretches, independent_stretches


@pytest.fixture(scope="module")
def fit():
    return model("gaussian").fit(simulated(1, duration_s=60.0), threads=2)


def test_worth_by_the_ratio_of_standard_errors(fit):
    worth = fit.worth
    assert list(worth.index) == list(fit.parameters.index)
    ratio = np.maximum(fit.std_errors["ratio"], 1.0)
    np.testing.assert_allclose(worth["spikes"], fit.n_spikes / ratio**2)
    np.testing.assert_allclose(worth["seconds"], fit.duration_s / ratio**2)
    assert (worth["independent_stretches"] <= fit.n_blocks).all()
    assert (worth["independent_stretches"] > 0.5 * fit.n_blocks).all()  # |r| of 1/sqrt(G) by chance alone
    assert (worth["carrying_stretches"] > 0.1 * fit.n_blocks).all()  # simulated blocks pull about alike: near G/3


def test_every_unit_recorded_twice_doubles_the_spikes_and_not_their_worth(fit):
    """A copy of each unit at its own site says nothing new: model-based errors shrink by about the square root of 2."""
    rec = fit.recording
    trains = {u: rec.spike_times(u) for u in rec.unit_ids} | {f"{u} again": rec.spike_times(u) for u in rec.unit_ids}
    both = model("gaussian").fit(
        kf.Recording.from_arrays(trains, np.vstack([rec.positions, rec.positions]), rec.windows), threads=2
    )
    assert both.n_spikes == 2 * fit.n_spikes
    np.testing.assert_allclose(both.worth["ratio"] / fit.worth["ratio"], np.sqrt(2.0), rtol=0.12)


@pytest.mark.parametrize(("heavy", "stretches"), [(0.0, 60.0), (1e3, 1.0)])
def test_carrying_stretches_are_the_blocks_that_pull(fit, heavy, stretches):
    """Equal pulls count in full, a single one that outweighs the rest as one."""
    pull = np.where(np.arange(60) % 2 == 0, 1.0, -1.0)
    pull[0] += heavy
    assert with_influence(fit, pull).worth["carrying_stretches"].iloc[0] == pytest.approx(stretches, rel=0.05)


def test_carrying_stretches_are_a_third_of_all_where_pulls_are_normal():
    """The kurtosis of the normal law is 3."""
    pull = np.random.default_rng(0).standard_normal((20_000, 2))
    np.testing.assert_allclose(carrying_stretches(pull), 20_000 / 3, rtol=0.05)


def test_independent_stretches_are_fewer_where_neighbours_go_together(fit):
    """Signs + + - - : of 59 pairs of neighbours 30 are alike and 29 are not. In fours: 42 and 13 of 55."""
    in_twos = np.tile([1.0, 1.0, -1.0, -1.0], 15)
    in_fours = np.tile([1.0] * 4 + [-1.0] * 4, 8)[:56]
    r = (42 - 13) / 56
    twos = with_influence(fit, in_twos).worth["independent_stretches"].iloc[0]
    fours = with_influence(fit, in_fours).worth["independent_stretches"].iloc[0]
    assert twos == pytest.approx(60 * (1 - 1 / 60) / (1 + 1 / 60))
    assert fours == pytest.approx(56 * (1 - r) / (1 + r))


def test_independent_stretches_are_never_more_than_there_are(fit):
    alternating = np.where(np.arange(60) % 2 == 0, 1.0, -1.0)
    assert with_influence(fit, alternating).worth["independent_stretches"].iloc[0] == 60.0


def test_independent_stretches_leave_out_of_an_autoregression_what_its_mean_does():
    """The variance of a mean of G values of a first-order autoregression is (1 + r)/(1 - r)/G times theirs."""
    rng = np.random.default_rng(1)
    pull = lfilter([1.0], [1.0, -0.5], rng.standard_normal((50_000, 2)), axis=0)
    np.testing.assert_allclose(independent_stretches(pull), 50_000 / 3, rtol=0.05)


def test_what_means_nothing_without_coupling_is_worth_nothing(fit):
    none = dataclasses.replace(fit, verdict=dataclasses.replace(fit.verdict, found=False))
    assert none.worth.loc[["length_um", "leak_rate"]].isna().all(axis=None)
    assert none.worth.loc["amplitude"].notna().all()


def with_influence(fit, pull):
    influence = np.tile(pull[:, None], (1, fit.shared.size))
    return dataclasses.replace(fit, uncertainty=dataclasses.replace(fit.uncertainty, block_influence=influence))
