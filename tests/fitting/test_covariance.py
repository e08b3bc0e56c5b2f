"""Both covariances against the full matrices of a dense design."""

from __future__ import annotations

import dataclasses
from typing import NamedTuple

import numpy as np
import pytest
from worlds import BIN_S, LEAK, model, simulated

import kernelfit as kf
from kernelfit import kernels, terms
from kernelfit.engine.evaluate import whole
from kernelfit.engine.time_blocks import time_blocks
from kernelfit.engine.twin import dense_counts, dense_gradients, evaluate_plainly
from kernelfit.errors import ArgumentError
from kernelfit.fitting.by_block import FEWEST_BLOCKS, block_length_s, usual_blocks
from kernelfit.fitting.covariance import covariances
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.null import first_estimate
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.kernels.bands import Bands
from kernelfit.recording.recording import Recording

CASES = {
    "gaussian": (model("gaussian"), [0.1, np.log(120.0), np.log(LEAK)]),
    "after-spike": (
        model("exponential", after_spike=terms.AfterSpike(time_constants_s=(0.01, 0.1), ridge=0.2)),
        [0.1, np.log(120.0), np.log(LEAK)],
    ),
    "spline, penalised, leak fixed": (model(kernels.Spline(n_basis=6, smoothing=5.0), leak_rate=LEAK), [0.1] * 6),
}


@pytest.fixture(scope="module")
def recording():
    return simulated(1)


@pytest.fixture(scope="module", params=CASES.values(), ids=CASES)
def case(request, recording):
    the_model, start = request.param
    problem = make_problem(the_model, recording, threads=2)
    optimum = maximise(problem, Estimate(first_estimate(problem).own, np.array(start)))
    return problem, optimum, covariances(problem, optimum)


class Dense(NamedTuple):
    """inverse (K, K) of the penalised information and of the Hessian; scores (G, K) and information (G, K, K) by block
    of time; units and own parameters of each."""

    inverse: np.ndarray
    bread: np.ndarray
    scores: np.ndarray
    within: np.ndarray
    n: int
    p: int


@pytest.fixture(scope="module")
def dense(case):
    """Information with penalties, its inverse, and block scores over all parameters, from the design matrix."""
    problem, optimum, spread = case
    point = problem.point(optimum.estimate)
    first, bins, eta, gradients = dense_gradients(problem.data, point)
    counts = dense_counts(problem.data)[1][bins - first][:, problem.data.targets]
    n, p = optimum.estimate.own.shape
    q = problem.n_shared
    scale = np.ones(p + q)
    if problem.fits_leak:
        scale[-1] = problem.leak(optimum.estimate.shared)  # d/d log alpha = alpha d/d alpha
    design = np.zeros((*eta.shape, n * p + q))
    for i in range(n):
        design[:, i, i * p : (i + 1) * p] = gradients[:, i, :p]
        design[:, i, n * p :] = gradients[:, i, p:] * scale[p:]
    mean = BIN_S * np.exp(eta)
    information = np.einsum("tn,tnj,tnk->jk", mean, design, design, optimize=True)
    ridge = np.zeros(p)
    ridge[1:] = problem.model.after_spike.ridge
    information[: n * p, : n * p] += np.diag(np.tile(ridge, n))
    information[n * p :, n * p :] += problem.penalty
    blocks = time_blocks(problem.grid, spread.block_length_s)
    block = np.concatenate([np.full(b - a, g) for a, b, g in blocks.stretches])
    pull = np.einsum("tn,tnj->tj", counts - mean, design)
    scores = np.array([pull[block == g].sum(axis=0) for g in range(blocks.n_blocks)])
    within = np.array(
        [
            np.einsum("tn,tnj,tnk->jk", mean[rows], design[rows], design[rows], optimize=True)
            for rows in (block == g for g in range(blocks.n_blocks))
        ]
    )
    hessian = information.copy()
    hessian[n * p :, n * p :] += excess_of_the_hessian(problem, optimum.estimate, information[n * p :, n * p :])
    return Dense(np.linalg.inv(information), np.linalg.inv(hessian), scores, within, n, p)


def excess_of_the_hessian(problem, estimate, information):
    """Minus the derivative of the plain twin's shared score by the shared parameters, less the expected information:
    differences of fourth order."""
    n_own = estimate.own.shape[1]

    def score(shared):
        point = problem.point(Estimate(estimate.own, shared))
        sums = evaluate_plainly(problem.data, point, whole(problem.data), np.ones(1))
        total = sums.score[0, :, n_own:].sum(axis=0)
        if problem.fits_leak:
            total[-1] *= problem.leak(shared)
        return total - problem.penalty @ shared

    excess = np.zeros_like(information)
    for q in range(len(information)):
        h = 1e-3 * np.eye(len(information))[q]
        near, far = (score(estimate.shared + k * h) - score(estimate.shared - k * h) for k in (1, 2))
        excess[:, q] = -(8.0 * near - far) / 12e-3 - information[:, q]
    excess = 0.5 * (excess + excess.T)
    return np.where(np.abs(excess) < 1e-7 * np.abs(information).max(), 0.0, excess)


