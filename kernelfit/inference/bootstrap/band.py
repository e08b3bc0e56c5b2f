"""Bands on J(d) from replicates: pointwise, and simultaneous by sup-t.

Reference
---------
Montiel Olea and Plagborg-Moller (2019), Journal of Applied Econometrics 34, 1-17.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit._validation import check_level, check_truth_value, given_as
from kernelfit.errors import ArgumentError
from kernelfit.inference.bands import standard_errors
from kernelfit.inference.bootstrap.ends import RANK_SLACK
from kernelfit.inference.not_found import search_root
from kernelfit.inference.parameters import distances_with_pairs
from kernelfit.inference.stated import state_band
from kernelfit.kernels.base import SAME_DISTANCE_UM

if TYPE_CHECKING:
    from kernelfit.inference.bootstrap.result import Bootstrap

METHODS = ("symmetric", "studentised")


def replicated_band(
    bootstrap: Bootstrap, distances_um: FloatArray, level: float, simultaneous: bool, method: str
) -> pd.DataFrame:
    """See `Bootstrap.kernel_band`."""
    check_level(level)
    check_truth_value(simultaneous, "simultaneous")
    if not isinstance(method, str) or method not in METHODS:
        raise ArgumentError(f"{given_as('method', method)} is not known. Say 'symmetric' or 'studentised'.")
    fit = bootstrap.fit
    near, far = distances_with_pairs(fit)
    inside = (distances_um >= near - SAME_DISTANCE_UM) & (distances_um <= far + SAME_DISTANCE_UM)
    estimate, half = (np.full(distances_um.size, np.nan) for _ in range(2))
    if inside.any():
        d = distances_um[inside]
        estimate[inside] = fit.kernel(d)
        half[inside] = _half_widths(bootstrap, d, level, simultaneous, method)
    lower, upper = estimate - half, estimate + half
    if fit.radius_interval is not None:  # between its ends a distance may lie within the radius or beyond it
        closest = np.array([fit.span.smallest_um])
        within = float(fit.kernel(closest)[0])
        spread = float(_half_widths(bootstrap, closest, level, simultaneous, method)[0])
        between = inside & (distances_um > fit.radius_interval[0]) & (distances_um < fit.radius_interval[1])
        lower[between], upper[between] = min(within - spread, 0.0), max(within + spread, 0.0)
    gradient = fit.model.kernel.gradient(fit.shared[: fit.n_kernel], distances_um, fit.span)
    state_band(fit, gradient, estimate, (lower, upper))
    return pd.DataFrame({"distance_um": distances_um, "estimate": estimate, "lower": lower, "upper": upper})


def _half_widths(bootstrap: Bootstrap, d: FloatArray, level: float, simultaneous: bool, method: str) -> FloatArray:
    """(m,) half-widths; NaN where the replicates are too few for the level, 0 where the curve does not move."""
    if method == "symmetric":
        deviation, spread = _deviations(bootstrap, d)
        t = deviation / np.where(spread > 0, spread, 1.0)
    else:
        t, spread = _studentised(bootstrap, d)
    if not np.isfinite(spread).all() or (len(t) + 1) * (1.0 - level) < 1.0 - RANK_SLACK:
        return np.full(d.size, np.nan)
    size = np.abs(t)
    if simultaneous:
        critical = np.full(d.size, np.quantile(np.max(size, axis=1), level, method="weibull"))
    else:
        critical = np.quantile(size, level, axis=0, method="weibull")
    critical = np.maximum(critical, search_root(bootstrap.fit, level))  # chosen for its length and leak
    return np.asarray(critical * spread)


def _deviations(bootstrap: Bootstrap, d: FloatArray) -> tuple[FloatArray, FloatArray]:
    """(B', m) J of each replicate that converged less that of the fit, and (m,) their standard deviation."""
    fit, n = bootstrap.fit, bootstrap.fit.n_kernel
    used = bootstrap.replicates[bootstrap.converged]
    curves = np.array([fit.model.kernel.value(row[:n], d, fit.span) for row in used]).reshape(len(used), d.size)
    spread = np.std(curves, axis=0, ddof=1) if len(used) >= 2 else np.full(d.size, np.nan)
    return curves - fit.kernel(d), np.asarray(spread)


def _studentised(bootstrap: Bootstrap, d: FloatArray) -> tuple[FloatArray, FloatArray]:
    """(B', m) deviations in the replicate's own standard errors, for those that have them, and (m,) the fit's."""
    fit, n = bootstrap.fit, bootstrap.fit.n_kernel
    spread = standard_errors(fit.model.kernel.gradient(fit.shared[:n], d, fit.span), bootstrap.fit_covariance[:n, :n])
    moves = spread > 0
    rows = []
    for shared, covariance in zip(
        bootstrap.replicates[bootstrap.converged], bootstrap.own_covariances[bootstrap.converged], strict=True
    ):
        own = standard_errors(fit.model.kernel.gradient(shared[:n], d, fit.span), covariance[:n, :n])
        deviation = fit.model.kernel.value(shared[:n], d, fit.span) - fit.kernel(d)
        if (own[moves] > 0).all():
            rows.append(np.where(moves, deviation / np.where(moves, own, 1.0), 0.0))
    return np.array(rows).reshape(len(rows), d.size), spread
