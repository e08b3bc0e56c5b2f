"""Kernels and geometry against facts from outside the project."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import j0

from kernelfit import kernels
from kernelfit.kernels import DistanceRange, pair_geometry

pytestmark = pytest.mark.published


# --- B-splines on equally spaced knots: Eilers and Marx (1996), Statistical Science 11, 89-121 --------------
# The values are exact rationals.

SPLINE = kernels.Spline(n_basis=9)
UNIT_KNOTS = DistanceRange(1.0, 0.0, 6.0)  # 9 - 3 = 6 spans of width 1


def test_bspline_rows_sum_to_one():
    basis = SPLINE.basis(np.linspace(0.0, 6.0, 1001), UNIT_KNOTS)
    np.testing.assert_allclose(basis.sum(axis=1), 1.0, atol=1e-14)
    assert (basis >= 0).all()


def test_bspline_values_at_knots_and_at_mid_spans():
    at_knots = SPLINE.basis(np.arange(0.0, 7.0), UNIT_KNOTS)
    for k, row in enumerate(at_knots):
        expected = np.zeros(9)
        expected[k : k + 3] = [1 / 6, 2 / 3, 1 / 6]
        np.testing.assert_allclose(row, expected, atol=1e-14)
    between = SPLINE.basis(np.arange(0.5, 6.0), UNIT_KNOTS)
    for k, row in enumerate(between):
        expected = np.zeros(9)
        expected[k : k + 4] = [1 / 48, 23 / 48, 23 / 48, 1 / 48]
        np.testing.assert_allclose(row, expected, atol=1e-14)


def test_bspline_coefficients_at_the_greville_points_reproduce_a_line():
    greville = np.arange(-1.0, 8.0)  # the mean of the three inner knots of each B-spline
    d = np.linspace(0.0, 6.0, 101)
    line = SPLINE.value(2.0 - 0.3 * greville, d, UNIT_KNOTS)
    np.testing.assert_allclose(line, 2.0 - 0.3 * d, atol=1e-13)
    second_order = kernels.Spline(n_basis=9, smoothing=7.0).penalty(UNIT_KNOTS)
    np.testing.assert_allclose(second_order @ (2.0 - 0.3 * greville), 0.0, atol=1e-12)


def test_differences_of_the_coefficients_of_a_square_are_2_and_then_0():
    d = np.linspace(0.0, 6.0, 50)
    theta, *_ = np.linalg.lstsq(SPLINE.basis(d, UNIT_KNOTS), d**2, rcond=None)
    np.testing.assert_allclose(SPLINE.value(theta, d, UNIT_KNOTS), d**2, atol=1e-12)
    np.testing.assert_allclose(np.diff(theta, 2), 2.0, atol=1e-11)
    np.testing.assert_allclose(np.diff(theta, 3), 0.0, atol=1e-11)
    # so an unscaled penalty of order 2 is the sum of 7 squares of 2
    penalty = kernels.Spline(n_basis=9, smoothing=1.0).penalty(UNIT_KNOTS)
    assert theta @ penalty @ theta == pytest.approx(28.0, rel=1e-10)


@pytest.mark.parametrize("order", [1, 2, 3, 4])
def test_penalty_leaves_polynomials_below_its_order_free(order):
    penalty = kernels.Spline(n_basis=9, smoothing=1.0, order=order).penalty(UNIT_KNOTS)
    assert np.linalg.matrix_rank(penalty) == 9 - order
    places = np.arange(9.0)
    for degree in range(order):
        np.testing.assert_allclose(penalty @ places**degree, 0.0, atol=1e-9)
    assert np.abs(penalty @ places**order).max() > 0.1


# --- array geometries in use: counts and distances follow from the layout exactly ----------------------


def square_array(side: int, pitch_um: float) -> np.ndarray:
    """A square array without its corners."""
    corners = {0, side - 1}
    sites = [(x, y) for x in range(side) for y in range(side) if not {x, y} <= corners]
    return pitch_um * np.array(sites, dtype=float)


# Counts and distances are computed from the layouts. 8 x 8 at 200 µm: 60-electrode dishes (PMC2972682).
# 10 x 10 at 400 µm: 96-channel intracortical arrays (described by Maynard, Nordhausen and Normann 1997,
# Electroenceph. Clin. Neurophysiol. 102, 228; the reference is from memory).
@pytest.mark.parametrize(
    (
        "side",
        "pitch_um",
        "n_sites",
        "n_pairs",
        "n_near",
        "n_diagonal",
        "largest",
        "mean",
        "median",
        "n_distinct",
    ),
    [
        (8, 200.0, 60, 1770, 104, 94, 1720.465, 804.348, 800.0, 31),
        (10, 400.0, 96, 4560, 172, 158, 4560.702, 2034.614, 2000.0, 48),
    ],
)
def test_array_geometry(
    side, pitch_um, n_sites, n_pairs, n_near, n_diagonal, largest, mean, median, n_distinct
):
    positions = square_array(side, pitch_um)
    assert len(positions) == n_sites
    geometry = pair_geometry(positions)
    table = geometry.pairs_by_distance
    assert len(table) == n_distinct
    assert table["n_pairs"].sum() == n_pairs
    assert table["n_pairs"][0] == n_near
    assert table["n_pairs"][1] == n_diagonal
    assert table["distance_um"][0] == pytest.approx(pitch_um)
    assert table["distance_um"][1] == pytest.approx(pitch_um * np.sqrt(2))
    assert geometry.distance_range.largest_um == pytest.approx(largest, abs=5e-4)  # printed to three decimals
    each = np.repeat(table["distance_um"], table["n_pairs"])
    assert each.mean() == pytest.approx(mean, abs=5e-4)
    assert each.median() == pytest.approx(median, abs=1e-6)
    assert geometry.reference_um == pytest.approx(pitch_um)


# --- Fourier transforms (textbook pairs): closed forms, checked to 12 digits by quadrature ------

# Amplitude 1.5 at distance 0, length 0.8.
WAVENUMBERS = (0.0, 0.5, 1.0, 2.0)
HAT = kernels.MexicanHat()
# A kernel stated at a reference distance (here 0.4) is first brought to J(0) = 1.5.
GAUSSIAN = kernels.Gaussian().at(amplitude=1.5 * np.exp(-0.125), length_um=0.8, reference_um=0.4)
EXPONENTIAL = kernels.Exponential().at(amplitude=1.5 * np.exp(-0.5), length_um=0.8, reference_um=0.4)


@pytest.mark.parametrize(
    ("curve", "dimension", "expected"),
    [
        (GAUSSIAN, 1, (3.00795392956, 2.77669144155, 2.18422284951, 0.836323390462)),
        (GAUSSIAN, 2, (6.03185789489, 5.56810662186, 4.38002780214, 1.67708148581)),
        (EXPONENTIAL, 1, (2.4, 2.06896551724, 1.46341463415, 0.674157303371)),
        (EXPONENTIAL, 2, (6.03185789489, 4.82796505012, 2.87200591044, 0.897999519815)),
        (
            HAT.at(amplitude=1.5, length_um=0.8, n_coordinates=1),
            1,
            (0.0, 0.444270630648, 1.39790262369, 2.14098787958),
        ),
        (
            HAT.at(amplitude=1.5, length_um=0.8, n_coordinates=2),
            2,
            (0.0, 0.445448529749, 1.40160889669, 2.14666430184),
        ),
    ],
)
def test_fourier_transform(curve, dimension, expected):
    for k, value in zip(WAVENUMBERS, expected, strict=True):
        if dimension == 1:
            transform, _ = quad(lambda d, k=k: 2 * float(curve(d)) * np.cos(k * d), 0, 40, limit=400)
        else:
            transform, _ = quad(lambda d, k=k: 2 * np.pi * d * float(curve(d)) * j0(k * d), 0, 40, limit=400)
        assert transform == pytest.approx(value, abs=1e-8)
