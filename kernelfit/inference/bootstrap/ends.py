"""Ends of intervals from replicates of one number.

Quantiles of B replicates follow the (B + 1) p rule, with which 95 % ends are order statistics for B = 39, 99, 199, 999.
An end that lies beyond the outermost replicate is not made up: it is NaN, with the number of replicates it takes.

References
----------
Efron and Tibshirani (1993), An Introduction to the Bootstrap, chapters 12 to 14; Davison and Hinkley (1997), Bootstrap
Methods and their Application, chapter 5; BCa: Efron (1987), Journal of the American Statistical Association 82,
171-185.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.stats import norm

from kernelfit._typing import BoolArray, FloatArray

IntervalMethod = Literal["percentile", "basic", "studentised", "bca"]
QuantileRule = Literal["weibull", "linear"]  # numpy's names: p-th of (B + 1) p, and of (B - 1) p + 1
RANK_SLACK = 1e-9  # (39 + 1) 0.025 must not fall short of 1 by rounding


@dataclass(frozen=True)
class Ends:
    """Lower and upper end; NaN with the reason in `note` where there is none."""

    lower: float
    upper: float
    note: str = ""

    @classmethod
    def missing(cls, note: str) -> Ends:
        """No interval, for this reason."""
        return cls(math.nan, math.nan, note)


def replicates_needed(level: float) -> int:
    """How many replicates an interval of this level takes."""
    return math.ceil(2.0 / (1.0 - level) - RANK_SLACK) - 1


def percentile_ends(replicates: FloatArray, level: float, rule: QuantileRule = "weibull") -> Ends:
    """Quantiles of the replicates (B,) themselves."""
    low, high = _tails(level)
    return _at(replicates, low, high, rule)


def basic_ends(estimate: float, replicates: FloatArray, level: float, rule: QuantileRule = "weibull") -> Ends:
    """Quantiles of (B,) replicate less estimate, taken off the estimate."""
    ends = percentile_ends(replicates, level, rule)
    return Ends(2.0 * estimate - ends.upper, 2.0 * estimate - ends.lower, ends.note)


def studentised_ends(
    estimate: float,
    std_error: float,
    replicates: FloatArray,
    std_errors: FloatArray,
    level: float,
    rule: QuantileRule = "weibull",
) -> Ends:
    """Quantiles of replicate less estimate in the replicate's own standard errors, times that of the estimate.

    Parameters
    ----------
    estimate, std_error : of the fit
    replicates, std_errors : (B,) all finite, standard errors above 0
    """
    if not std_error > 0:
        return Ends.missing("the estimate has no standard error")
    t = percentile_ends((replicates - estimate) / std_errors, level, rule)
    return Ends(estimate - t.upper * std_error, estimate - t.lower * std_error, t.note)


def bca_ends(
    estimate: float, replicates: FloatArray, influence: FloatArray, level: float, rule: QuantileRule = "weibull"
) -> Ends:
    """Quantiles of the replicates (B,), moved for bias and for a variance that changes with the parameter.

    Parameters
    ----------
    influence : (G,) what each block moves the estimate by; the acceleration is their skewness over 6 sqrt(G), the
        jackknife's
    """
    below = 0.5 * (np.mean(replicates < estimate) + np.mean(replicates <= estimate)) if replicates.size else 0.0
    if not 0.0 < below < 1.0:
        return Ends.missing("all replicates lie on one side of the estimate")
    bias = float(norm.ppf(below))
    z = bias + np.array([norm.ppf(p) for p in _tails(level)])
    stretch = 1.0 - acceleration(influence) * z
    if not (stretch > 0).all():
        return Ends.missing("the acceleration is too large for this level")
    moved = bias + z / stretch
    return _at(replicates, float(norm.cdf(moved[0])), float(norm.cdf(moved[1])), rule)


def acceleration(influence: FloatArray) -> float:
    """How fast the standard error changes with the estimate, from the influence of each block (G,); 0: not at all."""
    centred = influence - influence.mean()
    spread = float(np.sum(centred**2))
    return float(np.sum(centred**3)) / (6.0 * spread**1.5) if spread > 0 else 0.0


def bootstrap_p_value(exceeds: BoolArray) -> float:
    """(1 + number of replicates at least as extreme) / (B + 1), `exceeds` (B,): never 0.

    Reference: Davison and Hinkley (1997), section 4.2.
    """
    return (1.0 + float(np.sum(exceeds))) / (exceeds.size + 1.0)


def _tails(level: float) -> tuple[float, float]:
    return 0.5 * (1.0 - level), 0.5 * (1.0 + level)


def _at(replicates: FloatArray, low: float, high: float, rule: QuantileRule) -> Ends:
    n = replicates.size
    rank = (n + 1) * min(low, 1.0 - high)
    if rank < 1.0 - RANK_SLACK:
        needed = math.ceil(1.0 / min(low, 1.0 - high) - RANK_SLACK) - 1 if min(low, 1.0 - high) > 0 else None
        takes = "more" if needed is None else f"at least {needed}"
        return Ends.missing(f"an end lies beyond the outermost of {n} replicates; it takes {takes}")
    lower, upper = np.quantile(replicates, [low, high], method=rule)
    return Ends(float(lower), float(upper))