def assert_close(got, want):
    """Within 1e-5 standard errors: the Hessian is made of differences, here and there."""
    size = np.sqrt(np.diag(want))
    np.testing.assert_allclose(got / np.outer(size, size), want / np.outer(size, size), atol=1e-5)


def test_model_based_covariance_is_the_inverse_information(case, dense):
    _, _, spread = case
    inverse, n, p = dense.inverse, dense.n, dense.p
    np.testing.assert_allclose(spread.shared_model, inverse[n * p :, n * p :], rtol=1e-7)
    for i in range(n):
        rows = slice(i * p, (i + 1) * p)
        np.testing.assert_allclose(spread.own_model[i], inverse[rows, rows], rtol=1e-7, atol=1e-12)


def test_robust_covariance_is_the_sandwich_of_block_scores(case, dense):
    """G/(G - 1) H^-1 (sum of s s') H^-1, H the Hessian, all parameters together (Liang and Zeger 1986)."""
    _, _, spread = case
    bread, scores, n, p = dense.bread, dense.scores, dense.n, dense.p
    G = len(scores)
    sandwich = G / (G - 1) * bread @ (scores.T @ scores) @ bread
    assert spread.n_blocks == G
    assert_close(spread.shared_robust, sandwich[n * p :, n * p :])
    for i in range(n):
        rows = slice(i * p, (i + 1) * p)
        size = np.sqrt(np.diag(sandwich)[rows])
        np.testing.assert_allclose(
            spread.own_robust[i] / np.outer(size, size), sandwich[rows, rows] / np.outer(size, size), atol=1e-6
        )


def test_the_jackknife_leaves_out_each_block_in_one_step(case, dense):
    """(G - 1)/G sum of d d', d = (H - H_g)^-1 s_g (Bell and McCaffrey 2002), all parameters together."""
    _, _, spread = case
    total, (n, p) = np.linalg.inv(dense.bread), (dense.n, dense.p)
    moves = np.array([np.linalg.solve(total - h, s) for h, s in zip(dense.within, dense.scores, strict=True)])
    G = len(moves)
    want = (G - 1) / G * moves.T @ moves
    assert_close(spread.shared_jackknife, want[n * p :, n * p :])
    for i in range(n):
        rows = slice(i * p, (i + 1) * p)
        size = np.sqrt(np.diag(want)[rows])
        np.testing.assert_allclose(
            spread.own_jackknife[i] / np.outer(size, size), want[rows, rows] / np.outer(size, size), atol=1e-6
        )


def test_the_jackknife_is_wider_and_has_the_degrees_of_freedom_of_its_blocks(recording):
    """Leaving out blocks costs information: with equal blocks the variance is larger by about G / (G - 1)."""
    problem = make_problem(model("flat", leak_rate=LEAK), recording.select(stop_s=20.0), threads=1)
    few = covariances(problem, maximise(problem, Estimate(first_estimate(problem).own, np.array([0.05]))))
    assert 1.0 < few.shared("jackknife")[0, 0] / few.shared("robust")[0, 0] < 2.0
    assert few.degrees_of_freedom("jackknife") == few.n_blocks - 1


def test_no_jackknife_where_one_block_holds_all_that_is_known(recording):
    """One source alone drives, and falls silent after the first block."""
    trains = {u: recording.spike_times(u) for u in recording.unit_ids[:3]}
    early = {**trains, recording.unit_ids[0]: trains[recording.unit_ids[0]][:5]}
    assert early[recording.unit_ids[0]][-1] < 2.0
    one_way = kf.Recording.from_arrays(
        early, recording.positions[:3], [(0.0, 30.0)], exclude_pairs=[recording.unit_ids[1:3]]
    )
    problem = make_problem(model("flat", leak_rate=LEAK), one_way.select(source_only=one_way.unit_ids[:1]), threads=1)
    spread = covariances(problem, maximise(problem, Estimate(first_estimate(problem).own, np.array([0.05]))))
    assert np.isfinite(spread.shared_robust).all()
    assert spread.shared_jackknife is None
    with pytest.raises(ArgumentError, match="cannot be had here: without one of the blocks of time"):
        spread.shared("jackknife")


def test_block_influence_is_the_one_step_move_of_each_block(case, dense):
    _, _, spread = case
    bread, scores, n, p = dense.bread, dense.scores, dense.n, dense.p
    want = (scores @ bread)[:, n * p :]
    np.testing.assert_allclose(spread.block_influence / want.std(axis=0), want / want.std(axis=0), atol=1e-5)


def test_without_penalty_the_influences_cancel(recording):
    problem = make_problem(CASES["gaussian"][0], recording, threads=2)
    optimum = maximise(problem, Estimate(first_estimate(problem).own, np.array(CASES["gaussian"][1])))
    spread = covariances(problem, optimum)
    total = spread.block_influence.sum(axis=0)
    np.testing.assert_allclose(total / np.sqrt(np.diag(spread.shared_model)), 0.0, atol=1e-4)


