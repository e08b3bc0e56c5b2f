"""Random weights on blocks: their moments, and the standard error of a replicate against the plain formula."""

from __future__ import annotations

import numpy as np
import pytest

from kernelfit.errors import ArgumentError
from kernelfit.inference.bootstrap.weight_laws import WEIGHT_LAWS, Mammen, weight_law_from

LAWS = [law() for law in WEIGHT_LAWS.values()]
N_BLOCKS = 12
N_DRAWS = 40_000


def draws(law):
    rng = np.random.default_rng(1)
    return np.array([law.draw(N_BLOCKS, rng) for _ in range(N_DRAWS)])


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_mean_is_one_and_the_spread_is_what_the_law_says(law):
    weight = draws(law)
    assert abs(weight.mean() - 1.0) <= 4 * law.spread(N_BLOCKS) / np.sqrt(weight.size)
    squared = (weight - 1.0) ** 2
    error = squared.mean(axis=1).std() / np.sqrt(N_DRAWS)
    assert abs(squared.mean() - law.spread(N_BLOCKS) ** 2) <= 4 * error + 1e-12
    if law.refits:  # weights of a recording
        np.testing.assert_allclose(weight.sum(axis=1), N_BLOCKS, rtol=1e-12)
        assert (weight >= 0).all()


def test_multinomial_weights_are_counts():
    weight = draws(WEIGHT_LAWS["multinomial"]())
    assert (weight == np.round(weight)).all()
    # each block is left out with probability (1 - 1/G)^G
    left_out = (1 - 1 / N_BLOCKS) ** N_BLOCKS
    assert np.mean(weight == 0) == pytest.approx(left_out, abs=4 * np.sqrt(left_out / weight.size))


def test_mammen_weights_have_a_third_moment_of_one():
    """Mammen (1993): -(sqrt 5 - 1)/2 with probability (sqrt 5 + 1)/(2 sqrt 5), else (sqrt 5 + 1)/2 (from memory)."""
    weight = draws(Mammen())
    low, high = np.unique(weight) - 1.0
    assert (low, high) == pytest.approx((-(np.sqrt(5) - 1) / 2, (np.sqrt(5) + 1) / 2), rel=1e-14)
    p = (np.sqrt(5) + 1) / (2 * np.sqrt(5))
    assert np.mean(weight < 1) == pytest.approx(p, abs=4 * np.sqrt(p * (1 - p) / weight.size))
    for power, moment in ((1, 0.0), (2, 1.0), (3, 1.0)):  # exact, from the two values and the probability
        assert p * low**power + (1 - p) * high**power == pytest.approx(moment, abs=1e-14)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_covariance_with_every_weight_at_one(law):
    """A recording in which every block counts once has the robust covariance itself, centred."""
    influence = np.random.default_rng(2).normal(size=(N_BLOCKS, 3))
    centred = influence - influence.mean(axis=0)
    plain = N_BLOCKS / (N_BLOCKS - 1) * centred.T @ centred
    if law.refits:
        np.testing.assert_allclose(law.covariance(np.ones(N_BLOCKS), influence), plain, rtol=1e-12)
    else:  # every sign positive
        np.testing.assert_allclose(law.covariance(np.full(N_BLOCKS, 2.0), influence), plain, rtol=1e-12)


def test_covariance_of_drawn_blocks_is_that_of_the_copies():
    """Counting a block k times is the same as k copies of it (definition)."""
    law = WEIGHT_LAWS["multinomial"]()
    influence = np.random.default_rng(3).normal(size=(N_BLOCKS, 2))
    weight = law.draw(N_BLOCKS, np.random.default_rng(4))
    copies = np.repeat(influence, weight.astype(int), axis=0)
    centred = copies - copies.mean(axis=0)
    want = N_BLOCKS / (N_BLOCKS - 1) * centred.T @ centred
    np.testing.assert_allclose(law.covariance(weight, influence), want, rtol=1e-12)


def test_names():
    assert weight_law_from("mammen", refits=False) == Mammen()
    with pytest.raises(ArgumentError, match=r"'mammen' has negative weights.*'exponential', 'multinomial'"):
        weight_law_from("mammen", refits=True)
    with pytest.raises(ArgumentError, match=r"'poisson' is not known.*'rademacher'"):
        weight_law_from("poisson", refits=False)
