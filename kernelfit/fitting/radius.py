"""A kernel with an edge: its radius is profiled over the distances of the array, everything else is climbed."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.fitting.covariance import Uncertainty, covariances
from kernelfit.fitting.maximise import LOOSE, TIGHT, Optimum, maximise
from kernelfit.fitting.null import Null, NullSweep, null_blocks, null_sweep
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.fitting.search import SearchResult, StartRecord, held_by_nothing, promising, start_at
from kernelfit.kernels.bands import Bands

MOST_RADII = 40
N_STARTS = 3
NEIGHBOURS = 4
LEVEL = 0.95  # of the interval whose ends the profile must reach


@dataclass(frozen=True, eq=False)
class RadiusProfile:
    """Log-likelihood against the radius. `radius_um` (R,) ascending, `objective` (R,) maximised over the rest."""

    radius_um: FloatArray
    objective: FloatArray

    def interval(self, level: float, edges_um: FloatArray, inflation: float) -> tuple[float, float]:
        """Radii a likelihood-ratio test keeps, out to the last distance before a radius that it does not keep.

        Parameters
        ----------
        level : coverage
        edges_um : distinct distances of the array; between two of them all radii are alike
        inflation : robust over model variance, by which the ratio is scaled
        """
        drop = 2.0 * (np.max(self.objective) - self.objective)
        kept = np.flatnonzero(drop <= inflation * edge_critical(level))
        first, last = int(kept[0]), int(kept[-1])
        below = self.radius_um[first - 1] if first > 0 else 0.0
        above = self.radius_um[last + 1] if last + 1 < self.radius_um.size else np.inf
        return float(edges_um[edges_um > below][0]), float(edges_um[edges_um < above][-1])


def edge_critical(level: float) -> float:
    """Critical value of the likelihood ratio of an edge, -2 log(1 - sqrt(level)); 7.35 at 95 %.

    The likelihood jumps at an edge, so chi-square (3.84) does not hold: measured on jittered arrays it covered 84 %.
    Hansen (2000), Econometrica 68, 575-603, theorem 2.
    """
    return -2.0 * math.log(1.0 - math.sqrt(level))


def variance_inflation(spread: Uncertainty) -> float:
    """Robust over model variance of the amplitude, the first shared parameter; 1 at least, and where there is none."""
    model, robust = spread.shared_model[0, 0], spread.shared_robust[0, 0]
    return max(float(robust / model), 1.0) if model > 0 and np.isfinite(robust / model) else 1.0


def discrete_parameter(problem: Problem) -> int | None:
    """Place of the discrete parameter among the kernel's, or None."""
    flags = [p.discrete for p in problem.kernel.parameters(problem.span)]
    return flags.index(True) if any(flags) else None


def search_radius(problem: Problem, null: Null, place: int) -> tuple[SearchResult, RadiusProfile]:
    """Profile the radius: promising ones from one fine sweep, the best climbed, and refined between its neighbours.

    Arrays with many distinct distances are profiled at MOST_RADII of them and refined only around the best.

    Parameters
    ----------
    problem, null : the model on the recording, and its fit without coupling
    place : of the radius among the kernel's parameters
    """
    problem.clock.stage = "climbing"
    candidates = problem.kernel.radius_candidates(problem.geometry.distinct_um)
    if candidates is None:
        raise ValueError(f"kernel {problem.kernel.name!r} names no radii to profile")
    coarse = np.unique(np.linspace(0, candidates.size - 1, min(MOST_RADII, candidates.size)).astype(int))
    sweep = promising(null.sweeps)[0]
    gains, amplitudes = _gain_by_radius(problem, null, sweep, candidates[coarse])
    profiled = _Profile(problem, place, candidates)
    for c in np.argsort(-gains, kind="stable")[:N_STARTS]:
        k = int(coarse[c])
        profiled.climb(k, _start(problem, null, sweep, place, float(candidates[k]), float(amplitudes[c])))
    starts = tuple(
        StartRecord(problem.leak(o.estimate.shared), o.local.objective, o.n_iterations)
        for o in profiled.optima.values()
    )
    step, best = int(np.max(np.diff(coarse), initial=1)), -1
    while profiled.best != best:  # widening may come upon a better hill
        profiled.refine(step)
        best = profiled.best
        inflation = variance_inflation(covariances(problem, profiled.optima[best]))
        problem.clock.stage = "climbing"
        profiled.widen(coarse, 0.5 * inflation * edge_critical(LEVEL))
    held = np.arange(problem.n_shared) == place
    top = held_by_nothing(problem, profiled.climb(best, profiled.optima[best].estimate, TIGHT), held)
    tried = sorted(profiled.optima)
    objective = np.array([profiled.optima[k].local.objective for k in tried])
    return SearchResult(top, None, starts), RadiusProfile(candidates[tried], objective)


