"""Shared parameters of a fit by name, and from the working scale to the one people read."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import BoolArray, FloatArray

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit


def shared_names(fit: CouplingFit) -> tuple[str, ...]:
    """Names of the parameters of `fit.shared`, in order; a leak rate that was fixed is not among them."""
    names = [p.name for p in fit.model.kernel.parameters(fit.span)]
    return (*names, *["same_site"] * fit.has_same_site, *["leak_rate"] * (fit.model.leak_rate is None))


def shared_units(fit: CouplingFit) -> tuple[str, ...]:
    """Their units of measure, as `fit.parameters` states them."""
    units = [p.unit for p in fit.model.kernel.parameters(fit.span)]
    return (*units, *["per spike"] * fit.has_same_site, *["1/s"] * (fit.model.leak_rate is None))


def on_log_scale(fit: CouplingFit) -> BoolArray:
    """(Q,) True for parameters whose intervals are symmetric on the log scale."""
    scales = [p.scale == "log" for p in fit.model.kernel.parameters(fit.span)]
    return np.array([*scales, *[False] * fit.has_same_site, *[True] * (fit.model.leak_rate is None)], dtype=bool)


def natural_values(fit: CouplingFit, shared: FloatArray) -> FloatArray:
    """Shared parameters on the natural scale; `shared` (Q,) or (n, Q) on the working scale, the same shape out."""
    rows = np.atleast_2d(shared)
    n = fit.n_kernel
    kernel = np.array([fit.model.kernel.natural(row[:n], fit.span) for row in rows]).reshape(len(rows), n)
    rest = rows[:, n:].copy()
    if fit.model.leak_rate is None:
        rest[:, -1] = np.exp(rest[:, -1])
    return np.concatenate([kernel, rest], axis=1).reshape(np.shape(shared))
