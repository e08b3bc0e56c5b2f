"""Stretches of time left out: how well a fit to the rest describes them, for each smoothing of a grid.

The sum is cut into folds, each one contiguous stretch of it. A fold is judged by a fit to the rest less a gap of five
time constants on either side, over which its own spikes still act on the rest and those of the rest on it. Fits are
warm-started from smoothing to smoothing; the leak and all other parameters are fitted anew in every fold.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.engine.evaluate import SweepData, TimeBlocks, evaluate
from kernelfit.fitting.maximise import Optimum, Weighting, evaluate_locally, maximise
from kernelfit.fitting.parabola import Penalty, reweighted
from kernelfit.fitting.penalties import weights_of, with_weights
from kernelfit.fitting.problem import Estimate, Problem

N_FOLDS = 5
GAP_TAUS = 5.0
WIDEST_GAP = 0.25  # of a fold: a time constant that long is no reason to leave the whole recording out
CLIMBED = 1e-3  # tolerance of a fold's fit: a thirtieth of a standard error moves its log-likelihood by nothing
TRAIN, TEST, GAP = 0, 1, 2


@dataclass(frozen=True, eq=False)
class HeldOut:
    """What stretches of time left out say about a smoothing.

    Parameters
    ----------
    smoothing : (L,) ascending
    log_likelihood : (F, L) of each fold under the fit to the rest, nats, -log y! left out
    gap_s : left out on either side of a fold, seconds
    """

    smoothing: FloatArray
    log_likelihood: FloatArray
    gap_s: float

    @property
    def total(self) -> FloatArray:
        """(L,) summed over the folds, nats."""
        return np.asarray(self.log_likelihood.sum(axis=0))

    @property
    def loss_std_error(self) -> FloatArray:
        """(L,) standard error of the difference of `total` from its highest value, from the spread over folds."""
        difference = self.log_likelihood - self.log_likelihood[:, [int(np.argmax(self.total))]]
        n = len(difference)
        return np.asarray(np.sqrt(n) * difference.std(axis=0, ddof=1)) if n > 1 else np.full(len(self.total), np.nan)


def fold_blocks(problem: Problem, fold: int, n_folds: int, gap_bins: int) -> TimeBlocks:
    """The sum as three blocks: what is fitted, the fold, and the gaps on either side of it.

    Gaps are counted along the bins of the sum; across a break between windows they only grow in seconds.
    """
    stretches = problem.data.stretches
    length = stretches[:, 1] - stretches[:, 0]
    ends = np.cumsum(length)
    starts = ends - length
    total = int(ends[-1])
    first, last = total * fold // n_folds, total * (fold + 1) // n_folds
    edges = [(0, first - gap_bins, TRAIN), (first - gap_bins, first, GAP), (first, last, TEST)]
    edges += [(last, last + gap_bins, GAP), (last + gap_bins, total, TRAIN)]
    rows = []
    for low, high, block in edges:
        low, high = max(low, 0), min(high, total)
        for (begin, _), start, end in zip(stretches.tolist(), starts.tolist(), ends.tolist(), strict=True):
            a, b = max(low, start), min(high, end)
            if a < b:
                rows.append((begin + a - start, begin + b - start, block))
    cut = np.array(sorted(rows), dtype=np.int64)
    n_bins = np.bincount(cut[:, 2], weights=cut[:, 1] - cut[:, 0], minlength=3).astype(np.int64)
    return TimeBlocks(cut, n_bins)


def held_out(
    problem: Problem, optimum: Optimum, penalty: Penalty, smoothing: FloatArray, *, n_folds: int = N_FOLDS
) -> HeldOut:
    """Log-likelihood of each fold under fits to the rest, for each smoothing.

    Parameters
    ----------
    problem, optimum : near the top of the whole recording, where fits start from
    penalty : whose weight the smoothing is
    smoothing : (L,) ascending
    """
    tau_bins = 1.0 / (problem.leak(optimum.estimate.shared) * problem.data.bin_width)
    gap_bins = int(np.ceil(min(GAP_TAUS * tau_bins, WIDEST_GAP * problem.data.n_bins / n_folds)))
    held = ~optimum.free & (optimum.at_bound == 0)
    now = weights_of(problem, (penalty,))
    log_likelihood = np.empty((n_folds, smoothing.size))
    for fold in range(n_folds):
        blocks = fold_blocks(problem, fold, n_folds, gap_bins)
        weighting = Weighting(blocks, np.array([1.0, 0.0, 0.0]))
        # a unit whose spikes all lie in the fold has no baseline outside of it, and nothing to be judged by
        seen = _fires_in(problem, blocks, TRAIN)
        part = replace(problem, data=SweepData.from_grid(problem.grid, problem.data.targets[seen]))
        local = evaluate_locally(part, Estimate(optimum.estimate.own[seen], optimum.estimate.shared), weighting)
        weight = now
        for k in range(smoothing.size - 1, -1, -1):  # from smooth to rough: what is smooth is near its neighbours
            here = with_weights(part, (penalty,), smoothing[[k]])
            local = reweighted(local, (penalty,), smoothing[[k]] - weight)
            weight = smoothing[[k]]
            local = maximise(here, local, held=held, tolerance=CLIMBED, weighting=weighting).local
            log_likelihood[fold, k] = _of_fold(here, local.estimate, blocks)
    return HeldOut(smoothing, log_likelihood, gap_bins * problem.data.bin_width)


def best_held_out(found: HeldOut) -> tuple[float, int]:
    """The smoothing of highest log-likelihood, a parabola laid through the three highest points of the log grid.

    The second value is -1 or 1 where the highest point is the lowest or the highest smoothing of the grid, else 0.
    """
    total, x = found.total, np.log(found.smoothing)
    k = int(np.argmax(total))
    if k in (0, total.size - 1):
        return float(found.smoothing[k]), -1 if k == 0 else 1
    a, b, _ = np.polyfit(x[k - 1 : k + 2] - x[k], total[k - 1 : k + 2], 2)
    return float(np.exp(x[k] - 0.5 * b / a)) if a < 0 else float(found.smoothing[k]), 0


def _of_fold(problem: Problem, estimate: Estimate, blocks: TimeBlocks) -> float:
    sums = evaluate(problem.data, problem.point(estimate), derivatives=False, blocks=blocks, threads=problem.threads)
    problem.clock.tick()
    return float(sums.log_likelihood[TEST].sum())


def _fires_in(problem: Problem, blocks: TimeBlocks, which: int) -> BoolArray:
    """(n_targets,) True for units with a spike in that block."""
    grid = problem.grid
    fires = np.zeros(grid.n_units, dtype=bool)
    for start, stop in blocks.stretches[blocks.stretches[:, 2] == which][:, :2].tolist():
        first, last = np.searchsorted(grid.event_bin, [start, stop])
        fires[grid.event_unit[first:last]] = True
    return fires[problem.data.targets]
