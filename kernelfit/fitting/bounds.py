"""Where an optimum stands at an end of the parameter space: which parameters, why, and what they are called."""

from __future__ import annotations

import numpy as np

from kernelfit._typing import BoolArray
from kernelfit.fitting.amplitudes import strongest_suppression
from kernelfit.fitting.maximise import Optimum
from kernelfit.fitting.problem import Problem, leak_reason


def shared_names(problem: Problem) -> tuple[str, ...]:
    """Names of the shared parameters, in order."""
    names = [p.name for p in problem.kernel.parameters(problem.span)]
    return (*names, *["same_site"] * problem.has_same_site, *["leak_rate"] * problem.fits_leak)


def in_words(names: list[str], *, article: bool = False) -> str:
    """Parameters as a reader calls them: "length and leak rate", "the length and the leak rate"."""
    rare = {"same_site": "same-site coefficient"}
    words = [rare.get(name, name.removesuffix("_um").replace("_", " ")) for name in names]
    if article:
        words = [word if word.startswith("coefficient ") else f"the {word}" for word in words]
    return " and ".join([", ".join(words[:-1]), words[-1]] if len(words) > 1 else words)


def bound_reasons(problem: Problem, optimum: Optimum) -> tuple[str, ...]:
    """For each shared parameter, why it cannot go past the bound it sits at, why it is not held by anything or goes
    with one that is not, or an empty text."""
    reasons = [""] * problem.n_shared
    run_off = run_off_parameters(problem, optimum)
    if run_off.any():
        names = shared_names(problem)
        loose = in_words([names[q] for q in np.flatnonzero(run_off)], article=True)
        for q in np.flatnonzero(tied_parameters(problem, optimum)):
            reasons[q] = f"goes with {loose}, which nothing holds"
    for q in np.flatnonzero(optimum.at_bound):
        upper = optimum.at_bound[q] > 0
        if run_off[q]:
            reasons[q] = _nothing_holds(problem, optimum, int(q), bool(upper))
        elif q < problem.n_kernel:
            reasons[q] = problem.kernel.bound_reason(int(q), bool(upper), problem.span)
        else:
            reasons[q] = leak_reason(problem.data.bin_width, upper=bool(upper))
    return tuple(reasons)


def run_off_parameters(problem: Problem, optimum: Optimum) -> BoolArray:
    """(Q,) True for amplitudes that stand at no bound of theirs but where the likelihood no longer changes."""
    lower, upper = problem.bounds.T if problem.n_shared else np.empty((2, 0))
    side = np.where(optimum.at_bound > 0, upper, lower)
    return np.asarray((optimum.at_bound != 0) & ~np.isfinite(side))


def tied_parameters(problem: Problem, optimum: Optimum) -> BoolArray:
    """(Q,) True for parameters that were taken out because they go with an amplitude that nothing holds."""
    held = [p.discrete for p in problem.kernel.parameters(problem.span)]
    held += [False] * (problem.n_shared - problem.n_kernel)
    return np.asarray(~optimum.free & (optimum.at_bound == 0) & ~np.array(held, dtype=bool))


def _nothing_holds(problem: Problem, optimum: Optimum, q: int, upper: bool) -> str:
    if q < problem.n_kernel:
        _, distance = strongest_suppression(problem, optimum.estimate.shared, problem.driven_um)
        where = f"unit {distance:.3g} µm away"
    else:
        where = "other unit on its site"
    return (
        f"nothing holds it from {'above' if upper else 'below'}: after a spike no {where} fired while the effect "
        "lasted, so that a stronger suppression fits at least as well"
    )
