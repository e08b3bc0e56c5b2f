"""KS distance, its two nulls and the bands: against other libraries, closed forms and simulation."""

from __future__ import annotations

import importlib.util
from math import factorial, log
from pathlib import Path

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.diagnostic import lilliefors

from kernelfit.diagnostics import exponential_null_table as table
from kernelfit.diagnostics import ks
from kernelfit.errors import ArgumentError

SCRIPT = Path(__file__).resolve().parents[2] / "scripts" / "make_exponential_null_table.py"


def normalised_distances(n, n_samples, rng):
    """KS distances of n exponential gaps over their mean, one per sample: written apart from the package."""
    x = rng.exponential(size=(n_samples, n))
    z = np.sort(1 - np.exp(-x / x.mean(axis=1, keepdims=True)), axis=1)
    rank = np.arange(1, n + 1)
    return np.maximum((rank / n - z).max(axis=1), (z - (rank - 1) / n).max(axis=1))


@pytest.mark.parametrize("n", [1, 2, 7, 300])
def test_distance_and_known_p_value_are_those_of_a_ks_test(n):
    z = np.random.default_rng(n).random(n)
    expected = stats.kstest(z, "uniform", mode="exact")
    assert ks.ks_distance(z) == pytest.approx(expected.statistic, rel=1e-12)
    assert ks.known_p_value(ks.ks_distance(z), n) == pytest.approx(expected.pvalue, rel=1e-9)


@pytest.mark.parametrize("n", [1, 5, 40, 3000])
@pytest.mark.parametrize("level", [0.8, 0.95, 0.999])
def test_known_critical_distance_inverts_the_p_value(n, level):
    assert ks.known_p_value(ks.known_critical_distance(n, level), n) == pytest.approx(1 - level, abs=1e-9)


@pytest.mark.parametrize("n", [5, 6, 14, 33, 90, 400, 2500, 10**6])
@pytest.mark.parametrize("level", [0.05, 0.5, 0.95, 0.9999])
def test_estimated_mean_critical_distance_inverts_the_p_value(n, level):
    distance = ks.estimated_mean_critical_distance(n, level)
    assert ks.estimated_mean_p_value(distance, n) == pytest.approx(1 - level, rel=1e-8)


@pytest.mark.parametrize(("n", "n_samples"), [(5, 40_000), (9, 40_000), (23, 40_000), (150, 20_000), (3000, 2_000)])
def test_estimated_mean_p_value_is_uniform_under_its_null(n, n_samples):
    """Simulation: P(p <= a) = a, with 4 standard errors of the share."""
    distances = normalised_distances(n, n_samples, np.random.default_rng(n))
    p_values = np.array([ks.estimated_mean_p_value(d, n) for d in distances])
    for a in (0.9, 0.5, 0.2, 0.05, 0.01):
        error = 4 * np.sqrt(a * (1 - a) / n_samples)
        assert np.mean(p_values <= a) == pytest.approx(a, abs=error)


@pytest.fixture(scope="module")
def script():
    """The script that makes the table, as a module."""
    spec = importlib.util.spec_from_file_location(SCRIPT.stem, SCRIPT)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.mark.parametrize(("n", "distance"), [(5, 0.65), (5, 0.7), (5, 0.77), (6, 0.7), (8, 0.76)])
def test_far_tail_of_small_samples_has_a_closed_form(script, n, distance):
    """With d above (n - 2)/n and 1 - 1/e only the second largest gap can do it.

    P(D >= d) = n! a^(n-1), a = -log(1 - (n-1)/n + d) / n: any other order statistic would have to lie below 0, or
    make the gaps sum to more than n means. The n - 1 smaller gaps then fill a cube of side a in the simplex, where
    gaps divided by their sum have density (n - 1)!, and n of them can be the largest.
    """
    a = -log(1 - (n - 1) / n + distance) / n
    expected = factorial(n) * a ** (n - 1)
    # Double precision leaves about 1e-14 of the probability, hence the absolute part.
    assert 1.0 - script.probability_below(distance, n) == pytest.approx(expected, rel=1e-8, abs=2e-14)
    # Interpolation between the table's columns is at its worst here, where the curve of n = 5 ends.
    assert ks.estimated_mean_p_value(distance, n) == pytest.approx(expected, rel=5e-2)


@pytest.mark.parametrize("n", [10, 17, 50, 100, 800])
def test_estimated_mean_p_value_agrees_with_a_simulated_table(n):
    """The table of statsmodels: 1e7 samples, linear between percentiles 2.5 % apart, which costs up to 0.002.

    Only at sample sizes of that table: between them it is linear in n and up to 0.02 too high.
    """
    rng = np.random.default_rng(n)
    compared = 0
    for _ in range(300):
        distance, p_value = lilliefors(rng.exponential(size=n), dist="exp")
        if 0.011 < p_value < 0.099:
            assert ks.estimated_mean_p_value(distance, n) == pytest.approx(p_value, abs=0.003)
            compared += 1
    assert compared > 10


@pytest.mark.parametrize("n", [5, 8, 13, 27, 65, 333, 2500, 10**5])
def test_estimated_mean_p_value_falls_from_one_to_its_floor(n):
    p_values = np.array([ks.estimated_mean_p_value(d, n) for d in np.linspace(0.0, 1.0, 2000)])
    assert p_values[0] == 1.0
    assert p_values[-1] == ks.SMALLEST_P_VALUE
    assert (np.diff(p_values) <= 0).all()


def test_large_samples_run_into_the_limit():
    # Limit points of sqrt(n) D from a simulation at n = 6400 with 1e5 samples (our own): 0.992, 1.092, 1.294,
    # each good to about 0.004 (standard error of a simulated quantile, and the step from 6400 to the limit).
    for level, limit in ((0.90, 0.992), (0.95, 1.092), (0.99, 1.294)):
        n = 10**8
        assert ks.estimated_mean_critical_distance(n, level) * np.sqrt(n) == pytest.approx(limit, abs=0.005)


def test_fresh_entries_of_the_table_are_those_that_are_kept(script):
    for n in (5, 11, 100):
        row = table.LOG_ODDS[table.SAMPLE_SIZES.index(n)]
        for scaled, kept in list(zip(table.SCALED_DISTANCE, row, strict=True))[2:30:9]:
            fresh = script.log_odds(1.0 - script.probability_below(script.distance(scaled, n), n))
            assert fresh == pytest.approx(kept, abs=6e-5)  # kept to four decimals
    # Between the table's rows and columns the p-value is interpolated: 0.1 %.
    for n, scaled in ((14, 0.83), (45, 1.12), (300, 1.37), (1700, 1.71)):
        distance = script.distance(scaled, n)
        exact = 1.0 - script.probability_below(distance, n)
        assert ks.estimated_mean_p_value(distance, n) == pytest.approx(exact, rel=1e-3)


@pytest.mark.parametrize(
    "call",
    [
        lambda: ks.estimated_mean_p_value(0.3, 4),
        lambda: ks.estimated_mean_critical_distance(4),
        lambda: ks.estimated_mean_critical_distance(50, 1.0),
        lambda: ks.known_critical_distance(50, 0.0),
        lambda: ks.dkw_half_width(50, 95),
    ],
)
def test_arguments_out_of_range_are_refused(call):
    with pytest.raises(ArgumentError):
        call()
