"""The optimiser: the same optimum as scipy's from the same sums, bounds, held parameters, honest endings."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import minimize
from worlds import LEAK, model, simulated

from kernelfit import kernels, terms
from kernelfit.engine.time_blocks import time_blocks
from kernelfit.fitting.by_block import sums_by_block
from kernelfit.fitting.maximise import TIGHT, Weighting, evaluate_locally, maximise
from kernelfit.fitting.null import first_estimate
from kernelfit.fitting.problem import Estimate, make_problem


@pytest.fixture(scope="module")
def recording():
    return simulated(1)


def start_of(problem, shared):
    return Estimate(first_estimate(problem).own, np.array(shared, dtype=float))


def by_scipy(problem, start):
    """L-BFGS-B with the same bounds on the same objective and score: nothing of our steps, damping or elimination."""
    n, p = start.own.shape

    def estimate(x):
        return Estimate(x[: n * p].reshape(n, p), x[n * p :])

    def down(x):
        local = evaluate_locally(problem, estimate(x))
        return -local.objective, -np.concatenate([local.score_own.ravel(), local.score_shared])

    bounds = [(None, None)] * (n * p) + [tuple(b) for b in problem.bounds]
    found = minimize(
        down, np.concatenate([start.own.ravel(), start.shared]), jac=True, method="L-BFGS-B", bounds=bounds,
        options={"maxiter": 3000, "maxfun": 6000, "ftol": 1e-15, "gtol": 1e-7},
    )  # fmt: skip
    return -found.fun, estimate(found.x)


CASES = {
    "gaussian": (model("gaussian"), [0.05, np.log(200.0), np.log(20.0)]),
    "exponential, leak fixed": (model("exponential", leak_rate=30.0), [0.05, np.log(200.0)]),
    "power-law": (model("power-law"), [0.05, np.log(1.0), np.log(20.0)]),
    "spline, penalised": (model(kernels.Spline(n_basis=6, smoothing=3.0)), [0.05] * 6 + [np.log(20.0)]),
    "flat, after-spike": (
        model("flat", after_spike=terms.AfterSpike(time_constants_s=(0.01, 0.1), ridge=0.1)), [0.02, np.log(20.0)]
    ),
}  # fmt: skip


@pytest.mark.parametrize(("the_model", "start"), CASES.values(), ids=CASES)
def test_same_optimum_as_scipy(recording, the_model, start):
    problem = make_problem(the_model, recording, threads=1)
    begin = start_of(problem, start)
    optimum = maximise(problem, begin)
    objective, estimate = by_scipy(problem, begin)
    assert optimum.converged
    assert optimum.local.objective == pytest.approx(objective, abs=1e-5)
    assert optimum.local.objective > objective - 1e-8  # never below it
    # within a hundredth of a standard error; scipy stops earlier than we do
    error = 1.0 / np.sqrt(np.diag(optimum.local.information.shared))
    assert (np.abs(optimum.estimate.shared - estimate.shared) < 0.03 * error).all()
    np.testing.assert_allclose(optimum.estimate.own, estimate.own, atol=0.01)


def test_the_score_vanishes_at_the_optimum(recording):
    problem = make_problem(CASES["gaussian"][0], recording, threads=1)
    optimum = maximise(problem, start_of(problem, CASES["gaussian"][1]))
    local = optimum.local
    assert optimum.decrement < TIGHT
    assert np.abs(local.score_own / np.sqrt(np.einsum("nii->ni", local.information.own))).max() < 1e-6
    assert np.abs(local.score_shared / np.sqrt(np.diag(local.information.shared))).max() < 1e-6
    np.testing.assert_array_equal(optimum.at_bound, 0.0)
    assert optimum.free.all()


def test_convergence_is_fast_from_afar(recording):
    """From a fifth of the leak, twice the length, no sign of the amplitude: a few dozen steps, not hundreds."""
    problem = make_problem(CASES["gaussian"][0], recording, threads=1)
    for start in ([0.01, np.log(300.0), np.log(5.0)], [-0.05, np.log(60.0), np.log(300.0)]):
        assert maximise(problem, start_of(problem, start)).n_iterations < 60


def test_a_parameter_pushed_against_its_bound_stays_there_and_is_marked():
    """Coupling that grows with distance: the length runs to its upper bound, and the rest is as good as scipy's."""
    problem = make_problem(model("exponential", leak_rate=40.0), simulated(2, lambda d: np.where(d > 180, 0.2, 0.1)))
    begin = start_of(problem, [0.05, np.log(500.0)])
    optimum = maximise(problem, begin)
    objective, _ = by_scipy(problem, begin)
    assert optimum.converged
    assert optimum.estimate.shared[1] == problem.bounds[1, 1]
    np.testing.assert_array_equal(optimum.at_bound, [0.0, 1.0])
    np.testing.assert_array_equal(optimum.free, [True, False])
    assert optimum.local.objective == pytest.approx(objective, abs=1e-5)


