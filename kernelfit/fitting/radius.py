"""A kernel with an edge: its radius is profiled over the distances of the array, everything else is climbed."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from kernelfit._typing import FloatArray
from kernelfit.fitting.maximise import LOOSE, TIGHT, Optimum, maximise
from kernelfit.fitting.null import Null, NullSweep, null_blocks, null_sweep
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.fitting.search import SearchResult, StartRecord, promising
from kernelfit.kernels.bands import Bands

MOST_BANDS = 40
N_STARTS = 3


@dataclass(frozen=True, eq=False)
class RadiusProfile:
    """Log-likelihood against the radius. `radius_um` (R,) ascending, `objective` (R,) maximised over the rest."""

    radius_um: FloatArray
    objective: FloatArray

    def interval(self, level: float, edges_um: FloatArray, inflation: float) -> tuple[float, float]:
        """Radii a likelihood-ratio test keeps, out to the distances of the array that bound them.

        Parameters
        ----------
        level : coverage
        edges_um : distinct distances of the array
        inflation : robust over model variance, by which the ratio is scaled
        """
        drop = 2.0 * (np.nanmax(self.objective) - self.objective)
        kept = self.radius_um[drop <= inflation * chi2.ppf(level, 1)]
        below = edges_um[edges_um < kept.min()]
        above = edges_um[edges_um >= kept.max()]
        return (float(below[-1]) if below.size else 0.0), (float(above[0]) if above.size else float(edges_um[-1]))


def discrete_parameter(problem: Problem) -> int | None:
    """Place of the discrete parameter among the kernel's, or None."""
    flags = [p.discrete for p in problem.kernel.parameters(problem.span)]
    return flags.index(True) if any(flags) else None


def search_radius(problem: Problem, null: Null, place: int) -> tuple[SearchResult, RadiusProfile]:
    """Profile the radius: promising ones from one fine sweep, the best climbed, neighbours tried until none is better.

    Parameters
    ----------
    problem, null : the model on the recording, and its fit without coupling
    place : of the radius among the kernel's parameters
    """
    problem.clock.stage = "climbing"
    candidates = problem.kernel.radius_candidates(problem.geometry.distinct_um)
    if candidates is None:
        raise ValueError(f"kernel {problem.kernel.name!r} names no radii to profile")
    held = np.zeros(problem.n_shared, dtype=bool)
    held[place] = True
    objective = np.full(candidates.size, np.nan)
    optima: dict[int, Optimum] = {}
    records: list[StartRecord] = []

    def climb(k: int, start: Estimate, tolerance: float) -> None:
        shared = start.shared.copy()
        shared[place] = np.log(candidates[k])
        optima[k] = maximise(problem, Estimate(start.own, shared), held=held, tolerance=tolerance)
        objective[k] = optima[k].local.objective
        records.append(StartRecord(problem.leak(optima[k].estimate.shared), objective[k], optima[k].n_iterations))

    for sweep in promising(null.sweeps)[:1]:
        gains, amplitudes = _gain_by_radius(problem, null, sweep, candidates)
        for k in np.argsort(-gains, kind="stable")[:N_STARTS]:
            climb(int(k), _start(problem, null, sweep, place, float(candidates[k]), float(amplitudes[k])), LOOSE)
    while True:
        best = int(np.nanargmax(objective))
        untried = [k for k in (best - 1, best + 1) if 0 <= k < candidates.size and np.isnan(objective[k])]
        if not untried:
            break
        for k in untried:
            climb(k, optima[best].estimate, LOOSE)
    _widen(objective, best, candidates.size, lambda k, near: climb(k, optima[near].estimate, LOOSE))
    climb(best, optima[best].estimate, TIGHT)
    tried = ~np.isnan(objective)
    profile = RadiusProfile(candidates[tried], objective[tried])
    return SearchResult(optima[best], None, tuple(records)), profile


def _widen(objective: FloatArray, best: int, n: int, climb: Callable[[int, int], None]) -> None:
    """Climb outwards from the best radius until the likelihood has dropped enough for a wide interval."""
    enough = 0.5 * float(chi2.ppf(0.999, 1)) * 4.0  # room for a robust variance four times the model's
    for side in (-1, 1):
        k = best + side
        while 0 <= k < n:
            if np.isnan(objective[k]):
                climb(k, k - side)
            if objective[best] - objective[k] > enough:
                break
            k += side


def _gain_by_radius(
    problem: Problem, null: Null, sweep: NullSweep, candidates: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Gain a quadratic promises for each radius, and the amplitude, from one sweep with fine bands."""
    chosen = np.unique(np.linspace(0, candidates.size - 1, min(MOST_BANDS, candidates.size)).astype(int))
    bands = Bands(tuple(float(r) for r in candidates[chosen]))
    fine = null_sweep(problem, bands, sweep.leak, null.optimum.estimate, null_blocks(problem))
    score = fine.information @ fine.coupling
    gains, amplitudes = np.full(candidates.size, -np.inf), np.zeros(candidates.size)
    for place, k in enumerate(chosen):
        inside = np.arange(fine.coupling.size) <= place
        information = float(fine.information[np.ix_(inside, inside)].sum())
        if information > 0:
            amplitudes[k] = float(score[inside].sum()) / information
            gains[k] = 0.5 * amplitudes[k] ** 2 * information
    return gains, amplitudes


def _start(problem: Problem, null: Null, sweep: NullSweep, place: int, radius_um: float, amplitude: float) -> Estimate:
    theta = np.full(problem.n_kernel, amplitude)
    theta[place] = np.log(radius_um)
    rest = [0.0] * int(problem.has_same_site) + [np.log(sweep.leak)] * int(problem.fits_leak)
    return Estimate(null.optimum.estimate.own, np.concatenate([theta, rest]))
