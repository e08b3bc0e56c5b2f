"""Ends of the parameter space in the tables of a fit: what no interval can pass, and what nothing holds."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.fitting.problem import leak_limits, leak_reason

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.inference.intervals import WaldIntervals


def natural_limits(fit: CouplingFit) -> FloatArray:
    """(K, 2) values between which a parameter can be told, on the natural scale; infinite for amplitudes."""
    family = [p.limits(fit.span) for p in fit.model.kernel.parameters(fit.span)]
    leak = [leak_limits(fit.n_bins, fit.model.bin_width)] if fit.model.leak_rate is None else []
    return np.array([*family, *[(-np.inf, np.inf)] * fit.has_same_site, *leak]).reshape(-1, 2)


def end_reason(fit: CouplingFit, k: int, *, upper: bool) -> str:
    """Why the interval of parameter k cannot go on past its bound."""
    side = "upper" if upper else "lower"
    if k < fit.n_kernel:
        return f"{side} end at its bound: {fit.model.kernel.bound_reason(k, upper, fit.span)}"
    return f"{side} end at its bound: {leak_reason(fit.model.bin_width, upper=upper)}"


def cut_notes(fit: CouplingFit, whole: WaldIntervals, cut: WaldIntervals) -> list[str]:
    """For each parameter, why its interval ends before the standard error would end it; empty where it does not."""
    notes = []
    for k in range(whole.estimate.size):
        ends = [end_reason(fit, k, upper=False)] if cut.lower[k] > whole.lower[k] else []
        ends += [end_reason(fit, k, upper=True)] if cut.upper[k] < whole.upper[k] else []
        notes.append("; ".join(ends))
    return notes


def radius_notes(fit: CouplingFit, k: int, interval: tuple[float, float]) -> list[str]:
    """The same for the likelihood interval of a radius, which ends at distances of the array."""
    ends = [end_reason(fit, k, upper=False)] if interval[0] <= fit.distinct_um[0] else []
    return ends + ([end_reason(fit, k, upper=True)] if interval[1] >= fit.distinct_um[-1] else [])


def run_off(fit: CouplingFit) -> BoolArray:
    """(Q,) True for amplitudes that stand at no bound of theirs, but where nothing holds them any more."""
    bounded = np.zeros((fit.shared.size, 2), dtype=bool)
    bounded[: fit.n_kernel] = np.isfinite(fit.model.kernel.bounds(fit.span))
    if fit.model.leak_rate is None:
        bounded[-1] = True
    return np.asarray((fit.at_bound != 0) & ~np.where(fit.at_bound > 0, bounded[:, 1], bounded[:, 0]))


def loose(fit: CouplingFit) -> BoolArray:
    """(Q,) True for amplitudes that nothing holds, and for what goes with them: their values mean nothing."""
    reasoned = np.array([bool(reason) for reason in fit.bound_reasons], dtype=bool)
    return np.asarray(run_off(fit) | (reasoned & (fit.at_bound == 0)))
