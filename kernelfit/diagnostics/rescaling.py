"""Time rescaling: spike trains on a clock on which a right model makes them Poisson with rate 1.

On the clock that runs with the expected count, the spikes of a right model are a unit-rate Poisson process
(Brown, Barbieri, Ventura, Kass & Frank 2002, Neural Comput. 14, 325-346). Bins spoil that: every spike
would sit on a bin edge. The correction puts each spike back at random inside its bin (Haslinger, Pipa &
Brown 2010, Neural Comput. 22, 2477-2506), here also for bins that hold several spikes: given a Poisson
count in a bin, the events are uniform over the bin's expected count, so sorted uniforms make the gaps
exactly exponential.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.engine.compensator import Compensator
from kernelfit.errors import ArgumentError


@dataclass(frozen=True, eq=False, slots=True)
class RescaledTrain:
    """One process on its own clock.

    Parameters
    ----------
    times : (n_spikes,) sorted, in expected counts since the start of the observed time
    total : expected count over the whole observed time
    """

    times: FloatArray
    total: float

    @property
    def n_spikes(self) -> int:
        """Spikes in the sum."""
        return int(self.times.size)

    @property
    def gaps(self) -> FloatArray:
        """(n_spikes - 1,) gaps between successive spikes, in time order.

        The stretch before the first spike and the one after the last are not between spikes and are left
        out. Gaps that span a pause between windows stay: leaving those out would favour short ones.
        """
        return np.diff(self.times)


def place_events(before: FloatArray, within: FloatArray, count: IntArray, rng: np.random.Generator) -> FloatArray:
    """Times of single events on the rescaled clock, spread at random inside their bins.

    Parameters
    ----------
    before : (n_rows,) expected count up to the start of each bin, ascending
    within : (n_rows,) expected count in the bin
    count : (n_rows,) events in the bin
    rng : source of one uniform number per event

    Returns
    -------
    (sum of count,) sorted times, in expected counts
    """
    row = np.repeat(np.arange(count.size), count)
    times = before[row] + within[row] * rng.random(row.size)
    return np.sort(times)  # bins do not overlap, so this sorts within bins


def rescale(compensator: Compensator, *, seed: int) -> tuple[tuple[RescaledTrain, ...], RescaledTrain]:
    """Every unit and the pooled process on their own clocks.

    Every process draws from a generator of its own, spawned from the seed: the pooled process first, then
    the units in order. A unit's numbers therefore depend on the seed, its place and its own rows, not on
    other units' spikes.

    Parameters
    ----------
    compensator : expected counts at the bins that hold spikes
    seed : of the random places inside the bins

    Returns
    -------
    units : one `RescaledTrain` per unit, in order; without times for a unit without spikes
    pooled : all units as one process, which sees missing coupling where single units do not (Gerhard,
        Haslinger & Pipa 2011, Neural Comput. 23, 1452-1483)
    """
    pooled_rng, *unit_rngs = np.random.default_rng(seed).spawn(compensator.n_units + 1)
    units = []
    for k, rng in enumerate(unit_rngs):
        rows = compensator.rows_of(k)
        times = place_events(compensator.before[rows], compensator.within[rows], compensator.count[rows], rng)
        units.append(RescaledTrain(times=times, total=float(compensator.total[k])))
    pooled = RescaledTrain(
        times=place_events(compensator.pooled_before, compensator.pooled_within, compensator.pooled_count, pooled_rng),
        total=compensator.pooled_total,
    )
    return tuple(units), pooled


def uniform_scale(gaps: FloatArray) -> FloatArray:
    """z = 1 - exp(-gap): uniform on (0, 1) where the gaps are exponential with mean 1. Shape as `gaps`."""
    z: FloatArray = -np.expm1(-gaps)
    return z


def bernoulli_rescale(probability: FloatArray, spiked: BoolArray, draws: FloatArray) -> FloatArray:
    """Rescaled intervals of a train with at most one spike per bin; exponential, mean 1, under the truth.

    Silent bins add q = -log(1 - p), the bin of the spike adds -log(1 - r p) with r uniform (Haslinger, Pipa
    & Brown 2010). For counts clipped to 0 and 1 use p = 1 - exp(-expected count). Counts that are not
    clipped need `place_events`.

    Parameters
    ----------
    probability : (n_bins,) chance of a spike in each bin, at least 0 and below 1
    spiked : (n_bins,) whether the bin holds a spike
    draws : (number of spikes,) r, one uniform number in [0, 1) per spike

    Returns
    -------
    (number of spikes,) intervals; the first runs from the start of the bins, which is a whole interval only
    where a spike came just before them

    Raises
    ------
    ArgumentError : shapes that do not fit, or a probability outside [0, 1)
    """
    if probability.shape != spiked.shape or draws.size != np.count_nonzero(spiked):
        raise ArgumentError(
            f"{probability.size} probabilities, {spiked.size} bins and {draws.size} draws for "
            f"{np.count_nonzero(spiked)} spikes do not fit. Give one probability per bin, one draw per spike."
        )
    if not np.all((probability >= 0) & (probability < 1)):
        raise ArgumentError("A probability lies outside [0, 1). For clipped counts, use 1 - exp(-expected count).")
    at = np.flatnonzero(spiked)
    elapsed = np.concatenate([[0.0], np.cumsum(-np.log1p(-probability))])  # at the edges of the bins
    start = np.concatenate([[0.0], elapsed[at + 1]])[: at.size]  # the end of the bin of the spike before
    intervals: FloatArray = elapsed[at] - start - np.log1p(-draws * probability[at])
    return intervals
