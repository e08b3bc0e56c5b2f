"""A distance law without a formula: cubic B-splines with a difference penalty (P-splines).

Eilers and Marx (1996), Statistical Science 11, 89-121.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import ClassVar, Literal, get_args

import numpy as np
from scipy.interpolate import BSpline

from kernelfit._typing import FloatArray, IntArray
from kernelfit._validation import flat_numbers, is_number, is_whole
from kernelfit.errors import ArgumentError, ModelError, NotIdentifiedError
from kernelfit.kernels.base import DistanceRange, Kernel, KernelCurve, Parameter, SmoothingChoice

DEGREE = 3
LEAST_SUPPORT = 1e-6  # a coefficient that never weighs more than this in J has no pairs to speak of
LEAST_SINGULAR = 1e-8  # relative to the largest; below it a combination of coefficients is not determined


@dataclass(frozen=True)
class Spline(Kernel):
    """J(d) = sum_k theta_k B_k(d), cubic B-splines on equally spaced knots over the distances of the kernel.

    Below the smallest and above the largest distance the kernel goes on as a constant.

    Parameters
    ----------
    n_basis : number of coefficients, at least 4
    smoothing : weight of the penalty 1/2 smoothing |D theta|^2 on differences of neighbouring coefficients; or who is
        to choose it in a fit: "likelihood" (the marginal likelihood, in which the penalty is a prior) or "validation"
        (the log-likelihood of stretches of time left out)
    order : order of the differences; a kernel that is a polynomial of lower degree is not penalised
    axis : knots equally spaced in "distance" or in "log-distance" (finer near, coarser far)
    ridge : weight of a further penalty 1/2 ridge |theta|^2, which pulls the whole kernel to 0

    Raises
    ------
    ArgumentError : an option out of its range
    """

    name: ClassVar[str] = "spline"
    n_basis: int = 10
    smoothing: float | SmoothingChoice = 0.0
    order: int = 2
    axis: Literal["distance", "log-distance"] = "distance"

    def __post_init__(self) -> None:
        super().__post_init__()
        if not is_whole(self.n_basis) or self.n_basis <= DEGREE:
            raise ArgumentError(
                f"n_basis={self.n_basis!r}: a cubic spline needs a whole number of at least 4."
            )
        if isinstance(self.smoothing, str):
            if self.smoothing not in get_args(SmoothingChoice):
                raise ArgumentError(
                    f"smoothing={self.smoothing!r}: must be a number, 0 or above, or who is to choose it: 'likelihood' "
                    "or 'validation'."
                )
        elif not (is_number(self.smoothing) and self.smoothing >= 0):
            raise ArgumentError(
                f"smoothing={self.smoothing!r}: must be a finite number, 0 or above, or 'likelihood' or 'validation'."
            )
        if not is_whole(self.order) or not 1 <= self.order < self.n_basis:
            raise ArgumentError(
                f"order={self.order!r}: must be a whole number from 1 to n_basis - 1 = {self.n_basis - 1}."
            )
        if self.axis not in ("distance", "log-distance"):
            raise ArgumentError(f"axis={self.axis!r}: must be 'distance' or 'log-distance'.")
        put = object.__setattr__  # plain numbers: numpy's cannot be written as JSON
        put(self, "n_basis", int(self.n_basis))
        put(self, "order", int(self.order))
        if not isinstance(self.smoothing, str):
            put(self, "smoothing", float(self.smoothing))

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return tuple(Parameter(f"coefficient_{k + 1}", "per spike") for k in range(self.n_basis))

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        return np.asarray(self.basis(d_um, span) @ theta)

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        return np.ascontiguousarray(self.basis(d_um, span).T)

    def basis(self, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        """(m, K) value of each B-spline at each distance; rows sum to 1.

        Raises
        ------
        ModelError : all distances are one, or a distance of 0 on the log axis
        """
        knots = self._knots(span)
        inside = np.clip(d_um, span.smallest_um, span.largest_um)
        x = np.clip(self._on_axis(inside), knots[DEGREE], knots[-DEGREE - 1])
        return np.asarray(BSpline.design_matrix(x, knots, DEGREE).toarray(), dtype=np.float64)

    def penalty(self, span: DistanceRange) -> FloatArray | None:
        """(K, K) smoothing D'D + ridge, D the differences of the given order; None without either.

        Raises
        ------
        ArgumentError : the smoothing is to be chosen by the data, which only a fit can do
        """
        if isinstance(self.smoothing, str):
            raise ArgumentError(
                f"smoothing={self.smoothing!r} is a number only after a fit: fit.model.kernel.smoothing holds it."
            )
        ridge = super().penalty(span)
        if self.smoothing == 0:
            return ridge
        rough = self.smoothing * difference_penalty(self.n_basis, self.order)
        return rough if ridge is None else rough + ridge

    def roughness(self, span: DistanceRange) -> FloatArray:
        """(K, K) D'D; rank K - order."""
        return difference_penalty(self.n_basis, self.order)

    @property
    def smoothing_choice(self) -> SmoothingChoice | None:
        """Who chooses the smoothing, where the data are to."""
        return self.smoothing if isinstance(self.smoothing, str) else None

    def with_smoothing(self, value: float) -> Spline:
        """The same spline with this number for its smoothing. Raises ArgumentError for a number below 0."""
        return replace(self, smoothing=value)

    @property
    def smoothest(self) -> str:
        """What is left of the kernel under endless smoothing, in words."""
        shape = {1: "a constant", 2: "a straight line"}.get(self.order, f"a polynomial of degree {self.order - 1}")
        return f"{shape} in log distance" if self.axis == "log-distance" and self.order > 1 else shape

    def support_um(self, k: int, span: DistanceRange) -> tuple[float, float]:
        """Distances (µm) over which basis function k (from 0) is not zero, cut to those of the kernel."""
        knots = self._knots(span)
        ends = np.clip(knots[[k, k + DEGREE + 1]], knots[DEGREE], knots[-DEGREE - 1])
        low, high = np.exp(ends) if self.axis == "log-distance" else ends
        return float(low), float(high)

    def check_identified(self, distinct_um: FloatArray, span: DistanceRange) -> tuple[str, ...]:
        """Can these distances carry the coefficients? With smoothing, what the penalty alone carries.

        Raises
        ------
        NotIdentifiedError : without smoothing, a coefficient that has no pairs or too few distances
            near it; with smoothing and no ridge, fewer distinct distances than the penalty leaves free
        ModelError : all distances are one, or a distance of 0 on the log axis
        """
        basis = self.basis(distinct_um, span)
        without = np.flatnonzero(basis.max(axis=0) < LEAST_SUPPORT)
        if self.ridge > 0 or isinstance(self.smoothing, str) or self.smoothing > 0:
            # the differences leave polynomials of degree < order free: the distances must determine those
            if self.ridge == 0 and distinct_um.size < self.order:
                raise NotIdentifiedError(
                    f"A penalty of order {self.order} needs pairs at {self.order} distinct distances at "
                    f"least, and there are {distinct_um.size}. Lower the order, or use kernel='flat'."
                )
            return tuple(
                f"{self._place(k, span)} has no pairs: its value is carried by the penalty alone"
                for k in without.tolist()
            )
        if without.size:
            raise NotIdentifiedError(
                f"{self._place(int(without[0]), span)} has no pairs inside that range"
                f"{_others(without)}. {self._remedy(distinct_um)}"
            )
        undetermined = _undetermined(basis)
        if undetermined.size:
            raise NotIdentifiedError(
                f"{self._place(int(undetermined[0]), span)} cannot be told from its neighbours, as there are "
                f"too few distinct distances near it{_others(undetermined)}. {self._remedy(distinct_um)}"
            )
        return ()

    def at(self, *, coefficients: Sequence[float], smallest_um: float, largest_um: float) -> KernelCurve:
        """The kernel with these coefficients (per spike) on knots over `smallest_um` to `largest_um`.

        Raises
        ------
        ArgumentError : not `n_basis` coefficients, or distances out of order
        ModelError : no range to put knots on
        """
        span = DistanceRange(largest_um, smallest_um, largest_um)  # the reference makes no difference here
        self._knots(span)
        needed = f"Give {self.n_basis} coefficients, finite numbers."
        return self.curve(flat_numbers(coefficients, "coefficients", needed), span)

    def _on_axis(self, d_um: FloatArray) -> FloatArray:
        return np.asarray(np.log(d_um)) if self.axis == "log-distance" else d_um

    def _knots(self, span: DistanceRange) -> FloatArray:
        """(K + 4,) equally spaced, three beyond each end, so that the inner range is covered in full."""
        if not span.largest_um > span.smallest_um:
            raise ModelError(
                f"All pairs in the kernel are {span.largest_um:.4g} µm apart, so a spline over distance has "
                "nothing to run over. Use kernel='flat', raise max_distance, or record from more sites."
            )
        if self.axis == "log-distance" and span.smallest_um <= 0:
            raise ModelError(
                "Some pairs in the kernel are 0 µm apart, which has no place on a log-distance axis. Use "
                "Spline(axis='distance'), or leave same-site pairs out (same_site='exclude' or 'own')."
            )
        low, high = self._on_axis(np.array([span.smallest_um, span.largest_um]))
        n_spans = self.n_basis - DEGREE
        steps = np.arange(-DEGREE, n_spans + DEGREE + 1)
        knots = low + (high - low) * steps / n_spans
        knots[-DEGREE - 1] = high  # not left to rounding: distances at the end must lie inside
        return np.asarray(knots)

    def _place(self, k: int, span: DistanceRange) -> str:
        low, high = self.support_um(k, span)
        return f"Spline coefficient_{k + 1}, which covers {low:.4g} to {high:.4g} µm,"

    def _remedy(self, distinct_um: FloatArray) -> str:
        fewer = f"use a smaller n_basis (now {self.n_basis}), " if self.n_basis > DEGREE + 1 else ""
        return (
            f"The array has {distinct_um.size} distinct distances. Give Spline a smoothing above 0, {fewer}"
            "or try the other axis ('distance', 'log-distance')."
        )


def difference_penalty(n_basis: int, order: int) -> FloatArray:
    """(K, K) D'D, D the (K - order, K) matrix of differences; rank K - order."""
    difference = np.diff(np.eye(n_basis), n=order, axis=0)
    return np.asarray(difference.T @ difference)


def _undetermined(basis: FloatArray) -> IntArray:
    """Columns that take part in a combination the rows do not determine, the strongest first."""
    _, size, right = np.linalg.svd(np.linalg.qr(basis, mode="r"))  # small, however many the distances
    rank = int(np.sum(size > LEAST_SINGULAR * size[0]))
    share = np.sqrt(np.sum(right[rank:] ** 2, axis=0))
    order = np.argsort(-share, kind="stable")
    return np.asarray(order[share[order] > 0.1], dtype=np.int64)


def _others(which: IntArray) -> str:
    if len(which) < 2:
        return ""
    named = ", ".join(f"coefficient_{k + 1}" for k in sorted(which[1:4].tolist()))
    more = f" and {len(which) - 4} more" if len(which) > 4 else ""
    return f" (the same holds for {named}{more})"
