"""Amplitudes that nothing holds: with few spikes none may follow another within the reach of an effect.

The stronger the suppression then, the better, and the likelihood has its top at minus infinity. Past some point it no
longer changes, and a climb would go on for nothing: there the amplitude stays where it is and the rest is climbed. What
else would be different with another such amplitude is not identified either.
"""

from __future__ import annotations

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.fitting.arrow import Arrow, eliminate, solve_symmetric
from kernelfit.fitting.problem import FASTEST_LEAK_BINS, Problem

GONE = 20.0  # exp(-20) of a rate is no rate: no recording holds the spikes to tell one from the other
STRONG = 5.0  # suppression to under 1 %: strong enough to ask whether anything holds it


def far_off(problem: Problem) -> float:
    """A jump beyond minus this leaves `GONE` after a bin, whatever the leak: the fastest one fitted, or the stated."""
    stated = 0.0 if problem.model.leak_rate is None else problem.model.leak_rate * problem.data.bin_width
    return GONE * float(np.exp(max(FASTEST_LEAK_BINS, stated)))


def strong_enough(problem: Problem) -> float:
    """A jump beyond minus this leaves `STRONG` after a bin at a stated leak, and at once where the leak is fitted."""
    stated = 0.0 if problem.model.leak_rate is None else problem.model.leak_rate * problem.data.bin_width
    return STRONG * float(np.exp(stated))


def linear_mask(problem: Problem) -> BoolArray:
    """(Q,) True for shared parameters that the predictor is linear in: the kernel's amplitudes, the same-site one."""
    family = problem.kernel.parameters(problem.span)
    rest = [True] * problem.has_same_site + [False] * problem.fits_leak
    return np.array([*(not p.shape and not p.discrete for p in family), *rest], dtype=bool)


def strongest_suppression(problem: Problem, shared: FloatArray, driven_um: FloatArray) -> tuple[float, float]:
    """The most negative J of the kernel at a distance where some source fires, and that distance (µm)."""
    value = problem.kernel.value(shared[: problem.n_kernel], driven_um, problem.span)
    worst = int(np.argmin(value))
    return float(value[worst]), float(driven_um[worst])


def suppressing(problem: Problem, shared: FloatArray, driven_um: FloatArray, threshold: float) -> BoolArray:
    """(Q,) True for amplitudes that make some J more negative than `-threshold` at a distance where a source fires.

    Parameters
    ----------
    shared : (Q,) on the working scale
    driven_um : `problem.driven_um`, worked out once by the caller
    threshold : above 0, on the scale of J
    """
    linear, n = linear_mask(problem), problem.n_kernel
    found = np.zeros(problem.n_shared, dtype=bool)
    if n and driven_um.size:
        value = problem.kernel.value(shared[:n], driven_um, problem.span)
        beyond = value < -threshold
        if beyond.any():
            slope = problem.kernel.gradient(shared[:n], driven_um[beyond], problem.span)
            share = value[beyond] / max(int(linear[:n].sum()), 1)  # of several, one at least reaches it
            found[:n] = linear[:n] & (shared[:n, None] * slope <= share).any(axis=1)
    if problem.has_same_site:
        found[n] = shared[n] < -threshold
    return found


def tied(problem: Problem, information: Arrow, run_off: BoolArray, free: BoolArray) -> BoolArray:
    """(Q,) True for free parameters whose estimate would be another one with a still stronger suppression.

    Lengths and the leak share a ridge with the amplitude: a silence lasts log |J| time constants. Amplitudes beside it,
    as of a spline, and its leak are tied where they make up for it, which the information tells: they would move by
    more than a standard error.

    Parameters
    ----------
    information : at the optimum, all shared parameters in it
    run_off : (Q,) amplitudes that nothing holds
    free : (Q,) parameters estimated beside them
    """
    linear, n = linear_mask(problem), problem.n_kernel
    result = np.zeros(problem.n_shared, dtype=bool)
    try:
        schur = eliminate(information).schur
        inverse = solve_symmetric(schur[np.ix_(free, free)], np.eye(int(free.sum())))
        moved = np.abs(inverse @ schur[np.ix_(free, run_off)]) * 0.5 * far_off(problem)
        result[free] = (moved > np.sqrt(np.diag(inverse))[:, None]).any(axis=1)
    except np.linalg.LinAlgError:  # without information there is no standard error to be misled by
        result[free] = linear[free]
    if run_off[:n].any():
        result[:n] |= ~linear[:n]
        whole = bool((run_off | result)[:n].all())  # nothing of the kernel is left to tell the leak by
        result[-1] |= problem.fits_leak and (whole or not linear[:n].all())
    return result & free
