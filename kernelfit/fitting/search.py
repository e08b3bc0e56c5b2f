"""From the null fit to the best optimum: starts for each promising leak, the best few climbed to the top."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.fitting.amplitudes import far_off, strong_enough, strongest_suppression, suppressing
from kernelfit.fitting.maximise import (
    LOOSE,
    RIDGE_GAIN,
    TIGHT,
    Local,
    Optimum,
    evaluate_locally,
    maximise,
    with_run_off,
)
from kernelfit.fitting.null import Null, NullSweep
from kernelfit.fitting.problem import Estimate, Problem

N_LEAKS = 3
N_SHAPES = 2
WORTH_TRYING = 0.4  # of the best gain promised: poorer leaks only cost sweeps
LOOSE_ITERATIONS = 25
CLOSE = 2.0  # log-likelihood units: an optimum this near the best one is reported
NO_INFORMATION = 1e-10  # of the best informed band
APART = 0.2  # on the log scale: optima nearer than this are one


@dataclass(frozen=True)
class StartRecord:
    """One start: leak (1/s), the objective it was climbed to and in how many steps."""

    leak: float
    objective: float
    n_iterations: int


@dataclass(frozen=True, eq=False)
class SearchResult:
    """The best optimum, another one that comes close (or None), and every start tried."""

    best: Optimum
    second: Optimum | None
    starts: tuple[StartRecord, ...]


def promising(sweeps: tuple[NullSweep, ...]) -> list[NullSweep]:
    """Sweeps whose promised gain is a peak along the grid of leaks, best first, then the best of the rest."""
    gain = np.array([s.gain for s in sweeps])
    padded = np.concatenate([[-np.inf], gain, [-np.inf]])
    peak = (gain >= padded[:-2]) & (gain >= padded[2:])
    order = sorted(range(len(sweeps)), key=lambda k: (not peak[k], -gain[k]))
    worth = [k for k in order if gain[k] >= WORTH_TRYING * gain.max()]
    return [sweeps[k] for k in worth[:N_LEAKS]]


def start_estimates(problem: Problem, null: Null, sweep: NullSweep, n: int) -> list[Estimate]:
    """Starts at a leak: the family's shapes closest to the one-step estimate of J(d)."""
    variance = np.diag(np.linalg.pinv(sweep.information, rcond=1e-10, hermitian=True))
    information = np.diag(sweep.information)
    informed = information > NO_INFORMATION * information.max()  # not so where all sources of a band are silent
    weight = np.where(informed, 1.0 / np.where(informed, variance, 1.0), 0.0)
    thetas = problem.kernel.starts(null.distance_um, sweep.coupling, weight, problem.span, n=n)
    return [start_at(problem, null, sweep, theta) for theta in thetas]


def start_at(problem: Problem, null: Null, sweep: NullSweep, theta: FloatArray) -> Estimate:
    """A start with this kernel (K,); leak, own parameters and same-site coefficient are those of the sweep."""
    own, same_site = null.optimum.estimate.own, 0.0
    if sweep.same_site is not None:
        own, same_site = sweep.same_site.estimate.own, sweep.same_site.coefficient
    rest = [same_site] * int(problem.has_same_site) + [np.log(sweep.leak)] * int(problem.fits_leak)
    return Estimate(own, np.concatenate([theta, rest]))


def shrunk(problem: Problem, estimate: Estimate, floor: float) -> Estimate | Local:
    """Halve the coupling of a start until it is not worse than no coupling: one-step estimates overshoot in bursts."""
    linear = np.array([not p.shape for p in problem.kernel.parameters(problem.span)])
    shared = estimate.shared.copy()
    for _ in range(12):
        local = evaluate_locally(problem, Estimate(estimate.own, shared))
        if local.finite and local.objective >= floor:
            return local
        shared = shared.copy()
        shared[: problem.n_kernel][linear] *= 0.5
    return Estimate(estimate.own, shared)


