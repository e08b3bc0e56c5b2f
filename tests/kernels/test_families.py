"""What every distance law must do. One list drives all; a new family is one line in it."""

from __future__ import annotations

import itertools
import json
from dataclasses import dataclass, replace

import numpy as np
import pytest
from scipy.integrate import quad

from kernelfit import kernels
from kernelfit.errors import ArgumentError, NotIdentifiedError
from kernelfit.kernels import DistanceRange, Kernel, Parameter
from kernelfit.kernels.base import START_SEPARATION

SPAN = DistanceRange(reference_um=200.0, smallest_um=200.0, largest_um=1720.465, n_coordinates=2)
DISTANCES = np.array([0.0, 3.0, 150.0, 200.0, 282.8, 400.0, 721.1, 1000.0, 1720.465, 2500.0])


@dataclass(frozen=True)
class Case:
    """A kernel, invented parameters on the natural scale, and the J at the reference distance they imply."""

    kernel: Kernel
    natural: tuple[float, ...]
    at_reference: float

    @property
    def theta(self) -> np.ndarray:
        return self.kernel.working(np.array(self.natural), SPAN)


COEFFICIENTS = (0.3, 0.2, 0.1, 0.0, -0.1, -0.05, 0.0, 0.01)
CASES = [
    Case(kernels.Flat(), (-0.07,), -0.07),
    Case(kernels.Exponential(), (0.2, 300.0), 0.2),
    Case(kernels.Gaussian(), (-0.15, 350.0), -0.15),
    Case(kernels.PowerLaw(), (0.2, 1.7), 0.2),
    Case(kernels.PowerLaw(fit_scale=True), (0.2, 130.0, 2.1), 0.2),
    Case(kernels.DifferenceOfGaussians(), (0.5, 250.0, 0.2, 600.0), 0.3),
    # d = 200, m = 2, s = 400: (1 - 0.25/2) exp(-0.125)
    Case(kernels.MexicanHat(), (0.4, 400.0), 0.4 * 0.875 * np.exp(-0.125)),
    Case(kernels.Disc(), (0.1, 500.0), 0.1),
    # at the first knot the first three B-splines weigh 1/6, 2/3, 1/6
    Case(kernels.Spline(n_basis=8), COEFFICIENTS, 0.3 / 6 + 0.2 * 2 / 3 + 0.1 / 6),
    Case(kernels.Spline(n_basis=8, smoothing=2.0, order=3, axis="log-distance"), COEFFICIENTS, 0.2),
]
KERNELS = pytest.mark.parametrize("case", CASES, ids=lambda case: repr(case.kernel))


def test_the_list_covers_every_registered_family():
    assert {case.kernel.name for case in CASES} == set(kernels.KERNELS)


@KERNELS
def test_gradient_is_the_derivative_of_value(case):
    # Source: definition of a derivative. Central differences with step 1e-5: error about 1e-10 J'''.
    step = 1e-5
    gradient = case.kernel.gradient(case.theta, DISTANCES, SPAN)
    assert gradient.shape == (case.theta.size, DISTANCES.size)
    for k, parameter in enumerate(case.kernel.parameters(SPAN)):
        ahead, behind = case.theta.copy(), case.theta.copy()
        ahead[k] += step
        behind[k] -= step
        slope = case.kernel.value(ahead, DISTANCES, SPAN) - case.kernel.value(behind, DISTANCES, SPAN)
        np.testing.assert_allclose(gradient[k], slope / (2 * step), rtol=1e-6, atol=1e-9)
        if not parameter.discrete:
            assert np.any(gradient[k] != 0)


@KERNELS
def test_amplitudes_are_stated_where_the_family_says(case):
    value = case.kernel.value(case.theta, np.array([SPAN.reference_um]), SPAN)
    assert value == pytest.approx([case.at_reference], rel=1e-12)


@KERNELS
def test_linear_parameters_are_linear(case):
    linear = np.array([not p.shape for p in case.kernel.parameters(SPAN)])
    doubled = np.where(linear, 2.0 * case.theta, case.theta)
    once, twice = (case.kernel.value(theta, DISTANCES, SPAN) for theta in (case.theta, doubled))
    np.testing.assert_allclose(twice, 2.0 * once, rtol=1e-12)
    by_linear = case.theta[linear] @ case.kernel.gradient(case.theta, DISTANCES, SPAN)[linear]
    np.testing.assert_allclose(by_linear, once, rtol=1e-10, atol=1e-15)