def test_a_start_outside_the_bounds_is_moved_in(recording):
    problem = make_problem(CASES["gaussian"][0], recording, threads=1)
    inside = maximise(problem, start_of(problem, CASES["gaussian"][1]))
    outside = maximise(problem, start_of(problem, [0.05, np.log(1e9), np.log(1e9)]))
    low, high = problem.bounds.T
    assert ((outside.estimate.shared >= low) & (outside.estimate.shared <= high)).all()
    assert outside.local.objective <= inside.local.objective + 1e-6


def test_held_parameters_stay_and_the_others_are_optimal_given_them(recording):
    problem = make_problem(CASES["gaussian"][0], recording, threads=1)
    held = np.array([False, True, False])
    optimum = maximise(problem, start_of(problem, [0.05, np.log(90.0), np.log(20.0)]), held=held)
    assert optimum.estimate.shared[1] == np.log(90.0)
    np.testing.assert_array_equal(optimum.free, ~held)
    for step in (1e-3, -1e-3):
        for q in (0, 2):
            shared = optimum.estimate.shared.copy()
            shared[q] += step
            assert evaluate_locally(problem, Estimate(optimum.estimate.own, shared)).objective < optimum.local.objective


@pytest.mark.parametrize("steps", [0, 1, 3])
def test_too_few_steps_are_reported_and_the_best_point_is_kept(recording, steps):
    problem = make_problem(CASES["gaussian"][0], recording, threads=1)
    begin = start_of(problem, CASES["gaussian"][1])
    optimum = maximise(problem, begin, max_iterations=steps)
    assert not optimum.converged
    assert f"stopped after {steps} steps" in optimum.message
    assert optimum.n_iterations == steps
    assert optimum.local.objective >= evaluate_locally(problem, begin).objective


def test_the_objective_never_falls(recording):
    """Each further step allowed can only raise the objective: no step that loses likelihood is ever taken."""
    problem = make_problem(CASES["power-law"][0], recording, threads=1)
    begin = start_of(problem, [-0.3, np.log(20.0), np.log(400.0)])
    climbed = [maximise(problem, begin, max_iterations=k).local.objective for k in range(12)]
    assert (np.diff(climbed) >= -1e-12 * abs(climbed[0])).all()


def test_a_start_where_rates_overflow_is_given_up_in_words(recording):
    problem = make_problem(CASES["gaussian"][0], recording, threads=1)
    optimum = maximise(problem, start_of(problem, [40.0, np.log(200.0), np.log(5.0)]))
    assert not optimum.converged
    assert optimum.message == "the likelihood at the start is not finite"


@pytest.mark.parametrize("amplitude", [1.0, 3.0])
def test_a_start_far_too_strong_comes_back(recording, amplitude):
    problem = make_problem(CASES["gaussian"][0], recording, threads=1)
    best = maximise(problem, start_of(problem, CASES["gaussian"][1])).local.objective
    optimum = maximise(problem, start_of(problem, [amplitude, np.log(100.0), np.log(80.0)]))
    assert optimum.converged
    assert optimum.local.objective == pytest.approx(best, abs=1e-6)