def search(problem: Problem, null: Null, *, held: BoolArray | None = None) -> SearchResult:
    """Climb from the promising starts and keep the best.

    Parameters
    ----------
    problem, null : the model on the recording, and its fit without coupling
    held : (Q,) shared parameters that stay at their start (a discrete one, profiled elsewhere)
    """
    problem.clock.stage = "climbing"
    if problem.concave:
        return _only_hill(problem, null, held)
    floor = null.optimum.local.objective
    starts: list[Estimate] = []
    for rank, sweep in enumerate(promising(null.sweeps)):
        starts += start_estimates(problem, null, sweep, N_SHAPES if rank == 0 else 1)
    climbed = []
    for start in starts:
        begin = shrunk(problem, start, floor)
        climbed.append(maximise(problem, begin, held=held, tolerance=LOOSE, max_iterations=LOOSE_ITERATIONS))
    records = tuple(StartRecord(problem.leak(o.estimate.shared), o.local.objective, o.n_iterations) for o in climbed)
    ranked = sorted(climbed, key=lambda o: -o.local.objective)
    top = maximise(problem, ranked[0].local, held=held, tolerance=TIGHT)
    second = None
    for other in ranked[1:]:
        near = other.local.objective > top.local.objective - 2.0 * CLOSE
        if near and _apart(problem, other.estimate.shared, top.estimate.shared):
            finished = maximise(problem, other.local, held=held, tolerance=LOOSE)
            if finished.local.objective > top.local.objective:
                top, finished = maximise(problem, finished.local, held=held, tolerance=TIGHT), top
            close = finished.local.objective > top.local.objective - CLOSE
            if close and _apart(problem, finished.estimate.shared, top.estimate.shared):
                second = finished
                break
    steps = top.n_iterations + ranked[0].n_iterations
    return SearchResult(replace(held_by_nothing(problem, top, held), n_iterations=steps), second, records)


def held_by_nothing(problem: Problem, top: Optimum, held: BoolArray | None = None) -> Optimum:
    """An optimum with strong suppression, moved to where the rate is gone if the likelihood is as high there.

    Parameters
    ----------
    problem, top : where the climb ended
    held : (Q,) shared parameters that stay where they are

    Returns
    -------
    Optimum : `top` itself where something holds its amplitudes; else they stand at a suppression of `far_off` and are
        marked in `at_bound`, and the rest is at its maximum given them
    """
    driven_um = problem.driven_um
    strong = suppressing(problem, top.estimate.shared, driven_um, strong_enough(problem))
    strong = strong if held is None else strong & ~held
    if not strong.any() or not np.isfinite(top.local.objective):
        return top
    shared = top.estimate.shared.copy()
    n = problem.n_kernel
    if strong[:n].any():
        worst, _ = strongest_suppression(problem, shared, driven_um)
        shared[:n][strong[:n]] *= far_off(problem) / -worst
    if strong[n:].any():
        shared[n] = -far_off(problem)
    fixed = strong if held is None else held | strong
    there = maximise(problem, Estimate(top.estimate.own, shared), held=fixed, tolerance=TIGHT)
    if not there.converged or there.local.objective < top.local.objective - RIDGE_GAIN:
        return top
    return with_run_off(problem, there, strong)


def _only_hill(problem: Problem, null: Null, held: BoolArray | None) -> SearchResult:
    """At a fixed leak, a kernel linear in its coefficients: the objective is concave, so any start will do.

    No coupling is a start that never lies on a slope too steep to climb straight on, as one-step estimates may where
    units burst; where the one-step estimate is better than no coupling it saves a step.
    """
    begin: Estimate | Local = Estimate(null.optimum.estimate.own, np.zeros(problem.n_shared))
    first = evaluate_locally(problem, start_estimates(problem, null, null.sweeps[0], 1)[0])
    if first.finite and first.objective >= null.optimum.local.objective:
        begin = first
    top = held_by_nothing(problem, maximise(problem, begin, held=held, tolerance=TIGHT), held)
    start = StartRecord(problem.leak(top.estimate.shared), top.local.objective, top.n_iterations)
    return SearchResult(top, None, (start,))


def _apart(problem: Problem, a: FloatArray, b: FloatArray) -> bool:
    bounded = np.isfinite(problem.bounds).all(axis=1)
    return bool(np.max(np.abs(a - b)[bounded], initial=0.0) > APART)