@KERNELS
def test_natural_scale_there_and_back_with_its_jacobian(case):
    natural = case.kernel.natural(case.theta, SPAN)
    np.testing.assert_allclose(natural, case.natural, rtol=1e-12)
    step = 1e-6
    columns = [
        (case.kernel.natural(case.theta + step * e, SPAN) - case.kernel.natural(case.theta - step * e, SPAN))
        / (2 * step)
        for e in np.eye(case.theta.size)
    ]
    jacobian = case.kernel.natural_jacobian(case.theta, SPAN)
    np.testing.assert_allclose(jacobian, np.column_stack(columns), rtol=1e-6, atol=1e-8)


@KERNELS
def test_bounds_are_ordered_have_reasons_and_hold_the_grid(case):
    bounds = case.kernel.bounds(SPAN)
    assert bounds.shape == (case.theta.size, 2)
    assert (bounds[:, 0] < bounds[:, 1]).all()
    assert (bounds[:, 0] < case.theta).all()
    assert (case.theta < bounds[:, 1]).all()
    reasons = [case.kernel.bound_reason(k, up, SPAN) for k in range(len(bounds)) for up in (False, True)]
    assert all(reasons)
    for k, parameter in enumerate(case.kernel.parameters(SPAN)):
        assert np.isfinite(bounds[k]).all() == parameter.shape
        if parameter.shape:
            assert case.kernel.bound_reason(k, False, SPAN) != case.kernel.bound_reason(k, True, SPAN)
    grid = case.kernel.shape_grid(SPAN)
    assert grid.ndim == 2
    assert (grid >= bounds[:, 0] - 1e-12).all()
    assert (grid <= bounds[:, 1] + 1e-12).all()


@KERNELS
def test_derivatives_and_values_stay_finite_over_the_bounds(case):
    # a fit may try any corner; overflow would end it (numpy warnings from the package are errors here)
    bounds = np.clip(case.kernel.bounds(SPAN), -5.0, 50.0)
    for corner in (bounds[:, 0], bounds[:, 1], bounds.mean(axis=1)):
        assert np.isfinite(case.kernel.value(corner, DISTANCES, SPAN)).all()
        assert np.isfinite(case.kernel.gradient(corner, DISTANCES, SPAN)).all()


@KERNELS
def test_starts_recover_a_planted_kernel(case):
    # 31 distances as on an 8 x 8 array; noise a thirtieth of the largest value; three points carry nothing
    rng = np.random.default_rng(4)
    d = np.linspace(200.0, 1720.0, 31)
    truth = case.kernel.value(case.theta, d, SPAN)
    noise = np.abs(truth).max() / 30
    coupling = truth + rng.normal(0.0, noise, d.size)
    weight = np.full(d.size, noise**-2)
    coupling[3] = np.nan
    coupling[[14, 8]] = 1e9, 100 * np.abs(truth).max()
    weight[[14, 8]] = 0.0, 1e-6 * weight[0]
    starts = case.kernel.starts(d, coupling, weight, SPAN)
    assert 1 <= len(starts) <= 3
    best = case.kernel.value(starts[0], d, SPAN)
    # the grid is coarse: within a tenth of the largest value in the root mean square, from one start
    assert np.sqrt(np.mean((best - truth) ** 2)) < 0.1 * np.abs(truth).max()
    bounds = case.kernel.bounds(SPAN)
    shape = [k for k, p in enumerate(case.kernel.parameters(SPAN)) if p.shape]
    for i, start in enumerate(starts):
        assert (start >= bounds[:, 0] - 1e-12).all()
        assert (start <= bounds[:, 1] + 1e-12).all()
        for other in starts[:i]:
            assert np.max(np.abs(start - other)[shape]) >= START_SEPARATION
    if len(shape) == 1:  # one length or exponent: found to within a factor of 1.5
        assert abs(starts[0][shape[0]] - case.theta[shape[0]]) < np.log(1.5)


@KERNELS
def test_starts_without_a_usable_point_are_still_starts(case):
    nothing = np.full(3, np.nan)
    (first, *_) = case.kernel.starts(np.array([200.0, 400.0, 600.0]), nothing, nothing, SPAN)
    assert np.isfinite(first).all()
    assert np.any(case.kernel.gradient(first, DISTANCES, SPAN) != 0)


