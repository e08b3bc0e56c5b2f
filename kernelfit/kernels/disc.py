"""A distance law with an edge: constant within a radius, nothing beyond."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.kernels.base import (
    AMPLITUDE,
    SAME_DISTANCE_UM,
    START_AMPLITUDE,
    DistanceRange,
    Kernel,
    KernelCurve,
    Parameter,
    at_reference,
    require_number,
    require_positive,
)

ROUNDING = 1e-12  # relative: a radius stated as a distance of the array must not take it in by rounding


@dataclass(frozen=True)
class Disc(Kernel):
    """J(d) = A for d < R, 0 beyond.

    The likelihood is constant in R between two distances of the array and jumps at them, so R has no
    derivative: `gradient` is zero in it, and R is profiled over `radius_candidates`, one between each two
    distances.
    """

    name: ClassVar[str] = "disc"

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        # a smaller radius holds no pair; units that share a position are at distance 0, without a logarithm
        lower = max(span.smallest_um, 0.5 * SAME_DISTANCE_UM)
        upper = max(span.largest_um, lower * (1.0 + 1e-9))
        return (
            AMPLITUDE,
            Parameter("length_um", "µm", scale="log", shape=True, discrete=True, lower=lower, upper=upper),
        )

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        return np.where(_inside(theta, d_um), theta[0], 0.0)

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        inside = _inside(theta, d_um).astype(np.float64)
        return np.stack([inside, np.zeros_like(inside)])

    def bound_reason(self, k: int, upper: bool, span: DistanceRange) -> str:
        if k != 1:
            return super().bound_reason(k, upper, span)
        if upper:
            return "a disc that holds every pair of the array: cannot be told from a flat kernel"
        return "a disc that holds no pair of the array: there is nothing to estimate its amplitude from"

    def start_shapes(self, distance_um: FloatArray, span: DistanceRange) -> FloatArray:
        """One radius between each two distances that have points, so that no split is passed over."""
        radii = self.radius_candidates(np.unique(distance_um))
        low, high = np.exp(self.bounds(span)[1])
        inside = radii[(radii > low) & (radii < high)]
        if not inside.size:
            return self.shape_grid(span)
        return np.column_stack([np.full(inside.size, START_AMPLITUDE), np.log(inside)])

    def radius_candidates(self, distinct_um: FloatArray) -> FloatArray:
        """(D - 1,) radii in µm, half way between consecutive distinct distances: every split there is.

        The radius beyond the largest distance is left out: that is the flat kernel.
        """
        return np.asarray(0.5 * (distinct_um[1:] + distinct_um[:-1]))

    def at(self, *, amplitude: float, length_um: float, reference_um: float = 1.0) -> KernelCurve:
        """The kernel with `amplitude` (per spike) within the radius `length_um`.

        The reference distance makes no difference here.
        """
        require_number("amplitude", amplitude)
        require_positive("length_um", length_um)
        return self.curve(np.array([amplitude, np.log(length_um)]), at_reference(reference_um))


def _inside(theta: FloatArray, d_um: FloatArray) -> BoolArray:
    return np.asarray(d_um < np.exp(theta[1]) * (1.0 - ROUNDING))
