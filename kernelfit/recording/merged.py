"""All trains of a recording as one sorted train, and the fast walk over its close pairs of spikes.

Spike pairs at short lags are the raw material of every look at synchrony. In the merged train the partners of
a spike within some lag are its next few neighbours, so that comparing the train with itself shifted by 1, 2,
3... places finds all of them in a handful of vectorised passes, whatever the number of units.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.recording.recording import Recording

TIME_TOLERANCE_S = 1e-7  # times written on a grid of sampling steps differ from it by rounding only

MOST_PAIRS = 50_000_000  # pairs of spikes looked at one by one; some seconds
_GOLDEN = 0.6180339887498949

# Rates at which recordings are commonly sampled, and decimal steps that times are rounded to, 1/s.
_SAMPLING_RATES_HZ = (
    1.0,
    10.0,
    100.0,
    1e3,
    2e3,
    5e3,
    1e4,
    1.25e4,
    1.6e4,
    2e4,
    2.4e4,
    2.5e4,
    3e4,
    3.2e4,
    4e4,
    5e4,
    1e5,
)
_STEP_SAMPLE = 20_000
_STEP_MIN_SPIKES = 20
_STEP_MISFIT = 0.02  # of a step; random times pass by chance with probability 0.04 per spike


def merge_intervals(bounds: FloatArray) -> FloatArray:
    """(n, 2) stretches, any order -> sorted (m, 2) stretches that neither overlap nor touch."""
    if bounds.shape[0] == 0:
        return np.empty((0, 2))
    ordered = bounds[np.argsort(bounds[:, 0], kind="stable")]
    reach = np.maximum.accumulate(ordered[:, 1])
    first = np.flatnonzero(np.r_[True, ordered[1:, 0] > reach[:-1]])
    return np.column_stack([ordered[first, 0], reach[np.r_[first[1:] - 1, len(reach) - 1]]])


def inside(time_s: FloatArray, bounds: FloatArray) -> BoolArray:
    """(n,) True where a time lies in one of the sorted, separate stretches [start, stop)."""
    k = np.searchsorted(bounds[:, 0], time_s, side="right") - 1
    if bounds.shape[0] == 0:
        return np.zeros(time_s.shape, dtype=bool)
    return np.asarray((k >= 0) & (time_s < bounds[np.maximum(k, 0), 1]), dtype=bool)


def remove_intervals(windows: FloatArray, holes: FloatArray) -> FloatArray:
    """What of the sorted windows is left outside the sorted, separate holes: (m, 2)."""
    left = []
    for start, stop in windows:
        near = holes[(holes[:, 1] > start) & (holes[:, 0] < stop)]
        edges = np.concatenate([[start], near.ravel(), [stop]]).reshape(-1, 2)
        left.append(edges[edges[:, 1] > edges[:, 0]])
    return np.concatenate(left) if left else np.empty((0, 2))


@dataclass(frozen=True, eq=False)
class MergedTrain:
    """Spikes of all units in the windows and outside the exclusions, sorted by time.

    Parameters
    ----------
    time_s : (n_spikes,) seconds, sorted
    unit : (n_spikes,) index of the unit
    window : (n_spikes,) index of the window
    n_units : units of the recording, silent ones included
    windows : (n_windows, 2) seconds
    observed : (n_stretches, 2) the windows without the exclusions, seconds
    """

    time_s: FloatArray
    unit: IntArray
    window: IntArray
    n_units: int
    windows: FloatArray
    observed: FloatArray

    @property
    def n_spikes(self) -> int:
        """Spikes of all units."""
        return int(self.time_s.size)

    @property
    def duration_s(self) -> float:
        """Observed time, exclusions subtracted, seconds."""
        return float(np.sum(self.observed[:, 1] - self.observed[:, 0]))

    def counts(self) -> IntArray:
        """(n_units,) spikes of each unit."""
        return np.bincount(self.unit, minlength=self.n_units).astype(np.int64)

    def without(self, bounds: FloatArray) -> MergedTrain:
        """The same train with further stretches left out."""
        holes = merge_intervals(bounds)
        keep = ~inside(self.time_s, holes)
        return MergedTrain(
            time_s=self.time_s[keep],
            unit=self.unit[keep],
            window=self.window[keep],
            n_units=self.n_units,
            windows=self.windows,
            observed=remove_intervals(self.observed, holes),
        )

    def observed_time(self) -> FloatArray:
        """(n_spikes,) time of each spike on a clock that runs in the observed stretches only, from 0 s."""
        lengths = self.observed[:, 1] - self.observed[:, 0]
        before = np.concatenate([[0.0], np.cumsum(lengths)])
        k = np.clip(np.searchsorted(self.observed[:, 0], self.time_s, side="right") - 1, 0, None)
        if self.observed.shape[0] == 0:
            return np.zeros_like(self.time_s)
        return np.asarray(np.minimum(before[k] + self.time_s - self.observed[k, 0], before[k + 1]))

    def clock_time(self, observed_s: FloatArray) -> FloatArray:
        """The recording's own time of moments on the clock of `observed_time`, seconds."""
        lengths = self.observed[:, 1] - self.observed[:, 0]
        before = np.concatenate([[0.0], np.cumsum(lengths)])
        k = np.clip(np.searchsorted(before, observed_s, side="right") - 1, 0, len(lengths) - 1)
        return np.asarray(self.observed[k, 0] + observed_s - before[k], dtype=np.float64)

    def overlap_s(self, lag_s: FloatArray) -> FloatArray:
        """Time during which both ends of a pair at each lag are observed in one window, seconds."""
        lengths = self.windows[:, 1] - self.windows[:, 0]
        raw = np.maximum(lengths[None, :] - np.ravel(lag_s)[:, None], 0.0).sum(axis=1)
        # Exclusions are short beside the windows: they take the same share from every lag.
        share = self.duration_s / max(float(lengths.sum()), 1e-300)
        return np.asarray(raw * share, dtype=np.float64).reshape(np.shape(lag_s))


