"""Ends of intervals from replicates: against scipy's bootstrap on the same resamples, and by hand."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats

from kernelfit.inference.bootstrap.ends import (
    acceleration,
    basic_ends,
    bca_ends,
    percentile_ends,
    replicates_needed,
    studentised_ends,
)

LEVEL = 0.9


@pytest.fixture(scope="module")
def sample():
    return np.random.default_rng(7).exponential(size=25) ** 1.5  # skewed, so that the methods differ


@pytest.fixture(scope="module")
def by_scipy(sample):
    """Intervals of scipy for the mean, all from the same resamples, and those resamples' means."""
    found, means = {}, None
    for method in ("percentile", "basic", "BCa"):
        result = scipy.stats.bootstrap(
            (sample,), np.mean, n_resamples=999, confidence_level=LEVEL, method=method, rng=np.random.default_rng(1)
        )
        found[method] = tuple(result.confidence_interval)
        means = result.bootstrap_distribution
    return found, means


def test_percentile_and_basic_ends_are_those_of_scipy(sample, by_scipy):
    found, means = by_scipy
    ends = percentile_ends(means, LEVEL, "linear")  # scipy's rule for quantiles
    assert (ends.lower, ends.upper) == pytest.approx(found["percentile"], rel=1e-12)
    ends = basic_ends(sample.mean(), means, LEVEL, "linear")
    assert (ends.lower, ends.upper) == pytest.approx(found["basic"], rel=1e-12)


def test_bca_ends_of_a_mean_are_those_of_scipy(sample, by_scipy):
    """The influence of an observation on a mean is (x - mean) / n; scipy's acceleration is the jackknife's."""
    found, means = by_scipy
    ends = bca_ends(sample.mean(), means, (sample - sample.mean()) / sample.size, LEVEL, "linear")
    assert (ends.lower, ends.upper) == pytest.approx(found["BCa"], rel=1e-12)
    assert ends.lower > found["percentile"][0]  # the correction is not nothing here


def test_acceleration_of_a_mean():
    """Efron (1987): skewness over 6 sqrt(n); of (0, 0, 3): centred (-1, -1, 2), 6 / (6 6^1.5)."""
    assert acceleration(np.array([0.0, 0.0, 3.0])) == pytest.approx(6.0**-1.5, rel=1e-14)
    assert acceleration(np.ones(4)) == 0.0


def test_studentised_ends_of_a_mean_by_hand(sample):
    """t of each resample from its own standard deviation; the formula of Davison and Hinkley (1997), section 2.4."""
    rng = np.random.default_rng(3)
    resamples = rng.choice(sample, size=(999, sample.size))
    means, errors = resamples.mean(axis=1), resamples.std(axis=1, ddof=1) / np.sqrt(sample.size)
    mean, error = sample.mean(), sample.std(ddof=1) / np.sqrt(sample.size)
    t = np.sort((means - mean) / errors)
    ends = studentised_ends(mean, error, means, errors, LEVEL)
    assert (ends.lower, ends.upper) == pytest.approx((mean - t[949] * error, mean - t[49] * error), rel=1e-12)


def test_ends_are_order_statistics():
    """(B + 1) p = 5 and 195 of 199: Davison and Hinkley (1997), section 5.2.1."""
    ends = percentile_ends(np.random.default_rng(0).permutation(np.arange(1.0, 200.0)), 0.95)
    assert (ends.lower, ends.upper) == pytest.approx((5.0, 195.0), rel=1e-12)


def test_percentile_ends_are_equivariant_and_basic_ones_are_not():
    replicates = np.random.default_rng(2).normal(size=399)
    plain, logs = percentile_ends(np.exp(replicates), 0.95), percentile_ends(replicates, 0.95)
    assert (plain.lower, plain.upper) == pytest.approx((np.exp(logs.lower), np.exp(logs.upper)), rel=1e-12)
    basic = basic_ends(1.0, np.exp(replicates), 0.95)
    assert basic.lower < 0 < np.exp(basic_ends(0.0, replicates, 0.95).lower)


@pytest.mark.parametrize(("level", "needed"), [(0.8, 9), (0.9, 19), (0.95, 39), (0.99, 199)])
def test_too_few_replicates_have_no_interval(level, needed):
    assert replicates_needed(level) == needed
    assert np.isfinite(percentile_ends(np.arange(float(needed)), level).lower)
    short = percentile_ends(np.arange(needed - 1.0), level)
    assert np.isnan([short.lower, short.upper]).all()
    assert f"at least {needed}" in short.note


def test_what_bca_cannot_do_has_a_reason():
    replicates = np.random.default_rng(5).normal(size=99)
    influence = np.random.default_rng(6).normal(size=30)
    assert "one side" in bca_ends(-10.0, replicates, influence, 0.9).note
    one_large = np.concatenate([np.zeros(5), [1.0]])
    assert np.isfinite(acceleration(one_large))
    few = bca_ends(np.quantile(replicates, 0.98), replicates, influence, 0.9)
    assert "beyond the outermost of 99" in few.note
    assert np.isnan(few.lower)
