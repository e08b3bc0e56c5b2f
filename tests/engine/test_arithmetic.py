"""The small loops of the sweep, each against exact or extended arithmetic."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest

from kernelfit.engine.arithmetic import (
    BINS_AT_ONCE,
    ETA_LIMIT,
    GRAM,
    LANE_PITCH,
    ROW_PITCH,
    add_by_lane,
    add_gram_block,
    add_gram_block_by_lane,
    add_gram_row_by_lane,
    add_products_by_lane,
    exp_into,
    multiply_into,
    total,
)

EPS = np.finfo(float).eps


def exponential(x, shift=0.0):
    out = np.empty(x.size)
    exp_into(x, shift, out, np.empty(x.size))
    return out


def error_in_ulp(got, x):
    """|got - exp(x)| in units in the last place of exp(x), with 40 digits of exp."""
    with mpmath.workdps(40):
        exact = [mpmath.exp(mpmath.mpf(float(v))) for v in x]
        error = [abs(mpmath.mpf(float(g)) - e) for g, e in zip(got, exact, strict=True)]
        return np.array([float(d / mpmath.mpf(float(np.spacing(float(e))))) for d, e in zip(error, exact, strict=True)])


def test_exp_is_good_to_two_units_in_the_last_place():
    """Against mpmath, over all of [-700, 700], near 0, and where the argument is reduced to +-ln2/2."""
    rng = np.random.default_rng(0)
    half_steps = (np.arange(-1000, 1001) + 0.5) * math.log(2.0)
    x = np.concatenate([
        rng.uniform(-700, 700, 4000), rng.uniform(-12, 5, 2000), rng.normal(0, 1e-8, 200),
        half_steps[np.abs(half_steps) < 700], np.nextafter(half_steps[::20], 1e9)[5:95],
        [-700.0, 0.0, -0.0, 700.0, 1.0, math.log(2.0)],
    ])  # fmt: skip
    assert error_in_ulp(exponential(x), x).max() <= 2.0


def test_exp_agrees_with_numpy():
    x = np.random.default_rng(1).uniform(-700, 700, 100_001)
    np.testing.assert_allclose(exponential(x), np.exp(x), rtol=3 * EPS)  # 2 ulp of ours, 1 of numpy's


def test_exp_of_zero_is_one():
    np.testing.assert_array_equal(exponential(np.zeros(17)), np.ones(17))


def test_the_shift_is_added_first():
    x = np.random.default_rng(2).uniform(-20, 20, 1000)
    shift = math.log(0.001)
    assert error_in_ulp(exponential(x, shift), x + shift).max() <= 2.0


def test_exponents_past_the_limit_are_cut():
    got = exponential(np.array([-1e300, -701.0, 701.0, 1e300, -np.inf, np.inf]))
    np.testing.assert_allclose(got, np.exp(np.array([-1, -1, 1, 1, -1, 1]) * ETA_LIMIT), rtol=3 * EPS)


@pytest.mark.parametrize("n", [0, 1, 7, 8, 9, 1023, 1024, 1025])
def test_sums_and_products_of_rows(n):
    rng = np.random.default_rng(n)
    x, y = rng.normal(size=n), rng.normal(size=n)
    assert total(x) == pytest.approx(math.fsum(x), abs=n * EPS * np.sum(np.abs(x)) + 1e-300)
    out = np.empty(n)
    multiply_into(x, y, out)
    np.testing.assert_array_equal(out, x * y)


@pytest.mark.parametrize("n_bins", [0, 1, 3, 4, 5, 8, 11])
@pytest.mark.parametrize("lanes", [1, 3, 8, 48])
def test_lane_sums(n_bins, lanes):
    """Bins in every remainder of four; the sums are added to, not replaced."""
    rng = np.random.default_rng(n_bins * 100 + lanes)
    x, y = rng.normal(size=(n_bins, lanes)), rng.normal(size=(n_bins, lanes))
    start = rng.normal(size=lanes)
    plain, products = start.copy(), start.copy()
    add_by_lane(x.ravel(), plain)
    add_products_by_lane(x.ravel(), y.ravel(), products)
    for i in range(lanes):
        size = abs(start[i]) + np.sum(np.abs(x[:, i])) + np.sum(np.abs(x[:, i] * y[:, i])) + 1e-300
        assert plain[i] == pytest.approx(math.fsum([start[i], *x[:, i]]), abs=8 * EPS * size)
        assert products[i] == pytest.approx(math.fsum([start[i], *(x[:, i] * y[:, i])]), abs=8 * EPS * size)


@pytest.mark.parametrize("n", [0, 1, 15, 16, 1024, 1031])
def test_gram_block(n):
    """Nine sums of products against math.fsum, added to what is there."""
    rng = np.random.default_rng(n)
    a, b = rng.normal(size=(3, n)), rng.normal(size=(3, n))
    start = rng.normal(size=(3, 3))
    out = start.copy()
    add_gram_block(*a, *b, out)
    for i in range(3):
        for j in range(3):
            size = abs(start[i, j]) + np.sum(np.abs(a[i] * b[j]))
            assert out[i, j] == pytest.approx(math.fsum([start[i, j], *(a[i] * b[j])]), abs=(n + 8) * EPS * size)


@pytest.mark.parametrize("n_bins", [0, 1, 3, 4, 5, 20])
@pytest.mark.parametrize("lanes", [1, 3, 8, 28, LANE_PITCH])
def test_gram_blocks_by_lane(n_bins, lanes):
    """Each lane's sums against math.fsum, added to what is there; what lies beyond the last bin must not count."""
    rng = np.random.default_rng(n_bins * 100 + lanes)
    n = n_bins * lanes
    a, b = rng.normal(size=(GRAM, ROW_PITCH)), rng.normal(size=(GRAM, ROW_PITCH))
    a[:, n : -(-n_bins // BINS_AT_ONCE) * BINS_AT_ONCE * lanes] = 0.0
    start = rng.normal(size=(GRAM, GRAM, LANE_PITCH))
    block, row = start.copy(), start[0].copy()
    add_gram_block_by_lane(a.ravel(), b.ravel(), n_bins, lanes, block.reshape(-1))
    add_gram_row_by_lane(a[0], b.ravel(), n_bins, lanes, row.reshape(-1))
    np.testing.assert_array_equal(block[..., lanes:], start[..., lanes:])
    for i, j, lane in np.ndindex(GRAM, GRAM, lanes):
        products = a[i, lane:n:lanes] * b[j, lane:n:lanes]
        exact = math.fsum([start[i, j, lane], *products])
        error = 8 * EPS * (abs(start[i, j, lane]) + np.sum(np.abs(products)))
        assert block[i, j, lane] == pytest.approx(exact, abs=error)
        if i == 0:
            assert row[j, lane] == pytest.approx(exact, abs=error)
