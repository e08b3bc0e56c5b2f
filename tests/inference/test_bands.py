"""Simultaneous bands: sup-t critical values against published ones and quadrature, and their order."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.stats import chi, norm

from kernelfit.inference.bands import N_DRAWS, scheffe_critical, sidak_critical, standard_errors, sup_t_critical
from kernelfit.inference.intervals import critical_value

# A critical value here is the 95 % quantile of N_DRAWS draws: its standard error is sqrt(0.05 0.95 / N_DRAWS) over the
# density of the largest |t| there, which the quadrature below gives. Tests allow four of them.


def coverage(c, n, correlation):
    """P(max of n standard normals with equal correlation <= c in absolute value), by quadrature."""
    if correlation == 0.0:
        return float((2 * norm.cdf(c) - 1) ** n)
    root, rest = np.sqrt(correlation), np.sqrt(1 - correlation)

    def given_common(z):
        return norm.pdf(z) * (norm.cdf((c - root * z) / rest) - norm.cdf((-c - root * z) / rest)) ** n

    return quad(given_common, -9, 9, points=[0.0], limit=200, epsabs=1e-10)[0]


def monte_carlo_error(c, n, correlation):
    density = (coverage(c + 1e-3, n, correlation) - coverage(c - 1e-3, n, correlation)) / 2e-3
    return np.sqrt(0.05 * 0.95 / N_DRAWS) / density


def equal_correlation(n, correlation):
    return np.full((n, n), correlation) + (1 - correlation) * np.eye(n)


# --- CHECKS of independent points ---------------------------------------------------------------------------
# Sidak (1967), J. Amer. Statist. Assoc. 62, 626; the same as the studentised maximum modulus at infinite degrees of
# freedom, Stoline and Ury (1979), Technometrics 21, 87 (from memory; recomputed from Phi^-1((1 + 0.95^(1/K))/2)).
SIDAK = {
    # points: 90 %, 95 %, 99 %
    1: (1.644854, 1.959964, 2.575829), 2: (1.948822, 2.236477, 2.806225), 3: (2.114054, 2.387738, 2.934161),
    5: (2.310660, 2.568763, 3.089039), 10: (2.559551, 2.799625, 3.289255), 20: (2.791023, 3.015995, 3.479479),
    50: (3.075005, 3.283480, 3.717773), 100: (3.275956, 3.473979, 3.889386),
}  # fmt: skip


@pytest.mark.parametrize("n", SIDAK)
def test_sidak_table(n):
    for level, printed in zip((0.9, 0.95, 0.99), SIDAK[n], strict=True):
        assert sidak_critical(n, level) == pytest.approx(printed, abs=5e-7)


# Bonferroni at 95 %, Phi^-1(1 - 0.025/K): the same table. Scheffe (1953), Biometrika 40, 87: sqrt of the chi-square.
BONFERRONI = {2: 2.241403, 5: 2.575829, 10: 2.807034, 20: 3.023341, 50: 3.290527, 100: 3.480756}
SCHEFFE = {2: 2.447747, 5: 3.327236, 10: 4.278672}


@pytest.mark.parametrize("n", SCHEFFE)
def test_published_order_of_bands_for_independent_points(n):
    """pointwise <= sup-t <= Sidak <= Bonferroni <= Scheffe, at their printed values."""
    assert scheffe_critical(n, 0.95) == pytest.approx(SCHEFFE[n], abs=5e-7)
    got = sup_t_critical(np.eye(n), np.eye(n), 0.95, np.inf)
    error = 4 * monte_carlo_error(SIDAK[n][1], n, 0.0)
    assert critical_value(0.95, np.inf) <= got <= SIDAK[n][1] + error < SCHEFFE[n]
    assert SIDAK[n][1] <= BONFERRONI[n] <= SCHEFFE[n]


def test_scheffe_with_few_degrees_of_freedom():
    """One parameter: the t quantile. Two, and ten degrees of freedom: sqrt(2 x 4.103), Fisher and Yates' 5 % F."""
    assert scheffe_critical(1, 0.95, 9) == pytest.approx(critical_value(0.95, 9))
    assert scheffe_critical(2, 0.95, 10) == pytest.approx(np.sqrt(2 * 4.103), abs=1e-3)


