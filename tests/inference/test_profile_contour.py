"""Likelihood over two parameters: the surface against direct climbs, its cuts, and the robust kind."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import chi2, f
from worlds import LEAK, model, simulated

from kernelfit import Unavailable
from kernelfit.errors import ArgumentError
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.problem import Estimate
from kernelfit.inference.scaling import PlaneScaling


@pytest.fixture(scope="module")
def fit():
    return model().fit(simulated(1))


@pytest.fixture(scope="module")
def contour(fit):
    return fit.profile_contour("length_um", "leak_rate", n_points=7)


def test_the_surface_is_the_likelihood_climbed_at_each_of_its_points(fit, contour):
    problem = fit.problem()
    for i, j in ((0, 0), (0, 6), (3, 3), (6, 2), (6, 6)):
        shared = fit.shared.copy()
        shared[1:] = np.log(contour.values_a[i]), np.log(contour.values_b[j])
        found = maximise(problem, Estimate(fit.own, shared), held=np.array([False, True, True]))
        assert contour.drop[i, j] == pytest.approx(fit.log_likelihood - found.local.objective, abs=1e-4)
    assert contour.converged.all()
    assert contour.n_sweeps <= 3 * contour.drop.size


def test_the_grid_holds_the_region_of_95_percent(contour):
    rim = np.ones_like(contour.drop, dtype=bool)
    rim[1:-1, 1:-1] = False
    assert contour.drop[rim].min() > contour.critical[-1]
    assert contour.scaled_drop[rim].min() > contour.critical_scaled[-1]
    assert contour.drop.min() < contour.critical[0]


def test_cuts_are_chi_square_and_f_quantiles(fit, contour):
    assert contour.levels == pytest.approx([0.5, 0.9, 0.95])
    assert contour.critical == pytest.approx(0.5 * chi2.ppf([0.5, 0.9, 0.95], 2), rel=1e-12)
    assert contour.critical_scaled == pytest.approx(f.ppf([0.5, 0.9, 0.95], 2, fit.n_blocks - 1), rel=1e-12)


def test_the_surface_falls_no_less_than_the_profile_of_either(fit, contour):
    curve = fit.profile("length_um").curve
    inside = (contour.values_a > curve["value"].iloc[0]) & (contour.values_a < curve["value"].iloc[-1])
    profile = np.interp(contour.values_a[inside], curve["value"], curve["log_likelihood_drop"])
    assert (contour.drop[inside].min(axis=1) >= profile - 0.02).all()  # the curve is read off between its points


def test_the_table_has_a_row_for_each_point(contour):
    table = contour.table
    assert list(table.columns) == ["length_um", "leak_rate", "log_likelihood_drop", "scaled_drop", "converged"]
    row = table[(table["length_um"] == contour.values_a[2]) & (table["leak_rate"] == contour.values_b[5])]
    assert float(row["log_likelihood_drop"].iloc[0]) == contour.drop[2, 5]


def test_the_robust_kind_compares_with_the_covariance_that_the_surface_implies(fit, contour):
    # Expected: inverse of the Hessian of the drop by second differences, good to about one in a hundred.
    step = 0.1 * np.sqrt(np.diag(fit.uncertainty.shared_model)[1:])

    def drop(*signs):
        shared = fit.shared.copy()
        shared[1:] += signs * step
        held = np.array([False, True, True])
        return fit.log_likelihood - maximise(fit.problem(), Estimate(fit.own, shared), held=held).local.objective

    corner = (drop(1, 1) + drop(-1, -1) - drop(1, -1) - drop(-1, 1)) / 4.0
    hessian = np.array([[drop(1, 0) + drop(-1, 0), corner], [corner, drop(0, 1) + drop(0, -1)]]) / np.outer(step, step)
    robust = fit.uncertainty.shared_robust[1:, 1:]
    expected = PlaneScaling(np.linalg.inv(hessian), robust, 1.0)
    a, b = (np.log(v) for v in (contour.values_a, contour.values_b))
    steps = np.stack(np.meshgrid(a - fit.shared[1], b - fit.shared[2], indexing="ij"), axis=-1)
    assert np.allclose(contour.scaled_drop / contour.drop, expected.factor(steps), rtol=0.03)


def test_scaling_by_equal_covariances_changes_nothing():
    covariance = np.array([[1.0, 0.4], [0.4, 2.0]])
    same = PlaneScaling(covariance, covariance, 20.0)
    assert same.factor(np.random.default_rng(1).normal(size=(5, 2))) == pytest.approx(1.0, rel=1e-12)


def test_the_factor_is_that_of_the_two_quadratic_forms():
    # By hand: variances 4 and 9 times the model's along the axes, so 1/4 and 1/9; between them, forms of (1, 1).
    scaling = PlaneScaling(np.diag([1.0, 2.0]), np.diag([4.0, 18.0]), 20.0)
    factor = scaling.factor(np.array([[0.3, 0.0], [0.0, -2.0], [1.0, 1.0], [0.0, 0.0]]))
    assert factor == pytest.approx([0.25, 1.0 / 9.0, (1 / 4 + 1 / 18) / (1 + 1 / 2), 1.0], rel=1e-12)
    held_up = replace(scaling, at_most=0.2)
    assert held_up.factor(np.array([[0.3, 0.0], [0.0, -2.0]])) == pytest.approx([0.2, 1.0 / 9.0], rel=1e-12)


def test_two_that_mix_parameters_cannot_be_held_together():
    fit = model("difference-of-gaussians").fit(simulated(1, n_side=4, duration_s=20.0))
    refused = fit.profile_contour("narrow_amplitude", "wide_amplitude")
    assert isinstance(refused, Unavailable)
    assert "both mix" in refused.reason


def test_one_that_mixes_parameters_goes_with_another(fit):
    recording = simulated(1, n_side=4, duration_s=60.0)
    other = model("difference-of-gaussians").fit(recording)
    contour = other.profile_contour("leak_rate", "wide_length_um", n_points=3)
    assert contour.names == ("leak_rate", "wide_length_um")
    assert contour.estimate == pytest.approx(other.parameters.loc[list(contour.names), "estimate"], rel=1e-9)
    best = np.unravel_index(np.argmin(contour.drop), contour.drop.shape)
    assert best[0] == 1  # the middle of the leaks, which the estimate is near


def test_what_has_no_contour(fit):
    with pytest.raises(ArgumentError, match="two different"):
        fit.profile_contour("length_um", "length_um")
    with pytest.raises(ArgumentError, match="second='reach' is no parameter"):
        fit.profile_contour("length_um", "reach")
    stated = model(leak_rate=LEAK).fit(simulated(1))
    assert "fixed by the model" in stated.profile_contour("length_um", "leak_rate").reason
    disc = model("disc").fit(simulated(1, duration_s=20.0))
    assert "jumps" in disc.profile_contour("length_um", "leak_rate").reason