def merge_trains(recording: Recording) -> MergedTrain:
    """Spikes of `recording` inside its windows and outside its exclusions as one sorted train."""
    holes = merge_intervals(np.array(recording.exclusion_bounds))
    windows = np.array(recording.window_bounds)
    time_s, unit = sort_trains(recording.trains)
    keep = inside(time_s, windows) & ~inside(time_s, holes)
    time_s, unit = time_s[keep], unit[keep]
    return MergedTrain(
        time_s=time_s,
        unit=unit,
        window=np.searchsorted(windows[:, 0], time_s, side="right") - 1,
        n_units=recording.n_units,
        windows=windows,
        observed=remove_intervals(windows, holes),
    )


def sort_trains(trains: Sequence[FloatArray]) -> tuple[FloatArray, IntArray]:
    """Times and unit indices of all trains, sorted by time, ties in the order of the units."""
    unit = np.repeat(np.arange(len(trains)), [t.size for t in trains])
    time_s = np.concatenate(list(trains)) if len(trains) else np.empty(0)
    order = np.argsort(time_s, kind="stable")
    return time_s[order], unit[order]


def pair_sample(train: MergedTrain, max_lag_s: float) -> float:
    """Share of the spikes whose pairs have to be looked at so that no more than `MOST_PAIRS` are, 1 for all."""
    later = np.searchsorted(train.time_s, train.time_s + max_lag_s)
    n_pairs = int(np.sum(later - np.arange(train.n_spikes)))
    return min(1.0, MOST_PAIRS / max(n_pairs, 1))


def close_pairs(
    train: MergedTrain, max_lag_s: float, share: float = 1.0
) -> Iterator[tuple[IntArray, IntArray, FloatArray]]:
    """Every pair of spikes of different units less than `max_lag_s` apart in one window, each pair once.

    Parameters
    ----------
    train : spikes of all units
    max_lag_s : seconds, not included
    share : of the spikes, as the earlier one of a pair. Which ones follows from multiples of the golden section: spread
        evenly, in step with nothing

    Yields
    ------
    first, second : (m,) unit indices, `first` fired first (ties: the lower index)
    lag_s : (m,) seconds, at least 0
    """
    earlier = np.arange(train.n_spikes)
    if share < 1.0:
        earlier = earlier[np.mod(earlier * _GOLDEN, 1.0) < share]
    shift = 0
    while earlier.size:
        shift += 1
        earlier = earlier[earlier + shift < train.n_spikes]
        lag = train.time_s[earlier + shift] - train.time_s[earlier]
        near = (lag < max_lag_s - TIME_TOLERANCE_S) & (train.window[earlier] == train.window[earlier + shift])
        earlier, lag = earlier[near], lag[near]
        first, second = train.unit[earlier], train.unit[earlier + shift]
        cross = first != second
        yield first[cross], second[cross], lag[cross]


def time_step(train: MergedTrain) -> float | None:
    """Step of the time grid that all spike times lie on, seconds; None without one or with too few spikes.

    The coarsest of the common steps that fits is returned. Looks at 20,000 spikes spread over the recording.
    """
    if train.n_spikes < _STEP_MIN_SPIKES:
        return None
    sample = train.time_s[:: max(train.n_spikes // _STEP_SAMPLE, 1)]
    if np.unique(sample).size < _STEP_MIN_SPIKES:
        return None
    for rate_hz in _SAMPLING_RATES_HZ:
        place = sample * rate_hz
        if np.all(np.abs(place - np.rint(place)) < _STEP_MISFIT):
            return 1.0 / rate_hz
    return None