@pytest.mark.parametrize("n", [1, 2, 3, 5, 10, 20, 50, 100])
def test_independent_points_need_sidaks_value(n):
    got = sup_t_critical(np.eye(n), np.diag(np.arange(1.0, n + 1)), 0.95, np.inf)
    assert got == pytest.approx(SIDAK[n][1], abs=4 * monte_carlo_error(SIDAK[n][1], n, 0.0))


# Equal correlation, two-sided 95 %, infinite degrees of freedom: Dunnett (1964), Biometrics 20, 482, prints 2.21, 2.35,
# 2.44, 2.51 for 2 to 5 points at 0.5 (from memory); six digits by one-dimensional quadrature.
EQUICORRELATED = [
    (0.5, 2, 2.212128), (0.5, 3, 2.348971), (0.5, 4, 2.441771), (0.5, 5, 2.511463), (0.5, 10, 2.716289),
    (0.5, 20, 2.905480), (0.9, 2, 2.108143), (0.9, 5, 2.274279), (0.9, 10, 2.382571), (0.9, 20, 2.479390),
    (0.99, 10, 2.107443), (0.3, 2, 2.228530), (0.8, 2, 2.152436), (0.95, 2, 2.070881),
]  # fmt: skip


@pytest.mark.parametrize(("correlation", "n", "printed"), EQUICORRELATED)
def test_equally_correlated_points(correlation, n, printed):
    assert coverage(printed, n, correlation) == pytest.approx(0.95, abs=1e-6)
    got = sup_t_critical(np.eye(n), equal_correlation(n, correlation), 0.95, np.inf)
    assert got == pytest.approx(printed, abs=4 * monte_carlo_error(printed, n, correlation))


# Autoregressive paths: 4 million draws, standard error at most 0.0009 (own simulation, no published source). The error
# of ours is taken from independent points, where it is not far off.
@pytest.mark.parametrize(("n", "correlation", "simulated"), [(10, 0.5, 2.7757), (10, 0.9, 2.5457), (50, 0.95, 2.9125)])
def test_autoregressive_points(n, correlation, simulated):
    k = np.arange(n)
    got = sup_t_critical(np.eye(n), correlation ** np.abs(k[:, None] - k), 0.95, np.inf)
    assert got == pytest.approx(simulated, abs=4 * (monte_carlo_error(SIDAK[10][1], 10, 0.0) + 0.0009))


def test_points_that_move_together_need_the_pointwise_value():
    gradient = np.array([[1.0, 2.0, -3.0, 0.5]])  # one parameter, four points
    got = sup_t_critical(gradient, np.array([[4.0]]), 0.95, np.inf)
    assert got == pytest.approx(1.959964, abs=4 * monte_carlo_error(1.959964, 1, 0.0))
    assert got >= 1.959963  # never narrower than a pointwise band


@pytest.mark.parametrize(("n", "freedom"), [(1, 4), (2, 9), (5, 9), (10, 30), (10, 99)])
def test_few_degrees_of_freedom_widen_the_band(n, freedom):
    """Studentised maximum modulus, by quadrature over the scale."""

    def covered(c):
        return quad(
            lambda s: coverage(c * s, n, 0.0) * np.sqrt(freedom) * chi.pdf(s * np.sqrt(freedom), freedom), 0, 6
        )[0]

    got = sup_t_critical(np.eye(n), np.eye(n), 0.95, freedom)
    density = (covered(got + 0.01) - covered(got - 0.01)) / 0.02
    assert covered(got) == pytest.approx(0.95, abs=4 * np.sqrt(0.05 * 0.95 / N_DRAWS))
    assert got > sup_t_critical(np.eye(n), np.eye(n), 0.95, np.inf)
    assert density > 0


@pytest.mark.parametrize(("n", "covered"), [(5, 0.77378), (10, 0.59874), (20, 0.35849), (50, 0.07694)])
def test_bands_cover_simultaneously_and_pointwise_ones_do_not(n, covered):
    """Independent points: 1.96-bands cover all of them with probability 0.95^n, sup-t ones with 0.95 (exact)."""
    z = np.abs(np.random.default_rng(1).standard_normal((40_000, n))).max(axis=1)
    assert 0.95**n == pytest.approx(covered, abs=6e-6)
    error = 4 * np.sqrt(covered * (1 - covered) / z.size)
    assert np.mean(z <= critical_value(0.95, np.inf)) == pytest.approx(covered, abs=error)
    error = 4 * np.sqrt(0.95 * 0.05 * (1 / z.size + 1 / N_DRAWS))  # of this simulation, and of the critical value's own
    assert np.mean(z <= sup_t_critical(np.eye(n), np.eye(n), 0.95, np.inf)) == pytest.approx(0.95, abs=error)