def test_a_parameter_at_its_bound_has_no_variance_and_leaves_the_others_conditional(recording):
    problem = make_problem(model("exponential", leak_rate=LEAK), simulated(2, lambda d: np.where(d > 180, 0.2, 0.1)))
    optimum = maximise(problem, Estimate(first_estimate(problem).own, np.array([0.05, np.log(500.0)])))
    spread = covariances(problem, optimum)
    np.testing.assert_array_equal(np.isnan(spread.shared_model), [[False, True], [True, True]])
    np.testing.assert_array_equal(np.isnan(spread.shared_robust), [[False, True], [True, True]])
    assert np.isnan(spread.block_influence[:, 1]).all()
    assert spread.weak_direction is None
    assert np.isfinite(spread.own_model).all()


def test_one_block_of_time_has_no_robust_variance(recording):
    problem = make_problem(model("flat", leak_rate=LEAK), recording.select(stop_s=0.9), threads=1)
    optimum = maximise(problem, Estimate(first_estimate(problem).own, np.array([0.05])))
    spread = covariances(problem, optimum)
    assert spread.n_blocks == 1
    assert np.isnan(spread.shared_robust).all()
    assert np.isfinite(spread.shared_model).all()


def test_parameters_that_cannot_be_told_apart_are_named():
    """Two bands, one of them without pairs: no information on its amplitude."""
    problem = make_problem(model(Bands((10_000.0,)), leak_rate=LEAK), simulated(1), threads=1)
    held = np.array([False, True])
    optimum = maximise(problem, Estimate(first_estimate(problem).own, np.array([0.05, 0.0])), held=held)
    spread = covariances(problem, dataclasses.replace(optimum, free=np.array([True, True])))
    np.testing.assert_array_equal(spread.weak_direction, [0.0, 1.0])
    np.testing.assert_array_equal(spread.determines(np.eye(2)), [True, False])
    alone = covariances(problem, optimum)
    assert spread.shared_model[0, 0] == pytest.approx(alone.shared_model[0, 0], rel=1e-12)
    assert spread.shared_robust[0, 0] == pytest.approx(alone.shared_robust[0, 0], rel=1e-12)
    assert np.isfinite(spread.own_model).all()


@pytest.mark.parametrize(
    ("n_windows", "window_s", "least"), [(5, 38.0, 10), (5, 37.0, 10), (7, 30.0, 10), (3, 50.0, 10)]
)
def test_windows_do_not_leave_fewer_blocks_than_a_variance_needs(n_windows, window_s, least):
    """With a leak of 0.5/s blocks are a tenth of the sum, which windows little longer than that cannot be cut into."""
    entire = simulated(1, duration_s=60.0 * n_windows)
    trains = {unit: entire.spike_times(unit) for unit in entire.unit_ids}
    windows = [(60.0 * k, 60.0 * k + window_s) for k in range(n_windows)]
    windows[0] = (windows[0][0], windows[0][1] - 0.5)
    recording = Recording.from_arrays(trains, entire.positions, windows)
    problem = make_problem(model("flat", leak_rate=0.5), recording)
    blocks = usual_blocks(problem, 0.5)
    assert blocks.n_blocks >= least
    assert blocks.n_bins.min() * BIN_S > 0.5 * problem.grid.duration_s / FEWEST_BLOCKS
    assert blocks.n_bins.sum() == problem.data.n_bins


def test_windows_as_short_as_a_block_stay_whole():
    entire = simulated(1, duration_s=40.0)
    trains = {unit: entire.spike_times(unit) for unit in entire.unit_ids}
    recording = Recording.from_arrays(trains, entire.positions, [(8.0 * k, 8.0 * k + 1.5) for k in range(5)])
    assert usual_blocks(make_problem(model("flat", leak_rate=0.5), recording), 0.5).n_blocks == 5


def test_too_few_blocks_for_a_jackknife_are_counted(recording):
    problem = make_problem(model("flat", leak_rate=LEAK), recording.select(stop_s=4.0), threads=1)
    optimum = maximise(problem, Estimate(first_estimate(problem).own, np.array([0.05])))
    with pytest.raises(ArgumentError, match="the recording makes 4 blocks of time, and 6 are needed"):
        covariances(problem, optimum).shared("jackknife")


@pytest.mark.parametrize(
    ("duration", "leak", "length"),
    [(1000.0, 40.0, 10.0), (50.0, 40.0, 1.0), (1000.0, 0.5, 40.0), (60.0, 100.0, 1.0), (3600.0, 1.0, 36.0)],
)
def test_length_of_blocks(duration, leak, length):
    """About a hundred, none shorter than 1 s or 20 time constants (docs/model.md section 8)."""
    assert block_length_s(duration, leak) == pytest.approx(length)
