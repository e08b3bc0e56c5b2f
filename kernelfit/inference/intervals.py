"""Wald intervals on the scale where they are honest, stated on the scale people read (docs/model.md section 8)."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.stats import norm, t

from kernelfit._typing import BoolArray, FloatArray


@dataclass(frozen=True, eq=False)
class WaldIntervals:
    """estimate, std_error, lower, upper: (K,) on the natural scale; NaN where there is no standard error."""

    estimate: FloatArray
    std_error: FloatArray
    lower: FloatArray
    upper: FloatArray

    def within(self, limits: FloatArray) -> WaldIntervals:
        """The same with ends moved to `limits` (K, 2), past which nothing can be told, or to an estimate there."""
        least, most = np.minimum(limits[:, 0], self.estimate), np.maximum(limits[:, 1], self.estimate)
        lower = np.minimum(np.maximum(self.lower, least), most)
        upper = np.minimum(np.maximum(self.upper, least), most)
        return replace(self, lower=lower, upper=upper)


def critical_value(level: float, degrees_of_freedom: float) -> float:
    """Half-width in standard errors: t quantile, or normal where the degrees of freedom are infinite."""
    tail = 0.5 * (1.0 + level)
    if np.isinf(degrees_of_freedom):
        return float(norm.ppf(tail))
    return float(t.ppf(tail, degrees_of_freedom)) if degrees_of_freedom >= 1 else np.nan


def wald_intervals(
    natural: FloatArray, jacobian: FloatArray, covariance: FloatArray, on_log: BoolArray, critical: FloatArray | float
) -> WaldIntervals:
    """Delta-method intervals of natural parameters.

    Parameters
    ----------
    natural : (K,) estimates
    jacobian : (K, Q) derivative of each by the working parameters
    covariance : (Q, Q) of the working parameters; rows of NaN for what was not estimated
    on_log : (K,) True where the interval is symmetric on the log scale, so that a length is never negative
    critical : half-width in standard errors, for each or for all
    """
    variance = np.full(natural.size, np.nan)
    for k, row in enumerate(jacobian):
        used = row != 0
        if used.any():
            variance[k] = float(row[used] @ covariance[np.ix_(used, used)] @ row[used])
    std_error = np.sqrt(np.maximum(variance, 0.0))  # rounding can leave a variance of 0 below it
    half = np.asarray(critical) * std_error
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        factor = np.exp(half / natural)
        lower = np.where(on_log, natural / factor, natural - half)
        upper = np.where(on_log, natural * factor, natural + half)
    return WaldIntervals(natural, std_error, lower, upper)
