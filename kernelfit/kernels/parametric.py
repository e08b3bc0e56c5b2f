"""Distance laws of one amplitude that fall off, or do not: flat, exponential, gaussian, power-law.

Every amplitude is J at the reference distance, because J(0) is an extrapolation on most arrays. In the
formulas d is a distance, r the reference distance, s a length, all in µm.
"""

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

EXPONENT = Parameter("exponent", "", scale="log", shape=True, lower=0.05, upper=25.0)


@dataclass(frozen=True)
class Flat(Kernel):
    """J(d) = A: the same coupling at every distance."""

    name: ClassVar[str] = "flat"

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return (AMPLITUDE,)

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        return np.full(d_um.shape, theta[0])

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        return np.ones((1, d_um.size))

    def at(self, *, amplitude: float, reference_um: float = 1.0) -> KernelCurve:
        """The kernel with this amplitude (per spike). The reference distance makes no difference here."""
        require_number("amplitude", amplitude)
        return self.curve(np.array([amplitude]), at_reference(reference_um))


@dataclass(frozen=True)
class Exponential(Kernel):
    """J(d) = A exp(-(d - r)/s)."""

    name: ClassVar[str] = "exponential"

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return (AMPLITUDE, LENGTH)

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        return np.asarray(theta[0] * exponential(-(d_um - span.reference_um) / np.exp(theta[1])))

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        x = (d_um - span.reference_um) / np.exp(theta[1])
        fall = exponential(-x)
        return np.stack([fall, theta[0] * fall * x])

    def at(self, *, amplitude: float, length_um: float, reference_um: float) -> KernelCurve:
        """The kernel with `amplitude` (per spike) at `reference_um`, falling by 1/e every `length_um`."""
        require_number("amplitude", amplitude)
        require_positive("length_um", length_um)
        return self.curve(np.array([amplitude, np.log(length_um)]), at_reference(reference_um))


@dataclass(frozen=True)
class Gaussian(Kernel):
    """J(d) = A exp(-(d^2 - r^2) / 2 s^2)."""

    name: ClassVar[str] = "gaussian"

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return (AMPLITUDE, LENGTH)

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        return np.asarray(theta[0] * exponential(-0.5 * _squared(d_um, span) / np.exp(2 * theta[1])))

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        q = _squared(d_um, span) / np.exp(2 * theta[1])
        fall = exponential(-0.5 * q)
        return np.stack([fall, theta[0] * fall * q])

    def at(self, *, amplitude: float, length_um: float, reference_um: float) -> KernelCurve:
        """The kernel with `amplitude` (per spike) at `reference_um` and standard deviation `length_um`."""
        require_number("amplitude", amplitude)
        require_positive("length_um", length_um)
        return self.curve(np.array([amplitude, np.log(length_um)]), at_reference(reference_um))


@dataclass(frozen=True)
class PowerLaw(Kernel):
    """J(d) = A ((1 + d/s) / (1 + r/s))^-p, with s the reference distance unless it is fitted.

    Parameters
    ----------
    fit_scale : fit s too, as `length_um`. s and p lie on a ridge (both large: an exponential), so expect
        wide intervals.
    """

    name: ClassVar[str] = "power-law"
    fit_scale: bool = False

    def __post_init__(self) -> None:
        super().__post_init__()
        if not isinstance(self.fit_scale, bool):
            raise ArgumentError(f"fit_scale={self.fit_scale!r}: must be True or False.")

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        return (AMPLITUDE, LENGTH, EXPONENT) if self.fit_scale else (AMPLITUDE, EXPONENT)

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        scale = self._scale(theta, span)
        log_fall = -np.exp(theta[-1]) * np.log((scale + d_um) / (scale + span.reference_um))
        return np.asarray(theta[0] * exponential(log_fall))

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        scale, power = self._scale(theta, span), np.exp(theta[-1])
        log_fall = -power * np.log((scale + d_um) / (scale + span.reference_um))
        fall = exponential(log_fall)
        by_exponent = theta[0] * fall * log_fall
        if not self.fit_scale:
            return np.stack([fall, by_exponent])
        slope = -power * scale * (1.0 / (scale + d_um) - 1.0 / (scale + span.reference_um))
        return np.stack([fall, theta[0] * fall * slope, by_exponent])

    def bound_reason(self, k: int, upper: bool, span: DistanceRange) -> str:
        if self.parameters(span)[k] is not EXPONENT:
            return super().bound_reason(k, upper, span)
        if upper:
            return "an exponent above 25: so steep that only the closest pairs feel it"
        return "an exponent below 0.05: cannot be told from a kernel that does not change with distance"

    def at(
        self, *, amplitude: float, exponent: float, reference_um: float, length_um: float | None = None
    ) -> KernelCurve:
        """The kernel with `amplitude` (per spike) at `reference_um`; `length_um` is s where it is fitted."""
        require_number("amplitude", amplitude)
        require_positive("exponent", exponent)
        if (length_um is not None) != self.fit_scale:
            raise ArgumentError(
                f"length_um={length_um}: PowerLaw(fit_scale=True) needs a length, and PowerLaw() takes "
                "the reference distance instead."
            )
        theta = [amplitude, np.log(exponent)]
        if length_um is not None:
            require_positive("length_um", length_um)
            theta.insert(1, np.log(length_um))
        return self.curve(np.array(theta), at_reference(reference_um))

    def _scale(self, theta: FloatArray, span: DistanceRange) -> float:
        return float(np.exp(theta[1])) if self.fit_scale else span.reference_um


def _squared(d_um: FloatArray, span: DistanceRange) -> FloatArray:
    return np.asarray(d_um**2 - span.reference_um**2)
