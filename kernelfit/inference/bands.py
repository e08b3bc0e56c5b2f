"""Bands around a curve that depends on a few parameters: pointwise, and simultaneous by sup-t.

Reference
---------
Montiel Olea and Plagborg-Moller (2019), Journal of Applied Econometrics 34, 1-17.
"""

from __future__ import annotations

import numpy as np
from scipy.stats import chi2, f, norm

from kernelfit._typing import FloatArray
from kernelfit.inference.intervals import critical_value

N_DRAWS = 20_000
POINTS_AT_ONCE = 256  # of the curve, so that a band over many distances does not fill the memory


def standard_errors(gradient: FloatArray, covariance: FloatArray) -> FloatArray:
    """(m,) delta-method standard errors of a curve with gradient (Q, m); NaN rows of the covariance are left out."""
    known = ~np.isnan(np.diag(covariance))
    if not known.any():
        return np.full(gradient.shape[1], np.nan)
    g = gradient[known]
    variance = np.einsum("qm,qr,rm->m", g, covariance[np.ix_(known, known)], g)
    return np.asarray(np.sqrt(np.maximum(variance, 0.0)))  # rounding can leave a variance of 0 below it


def sup_t_critical(
    gradient: FloatArray, covariance: FloatArray, level: float, degrees_of_freedom: float, seed: int = 0
) -> float:
    """Half-width, in standard errors, of the band that covers the curve at all its points at once.

    It is the `level` quantile of the largest |t| over the points, from draws of the parameters; the band of this width
    is the narrowest of the form estimate -+ c standard errors that covers them all with probability `level`.

    Parameters
    ----------
    gradient : (Q, m) derivative of the curve at the m points that are to be covered
    covariance : (Q, Q) of the parameters
    level, degrees_of_freedom : coverage, and those of the covariance (infinite: normal)
    seed : of the draws; the same seed gives the same band

    Returns
    -------
    float : between the pointwise value (one point, or points that move together) and the smaller of Sidak's
        (independent points) and Scheffe's (every combination of the parameters); NaN where nothing has a variance
    """
    known = ~np.isnan(np.diag(covariance))
    if not known.any():
        return np.nan
    g = gradient[known]
    value, vector = np.linalg.eigh(covariance[np.ix_(known, known)])
    root = (vector * np.sqrt(np.maximum(value, 0.0))).T @ g  # (Q, m)
    size = np.sqrt(np.sum(root**2, axis=0))
    root = root[:, size > 0] / size[size > 0]
    if root.shape[1] == 0:
        return np.nan
    rng = np.random.default_rng(seed)
    draws = rng.standard_normal((N_DRAWS, root.shape[0]))
    largest = np.zeros(N_DRAWS)
    for at in range(0, root.shape[1], POINTS_AT_ONCE):
        np.maximum(largest, np.max(np.abs(draws @ root[:, at : at + POINTS_AT_ONCE]), axis=1), out=largest)
    if np.isfinite(degrees_of_freedom):
        largest *= np.sqrt(degrees_of_freedom / rng.chisquare(degrees_of_freedom, N_DRAWS))
    pointwise = critical_value(level, degrees_of_freedom)
    return max(float(np.quantile(largest, level)), pointwise)


def sidak_critical(n: int, level: float) -> float:
    """Half-width for n independent points (Sidak 1967)."""
    return float(norm.ppf(0.5 * (1.0 + level ** (1.0 / n))))


def scheffe_critical(rank: int, level: float, degrees_of_freedom: float = np.inf) -> float:
    """Half-width that covers every linear combination of `rank` parameters at once (Scheffe 1953)."""
    if np.isinf(degrees_of_freedom):
        return float(np.sqrt(chi2.ppf(level, rank)))
    return float(np.sqrt(rank * f.ppf(level, rank, degrees_of_freedom)))
