"""Effective parameters under a difference penalty, against published and closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from kernelfit.fitting.arrow import Arrow
from kernelfit.fitting.parabola import Parabola, Penalty
from kernelfit.kernels import difference_penalty

N = 10

# tr[(I + w D'D)^-1] for the identity basis of 10 points and differences of order d (Eilers and Marx 1996, Statistical
# Science 11, 89-121; computed from the matrix, and for d = 1 from the closed form below). w -> infinity leaves d.
TABLE = {
    (1, 1.0): 4.8721359941,
    (1, 10.0): 2.0552973709,
    (1, 100.0): 1.1546022194,
    (2, 1.0): 4.7310691412,
    (2, 10.0): 3.0206675209,
    (2, 100.0): 2.2065191205,
    (3, 1.0): 4.9068091088,
    (3, 10.0): 3.7713352313,
    (3, 100.0): 3.1503359100,
}


def effective(order, weight):
    """Null space and free directions of a parabola whose information is the identity."""
    rough = difference_penalty(N, order)
    parabola = Parabola(
        own=np.zeros((0, 1)),
        shared=np.zeros(N),
        free=np.ones(N, dtype=bool),
        value=0.0,
        score_own=np.zeros((0, 1)),
        score_shared=np.zeros(N),
        information=Arrow(np.zeros((0, 1, 1)), np.zeros((0, 1, N)), np.eye(N)),
    )
    penalty = Penalty("kernel", np.zeros(1), rough, np.linalg.eigvalsh(rough)[order:])
    return order + parabola.peak((penalty,), np.array([weight])).free_directions[0]


@pytest.mark.published
@pytest.mark.parametrize(("order", "weight"), TABLE)
def test_effective_parameters_of_a_difference_penalty(order, weight):
    assert effective(order, weight) == pytest.approx(TABLE[order, weight], abs=5e-11)


@pytest.mark.published
@pytest.mark.parametrize("weight", [0.3, 4.0, 250.0])
def test_closed_form_for_first_differences(weight):
    """sum over j of 1 / (1 + 4 w sin^2(pi j / 2n))."""
    j = np.arange(N)
    assert effective(1, weight) == pytest.approx(np.sum(1.0 / (1.0 + 4.0 * weight * np.sin(np.pi * j / (2 * N)) ** 2)))


@pytest.mark.published
@pytest.mark.parametrize("order", [1, 2, 3])
def test_ends_of_the_range(order):
    assert effective(order, 1e-9) == pytest.approx(N, abs=1e-5)
    assert effective(order, 1e9) == pytest.approx(order, abs=1e-5)
