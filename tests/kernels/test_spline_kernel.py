"""The spline kernel: its basis, its penalty, and what it says about coefficients without pairs."""

from __future__ import annotations

import numpy as np
import pytest

from kernelfit import kernels
from kernelfit.errors import ArgumentError, ModelError, NotIdentifiedError
from kernelfit.kernels import DistanceRange

SPAN = DistanceRange(200.0, 200.0, 1720.0)


def test_constant_outside_the_range():
    curve = kernels.Spline(n_basis=6).at(coefficients=range(6), smallest_um=200.0, largest_um=1000.0)
    assert curve(0.0) == curve(200.0)
    assert curve(5000.0) == curve(1000.0)
    assert curve(600.0) != curve(1000.0)


def test_log_axis_is_the_same_spline_in_log_distance():
    d = np.geomspace(200.0, 1720.0, 40)
    logged = kernels.Spline(axis="log-distance").basis(d, SPAN)
    plain = kernels.Spline().basis(np.log(d), DistanceRange(1.0, np.log(200.0), np.log(1720.0)))
    np.testing.assert_allclose(logged, plain, atol=1e-12)


def test_the_ends_of_the_range_lie_on_the_knots_whatever_the_rounding():
    rng = np.random.default_rng(2)
    for low, high in np.sort(rng.uniform(0.1, 5000.0, (200, 2)), axis=1):
        for axis in ("distance", "log-distance"):
            spline = kernels.Spline(n_basis=9, axis=axis)
            basis = spline.basis(np.array([low, high]), DistanceRange(1.0, low, high))
            np.testing.assert_allclose(basis[0, :3], [1 / 6, 2 / 3, 1 / 6], atol=1e-9)
            np.testing.assert_allclose(basis[1, -3:], [1 / 6, 2 / 3, 1 / 6], atol=1e-9)


@pytest.mark.parametrize("order", [1, 2, 3])
def test_heavy_smoothing_leaves_a_polynomial(order):
    # Source: the penalty's null space, polynomials of degree < order (Eilers and Marx 1996).
    rng = np.random.default_rng(1)
    d = np.linspace(200.0, 1720.0, 60)
    target = 0.2 * np.exp(-d / 400) + rng.normal(0, 0.01, d.size)
    spline = kernels.Spline(n_basis=12, smoothing=1e9, order=order)
    (theta,) = spline.starts(d, target, np.ones(d.size), SPAN)
    expected = np.polynomial.Polynomial.fit(d, target, order - 1)(d)
    np.testing.assert_allclose(spline.value(theta, d, SPAN), expected, atol=2e-6)


def test_no_smoothing_no_penalty():
    assert kernels.Spline().penalty(SPAN) is None


def test_smoothing_left_to_the_data_has_a_penalty_once_it_is_a_number():
    spline = kernels.Spline(n_basis=6, smoothing="likelihood", order=1)
    assert spline.smoothing_choice == "likelihood"
    with pytest.raises(ArgumentError, match="number only after a fit"):
        spline.penalty(SPAN)
    settled = spline.with_smoothing(3.0)
    assert settled.smoothing_choice is None
    np.testing.assert_array_equal(settled.penalty(SPAN), 3.0 * settled.roughness(SPAN))
    assert settled.describe() == {"n_basis": 6, "smoothing": 3.0, "order": 1, "axis": "distance"}
    assert spline.describe()["smoothing"] == "likelihood"
    assert len(spline.check_identified(np.linspace(200.0, 300.0, 5), SPAN)) > 0  # the penalty carries what is not seen


@pytest.mark.parametrize(
    ("order", "axis", "words"),
    [
        (1, "distance", "a constant"),
        (1, "log-distance", "a constant"),
        (2, "distance", "a straight line"),
        (2, "log-distance", "a straight line in log distance"),
        (4, "distance", "a polynomial of degree 3"),
    ],
)
def test_what_endless_smoothing_leaves(order, axis, words):
    assert kernels.Spline(order=order, axis=axis).smoothest == words


def test_a_ridge_joins_the_smoothing():
    spline = kernels.Spline(n_basis=5, smoothing=2.0, ridge=0.5)
    expected = 2.0 * kernels.difference_penalty(5, 2) + 0.5 * np.eye(5)
    np.testing.assert_allclose(spline.penalty(SPAN), expected)
    np.testing.assert_allclose(kernels.Spline(n_basis=5, ridge=0.5).penalty(SPAN), 0.5 * np.eye(5))


