"""The model without coupling, and what a little coupling would add to it at each leak rate.

One fit of baselines and after-spike effects, then one sweep for each leak on a coarse grid. Each sweep gives the
score of
coupling in bands of distance: a one-step estimate of J(d), where every family starts from, and by blocks of time, the
test of any coupling at all.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.engine.evaluate import TimeBlocks
from kernelfit.engine.time_blocks import time_blocks
from kernelfit.fitting.arrow import Arrow, eliminate
from kernelfit.fitting.maximise import Optimum, maximise, penalised
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.kernels.bands import Bands, equal_bands

N_BANDS = 8
LEAKS_PER_DECADE = 3
LONGEST_START_S = 10.0
N_BLOCKS = 100
SHORTEST_BLOCK_S = 1.0


@dataclass(frozen=True, eq=False)
class NullSweep:
    """What a sweep at the null fit says about coupling with one leak rate. K bands, G blocks of time.

    Parameters
    ----------
    leak : 1/s
    coupling : (K,) one-step estimate of J in each band
    information : (K, K) efficient information on it
    block_score : (G, K) efficient score by block of time
    gain : log-likelihood a quadratic promises
    """

    leak: float
    coupling: FloatArray
    information: FloatArray
    block_score: FloatArray
    gain: float


@dataclass(frozen=True, eq=False)
class Null:
    """The fit without coupling and its sweeps. `distance_um` (K,) is the mean distance of each band's pairs."""

    problem: Problem
    optimum: Optimum
    bands: Bands
    distance_um: FloatArray
    sweeps: tuple[NullSweep, ...]


def without_coupling(problem: Problem) -> Problem:
    """The same data and own terms, no coupling."""
    return with_bands(problem, Bands(empty=True), 1.0)


def with_bands(problem: Problem, bands: Bands, leak: float) -> Problem:
    """The same data and own terms with coupling in bands at a fixed leak; same-site pairs left out."""
    geometry = replace(problem.geometry, own_site=np.zeros_like(problem.geometry.own_site))
    return replace(problem, kernel=bands, model=replace(problem.model, leak_rate=leak), geometry=geometry)


def first_estimate(problem: Problem) -> Estimate:
    """Constant rates, no after-spike effect."""
    rate_hz = problem.data.counts / (problem.data.n_bins * problem.data.bin_width)
    own = np.zeros((problem.data.n_targets, 1 + problem.trace_decay.size))
    own[:, 0] = problem.model.link.predictor(rate_hz)
    return Estimate(own, np.empty(0))


def leak_grid(problem: Problem) -> FloatArray:
    """Leak rates to try, 1/s: log-spaced time constants from about two bins up, or the one that is given."""
    if problem.model.leak_rate is not None:
        return np.array([problem.model.leak_rate])
    slowest, fastest = problem.leak_limits
    longest = min(LONGEST_START_S, 1.0 / slowest)
    shortest = min(2.0 * problem.data.bin_width, 0.5 * longest)
    n = 2 + int(np.ceil(LEAKS_PER_DECADE * np.log10(longest / shortest)))
    return np.clip(1.0 / np.geomspace(shortest, longest, n), slowest, fastest)


def null_blocks(problem: Problem) -> TimeBlocks:
    """About a hundred blocks of time, none shorter than a second."""
    return time_blocks(problem.grid, max(SHORTEST_BLOCK_S, problem.grid.duration_s / N_BLOCKS))


def fit_null(problem: Problem) -> Null:
    """Fit the model without coupling, then sweep it once for each leak rate of the grid."""
    problem.clock.stage = "rates without coupling"
    optimum = maximise(without_coupling(problem), first_estimate(problem), tolerance=1e-6)
    by_distance = problem.geometry.pairs_by_distance
    n_pairs = by_distance["n_pairs"].to_numpy()
    bands = equal_bands(problem.geometry.distinct_um, n_pairs, N_BANDS)
    band = bands.band(problem.geometry.distinct_um)
    distance = np.bincount(band, weights=problem.geometry.distinct_um * n_pairs) / np.bincount(band, weights=n_pairs)
    blocks = null_blocks(problem)
    problem.clock.stage = "looking for coupling"
    sweeps = tuple(null_sweep(problem, bands, float(leak), optimum.estimate, blocks) for leak in leak_grid(problem))
    return Null(problem, optimum, bands, distance, sweeps)


def null_sweep(problem: Problem, bands: Bands, leak: float, null: Estimate, blocks: TimeBlocks) -> NullSweep:
    """One sweep at the null estimate with coupling in these bands at this leak rate (1/s), by blocks of time."""
    here = with_bands(problem, bands, leak)
    estimate = Estimate(null.own, np.zeros(here.n_shared))
    sums = here.evaluate(estimate, blocks=blocks)
    local = penalised(here, estimate, sums)
    n_own = null.own.shape[1]
    elimination = eliminate(Arrow(local.information.own, sums.own_shared, sums.shared_shared))
    block_score = elimination.efficient_score(sums.score[..., :n_own], sums.score[..., n_own:].sum(axis=1))
    score = elimination.efficient_score(local.score_own, local.score_shared)
    # bands without a driven pair carry no information: leave them at zero
    inverse = np.linalg.pinv(elimination.schur, rcond=1e-10, hermitian=True)
    coupling = inverse @ score
    return NullSweep(leak, coupling, elimination.schur, block_score, 0.5 * float(score @ coupling))