def test_without_shared_parameters_the_rates_are_the_counts(recording):
    from kernelfit.fitting.null import without_coupling

    problem = without_coupling(make_problem(CASES["gaussian"][0], recording, threads=1))
    own = np.zeros((9, 1))
    optimum = maximise(problem, Estimate(own, np.empty(0)))
    rate = problem.data.counts / (problem.data.n_bins * problem.data.bin_width)
    np.testing.assert_allclose(np.exp(optimum.estimate.own[:, 0]), rate, rtol=1e-6)


def test_a_point_evaluated_before_saves_a_sweep(recording):
    problem = make_problem(model("gaussian"), recording, threads=1)
    start = Estimate(first_estimate(problem).own, np.array([0.1, np.log(120.0), np.log(LEAK)]))
    fresh = maximise(problem, start)
    used = problem.clock.sweeps
    again = maximise(problem, evaluate_locally(problem, start))
    assert problem.clock.sweeps - used == used
    np.testing.assert_array_equal(again.estimate.shared, fresh.estimate.shared)
    outside = Estimate(start.own, np.array([0.1, 50.0, np.log(LEAK)]))
    moved = maximise(problem, evaluate_locally(problem, outside))
    np.testing.assert_array_equal(moved.estimate.shared, maximise(problem, outside).estimate.shared)


def test_the_last_sweep_is_kept_by_block_of_time(recording):
    problem = make_problem(model("gaussian"), recording, threads=1)
    optimum = maximise(problem, Estimate(first_estimate(problem).own, np.array([0.1, np.log(120.0), np.log(LEAK)])))
    again = sums_by_block(problem, optimum.estimate)
    np.testing.assert_array_equal(optimum.by_block.sums.score, again.sums.score)
    np.testing.assert_array_equal(optimum.by_block.blocks.stretches, again.blocks.stretches)
    assert maximise(problem, optimum.estimate, tolerance=1e-2).by_block is None


@pytest.mark.parametrize("kernel", ["gaussian", kernels.Spline(n_basis=5, smoothing=3.0)])
def test_weights_count_blocks_of_time_as_often_as_they_say(recording, kernel):
    """Weights of 0 and 2 on two halves: the score of the second half vanishes at the optimum, penalty and ridge aside;
    and weights of 1 change nothing."""
    leak = None if isinstance(kernel, str) else LEAK
    problem = make_problem(model(kernel, leak_rate=leak), recording, threads=1)
    start = [0.1, np.log(120.0), np.log(LEAK)] if leak is None else [0.1] * 5
    estimate = Estimate(first_estimate(problem).own, np.array(start))
    blocks = time_blocks(problem.grid, 0.5 * problem.grid.duration_s)
    assert blocks.n_blocks == 2
    plain = maximise(problem, estimate)
    ones = maximise(problem, estimate, weighting=Weighting(blocks, np.ones(2)))
    np.testing.assert_allclose(ones.estimate.shared, plain.estimate.shared, rtol=1e-6, atol=1e-8)
    second = maximise(problem, estimate, weighting=Weighting(blocks, np.array([0.0, 2.0])))
    assert second.converged
    sums = problem.evaluate(second.estimate, blocks=blocks)
    pull = 2.0 * sums.score[1, :, 1:].sum(axis=0) - problem.penalty @ second.estimate.shared
    size = np.sqrt(np.diag(second.local.information.shared))
    np.testing.assert_allclose(pull / size, 0.0, atol=1e-4)
    np.testing.assert_allclose(sums.score[1, :, 0], 0.0, atol=1e-3)
    assert abs(second.estimate.shared[0] - plain.estimate.shared[0]) > 1e-4


def test_a_concave_objective_is_climbed_by_newton_steps_alone(recording):
    """Fixed leak, kernel linear in its coefficients, canonical link: five sweeps from no coupling."""
    problem = make_problem(model(kernels.Spline(n_basis=5), leak_rate=LEAK), recording, threads=1)
    assert problem.concave
    optimum = maximise(problem, Estimate(first_estimate(problem).own, np.zeros(5)))
    assert optimum.converged
    assert problem.clock.sweeps <= 7
    assert not make_problem(model("flat"), recording, threads=1).concave
    assert not make_problem(model("gaussian", leak_rate=LEAK), recording, threads=1).concave
