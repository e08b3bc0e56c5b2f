"""Rescaling: spikes stay inside their bins, every unit draws for itself, and right models give exponential gaps."""

from __future__ import annotations

import numpy as np
import pytest
from dense import compensator_from_dense

from kernelfit.diagnostics.ks import known_p_value, ks_distance
from kernelfit.diagnostics.rescaling import bernoulli_rescale, place_events, rescale, uniform_scale
from kernelfit.errors import ArgumentError


@pytest.fixture
def two_units():
    """Rates that change from bin to bin; bins with 0 to 5 spikes."""
    rng = np.random.default_rng(5)
    expected = 0.4 + 0.6 * rng.random((400, 2))
    return expected, rng.poisson(expected)


def test_events_stay_in_their_bins_in_order():
    before, within = np.array([0.0, 0.7, 2.0]), np.array([0.5, 0.3, 0.25])
    count = np.array([1, 4, 2])
    times = place_events(before, within, count, np.random.default_rng(0))
    assert (np.diff(times) >= 0).all()
    row = np.repeat([0, 1, 2], count)
    assert (times >= before[row]).all()
    assert (times < (before + within)[row]).all()


def test_every_spike_is_placed_once(two_units):
    expected, counts = two_units
    assert counts.max() >= 3  # several spikes in a bin do occur here
    units, pooled = rescale(compensator_from_dense(expected, counts), seed=0)
    assert [t.n_spikes for t in units] == counts.sum(axis=0).tolist()
    assert pooled.n_spikes == counts.sum()
    assert pooled.total == pytest.approx(sum(t.total for t in units), rel=1e-12)


def test_first_and_last_incomplete_stretch_are_left_out(two_units):
    units, _ = rescale(compensator_from_dense(*two_units), seed=0)
    for train in units:
        assert train.gaps.size == train.n_spikes - 1
        assert train.gaps.sum() == pytest.approx(train.times[-1] - train.times[0], rel=1e-12)


def test_a_pause_between_windows_is_no_gap():
    """Bins outside the windows never reach the compensator: cutting the recording in two changes nothing."""
    expected = np.full((6, 1), 0.5)
    counts = np.array([[1], [0], [1], [0], [1], [1]])
    whole = compensator_from_dense(expected, counts)
    units, _ = rescale(whole, seed=3)
    assert units[0].total == 3.0
    assert units[0].times[-1] <= 3.0


def test_same_seed_same_draws(two_units):
    compensator = compensator_from_dense(*two_units)
    first, again, other = (rescale(compensator, seed=s)[0][0].times for s in (1, 1, 2))
    np.testing.assert_array_equal(first, again)
    assert (first != other).any()


def test_a_unit_does_not_depend_on_the_others(two_units):
    expected, counts = two_units
    both, _ = rescale(compensator_from_dense(expected, counts), seed=1)
    changed = counts.copy()
    changed[:, 0] = 0
    alone, _ = rescale(compensator_from_dense(expected, changed), seed=1)
    np.testing.assert_array_equal(both[1].times, alone[1].times)
    more, _ = rescale(compensator_from_dense(np.hstack([expected, expected]), np.hstack([counts, counts])), seed=1)
    np.testing.assert_array_equal(both[0].times, more[0].times)


@pytest.mark.parametrize("scale", [0.05, 0.5, 3.0])
def test_right_rates_give_exponential_gaps(scale):
    """Exact for Poisson counts, however coarse the bins. 0.001: one seed in a thousand would fail by chance."""
    rng = np.random.default_rng(11)
    expected = scale * (0.2 + rng.random((40_000, 1)))
    units, _ = rescale(compensator_from_dense(expected, rng.poisson(expected)), seed=0)
    gaps = units[0].gaps
    assert known_p_value(ks_distance(uniform_scale(gaps)), gaps.size) > 0.001
    # Mean and variance of Exp(1) with 4 standard errors (variance of the sample variance: 8/n).
    assert gaps.mean() == pytest.approx(1.0, abs=4 / np.sqrt(gaps.size))
    assert gaps.var() == pytest.approx(1.0, abs=4 * np.sqrt(8 / gaps.size))


def test_wrong_rates_do_not():
    rng = np.random.default_rng(12)
    expected = np.where(np.arange(20_000)[:, np.newaxis] % 2000 < 1000, 0.02, 0.18)
    flat = np.full_like(expected, 0.1)
    units, _ = rescale(compensator_from_dense(flat, rng.poisson(expected)), seed=0)
    assert known_p_value(ks_distance(uniform_scale(units[0].gaps)), units[0].gaps.size) < 1e-6


# --- at most one spike per bin ---------------------------------------------------------------------------


def test_clipped_counts_of_a_changing_rate_give_exponential_intervals():
    rng = np.random.default_rng(13)
    mean = 0.1 + 0.5 * rng.random(60_000)
    spiked = rng.poisson(mean) > 0
    intervals = bernoulli_rescale(-np.expm1(-mean), spiked, rng.random(spiked.sum()))
    assert known_p_value(ks_distance(uniform_scale(intervals)), intervals.size) > 0.001


def test_no_spike_gives_no_interval():
    assert bernoulli_rescale(np.full(5, 0.1), np.zeros(5, dtype=bool), np.empty(0)).size == 0


@pytest.mark.parametrize(
    ("probability", "draws", "told"),
    [
        (np.array([0.1, 1.0]), np.array([0.5]), "1 - exp"),
        (np.array([-0.1, 0.5]), np.array([0.5]), "1 - exp"),
        (np.array([0.1, np.nan]), np.array([0.5]), "1 - exp"),
        (np.array([0.1, 0.5]), np.array([0.5, 0.5]), "one draw per spike"),
        (np.array([0.1]), np.array([0.5]), "one probability per bin"),
    ],
)
def test_arguments_that_do_not_fit_are_refused(probability, draws, told):
    with pytest.raises(ArgumentError, match=told):
        bernoulli_rescale(probability, np.array([False, True]), draws)
