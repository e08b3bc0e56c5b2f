"""The marginal likelihood of penalties' weights on a parabola: the best weights, and how likely others are.

References
----------
Wood (2011), Journal of the Royal Statistical Society B 73, 3-36; Wood and Fasiolo (2017), Biometrics 73, 1071-1081.
What not knowing a weight adds to the spread: in the manner of Wood, Pya and Saefken (2016), Journal of the American
Statistical Association 111, 1548-1563, summed over the weights instead of to first order, so that it holds at a bound.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.fitting.covariance import Uncertainty
from kernelfit.fitting.parabola import Parabola, Peak, Penalty

UPDATES = 300
FLAT = 1e-5  # slope of the log marginal likelihood by a log weight
LONGEST_STRETCH = 16.0
GRID_POINTS = 25
LIKELY_POINTS = 41
LOG_STEP = 0.05  # of a log weight, for its curvature


def best_weights(
    parabola: Parabola, penalties: tuple[Penalty, ...], start: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Weights of highest marginal likelihood on a parabola, and their bounds (n_penalties, 2).

    Generalised Fellner-Schall: w <- w (rank - w tr(V R)) / (w x'Rx), which never lowers the marginal likelihood of a
    parabola; steps that keep their direction are stretched, and taken back where they lower it. The smoothing of a
    kernel alone starts from the best of a grid, as its marginal likelihood may have two tops. The ridge does not: far
    from here the parabola says little of coefficients that a unit with few spikes would let run off.
    """
    bounds = np.array([parabola.limits(k, penalties, start) for k in range(len(penalties))])
    low, high = np.log(bounds).T
    x = np.clip(np.log(start), low, high)
    if len(penalties) == 1 and penalties[0].term == "kernel":
        grid = np.linspace(low[0], high[0], GRID_POINTS)
        heights = [parabola.peak(penalties, np.exp([g])).log_marginal for g in grid]
        x = grid[[int(np.argmax(heights))]]
    peak, stretch = parabola.peak(penalties, np.exp(x)), 1.0
    for _ in range(UPDATES):
        inside = ~(((x <= low) & (peak.slope < 0)) | ((x >= high) & (peak.slope > 0)))
        if not np.any(np.abs(peak.slope[inside]) > FLAT):
            break
        tiny = np.finfo(float).tiny
        step = np.log(np.maximum(peak.free_directions, tiny)) - np.log(np.maximum(peak.costs, tiny))
        there = np.clip(x + stretch * step, low, high)
        candidate = parabola.peak(penalties, np.exp(there))
        if candidate.log_marginal < peak.log_marginal and stretch > 1.0:
            stretch = 1.0
            continue
        x, peak, stretch = there, candidate, min(2.0 * stretch, LONGEST_STRETCH)
    return np.exp(x), bounds


@dataclass(frozen=True, eq=False)
class Likely:
    """Weights of one penalty over its whole range, as likely as the marginal likelihood makes them.

    weight (m,) ascending; share (m,) of the probability; peaks of the parabola there.
    """

    weight: FloatArray
    share: FloatArray
    peaks: tuple[Peak, ...]

    def quantile(self, level: float) -> float:
        """The weight below which so much of the probability lies."""
        reached = np.cumsum(self.share) - 0.5 * self.share
        return float(np.exp(np.interp(level, reached, np.log(self.weight))))


def likely_weights(parabola: Parabola, penalties: tuple[Penalty, ...], weights: FloatArray, k: int) -> Likely:
    """How likely weights of penalty k are, the others as they are. No sweep.

    Before the data every number of free directions is as likely as any other: even in the log weight there would be no
    end to the weights that are as good as endless.
    """
    low, high = parabola.limits(k, penalties, weights)
    x = np.linspace(np.log(low), np.log(high), LIKELY_POINTS)
    peaks = []
    for value in np.exp(x):
        here = weights.copy()
        here[k] = value
        peaks.append(parabola.peak(penalties, here))
    height = np.array([peak.log_marginal for peak in peaks])
    free = np.array([peak.free_directions[k] for peak in peaks])
    share = np.exp(height - height.max())
    if high > low:
        share *= np.abs(np.gradient(free, x))
    return Likely(np.exp(x), share / share.sum(), tuple(peaks))


def likely_range(
    parabola: Parabola, penalties: tuple[Penalty, ...], weights: FloatArray, k: int, limits: FloatArray
) -> tuple[float, float]:
    """Weights of penalty k within 1.96 standard errors of the log weight, by the curvature here; or its limits."""
    slopes = []
    for step in (-LOG_STEP, LOG_STEP):
        here = weights.copy()
        here[k] *= np.exp(step)
        slopes.append(parabola.peak(penalties, here).slope[k])
    curvature = (slopes[0] - slopes[1]) / (2.0 * LOG_STEP)
    low, high = limits
    if curvature <= 0.0:
        return float(low), float(high)
    far = np.exp(1.96 / np.sqrt(curvature))
    return float(max(weights[k] / far, low)), float(min(weights[k] * far, high))


def added_spread(parabola: Parabola, penalties: tuple[Penalty, ...], weights: FloatArray, likely: Likely) -> FloatArray:
    """(Q, Q) what not knowing a weight adds to the covariance of the shared parameters under the weight chosen.

    The mean over likely weights of covariance and squared distance from the estimate, less the covariance at the
    estimate; directions in which that is less than nothing add nothing.
    """
    here, free = parabola.peak(penalties, weights), parabola.free
    moved = np.array([(peak.shared - here.shared)[free] for peak in likely.peaks])
    mean = np.tensordot(likely.share, [peak.covariance for peak in likely.peaks], axes=1)
    scale = np.sqrt(np.diag(here.covariance))
    added = (mean + (likely.share[:, None] * moved).T @ moved - here.covariance) / np.outer(scale, scale)
    value, vector = np.linalg.eigh(0.5 * (added + added.T))
    spread = np.zeros((free.size, free.size))
    spread[np.ix_(free, free)] = (vector * np.maximum(value, 0.0)) @ vector.T * np.outer(scale, scale)
    return spread


def widened(spread: Uncertainty, added: FloatArray) -> Uncertainty:
    """Covariances of the shared parameters with what not knowing the weights adds to each kind."""
    jackknife = spread.shared_jackknife
    return replace(
        spread,
        shared_model=spread.shared_model + added,
        shared_robust=spread.shared_robust + added,
        shared_jackknife=None if jackknife is None else jackknife + added,
    )
