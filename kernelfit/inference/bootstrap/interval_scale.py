"""The scale on which intervals of shared parameters are made: logarithms of lengths, exponents and the leak rate."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.inference.scales import natural_values, on_log_scale

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit


@dataclass(frozen=True, eq=False)
class IntervalScale:
    """Shared parameters (Q,) from the working scale to that of intervals, and on to the natural one."""

    fit: CouplingFit
    on_log: BoolArray

    @classmethod
    def of(cls, fit: CouplingFit) -> IntervalScale:
        """That of a fit."""
        return cls(fit, on_log_scale(fit))

    def __call__(self, shared: FloatArray) -> FloatArray:
        """(Q,) on the scale of intervals."""
        natural = natural_values(self.fit, shared)
        return np.where(self.on_log, np.log(np.where(self.on_log, natural, 1.0)), natural)

    def jacobian(self, shared: FloatArray) -> FloatArray:
        """(Q, Q) derivative of each by the working parameters."""
        n = self.fit.n_kernel
        jacobian = np.eye(shared.size)
        kernel = self.fit.model.kernel.natural_jacobian(shared[:n], self.fit.span)
        natural = self.fit.model.kernel.natural(shared[:n], self.fit.span)
        jacobian[:n, :n] = kernel / np.where(self.on_log[:n], natural, 1.0)[:, None]
        return jacobian

    def to_natural(self, value: FloatArray) -> FloatArray:
        """Back from the scale of intervals, the last axis over parameters."""
        return np.where(self.on_log, np.exp(np.where(self.on_log, value, 0.0)), value)

    def natural_jacobian(self, shared: FloatArray) -> FloatArray:
        """(Q, Q) derivative of each natural parameter by the working ones."""
        value = self(shared)
        return np.asarray(self.jacobian(shared) * np.where(self.on_log, self.to_natural(value), 1.0)[:, None])
