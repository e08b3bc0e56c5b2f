"""The length of blocks of time, chosen from simulated influences whose spread is known by formula."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter

from kernelfit.fitting.block_length import FEWEST_JOINED, block_curve, joined, neighbour_correlation

FINE = 400


def influences(rng, n=FINE, memory=0.0, share=1.0, n_parameters=2):
    """White noise, plus a first-order autoregression of coefficient `memory` with `share` times its variance."""
    noise = rng.standard_normal((n, n_parameters))
    drive = rng.standard_normal((n + 200, n_parameters)) * np.sqrt(share * (1 - memory**2))
    slow = lfilter([1.0], [1.0, -memory], drive, axis=0)[200:]
    together = noise + slow if memory else noise
    return together - together.mean(axis=0)


def test_joined_adds_neighbours_up_and_leaves_the_rest():
    np.testing.assert_array_equal(joined(np.arange(5.0)[:, None], 2), [[1.0], [5.0], [4.0]])


def test_neighbour_correlation_is_the_first_autocorrelation():
    x = np.array([1.0, 2.0, -1.0, -2.0])[:, None]
    assert neighbour_correlation(x)[0] == pytest.approx((2.0 - 2.0 + 2.0) / 10.0)


def test_independent_blocks_keep_the_usual_length():
    """One in twenty is joined by chance at each of the two lengths tried; 300 recordings, so at most 0.10 and 3.3
    standard errors."""
    rng = np.random.default_rng(0)
    usual = [block_curve(influences(rng), 4, 100.0) for _ in range(300)]
    joined_by_chance = np.mean([c.factor(4) > 1 for c in usual])
    assert joined_by_chance < 0.10 + 3.3 * np.sqrt(0.10 * 0.90 / 300)
    assert np.mean([c.settled for c in usual]) > 0.9
    np.testing.assert_array_equal(usual[0].n_blocks, [400, 200, 100, 50, 25])
    np.testing.assert_allclose(usual[0].length_s, [0.25, 0.5, 1.0, 2.0, 4.0])


def test_a_length_without_correlation_does_not_end_the_search():
    """Blocks of the usual length, 4, alternate in sign and hide a state of 32: at twice that it is plain to see."""
    place = np.arange(640)
    hidden = np.where(place // 4 % 2 == 0, 1.0, -1.0) + 0.5 * np.where(place // 32 % 2 == 0, 1.0, -1.0)
    curve = block_curve(hidden[:, None], 4, 160.0)
    together = curve.correlation[:, 0] > curve.threshold
    np.testing.assert_array_equal(together[2:4], [False, True])
    assert curve.factor(4) >= 4


def variance_of_sum(n, memory):
    """Of n steps of white noise plus a first-order autoregression, both of variance 1: the sum in closed form."""
    slow = (1 + memory) / (1 - memory) - 2 * memory * (1 - memory**n) / (n * (1 - memory) ** 2)
    return n * (1.0 + slow)


def test_states_that_outlast_a_block_are_joined():
    """Correlated over three fine blocks: the spread of a sum over any length is known, and so is what remains missing
    when it is put together from sums over blocks, as if these were independent."""
    rng = np.random.default_rng(1)
    memory = 0.7
    curves = [block_curve(influences(rng, memory=memory), 4, 100.0) for _ in range(300)]
    assert np.mean([c.factor(4) > 1 for c in curves]) > 0.8
    found = np.array([c.std_error[:, 0] for c in curves]) ** 2
    for k, size in enumerate((1, 2, 4, 8, 16)):
        within = FINE / size * variance_of_sum(size, memory)
        lost = variance_of_sum(FINE, memory) / FINE * size  # of the mean, which is taken out; size / FINE of each block
        error = 3.3 * found[:, k].std() / np.sqrt(300)
        assert found[:, k].mean() == pytest.approx((within - lost) * (FINE / size) / (FINE / size - 1), abs=error)
    true = variance_of_sum(FINE, memory)
    chosen = np.mean([c.std_error[c.chosen, 0] ** 2 for c in curves])
    assert found[:, 2].mean() < 0.6 * true  # blocks of the usual length miss close to half of the variance
    assert chosen > 0.75 * true


def test_the_curve_rises_no_further_where_too_few_blocks_would_be_left():
    rng = np.random.default_rng(2)
    curve = block_curve(influences(rng, n=60, memory=0.9, share=10.0), 1, 60.0)
    assert curve.n_blocks.min() >= FEWEST_JOINED
    assert not curve.settled
    assert curve.chosen == len(curve.n_blocks) - 1


def test_a_single_block_has_a_curve_without_numbers():
    curve = block_curve(np.array([[0.1, 0.2]]), 1, 0.9)
    assert curve.chosen == 0
    assert np.isnan(curve.std_error).all()


def test_parameters_that_were_not_estimated_do_not_count():
    rng = np.random.default_rng(3)
    values = influences(rng)
    values[:, 1] = np.nan
    curve = block_curve(values, 4, 100.0)
    assert np.isnan(curve.std_error[:, 1]).all()
    assert np.isfinite(curve.std_error[:, 0]).all()
    table = curve.table(("amplitude", "length_um"))
    assert list(table.columns) == [
        "block_length_s", "n_blocks", "chosen",
        "amplitude_std_error", "amplitude_correlation", "length_um_std_error", "length_um_correlation",
    ]  # fmt: skip
    assert table["chosen"].sum() == 1
