"""The observed information: against differences of the whole score, and against refits with weights."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from worlds import LEAK, model, simulated

from kernelfit.fitting.curvature import curved_parameters, excess_curvature, with_observed_information
from kernelfit.fitting.maximise import evaluate_locally
from kernelfit.fitting.problem import Estimate

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")


def errors_of(fit):
    return np.sqrt(np.diag(fit.uncertainty.shared_model))


@pytest.mark.parametrize("kernel", ["gaussian", "power-law", "difference-of-gaussians", "spline"])
def test_expected_information_and_excess_are_the_hessian(kernel):
    """Central differences of the whole score, own parameters included."""
    fit = model(kernel, after_spike="basis").fit(simulated(7, duration_s=60.0))
    problem = fit.problem()
    local = evaluate_locally(problem, fit.estimate)
    std_errors = np.where(np.isfinite(errors_of(fit)), errors_of(fit), 1e-2)
    excess = excess_curvature(problem, local, std_errors)
    for q in range(fit.shared.size):
        step = np.zeros(fit.shared.size)
        step[q] = 1e-3 * std_errors[q]
        up, down = (evaluate_locally(problem, Estimate(fit.own, fit.shared + s * step)) for s in (1, -1))
        shared = (down.score_shared - up.score_shared) / (2 * step[q])
        own = (down.score_own - up.score_own) / (2 * step[q])
        scale = np.abs(local.information.shared).max(axis=1)
        np.testing.assert_allclose((local.information.shared + excess)[:, q] / scale, shared / scale, atol=2e-6)
        np.testing.assert_allclose(local.information.cross[..., q], own, atol=1e-5 * np.abs(own).max())
    np.testing.assert_array_equal(excess, excess.T)
    assert np.abs(excess).max() > 0


def test_where_the_predictor_is_linear_there_is_none():
    fit = model("spline", leak_rate=LEAK).fit(simulated(7, duration_s=60.0))
    problem = fit.problem()
    before = problem.clock.sweeps
    assert not curved_parameters(problem).any()
    assert not excess_curvature(problem, evaluate_locally(problem, fit.estimate), errors_of(fit)).any()
    assert problem.clock.sweeps == before + 1


def test_one_step_with_it_is_near_full_refits():
    """Standard errors and band widths within 10 % of 199 refits with the same exponential weights; by the expected
    information the length is not."""
    fit = model().fit(simulated(3, duration_s=240.0))
    problem = fit.problem()
    excess = excess_curvature(problem, evaluate_locally(problem, fit.estimate), errors_of(fit))
    influence = with_observed_information(fit.uncertainty.block_influence, fit.uncertainty.shared_model, excess)
    observed = replace(fit, uncertainty=replace(fit.uncertainty, block_influence=influence))
    refits = fit.bootstrap("block-weights", n_replicates=199, jobs=1)
    step = observed.bootstrap("one-step", n_replicates=199)
    spread = step.kind.law.spread(fit.n_blocks)
    ratio = spread * np.sqrt(np.diag(step.covariance) / np.diag(refits.covariance))
    np.testing.assert_allclose(ratio, 1.0, atol=0.1)
    expected = fit.bootstrap("one-step", n_replicates=199)
    assert spread * np.sqrt(expected.covariance[1, 1] / refits.covariance[1, 1]) > 1.1
    d = np.linspace(fit.span.smallest_um, fit.span.largest_um, 15)
    for simultaneous in (False, True):
        ours, full = (b.kernel_band(d, simultaneous=simultaneous) for b in (step, refits))
        widths = spread * (ours["upper"] - ours["lower"]) / (full["upper"] - full["lower"])
        assert widths.mean() == pytest.approx(1.0, abs=0.1)


def test_no_top_has_no_influence():
    influence, model_covariance = np.ones((5, 2)), np.eye(2)
    assert with_observed_information(influence, model_covariance, np.diag([0.0, -1.5])) is None
    same = with_observed_information(influence, model_covariance, np.zeros((2, 2)))
    np.testing.assert_allclose(same, influence, rtol=1e-15)
    held = np.full((2, 2), np.nan)
    held[0, 0] = 0.5
    partly = with_observed_information(np.array([[1.0, np.nan]]), held, np.diag([2.0, 0.0]))
    np.testing.assert_allclose(partly, [[0.5, np.nan]])
