"""Arrow-shaped systems against the same matrix written out in full and handed to numpy."""

from __future__ import annotations

import numpy as np
import pytest

from kernelfit.fitting.arrow import Arrow, SingularOwnBlock, eliminate, solve_symmetric

SHAPES = [(1, 1, 1), (3, 1, 2), (4, 3, 2), (7, 2, 5), (2, 4, 1)]  # units, own parameters, shared ones


def arrow_and_dense(seed, n, p, q):
    """A positive definite arrow matrix and the same in full: sum of w g g' of gradients that involve one unit each."""
    rng = np.random.default_rng(seed)
    own, cross, shared = np.zeros((n, p, p)), np.zeros((n, p, q)), np.zeros((q, q))
    dense = np.zeros((n * p + q, n * p + q))
    for i in range(n):
        for _ in range(3 * (p + q)):
            a, b = rng.normal(size=p), rng.normal(size=q)
            own[i] += np.outer(a, a)
            cross[i] += np.outer(a, b)
            shared += np.outer(b, b)
            full = np.zeros(n * p + q)
            full[i * p : (i + 1) * p], full[n * p :] = a, b
            dense += np.outer(full, full)
    return Arrow(own, cross, shared), dense


@pytest.mark.parametrize(("n", "p", "q"), SHAPES)
def test_solution(n, p, q):
    arrow, dense = arrow_and_dense(1, n, p, q)
    rng = np.random.default_rng(2)
    score_own, score_shared = rng.normal(size=(n, p)), rng.normal(size=q)
    own, shared = eliminate(arrow).solve(score_own, score_shared)
    want = np.linalg.solve(dense, np.concatenate([score_own.ravel(), score_shared]))
    np.testing.assert_allclose(np.concatenate([own.ravel(), shared]), want, rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize(("n", "p", "q"), SHAPES)
def test_schur_complement_is_the_inverse_of_the_inverses_corner(n, p, q):
    arrow, dense = arrow_and_dense(3, n, p, q)
    elimination = eliminate(arrow)
    corner = np.linalg.inv(dense)[n * p :, n * p :]
    np.testing.assert_allclose(np.linalg.inv(elimination.schur), corner, rtol=1e-9)
    np.testing.assert_array_equal(elimination.schur, elimination.schur.T)


def test_efficient_score_is_uncorrelated_with_the_own_scores():
    """Scores with covariance H: what is left of the shared one is uncorrelated with the own ones, of variance schur."""
    arrow, dense = arrow_and_dense(4, 3, 2, 2)
    elimination = eliminate(arrow)
    root = np.linalg.cholesky(dense)
    columns = [elimination.efficient_score(c[:6].reshape(3, 2), c[6:]) for c in root.T]
    efficient = np.array(columns).T  # (Q, 8): covariance of two linear forms of unit-variance noise is their product
    np.testing.assert_allclose(efficient @ root[:6].T, 0.0, atol=1e-10)
    np.testing.assert_allclose(efficient @ efficient.T, elimination.schur, rtol=1e-10)


def test_efficient_scores_of_many_blocks_at_once():
    arrow, _ = arrow_and_dense(5, 3, 2, 2)
    elimination = eliminate(arrow)
    rng = np.random.default_rng(6)
    own, shared = rng.normal(size=(5, 3, 2)), rng.normal(size=(5, 2))
    together = elimination.efficient_score(own, shared)
    for g in range(5):
        np.testing.assert_allclose(together[g], elimination.efficient_score(own[g], shared[g]), rtol=1e-12)


def test_damping_multiplies_the_diagonal_and_leaves_the_original():
    arrow, dense = arrow_and_dense(7, 2, 2, 2)
    before = arrow.own.copy()
    damped = arrow.damped(0.5)
    own, shared = eliminate(damped).solve(np.ones((2, 2)), np.ones(2))
    want = np.linalg.solve(dense + 0.5 * np.diag(np.diag(dense)), np.ones(6))
    np.testing.assert_allclose(np.concatenate([own.ravel(), shared]), want, rtol=1e-10)
    np.testing.assert_array_equal(arrow.own, before)


def test_parameters_can_be_taken_out():
    arrow, dense = arrow_and_dense(8, 2, 2, 3)
    free = np.array([True, False, True])
    own, shared = eliminate(arrow.only(free)).solve(np.ones((2, 2)), np.ones(2))
    keep = [0, 1, 2, 3, 4, 6]
    want = np.linalg.solve(dense[np.ix_(keep, keep)], np.ones(6))
    np.testing.assert_allclose(np.concatenate([own.ravel(), shared]), want, rtol=1e-10)


def test_without_shared_parameters():
    arrow, _ = arrow_and_dense(9, 3, 2, 1)
    alone = Arrow(arrow.own, arrow.cross[..., :0], arrow.shared[:0, :0])
    own, shared = eliminate(alone).solve(np.ones((3, 2)), np.empty(0))
    assert shared.size == 0
    for i in range(3):
        np.testing.assert_allclose(own[i], np.linalg.solve(arrow.own[i], np.ones(2)), rtol=1e-10)


def test_solve_symmetric_does_not_mind_scales():
    """Lengths and amplitudes differ by orders of magnitude: scaled by up to 1e12, the solution stays good."""
    rng = np.random.default_rng(10)
    root = rng.normal(size=(4, 8))
    matrix = root @ root.T
    scale = np.array([1e-6, 1.0, 1e3, 1e6])
    scaled = matrix * np.outer(scale, scale)
    right = rng.normal(size=(4, 3))
    np.testing.assert_allclose(
        solve_symmetric(scaled, scale[:, None] * right) * scale[:, None], np.linalg.solve(matrix, right), rtol=1e-9
    )
    np.testing.assert_allclose(solve_symmetric(matrix, right[:, 0]), np.linalg.solve(matrix, right[:, 0]), rtol=1e-9)


@pytest.mark.parametrize(
    "matrix",
    [np.zeros((2, 2)), np.diag([1.0, 0.0]), np.diag([1.0, -1.0]), np.ones((2, 2)), np.array([[1.0, 2], [2, 1.0]])],
)
def test_a_singular_or_indefinite_matrix_raises(matrix):
    with pytest.raises(np.linalg.LinAlgError):
        solve_symmetric(matrix, np.ones(2))


@pytest.mark.parametrize("block", [np.diag([1.0, 0.0]), np.ones((2, 2)), np.array([[1.0, 1e6], [1e6, 1e12]])])
def test_a_singular_own_block_is_named(block):
    """Whatever the scales of its parameters: the third is the second in other units."""
    arrow, _ = arrow_and_dense(11, 3, 2, 1)
    arrow.own[1] = block
    with pytest.raises(SingularOwnBlock) as caught:
        eliminate(arrow)
    assert caught.value.place == 1
