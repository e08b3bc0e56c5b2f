"""Distance laws with a centre and a surround: a difference of two Gaussians, and the balanced Mexican hat."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.errors import ArgumentError
from kernelfit.kernels.base import (
    AMPLITUDE,
    LENGTH,
    DistanceRange,
    Kernel,
    KernelCurve,
    Parameter,
    at_reference,
    exponential,
    require_number,
    require_positive,
)

SMALLEST_EXCESS = 0.1  # the wide length is at least 10 % above the narrow one, or the two Gaussians are one


@dataclass(frozen=True)
class DifferenceOfGaussians(Kernel):
    """J(d) = A_n exp(-(d^2 - r^2) / 2 s_n^2) - A_w exp(-(d^2 - r^2) / 2 s_w^2): narrow minus wide Gaussian.

    Both amplitudes are stated at the reference distance r and may have either sign. The wide length is kept above the
    narrow one by s_w = s_n (1 + e^u). Where the lengths come close the amplitudes grow without limit while their
    difference hardly changes, so the optimiser works with A_n - A_w and with B = A_w (1 - s_n/s_w), which stays finite:
    J = (A_n - A_w) G_n + B (G_n - G_w) / (1 - s_n/s_w). Working parameters: A_n - A_w, log s_n, B, u.
    """

    name: ClassVar[str] = "difference-of-gaussians"

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return (
            Parameter("narrow_amplitude", "per spike"),
            Parameter("narrow_length_um", "µm", scale="log", shape=True),
            Parameter("wide_amplitude", "per spike"),
            Parameter("wide_length_um", "µm", scale="log", shape=True),
        )

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        narrow, wide = self._falls(theta, d_um, span)
        return np.asarray(theta[0] * narrow + theta[2] * (narrow - wide) / _gap(theta))

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        narrow, wide = self._falls(theta, d_um, span)
        squared = d_um**2 - span.reference_um**2
        narrow_amplitude, narrow_length, wide_amplitude, wide_length = self.natural(theta, span)
        # derivative by each log length, the other and the amplitudes fixed
        by_narrow = narrow_amplitude * narrow * squared / narrow_length**2
        by_wide = -wide_amplitude * wide * squared / wide_length**2
        gap = _gap(theta)  # d log s_w / du too
        difference = (narrow - wide) / gap
        return np.stack([narrow, by_narrow + by_wide, difference, by_wide * gap - theta[2] * difference * (1.0 - gap)])

    def natural(self, theta: FloatArray, span: DistanceRange) -> FloatArray:
        narrow_length = np.exp(theta[1])
        wide_amplitude = theta[2] / _gap(theta)
        return np.array(
            [theta[0] + wide_amplitude, narrow_length, wide_amplitude, narrow_length * (1.0 + np.exp(theta[3]))]
        )

    def natural_jacobian(self, theta: FloatArray, span: DistanceRange) -> FloatArray:
        _, narrow_length, wide_amplitude, wide_length = self.natural(theta, span)
        gap = _gap(theta)
        by_excess = -wide_amplitude * (1.0 - gap)
        return np.array(
            [
                [1.0, 0.0, 1.0 / gap, by_excess],
                [0.0, narrow_length, 0.0, 0.0],
                [0.0, 0.0, 1.0 / gap, by_excess],
                [0.0, wide_length, 0.0, wide_length - narrow_length],
            ]
        )

    def working(self, natural: FloatArray, span: DistanceRange) -> FloatArray:
        narrow_amplitude, narrow_length, wide_amplitude, wide_length = natural
        if not 0 < narrow_length < wide_length:
            raise ArgumentError(
                f"narrow_length_um={narrow_length}, wide_length_um={wide_length}: both must be above 0, and "
                "the wide length above the narrow one."
            )
        excess = np.log(wide_length / narrow_length - 1.0)
        gap = 1.0 - narrow_length / wide_length
        return np.array([narrow_amplitude - wide_amplitude, np.log(narrow_length), wide_amplitude * gap, excess])

    def bounds(self, span: DistanceRange) -> FloatArray:
        """The narrow length within the limits of every length, and u so that the wide one can reach it.

        A box in (log s_n, u) cannot keep s_w itself below its limit; past it the wide Gaussian is a constant.
        """
        shortest, longest = span.length_limits
        free = (-np.inf, np.inf)
        excess = (np.log(SMALLEST_EXCESS), np.log(longest / shortest - 1.0))
        return np.array([free, (np.log(shortest), np.log(longest)), free, excess])

    def bound_reason(self, k: int, upper: bool, span: DistanceRange) -> str:
        if k != 3:
            return super().bound_reason(k, upper, span)
        if upper:
            return "so wide that over this array the wide Gaussian cannot be told from a constant"
        return "within 10 % of the narrow length: the two Gaussians cannot be told apart, nor their amplitudes"

    def shape_grid(self, span: DistanceRange) -> FloatArray:
        grid = super().shape_grid(span)
        excess = np.log([0.25, 0.5, 1.0, 2.0, 4.0, 8.0])  # wide lengths of 1.25 to 9 narrow ones
        narrow = np.unique(grid[:, 1])
        amplitudes = grid[0, [0, 2]]
        return np.array([[amplitudes[0], s, amplitudes[1], u] for s in narrow for u in excess])

    def at(
        self,
        *,
        narrow_amplitude: float,
        narrow_length_um: float,
        wide_amplitude: float,
        wide_length_um: float,
        reference_um: float,
    ) -> KernelCurve:
        """The kernel with these amplitudes (per spike, at `reference_um`); the wide part is subtracted.

        Raises
        ------
        ArgumentError : lengths not above 0, or the wide one not above the narrow one
        """
        require_number("narrow_amplitude", narrow_amplitude)
        require_positive("narrow_length_um", narrow_length_um)
        require_number("wide_amplitude", wide_amplitude)
        require_positive("wide_length_um", wide_length_um)
        natural = np.array([narrow_amplitude, narrow_length_um, wide_amplitude, wide_length_um])
        span = at_reference(reference_um)
        return self.curve(self.working(natural, span), span)

    def _falls(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> tuple[FloatArray, FloatArray]:
        squared = d_um**2 - span.reference_um**2
        _, narrow_length, _, wide_length = self.natural(theta, span)
        return exponential(-0.5 * squared / narrow_length**2), exponential(-0.5 * squared / wide_length**2)


def _gap(theta: FloatArray) -> float:
    """1 - s_n / s_w = e^u / (1 + e^u), which is also d log s_w / du."""
    return float(1.0 / (1.0 + np.exp(-theta[3])))


@dataclass(frozen=True)
class MexicanHat(Kernel):
    """J(d) = A (1 - d^2 / (m s^2)) exp(-d^2 / 2 s^2), with m the number of coordinates of the positions.

    Balanced: it integrates to zero over a space of m dimensions. It changes sign at s sqrt(m). The amplitude
    is stated at d = 0: at a reference distance near the change of sign it would mean nothing.
    """

    name: ClassVar[str] = "mexican-hat"

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return (AMPLITUDE, LENGTH)

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        q = d_um**2 / np.exp(2 * theta[1])
        return np.asarray(theta[0] * (1.0 - q / span.n_coordinates) * np.exp(-0.5 * q))

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        q = d_um**2 / np.exp(2 * theta[1])
        hat, fall = 1.0 - q / span.n_coordinates, np.exp(-0.5 * q)
        return np.stack([hat * fall, theta[0] * fall * q * (hat + 2.0 / span.n_coordinates)])

    def at(self, *, amplitude: float, length_um: float, n_coordinates: int, reference_um: float = 1.0) -> KernelCurve:
        """The kernel with `amplitude` (per spike) at distance 0, in a space of `n_coordinates` dimensions.

        The reference distance makes no difference here.
        """
        require_number("amplitude", amplitude)
        require_positive("length_um", length_um)
        return self.curve(np.array([amplitude, np.log(length_um)]), at_reference(reference_um, n_coordinates))
