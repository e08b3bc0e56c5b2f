"""The observed information: against differences of the whole score, and against refits with weights."""

from __future__ import annotations

import numpy as np
import pytest
from worlds import LEAK, model, simulated

from kernelfit.fitting import covariance
from kernelfit.fitting.curvature import curved_parameters, excess_curvature
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


def test_one_step_is_near_full_refits_and_would_not_be_by_the_expected_information(monkeypatch):
    """Standard errors and band widths within 10 % of 199 refits with the same exponential weights."""
    recording = simulated(3, duration_s=240.0)
    fit = model().fit(recording)
    refits = fit.bootstrap("block-weights", n_replicates=199, jobs=1)
    step = fit.bootstrap("one-step", n_replicates=199)
    spread = step.kind.law.spread(fit.n_blocks)
    ratio = spread * np.sqrt(np.diag(step.covariance) / np.diag(refits.covariance))
    np.testing.assert_allclose(ratio, 1.0, atol=0.1)
    d = np.linspace(fit.span.smallest_um, fit.span.largest_um, 15)
    for simultaneous in (False, True):
        ours, full = (b.kernel_band(d, simultaneous=simultaneous) for b in (step, refits))
        widths = spread * (ours["upper"] - ours["lower"]) / (full["upper"] - full["lower"])
        assert widths.mean() == pytest.approx(1.0, abs=0.1)
    monkeypatch.setattr(covariance, "excess_curvature", lambda problem, local, errors, weighting: np.zeros((3, 3)))
    expected = model().fit(recording).bootstrap("one-step", n_replicates=199)
    assert spread * np.sqrt(expected.covariance[1, 1] / refits.covariance[1, 1]) > 1.1


def test_where_there_is_no_top_the_expected_information_is_used(monkeypatch):
    recording = simulated(7, duration_s=60.0)
    monkeypatch.setattr(covariance, "excess_curvature", lambda problem, local, errors, weighting: np.zeros((3, 3)))
    expected = model().fit(recording)
    downhill = -np.diag([0.0, 1.5, 0.0]) @ np.linalg.inv(expected.uncertainty.shared_model)
    downhill = 0.5 * (downhill + downhill.T)
    monkeypatch.setattr(covariance, "excess_curvature", lambda problem, local, errors, weighting: downhill)
    fit = model().fit(recording)
    np.testing.assert_array_equal(fit.uncertainty.shared_robust, expected.uncertainty.shared_robust)
