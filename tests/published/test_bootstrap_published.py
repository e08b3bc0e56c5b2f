"""Bootstraps by blocks against enumeration and published values."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from test_likelihood_published import AUSTRALIA, regression

import kernelfit as kf
from kernelfit.fitting.null import fit_null
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.inference.bootstrap import OneStep
from kernelfit.inference.bootstrap.ends import bootstrap_p_value
from kernelfit.inference.bootstrap.simulation import live_stretches, simulate_grid
from kernelfit.inference.bootstrap.weight_laws import Multinomial

pytestmark = [pytest.mark.published, pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")]


# --- the mean of a series by blocks that do not overlap -----------------------------------------------------
# Carlstein (1986), Annals of Statistics 14, 1171-1179. A mean is moved by a block as its own mean less the whole one,
# over the number of blocks.

EIGHT = np.array([2.0, 4, 1, 3, 7, 5, 6, 4])


def influence_on_mean(series, length):
    means = series.reshape(-1, length).mean(axis=1)
    return (means - means.mean()) / means.size


@pytest.mark.parametrize(("length", "variance"), [(1, 0.4375), (2, 0.625), (4, 1.125)])
def test_mean_of_eight_numbers(length, variance):
    """Ideal bootstrap variance, own example: all k^k ways to draw k blocks, and the law's own draws."""
    influence, law = influence_on_mean(EIGHT, length), Multinomial()
    k = influence.size
    assert np.sum(influence**2) == pytest.approx(variance, rel=1e-14)
    if k <= 4:
        drawn = np.array(list(itertools.product(range(k), repeat=k)))
        weight = np.stack([np.sum(drawn == g, axis=1) for g in range(k)], axis=1)
        assert np.var(weight @ influence) == pytest.approx(variance, rel=1e-14)
        assert np.mean(weight @ influence) == pytest.approx(0.0, abs=1e-14)
    rng = np.random.default_rng(1)
    means = np.array([law.draw(k, rng) @ influence for _ in range(20_000)])
    error = np.std((means - means.mean()) ** 2) / np.sqrt(means.size)
    assert np.var(means) == pytest.approx(variance, abs=4 * error)


def expected_ratio(length, n=200, rho=0.5):
    """Expected variance by blocks that do not overlap over the true variance of the mean, AR(1): a quadratic form."""
    covariance = rho ** np.abs(np.subtract.outer(np.arange(n), np.arange(n))) / (1 - rho**2)
    k = n // length
    means = np.kron(np.eye(k), np.full((1, length), 1 / length))
    centred = (np.eye(k) - 1 / k) @ means
    return float(np.trace(centred @ covariance @ centred.T)) / k**2 / (covariance.sum() / n**2)


def test_expected_ratio_of_single_bins():
    """Blocks of one: 0.33057, where all schemes agree; the true variance of the mean at n = 200 by the closed form."""
    assert expected_ratio(1) == pytest.approx(0.33057, abs=5e-6)
    true = (4 / 3 / 200) * (3 - (1 / 200) * (1 - 0.5**200) / 0.25)
    covariance = 0.5 ** np.abs(np.subtract.outer(np.arange(200), np.arange(200))) / 0.75
    assert covariance.sum() / 200**2 == pytest.approx(true, rel=1e-12)


@pytest.mark.parametrize("length", [1, 5, 10, 20, 40])
def test_block_variance_of_correlated_series(length):
    """400 series: the mean ratio is what the quadratic form says, and no length brings the true variance back."""
    rng = np.random.default_rng(length)
    n = 200
    noise = rng.standard_normal((400, n))
    series = np.empty_like(noise)
    series[:, 0] = noise[:, 0] / np.sqrt(0.75)
    for t in range(1, n):
        series[:, t] = 0.5 * series[:, t - 1] + noise[:, t]
    true = (0.5 ** np.abs(np.subtract.outer(np.arange(n), np.arange(n))) / 0.75).sum() / n**2
    law, k = Multinomial(), n // length
    ratios = []
    for row in series:
        influence = influence_on_mean(row, length)
        weight = np.array([law.draw(k, rng) for _ in range(100)])
        ratios.append(np.mean((weight @ influence) ** 2) / true)
    error = np.std(ratios) / np.sqrt(len(ratios))
    assert np.mean(ratios) == pytest.approx(expected_ratio(length), abs=4 * error)
    assert expected_ratio(length) < 0.85


# --- one step -----------------------------------------------------------------------------------------------


def test_all_random_signs_of_the_australian_fit():
    """Kline and Santos (2012), J. Econometric Methods 1, 23-41: the covariance of one-step replicates is the sandwich.

    HC0 standard error of the slope 0.0248770888 (statsmodels; all 2^14 signs by enumeration), mean 0. Every bin of 1 s
    is a block of its own.
    """
    fit = regression(AUSTRALIA, np.arange(1.0, 15.0))
    replicator = OneStep("rademacher").replicator(fit, None)
    slopes = []
    for signs in itertools.product((0.0, 2.0), repeat=14):
        slopes.append(replicator.with_weights(np.array(signs)).shared[0])
    assert len(slopes) == 2**14
    assert np.mean(slopes) == pytest.approx(fit.shared[0], abs=1e-13)
    assert np.std(slopes) == pytest.approx(0.0248770888, abs=6e-11)


# --- small facts --------------------------------------------------------------------------------------------


def test_p_value_of_99_replicates():
    """Davison and Hinkley (1997), section 4.2: (1 + 4) / (99 + 1) with 4 at least as extreme."""
    assert bootstrap_p_value(np.arange(99) < 4) == pytest.approx(0.05, rel=1e-15)
    assert bootstrap_p_value(np.zeros(99, dtype=bool)) == 0.01


def test_log_mean_of_simulated_counts():
    """Intercept-only Poisson: the standard error of a log mean is 1 / sqrt(sum y), 0.0675737378 for 219 counts (exact);
    recordings drawn from such a fit scatter by that much."""
    counts = np.array(AUSTRALIA)
    spikes = {"y": np.concatenate([t + 0.5 + 0.4 * np.arange(k) / max(k, 1) for t, k in enumerate(counts)])}
    recording = kf.Recording.from_arrays(spikes | {"x": [0.5]}, [[0.0], [100.0]], [(0.0, 14.0)])
    recording = recording.select(source_only=["x"])
    problem = make_problem(kf.CouplingModel("flat", bin_width=1.0, leak_rate=20.0, after_spike="none"), recording)
    null = fit_null(problem).optimum
    assert 1 / np.sqrt(null.local.information.own[0, 0, 0]) == pytest.approx(0.0675737378, abs=6e-11)
    # bins of 10 ms, so that no bin holds many
    fine = make_problem(kf.CouplingModel("flat", bin_width=0.01, leak_rate=20.0, after_spike="none"), recording)
    estimate = Estimate(np.log([[219 / 14]]), np.zeros(1))
    rng, live = np.random.default_rng(2), live_stretches(recording, 0.01)
    logs = [np.log(simulate_grid(fine, estimate, live, rng).counts_in_sum[0]) for _ in range(1000)]
    assert np.std(logs) == pytest.approx(0.0675737378, abs=4 * 0.0675737378 / np.sqrt(2 * 1000))
    assert np.mean(logs) == pytest.approx(np.log(219), abs=4 * 0.0675737378 / np.sqrt(1000) + 0.5 / 219)