def test_a_ridge_carries_coefficients_without_pairs_too():
    distances = np.linspace(200, 300, 3)
    notes = kernels.Spline(n_basis=8, ridge=1.0).check_identified(distances, SPAN)
    assert len(notes) == 4
    assert "carried by the penalty alone" in notes[0]


def test_a_coefficient_without_pairs_is_refused_by_name_and_place():
    distances = np.concatenate([np.linspace(200, 300, 20), np.linspace(1500, 1720, 20)])
    with pytest.raises(NotIdentifiedError) as error:
        kernels.Spline(n_basis=12).check_identified(distances, SPAN)
    # knots every 1520 / 9 = 168.9 µm: the fifth B-spline begins at 368.9, the seventh ends at 1382
    assert str(error.value).startswith(
        "Spline coefficient_5, which covers 368.9 to 1044 µm, has no pairs inside that range "
        "(the same holds for coefficient_6, coefficient_7). "
    )
    for remedy in ("smoothing above 0", "smaller n_basis (now 12)", "40 distinct distances"):
        assert remedy in str(error.value)


def test_with_smoothing_it_is_carried_by_the_penalty_and_said_so():
    distances = np.concatenate([np.linspace(200, 300, 20), np.linspace(1500, 1720, 20)])
    notes = kernels.Spline(n_basis=12, smoothing=1.0).check_identified(distances, SPAN)
    assert len(notes) == 3
    assert "coefficient_5, which covers 368.9 to 1044 µm" in notes[0]
    assert "penalty" in notes[0]


def test_coefficients_that_share_too_few_distances_are_refused():
    # knots every 304 µm: the first three B-splines are seen through one distance, the others well covered
    distances = np.concatenate([[200.0], np.linspace(1120, 1720, 30)])
    spline = kernels.Spline(n_basis=8)
    assert (spline.basis(distances, SPAN).max(axis=0) > 0.01).all()
    with pytest.raises(
        NotIdentifiedError, match=r"coefficient_3, .* too few distinct .* coefficient_1, coefficient_2\)"
    ):
        spline.check_identified(distances, SPAN)
    assert spline.check_identified(np.linspace(200, 1720, 8), SPAN) == ()


def test_many_distances_are_checked_without_a_square_of_them():
    distances = np.linspace(200.0, 1720.0, 60_000)  # their square would need 29 GB
    assert kernels.Spline(n_basis=20).check_identified(distances, SPAN) == ()


@pytest.mark.parametrize(
    ("call", "kind", "words"),
    [
        (lambda: kernels.Spline(n_basis=3), ArgumentError, "at least 4"),
        (lambda: kernels.Spline(n_basis=7.5), ArgumentError, "whole number"),
        (lambda: kernels.Spline(smoothing=-1.0), ArgumentError, "smoothing=-1.0"),
        (lambda: kernels.Spline(smoothing=np.nan), ArgumentError, "smoothing=nan"),
        (lambda: kernels.Spline(smoothing="much"), ArgumentError, "'likelihood' or 'validation'"),
        (lambda: kernels.Spline(ridge=-1.0), ArgumentError, "ridge=-1.0"),
        (lambda: kernels.Spline(order=0), ArgumentError, "order=0"),
        (lambda: kernels.Spline(n_basis=5, order=5), ArgumentError, "n_basis - 1 = 4"),
        (lambda: kernels.Spline(axis="log"), ArgumentError, "log-distance"),
        (
            lambda: kernels.Spline().at(coefficients=[1.0], smallest_um=1.0, largest_um=2.0),
            ArgumentError,
            "needs 10 finite values",
        ),
        (
            lambda: kernels.Spline().check_identified(np.array([200.0]), DistanceRange(200, 200, 200)),
            ModelError,
            "nothing to run over.*kernel='flat'",
        ),
        (
            lambda: kernels.Spline(axis="log-distance").basis(np.zeros(1), DistanceRange(200, 0, 200)),
            ModelError,
            "axis='distance'",
        ),
        (
            lambda: kernels.Spline(smoothing=1.0, order=3).check_identified(np.array([200.0, 1720.0]), SPAN),
            NotIdentifiedError,
            "3 distinct distances",
        ),
    ],
)
def test_refusals(call, kind, words):
    with pytest.raises(kind, match=words):
        call()