@settings(max_examples=40, deadline=None)
@given(
    n_parameters=st.integers(1, 6),
    n_points=st.integers(1, 40),
    seed=st.integers(0, 10_000),
    level=st.sampled_from([0.8, 0.9, 0.95, 0.99]),
)
def test_order_of_bands(n_parameters, n_points, seed, level):
    """pointwise <= sup-t <= Sidak <= Bonferroni, and <= Scheffe, whatever the curve; sup-t within its own error."""
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(n_parameters, n_parameters))
    gradient = rng.normal(size=(n_parameters, n_points))
    sup_t = sup_t_critical(gradient, root @ root.T, level, np.inf)
    bonferroni = norm.isf((1 - level) / (2 * n_points))
    density = n_points * (2 * norm.cdf(sidak_critical(n_points, level)) - 1) ** (n_points - 1) * 2
    density *= norm.pdf(sidak_critical(n_points, level))
    error = np.sqrt(level * (1 - level) / N_DRAWS) / density
    assert critical_value(level, np.inf) <= sup_t <= sidak_critical(n_points, level) + 5 * error
    assert sidak_critical(n_points, level) <= bonferroni + 1e-12
    rank = min(n_parameters, n_points)
    scheffe = scheffe_critical(rank, level)  # sup-t over all directions has its density at the quantile: chi's
    assert sup_t <= scheffe + 5 * np.sqrt(level * (1 - level) / N_DRAWS) / chi.pdf(scheffe, rank)


@pytest.mark.parametrize("freedom", [np.inf, 12.0])
def test_a_fine_grid_needs_hardly_more_than_a_coarse_one(freedom):
    """A smooth curve: neighbours move together, so the band of 4000 points is that of 60, within its own error."""
    coarse, fine = np.linspace(0, 3, 60), np.linspace(0, 3, 4000)
    bands = [sup_t_critical(np.stack([np.exp(-x), x * np.exp(-x)]), np.eye(2), 0.95, freedom) for x in (coarse, fine)]
    assert bands[0] <= bands[1] <= 1.005 * bands[0]


def test_the_same_seed_gives_the_same_band():
    g = np.random.default_rng(0).normal(size=(3, 12))
    assert sup_t_critical(g, np.eye(3), 0.95, 20.0) == sup_t_critical(g, np.eye(3), 0.95, 20.0)
    assert sup_t_critical(g, np.eye(3), 0.95, 20.0) != sup_t_critical(g, np.eye(3), 0.95, 20.0, seed=1)


def test_parameters_that_were_not_estimated_are_left_out():
    g = np.array([[1.0, 2.0], [5.0, 5.0]])
    covariance = np.array([[0.04, np.nan], [np.nan, np.nan]])
    np.testing.assert_allclose(standard_errors(g, covariance), [0.2, 0.4])
    assert sup_t_critical(g, covariance, 0.95, np.inf) == pytest.approx(1.96, abs=0.05)


def test_nothing_estimated_is_not_a_number():
    g = np.ones((2, 3))
    assert np.isnan(standard_errors(g, np.full((2, 2), np.nan))).all()
    assert np.isnan(sup_t_critical(g, np.full((2, 2), np.nan), 0.95, np.inf))


def test_points_without_variance_do_not_count():
    g = np.array([[1.0, 0.0, 0.0]])
    np.testing.assert_allclose(standard_errors(g, np.eye(1)), [1.0, 0.0, 0.0])
    assert sup_t_critical(g, np.eye(1), 0.95, np.inf) == pytest.approx(1.96, abs=0.05)
    assert np.isnan(sup_t_critical(np.zeros((1, 3)), np.eye(1), 0.95, np.inf))


def test_standard_errors_are_the_delta_method():
    rng = np.random.default_rng(3)
    root = rng.normal(size=(4, 4))
    gradient, covariance = rng.normal(size=(4, 9)), root @ root.T
    np.testing.assert_allclose(
        standard_errors(gradient, covariance), np.sqrt(np.diag(gradient.T @ covariance @ gradient))
    )
