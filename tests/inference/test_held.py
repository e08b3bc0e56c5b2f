"""Coordinates in which a natural parameter can be held: the same kernel, its derivatives and its bounds."""

from __future__ import annotations

import numpy as np
import pytest
from worlds import LEAK, model, simulated

from kernelfit import Unavailable, kernels
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.inference.held import Reparametrised, hold
from kernelfit.kernels import DistanceRange

SPAN = DistanceRange(80.0, 60.0, 700.0)
DISTANCES = np.array([0.0, 60.0, 80.0, 155.0, 320.0, 700.0])
THETA = np.array([0.3, np.log(90.0), 0.2, 0.4])
PLACES = [(0, 0), (2, 2), (3, 1)]  # natural parameter of a difference of Gaussians, and the working one it replaces


@pytest.mark.parametrize(("natural", "place"), PLACES)
def test_other_coordinates_are_the_same_kernel(natural, place):
    inner = kernels.DifferenceOfGaussians()
    other = Reparametrised(inner, natural, place)
    outer = other.outer(THETA, SPAN)
    expected = inner.natural(THETA, SPAN)[natural]
    assert outer[place] == pytest.approx(np.log(expected) if natural == 3 else expected, rel=1e-14)
    assert other.theta(outer, SPAN) == pytest.approx(THETA, rel=1e-12)
    assert np.allclose(other.value(outer, DISTANCES, SPAN), inner.value(THETA, DISTANCES, SPAN), rtol=1e-12, atol=0)


@pytest.mark.parametrize(("natural", "place"), PLACES)
def test_the_gradient_is_the_derivative_of_the_value(natural, place):
    # Source: definition of a gradient; central differences of 1e-5, whose error is of the order 1e-10.
    other = Reparametrised(kernels.DifferenceOfGaussians(), natural, place)
    outer = other.outer(THETA, SPAN)
    gradient = other.gradient(outer, DISTANCES, SPAN)
    for k in range(4):
        step = 1e-5 * np.eye(4)[k]
        ahead, behind = (other.value(outer + s, DISTANCES, SPAN) for s in (step, -step))
        assert np.allclose(gradient[k], (ahead - behind) / 2e-5, rtol=1e-6, atol=1e-8)


@pytest.mark.parametrize(("natural", "place"), PLACES)
def test_the_row_is_the_derivative_of_the_parameter(natural, place):
    other = Reparametrised(kernels.DifferenceOfGaussians(), natural, place)
    row = other.row(THETA, SPAN)
    for k in range(4):
        step = 1e-6 * np.eye(4)[k]
        ahead, behind = (other.outer(THETA + s, SPAN)[place] for s in (step, -step))
        assert row[k] == pytest.approx((ahead - behind) / 2e-6, rel=1e-6, abs=1e-8)


@pytest.mark.parametrize("wide_um", [70.0, 200.0, 900.0, 3400.0])
def test_bounds_of_the_others_keep_every_parameter_within_its_own(wide_um):
    # With the wide length held, the excess may only go so far that the narrow length stays within its limits.
    inner = kernels.DifferenceOfGaussians()
    held = Reparametrised(inner, 3, 1, held=float(np.log(wide_um)))
    own, bounds = inner.bounds(SPAN), held.bounds(SPAN)
    assert own[3, 0] <= bounds[3, 0] < bounds[3, 1] <= own[3, 1]
    for excess in bounds[3]:
        theta = held.theta(np.array([0.3, np.log(wide_um), 0.2, excess]), SPAN)
        assert own[1, 0] - 1e-9 <= theta[1] <= own[1, 1] + 1e-9
        assert inner.natural(theta, SPAN)[3] == pytest.approx(wide_um, rel=1e-12)
    assert np.exp(bounds[1]) == pytest.approx([1.1 * SPAN.length_limits[0], SPAN.length_limits[1]], rel=1e-12)
    assert np.isinf(bounds[[0, 2]]).all()


def test_an_estimate_goes_there_and_back():
    recording = simulated(1, duration_s=5.0)
    problem = make_problem(model("difference-of-gaussians"), recording)
    shared = np.append(THETA, np.log(LEAK))
    estimate = Estimate(np.zeros((problem.data.n_targets, 1)), shared)
    for name in ("narrow_amplitude", "narrow_length_um", "wide_amplitude", "wide_length_um", "leak_rate"):
        held = hold(problem, shared, name)
        there = held.into(estimate)
        assert held.value(there.shared[held.place]) == pytest.approx(
            {**problem.kernel.curve(THETA, problem.span).natural, "leak_rate": LEAK}[name], rel=1e-12
        )
        assert held.back(there).shared == pytest.approx(shared, rel=1e-12)


def test_a_penalty_on_working_parameters_does_not_go_with_other_coordinates():
    problem = make_problem(model(kernels.DifferenceOfGaussians(ridge=0.1)), simulated(1, duration_s=5.0))
    shared = np.append(THETA, np.log(LEAK))
    refused = hold(problem, shared, "wide_amplitude")
    assert isinstance(refused, Unavailable)
    assert "penalty" in refused.reason
    assert not isinstance(hold(problem, shared, "narrow_length_um"), Unavailable)
