"""Kolmogorov-Smirnov distances, critical values, bands and adjusted p-values against values from outside."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import kolmogorov

from kernelfit.diagnostics import ks
from kernelfit.diagnostics.goodness import adjusted_p_values
from kernelfit.diagnostics.independence import SerialIndependence, serial_independence
from kernelfit.diagnostics.rescaling import uniform_scale

pytestmark = pytest.mark.published

# --- fully known null ------------------------------------------------------------------------------------

# Table of Miller (1956), J. Amer. Statist. Assoc. 51, 111-121 (source from memory). Each entry was recomputed by a
# 30-digit matrix evaluation of P(D_n < d). Printed to five decimals, hence abs=5e-6.
LEVELS = (0.80, 0.85, 0.90, 0.95, 0.99)
EXACT = {
    1: (0.90000, 0.92500, 0.95000, 0.97500, 0.99500),
    2: (0.68377, 0.72614, 0.77639, 0.84189, 0.92929),
    3: (0.56481, 0.59582, 0.63604, 0.70760, 0.82900),
    5: (0.44697, 0.47439, 0.50945, 0.56328, 0.66853),
    10: (0.32257, 0.34250, 0.36866, 0.40925, 0.48893),
    15: (0.26585, 0.28233, 0.30397, 0.33760, 0.40420),
    20: (0.23152, 0.24587, 0.26473, 0.29408, 0.35241),
    25: (0.20787, 0.22074, 0.23767, 0.26404, 0.31657),
    30: (0.19029, 0.20207, 0.21756, 0.24170, 0.28986),
    35: (0.17655, 0.18748, 0.20185, 0.22425, 0.26897),
    40: (0.16544, 0.17567, 0.18913, 0.21012, 0.25205),
    50: (0.14837, 0.15753, 0.16959, 0.18841, 0.22604),
    100: (0.10561, 0.11210, 0.12066, 0.13403, 0.16081),
}


@pytest.mark.parametrize("n", sorted(EXACT))
def test_critical_distances_are_exact(n):
    for level, expected in zip(LEVELS, EXACT[n], strict=True):
        assert ks.known_critical_distance(n, level) == pytest.approx(expected, abs=5e-6)
        # The p-value at a critical distance rounded to five decimals is the level to 1e-5 times the density there.
        assert ks.known_p_value(expected, n) == pytest.approx(1 - level, abs=5e-5)
        assert ks.known_p_value(ks.known_critical_distance(n, level), n) == pytest.approx(1 - level, abs=1e-9)


@pytest.mark.parametrize("alpha", [0.5, 0.2, 0.05, 0.01])
def test_critical_distances_by_hand(alpha):
    # Closed forms for one and two values: P(D_1 >= d) = 2 (1 - d) and P(D_2 >= d) = 2 (1 - d)^2.
    assert ks.known_critical_distance(1, 1 - alpha) == pytest.approx(1 - alpha / 2, abs=1e-9)
    assert ks.known_critical_distance(2, 1 - alpha) == pytest.approx(1 - np.sqrt(alpha / 2), abs=1e-9)


# Massey (1951), J. Amer. Statist. Assoc. 46, 68-78 (digits from memory). The old table differs from the exact values
# by up to 0.004, hence 0.006. Its row of 35 is the limit law's point, up to 0.005 above the exact one, rounded to two
# decimals, hence 0.01.
@pytest.mark.parametrize(
    ("n", "printed", "tolerance"),
    [
        (5, (0.446, 0.474, 0.510, 0.565, 0.669), 0.006),
        (10, (0.322, 0.342, 0.368, 0.410, 0.490), 0.006),
        (20, (0.231, 0.246, 0.264, 0.294, 0.356), 0.006),
        (35, (0.18, 0.19, 0.21, 0.23, 0.27), 0.01),
    ],
)
def test_critical_distances_are_near_the_old_printed_table(n, printed, tolerance):
    for level, value in zip(LEVELS, printed, strict=True):
        assert ks.known_critical_distance(n, level) == pytest.approx(value, abs=tolerance)


# Kolmogorov (1933), Smirnov (1948), Ann. Math. Statist. 19, 279; both series of the law agree on these to 12 digits.
LIMIT = {
    0.5: 0.0360547563351,
    0.8: 0.455857588426,
    1.0: 0.730000328323,
    1.22: 0.898102220834,
    1.36: 0.950514123245,
    1.5: 0.977782037383,
    1.63: 0.990153635112,
    2.0: 0.999329074744,
}


@pytest.mark.parametrize("x", sorted(LIMIT))
def test_p_values_of_large_samples_run_into_the_limit_law(x):
    k = np.arange(1, 60)
    alternating = 1 - 2 * np.sum((-1.0) ** (k - 1) * np.exp(-2 * k**2 * x**2))
    theta = np.sqrt(2 * np.pi) / x * np.sum(np.exp(-((2 * k - 1) ** 2) * np.pi**2 / (8 * x**2)))
    assert alternating == pytest.approx(LIMIT[x], abs=2e-12)
    assert theta == pytest.approx(LIMIT[x], abs=2e-12)
    assert 1 - kolmogorov(x) == pytest.approx(LIMIT[x], abs=2e-12)
    # The next term of the expansion in 1/sqrt(n) is the slope of the law, at most 1.7, over 6.
    n = 10**8
    assert 1 - ks.known_p_value(x / np.sqrt(n), n) == pytest.approx(LIMIT[x], abs=0.4 / np.sqrt(n))


# Upper points of sqrt(n) D; the coefficients 1.22, 1.36, 1.63 of textbooks are these, rounded.
@pytest.mark.parametrize(
    ("level", "point"),
    [(0.80, 1.0727492), (0.85, 1.1379465), (0.90, 1.2238479), (0.95, 1.3580986), (0.99, 1.6276236), (0.999, 1.9494746)],
)
def test_critical_distances_of_large_samples(level, point):
    n = 10**8
    # D is about point/sqrt(n) - 1/(6n).
    assert ks.known_critical_distance(n, level) * np.sqrt(n) == pytest.approx(point, abs=3e-5)


def test_band_of_the_usual_plot():
    # Brown, Barbieri, Ventura, Kass and Frank (2002), Neural Comput. 14, 325-346 (from memory): 1.36/sqrt(n).
    for n in (10, 400, 12_345):
        assert ks.brown_half_width(n) == pytest.approx(1.36 / np.sqrt(n), rel=1e-15)


# Marsaglia, Tsang and Wang (2003), J. Statist. Softw. 8(18): digits from memory, recomputed to 15 figures. The second
# is computed by an expansion in the library used here, which is off by 6e-10.
@pytest.mark.parametrize(
    ("n", "d", "below", "tolerance"),
    [
        (10, 0.274, 0.628479615456504, 1e-12),
        (2000, 0.04, 0.996769431917137, 1e-8),
        (100, 0.1, 0.7473072430, 1e-9),
    ],
)
def test_single_probabilities(n, d, below, tolerance):
    assert 1 - ks.known_p_value(d, n) == pytest.approx(below, abs=tolerance)


# Massart (1990), Ann. Probab. 18, 1269-1283: P(sqrt(n) sup|F_n - F| > x) <= 2 exp(-2 x^2).
@pytest.mark.parametrize(
    ("n", "widths"),
    [
        (50, (0.17308184, 0.19206456, 0.23018074)),
        (100, (0.12238734, 0.13581015, 0.16276236)),
        (500, (0.05473328, 0.06073615, 0.07278954)),
        (1000, (0.03870228, 0.04294694, 0.05146998)),
    ],
)
def test_dkw_band(n, widths):
    for level, width in zip((0.90, 0.95, 0.99), widths, strict=True):
        assert ks.dkw_half_width(n, level) == pytest.approx(width, abs=5e-9)


@pytest.mark.parametrize("n", sorted(EXACT))
def test_dkw_band_is_never_narrower_than_the_exact_one(n):
    for level in LEVELS:
        assert ks.dkw_half_width(n, level) >= ks.known_critical_distance(n, level)


# --- the mean estimated ----------------------------------------------------------------------------------

# Independent Monte Carlo (4 to 6 million samples per n); standard error at most 0.0002 at 1 %, 0.0001 elsewhere, and
# rounding to four decimals: 0.0008 is four of the former. The tables shipped with statsmodels agree to 0.0004.
ESTIMATED = {
    5: (0.3604, 0.3793, 0.4046, 0.4422, 0.5131),
    8: (0.2914, 0.3070, 0.3273, 0.3590, 0.4208),
    10: (0.2626, 0.2768, 0.2955, 0.3245, 0.3813),
    15: (0.2170, 0.2288, 0.2444, 0.2686, 0.3168),
    20: (0.1893, 0.1996, 0.2132, 0.2344, 0.2769),
    25: (0.1701, 0.1794, 0.1917, 0.2108, 0.2494),
    30: (0.1558, 0.1644, 0.1756, 0.1932, 0.2286),
    50: (0.1218, 0.1284, 0.1372, 0.1509, 0.1787),
    100: (0.0868, 0.0915, 0.0977, 0.1076, 0.1275),
    400: (0.0439, 0.0462, 0.0494, 0.0543, 0.0642),
}


@pytest.mark.parametrize("n", sorted(ESTIMATED))
def test_critical_distances_with_estimated_mean(n):
    for level, expected in zip(LEVELS, ESTIMATED[n], strict=True):
        assert ks.estimated_mean_critical_distance(n, level) == pytest.approx(expected, abs=8e-4)


# The tables of statsmodels (10 million samples), 10, 5 and 1 %.
@pytest.mark.parametrize(
    ("n", "points"),
    [(10, (0.29545, 0.32438, 0.38136)), (20, (0.21317, 0.23447, 0.27704)), (100, (0.09771, 0.10752, 0.12735))],
)
def test_critical_distances_with_estimated_mean_second_source(n, points):
    for level, expected in zip((0.90, 0.95, 0.99), points, strict=True):
        assert ks.estimated_mean_critical_distance(n, level) == pytest.approx(expected, abs=2e-4)


# Lilliefors (1969), J. Amer. Statist. Assoc. 64, 387-389 (digits from memory), 10, 5 and 1 %. The printed 1 % column
# is low by up to 0.009 at small n; hence 0.01 there and 0.002 elsewhere.
@pytest.mark.parametrize(
    ("n", "printed"),
    [
        (5, (0.406, 0.442, 0.504)),
        (10, (0.295, 0.325, 0.380)),
        (20, (0.212, 0.234, 0.278)),
        (30, (0.174, 0.192, 0.226)),
    ],
)
def test_critical_distances_with_estimated_mean_are_near_the_old_printed_table(n, printed):
    for level, expected, tolerance in zip((0.90, 0.95, 0.99), printed, (0.002, 0.002, 0.01), strict=True):
        assert ks.estimated_mean_critical_distance(n, level) == pytest.approx(expected, abs=tolerance)


# Stephens (1974), J. Amer. Statist. Assoc. 69, 730-737 (form and points from memory). Good to 0.002 at 10 and 5 %.
@pytest.mark.parametrize("n", [5, 10, 30, 100, 1000])
@pytest.mark.parametrize(("level", "point"), [(0.85, 0.926), (0.90, 0.990), (0.95, 1.094)])
def test_scaled_distance_hardly_depends_on_n(n, level, point):
    distance = (point / (np.sqrt(n) + 0.26 + 0.5 / np.sqrt(n))) + 0.2 / n
    assert ks.estimated_mean_critical_distance(n, level) == pytest.approx(distance, abs=0.002)


# The known-law 5 % point used on gaps with fitted mean: true size 0.00483 +- 0.00004 (n = 20) and 0.00550 +- 0.00005
# (n = 100), from 4e6 and 2e6 simulated samples; four standard errors.
@pytest.mark.parametrize(("n", "size", "error"), [(20, 0.00483, 0.00004), (100, 0.00550, 0.00005)])
def test_known_law_is_ten_times_too_lenient_where_the_mean_is_fitted(n, size, error):
    assert ks.estimated_mean_p_value(ks.known_critical_distance(n), n) == pytest.approx(size, abs=4 * error)


def test_size_of_both_tests_on_constant_rates():
    """1000 trains of 60 gaps: plain below 2 %, estimated-mean within 5 % +- 2.8 % (four standard errors)."""
    gaps = np.random.default_rng(3).exponential(size=(1000, 60))
    z = uniform_scale(gaps / gaps.mean(axis=1, keepdims=True))
    distances = np.array([ks.ks_distance(row) for row in z])
    plain = np.mean([ks.known_p_value(d, 60) < 0.05 for d in distances])
    fitted = np.mean([ks.estimated_mean_p_value(d, 60) < 0.05 for d in distances])
    assert plain < 0.02
    assert fitted == pytest.approx(0.05, abs=0.028)


# --- by hand ---------------------------------------------------------------------------------------------


def test_distance_by_hand():
    # 3/4 - 0.35 = 0.40 at the third value; exact p 0.4374 by enumeration.
    z = np.array([0.80, 0.05, 0.30, 0.35])
    assert ks.ks_distance(z) == pytest.approx(0.40, abs=1e-15)
    assert ks.known_p_value(0.40, 4) == pytest.approx(0.4374, abs=5e-5)


def test_distance_of_rescaled_intervals_of_a_self_exciting_train():
    # Linear self-exciting process, events 0.5, 1.2, 1.9, 3.3, 4.1, base 0.4, jump 0.6, decay 1.5: intervals by the
    # recursion of Ozaki (1979) and Ogata (1981), direct sums and quadrature agree to 15 digits.
    intervals = np.array([0.2, 0.540024900356, 0.631017428699, 1.07683601817, 0.649921343642])
    z = uniform_scale(intervals)
    expected = [0.181269246922, 0.417266258084, 0.467949797610, 0.659328298680, 0.477913159404]
    np.testing.assert_allclose(z, expected, atol=2e-12)
    assert ks.ks_distance(z) == pytest.approx(0.340671701320, abs=2e-12)


def test_serial_independence_by_hand():
    # Ljung and Box (1978), Biometrika 65, 297-303 (from memory): r1 = 0.1785714286, r2 = 0.0714285714.
    result = serial_independence(np.array([2.0, 4, 1, 3, 7, 5, 6, 4]), n_lags=2)
    assert isinstance(result, SerialIndependence)
    assert result.statistic == pytest.approx(0.4324586978, abs=1e-9)
    assert result.p_value == pytest.approx(0.8055505286, abs=1e-9)


# Benjamini and Hochberg (1995), J. R. Statist. Soc. B 57, 289-300: their 15 p-values, of which 4 are rejected at 5 %.
def test_adjusted_p_values_of_the_original_example():
    p_values = np.array(
        [0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240, 0.4262, 0.5719, 0.6528,
         0.7590, 1.000]
    )  # fmt: skip
    expected = [0.0015, 0.003, 0.0095, 0.035625, 0.0603, 0.0638571, 0.0638571, 0.0645, 0.0765, 0.486, 0.58118,
                0.71488, 0.75323, 0.81321, 1.0]  # fmt: skip
    order = np.random.default_rng(0).permutation(15)
    adjusted = adjusted_p_values(p_values[order])
    np.testing.assert_allclose(adjusted, np.array(expected)[order], atol=5e-6)
    assert np.sum(adjusted <= 0.05) == 4