@KERNELS
def test_description_round_trip(case):
    options = json.loads(json.dumps(case.kernel.describe()))
    assert kernels.kernel_from_description(case.kernel.name, options) == case.kernel


@KERNELS
def test_a_ridge_weighs_every_amplitude_and_no_shape(case):
    ridged = replace(case.kernel, ridge=2.5)
    before = case.kernel.penalty(SPAN)
    added = ridged.penalty(SPAN) - (0.0 if before is None else before)
    shape = [p.shape for p in ridged.parameters(SPAN)]
    np.testing.assert_allclose(added, np.diag(np.where(shape, 0.0, 2.5)), atol=1e-12)
    options = json.loads(json.dumps(ridged.describe()))
    assert options["ridge"] == 2.5
    assert kernels.kernel_from_description(case.kernel.name, options) == ridged
    assert "ridge" not in case.kernel.describe()


@KERNELS
@pytest.mark.parametrize("ridge", [-1.0, np.nan, np.inf, True, "much"])
def test_a_ridge_is_a_number_from_zero_on(case, ridge):
    with pytest.raises(ArgumentError, match="ridge="):
        replace(case.kernel, ridge=ridge)


@KERNELS
def test_a_strong_ridge_starts_without_amplitude(case):
    ridged, jump = replace(case.kernel, ridge=1e9), np.full(DISTANCES.size, 0.1)
    (start, *_) = ridged.starts(DISTANCES, jump, np.ones(DISTANCES.size), SPAN)
    linear = [not p.shape for p in case.kernel.parameters(SPAN)]
    assert np.abs(start[linear]).max() < 1e-6


@KERNELS
def test_too_few_distances_are_refused_in_words(case):
    n_parameters = len(case.kernel.parameters(SPAN))
    if n_parameters == 1:
        assert case.kernel.check_identified(np.array([200.0]), SPAN) == ()
        return
    with pytest.raises(NotIdentifiedError, match=r"distinct distance.*flat|distinct distance.*smoothing"):
        case.kernel.check_identified(np.array([200.0]), SPAN)


@KERNELS
def test_curve_is_the_kernel_as_a_function(case):
    curve = case.kernel.curve(case.theta, SPAN)
    table = DISTANCES.reshape(2, 5)
    np.testing.assert_array_equal(curve(table).ravel(), case.kernel.value(case.theta, DISTANCES, SPAN))
    assert curve(350.0).shape == ()
    assert list(curve.natural) == [p.name for p in case.kernel.parameters(SPAN)]
    assert curve.reference_um == 200.0
    assert case.kernel.name in repr(curve)
    with pytest.raises(ArgumentError, match="not negative"):
        curve([-1.0])
    with pytest.raises(ArgumentError, match="finite values"):
        case.kernel.curve(case.theta[:-1], SPAN)
    with pytest.raises(ValueError, match="read-only"):
        curve.theta[0] = 1.0


BY_HAND = {
    "flat": kernels.Flat().at(amplitude=-0.07),
    "exponential": kernels.Exponential().at(amplitude=0.2, length_um=300.0, reference_um=200.0),
    "gaussian": kernels.Gaussian().at(amplitude=-0.15, length_um=350.0, reference_um=200.0),
    "power-law": kernels.PowerLaw().at(amplitude=0.2, exponent=1.7, reference_um=200.0),
    "difference-of-gaussians": kernels.DifferenceOfGaussians().at(
        narrow_amplitude=0.5,
        narrow_length_um=250.0,
        wide_amplitude=0.2,
        wide_length_um=600.0,
        reference_um=200.0,
    ),
    "mexican-hat": kernels.MexicanHat().at(amplitude=0.4, length_um=400.0, n_coordinates=2),
    "disc": kernels.Disc().at(amplitude=0.1, length_um=500.0),
    "spline": kernels.Spline(n_basis=8).at(coefficients=COEFFICIENTS, smallest_um=200.0, largest_um=1720.465),
}


@pytest.mark.parametrize("name", sorted(kernels.KERNELS))
def test_a_kernel_stated_by_hand_equals_the_fitted_form(name):
    case = next(c for c in CASES if c.kernel.name == name)
    expected = case.kernel.value(case.theta, DISTANCES, SPAN)
    np.testing.assert_allclose(BY_HAND[name](DISTANCES), expected, rtol=1e-12)


