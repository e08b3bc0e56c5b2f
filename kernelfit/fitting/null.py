"""The model without coupling, and what a little coupling would add to it at each leak rate.

One fit of baselines and after-spike effects, then one sweep for each leak on a coarse grid. Each sweep gives the
score of coupling in bands of distance: a one-step estimate of J(d), where every family starts from, and by blocks of
time, the test of any coupling at all.

Where pairs on one site have a coefficient of their own, it is estimated at each leak before the bands are looked at,
and taken out of their scores: bands then tell what coupling across distance adds to it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.engine.evaluate import TimeBlocks
from kernelfit.engine.time_blocks import time_blocks
from kernelfit.fitting.arrow import Arrow, eliminate, solve_leniently
from kernelfit.fitting.maximise import Optimum, maximise, penalised
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.kernels.bands import Bands, equal_bands

N_BANDS = 8
LEAKS_PER_DECADE = 3
LONGEST_START_S = 10.0
N_BLOCKS = 100
SHORTEST_BLOCK_S = 1.0


@dataclass(frozen=True, eq=False)
class SameSiteNull:
    """The model with a same-site coefficient at one leak and no coupling across distance. G blocks of time.

    Parameters
    ----------
    estimate : own parameters, and the coefficient (1,)
    gain : log-likelihood above the model without any coupling
    block_score, information : (G, 1), (1, 1) of the coefficient, where it is zero
    """

    estimate: Estimate
    gain: float
    block_score: FloatArray
    information: FloatArray

    @property
    def coefficient(self) -> float:
        """Effect per spike on other units of the same site."""
        return float(self.estimate.shared[0])


@dataclass(frozen=True, eq=False)
class NullSweep:
    """What a sweep at the null fit says about coupling with one leak rate. K bands, G blocks of time.

    Parameters
    ----------
    leak : 1/s
    coupling : (K,) one-step estimate of J in each band
    information : (K, K) efficient information on it
    block_score : (G, K) efficient score by block of time
    gain : log-likelihood a quadratic promises, on top of what a same-site coefficient gained
    same_site : the fit with a same-site coefficient and no coupling across distance; None without that coefficient
    """

    leak: float
    coupling: FloatArray
    information: FloatArray
    block_score: FloatArray
    gain: float
    same_site: SameSiteNull | None = None


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
    geometry = replace(problem.geometry, own_site=np.zeros_like(problem.geometry.own_site))
    return replace(with_bands(problem, Bands(empty=True), 1.0), geometry=geometry)


def with_bands(problem: Problem, bands: Bands, leak: float) -> Problem:
    """The same data, own terms and same-site coefficient with coupling in bands at a fixed leak."""
    return replace(problem, kernel=bands, model=replace(problem.model, leak_rate=leak))


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
    sweeps = []
    for leak in leak_grid(problem):
        same_site = same_site_null(problem, float(leak), optimum, blocks) if problem.has_same_site else None
        sweeps.append(null_sweep(problem, bands, float(leak), optimum.estimate, blocks, same_site))
    return Null(problem, optimum, bands, distance, tuple(sweeps))


def same_site_null(problem: Problem, leak: float, null: Optimum, blocks: TimeBlocks) -> SameSiteNull:
    """Climb from the fit without coupling (`null`) to the same-site coefficient at this leak rate (1/s)."""
    here = with_bands(problem, Bands(empty=True), leak)
    start = Estimate(null.estimate.own, np.zeros(1))
    sums = here.evaluate(start, blocks=blocks)
    local = penalised(here, start, sums)
    n_own = start.own.shape[1]
    elimination = eliminate(local.information)
    block_score = elimination.efficient_score(sums.score[..., :n_own], sums.score[..., n_own:].sum(axis=1))
    optimum = maximise(here, local, tolerance=1e-6)
    gain = optimum.local.objective - null.local.objective
    return SameSiteNull(optimum.estimate, gain, block_score, elimination.schur)


def null_sweep(
    problem: Problem,
    bands: Bands,
    leak: float,
    null: Estimate,
    blocks: TimeBlocks,
    same_site: SameSiteNull | None = None,
) -> NullSweep:
    """One sweep without coupling across distance, with coupling in these bands at this leak rate (1/s), by blocks.

    Parameters
    ----------
    problem, bands, leak, blocks : what is looked for, and how scores are kept apart
    null : the fit without coupling, used where there is no same-site coefficient
    same_site : the fit with it at this leak, where there is one
    """
    here = with_bands(problem, bands, leak)
    n_bands = here.n_kernel
    own = null.own if same_site is None else same_site.estimate.own
    rest = np.empty(0) if same_site is None else same_site.estimate.shared
    estimate = Estimate(own, np.concatenate([np.zeros(n_bands), rest]))
    sums = here.evaluate(estimate, blocks=blocks)
    local = penalised(here, estimate, sums)
    n_own = own.shape[1]
    elimination = eliminate(Arrow(local.information.own, sums.own_shared, sums.shared_shared))
    block_score = elimination.efficient_score(sums.score[..., :n_own], sums.score[..., n_own:].sum(axis=1))
    score = elimination.efficient_score(local.score_own, local.score_shared)
    schur = elimination.schur
    if same_site is not None:  # what bands have in common with the same-site coefficient is that one's
        share = solve_leniently(schur[n_bands:, n_bands:], schur[n_bands:, :n_bands])
        block_score = block_score[:, :n_bands] - block_score[:, n_bands:] @ share
        score = score[:n_bands] - score[n_bands:] @ share
        schur = schur[:n_bands, :n_bands] - schur[:n_bands, n_bands:] @ share
    # bands without a driven pair carry no information: leave them at zero
    inverse = np.linalg.pinv(schur, rcond=1e-10, hermitian=True)
    coupling = inverse @ score
    gain = 0.5 * float(score @ coupling) + (0.0 if same_site is None else same_site.gain)
    return NullSweep(leak, coupling, schur, block_score, gain, same_site)