def profile_around(problem: Problem, place: int, start: Estimate) -> tuple[RadiusProfile, tuple[Estimate, ...]]:
    """The profile of the radius from an optimum that is known, and where everything else stands at each radius.

    All of at most MOST_RADII radii over the array are climbed, as the profile is ragged and may have several tops, and
    more of them around the best.

    Parameters
    ----------
    problem, place : the model on its recording, and the radius among the kernel's parameters
    start : the optimum
    """
    candidates = problem.kernel.radius_candidates(problem.geometry.distinct_um)
    if candidates is None:
        raise ValueError(f"kernel {problem.kernel.name!r} names no radii to profile")
    coarse = np.unique(np.linspace(0, candidates.size - 1, min(MOST_RADII, candidates.size)).astype(int))
    profiled = _Profile(problem, place, candidates)
    profiled.climb(int(np.argmin(np.abs(np.log(candidates) - start.shared[place]))), start)
    step, best = int(np.max(np.diff(coarse), initial=1)), -1
    while profiled.best != best:
        profiled.refine(step)
        best = profiled.best
        profiled.widen(coarse, np.inf)
    tried = sorted(profiled.optima)
    objective = np.array([profiled.optima[k].local.objective for k in tried])
    return RadiusProfile(candidates[tried], objective), tuple(profiled.optima[k].estimate for k in tried)


@dataclass(eq=False)
class _Profile:
    """Optima at the radii tried so far, by place among the candidates; grows while the radius is searched."""

    problem: Problem
    place: int
    candidates: FloatArray
    optima: dict[int, Optimum] = field(default_factory=dict)

    @property
    def best(self) -> int:
        """The radius with the highest objective so far; one that is not finite counts as the lowest."""
        return max(self.optima, key=lambda k: (np.nan_to_num(self.optima[k].local.objective, nan=-np.inf), -k))

    def climb(self, k: int, start: Estimate, tolerance: float = LOOSE) -> Optimum:
        """Maximise over everything else at radius k."""
        shared = start.shared.copy()
        shared[self.place] = np.log(self.candidates[k])
        held = np.arange(self.problem.n_shared) == self.place
        self.optima[k] = maximise(self.problem, Estimate(start.own, shared), held=held, tolerance=tolerance)
        return self.optima[k]

    def refine(self, step: int) -> None:
        """Try radii around the best, nearer and nearer, until neither neighbour is better."""
        while step >= 1:
            best = self.best
            reach = (step,) if step > 1 else range(1, NEIGHBOURS + 1)  # the profile is ragged at the last
            for k in [best - r for r in reach] + [best + r for r in reach]:
                if 0 <= k < self.candidates.size and k not in self.optima:
                    self.climb(k, self.optima[best].estimate)
            if self.best == best:
                step //= 2

    def widen(self, coarse: IntArray, enough: float) -> None:
        """Climb outwards over the coarse radii until the log-likelihood has dropped by more than `enough` for good.

        For good: by more than that at every radius farther out that was tried too, as the profile is ragged.
        """
        best = self.best
        for side in (-1, 1):
            near = best
            for k in coarse[coarse > best] if side > 0 else coarse[coarse < best][::-1]:
                if int(k) not in self.optima:
                    self.climb(int(k), self.optima[near].estimate)
                near = int(k)
                from_here = [o.local.objective for j, o in self.optima.items() if side * (j - near) >= 0]
                if self.optima[best].local.objective - max(from_here) > enough:
                    break


def _gain_by_radius(
    problem: Problem, null: Null, sweep: NullSweep, candidates: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Gain a quadratic promises for each radius, and the amplitude, from one sweep with a band between each two."""
    bands = Bands(tuple(float(r) for r in candidates))
    fine = null_sweep(problem, bands, sweep.leak, null.optimum.estimate, null_blocks(problem), sweep.same_site)
    score = fine.information @ fine.coupling
    gains, amplitudes = np.full(candidates.size, -np.inf), np.zeros(candidates.size)
    for k in range(candidates.size):
        inside = np.arange(fine.coupling.size) <= k
        information = float(fine.information[np.ix_(inside, inside)].sum())
        if information > 0:
            amplitudes[k] = float(score[inside].sum()) / information
            gains[k] = 0.5 * amplitudes[k] ** 2 * information
    return gains, amplitudes


def _start(problem: Problem, null: Null, sweep: NullSweep, place: int, radius_um: float, amplitude: float) -> Estimate:
    theta = np.full(problem.n_kernel, amplitude)
    theta[place] = np.log(radius_um)
    return start_at(problem, null, sweep, theta)