# Values worked out from the formulas of the model's description, at d = 400, reference 200.
@pytest.mark.parametrize(
    ("name", "expected"),
    [
        ("flat", -0.07),
        ("exponential", 0.2 * np.exp(-200 / 300)),
        ("gaussian", -0.15 * np.exp(-(160000 - 40000) / (2 * 350**2))),
        ("power-law", 0.2 * (3 / 2) ** -1.7),
        (
            "difference-of-gaussians",
            0.5 * np.exp(-120000 / (2 * 250**2)) - 0.2 * np.exp(-120000 / (2 * 600**2)),
        ),
        ("mexican-hat", 0.4 * (1 - 1 / 2) * np.exp(-1 / 2)),
        ("disc", 0.1),
    ],
)
def test_formula(name, expected):
    assert BY_HAND[name](400.0) == pytest.approx(expected, rel=1e-12)


def test_a_fitted_scale_of_the_power_law():
    curve = kernels.PowerLaw(fit_scale=True).at(
        amplitude=0.2, length_um=100.0, exponent=2.0, reference_um=200.0
    )
    assert curve(400.0) == pytest.approx(0.2 * (5 / 3) ** -2, rel=1e-12)


def test_disc_radii_split_the_distances_in_every_way():
    disc = kernels.Disc()
    distinct = np.array([200.0, 282.8, 400.0, 447.2])
    radii = disc.radius_candidates(distinct)
    inside = [int(np.sum(disc.at(amplitude=1.0, length_um=r)(distinct))) for r in radii]
    assert inside == [1, 2, 3]
    bounds = np.exp(disc.bounds(DistanceRange(200.0, 200.0, 447.2))[1])
    assert (bounds[0] < radii).all()
    assert (radii < bounds[1]).all()
    assert kernels.Gaussian().radius_candidates(distinct) is None


def test_a_disc_does_not_reach_its_own_radius():
    # d < R; R travels as a logarithm, whose rounding must not decide
    for radius in np.linspace(10.0, 2000.0, 300):
        curve = kernels.Disc().at(amplitude=1.0, length_um=radius)
        assert curve(radius) == 0.0
        assert curve(radius * (1 - 1e-9)) == 1.0


@pytest.mark.parametrize("m", [1, 3])
def test_gradient_of_the_mexican_hat_in_other_dimensions(m):
    span = DistanceRange(200.0, 200.0, 1720.0, m)
    hat, theta, step = kernels.MexicanHat(), np.array([0.4, np.log(400.0)]), np.array([0.0, 1e-5])
    ahead, behind = (hat.value(theta + s, DISTANCES, span) for s in (step, -step))
    slope = (ahead - behind) / 2e-5
    np.testing.assert_allclose(hat.gradient(theta, DISTANCES, span)[1], slope, rtol=1e-6, atol=1e-9)


def test_a_length_far_below_the_reference_does_not_overflow():
    assert np.isfinite(kernels.Gaussian().at(amplitude=0.1, length_um=1.0, reference_um=200.0)(0.0))


def test_mexican_hat_is_balanced_in_its_own_dimension():
    # Source: definition; the integral over line, plane or space is 0. Beyond 12 lengths lies less than 1e-28.
    for m in (1, 2, 3):
        curve = kernels.MexicanHat().at(amplitude=1.0, length_um=500.0, n_coordinates=m)
        edges = [0.0, 500.0 * np.sqrt(m), 6000.0]
        centre, surround = (
            quad(lambda d, m=m, curve=curve: float(curve(d)) * d ** (m - 1), *ends)[0]
            for ends in itertools.pairwise(edges)
        )
        assert centre > 0
        assert centre + surround == pytest.approx(0.0, abs=1e-10 * centre)
        assert curve(500.0 * np.sqrt(m)) == pytest.approx(0.0, abs=1e-15)


def test_lengths_keep_room_when_the_kernel_reaches_less_far_than_the_reference():
    tiny = DistanceRange(reference_um=200.0, smallest_um=1.0, largest_um=5.0)
    for case in CASES:
        bounds = case.kernel.bounds(tiny)
        assert (bounds[:, 0] < bounds[:, 1]).all()


class Hyperbola(Kernel):
    """J = A r / (r + (d - r) e^b): a family of a user's own, with nothing but what must be said."""

    name = "hyperbola"

    def parameters(self, span):
        return Parameter("amplitude", "per spike"), Parameter(
            "steepness", "", "log", True, lower=0.1, upper=1.0
        )

    def value(self, theta, d_um, span):
        return theta[0] * span.reference_um / self._under(theta, d_um, span)

    def gradient(self, theta, d_um, span):
        by_steepness = -(d_um - span.reference_um) * np.exp(theta[1]) / self._under(theta, d_um, span)
        fall = span.reference_um / self._under(theta, d_um, span)
        return np.stack([fall, theta[0] * fall * by_steepness])

    def _under(self, theta, d_um, span):
        return span.reference_um + (d_um - span.reference_um) * np.exp(theta[1])


def test_a_family_of_ones_own_gets_the_rest_by_default():
    own = kernels.kernel_from(Hyperbola())
    d = np.linspace(200.0, 1700.0, 30)
    theta = np.array([0.2, np.log(0.4)])
    (start, *_) = own.starts(d, own.value(theta, d, SPAN), np.ones(30), SPAN)
    np.testing.assert_allclose(start, theta, atol=0.06)  # the grid's step is log(10) / 23 = 0.1
    assert own.natural(theta, SPAN) == pytest.approx([0.2, 0.4])
    assert np.exp(own.bounds(SPAN)[1]) == pytest.approx([0.1, 1.0])
    assert "above 1" in own.bound_reason(1, True, SPAN)
    assert own.describe() == {}
    assert own.penalty(SPAN) is None
    assert Hyperbola(ridge=3.0).penalty(SPAN).tolist() == [[3.0, 0.0], [0.0, 0.0]]
    assert own.roughness(SPAN) is None
    assert own.smoothing_choice is None
    assert own == Hyperbola()


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: DistanceRange(0.0, 1.0, 2.0), "reference_um=0.0"),
        (lambda: DistanceRange(1.0, 3.0, 2.0), "in this order"),
        (lambda: DistanceRange(1.0, -3.0, 2.0), "not negative"),
        (lambda: DistanceRange(1.0, 1.0, 2.0, 4), "n_coordinates=4"),
        (lambda: Parameter("steepness", "", shape=True), "Give lower and upper"),
        (lambda: Parameter("steepness", "", lower=2.0, upper=1.0), "upper=1.0"),
        (lambda: Parameter("steepness", "", scale="log", lower=0.0, upper=1.0), "logarithm"),
        (lambda: kernels.PowerLaw(fit_scale="yes"), "True or False"),
        (lambda: kernels.Gaussian().at(amplitude=1, length_um=-5.0, reference_um=1.0), "length_um=-5"),
        (lambda: kernels.Gaussian().at(amplitude=np.nan, length_um=5.0, reference_um=1.0), "amplitude=nan"),
        (lambda: kernels.Gaussian().at(amplitude="1", length_um=5.0, reference_um=1.0), "amplitude='1' must be"),
        (lambda: kernels.Flat().at(amplitude=None), "amplitude=None must be"),
        (lambda: kernels.Disc().at(amplitude=1, length_um="x"), "length_um='x' must be"),
        (lambda: kernels.Spline().at(coefficients="x", smallest_um=1.0, largest_um=2.0), "coefficients='x'"),
        (lambda: kernels.Spline().at(coefficients=[1.0], smallest_um="1", largest_um=2.0), "smallest_um='1'"),
        (lambda: kernels.Gaussian().at(amplitude=1, length_um=5.0, reference_um=1.0)("far"), "distance_um='far'"),
        (lambda: kernels.Disc().at(amplitude=1, length_um=np.inf), "length_um=inf"),
        (lambda: kernels.PowerLaw().at(amplitude=1, exponent=0.0, reference_um=1.0), "exponent=0"),
        (
            lambda: kernels.PowerLaw().at(amplitude=1, exponent=1.0, length_um=5.0, reference_um=1.0),
            "fit_scale",
        ),
        (
            lambda: kernels.DifferenceOfGaussians().at(
                narrow_amplitude=1, narrow_length_um=9, wide_amplitude=1, wide_length_um=8, reference_um=1
            ),
            "wide length above the narrow",
        ),
    ],
)
def test_refusals_name_the_argument(call, words):
    with pytest.raises(ArgumentError, match=words):
        call()
