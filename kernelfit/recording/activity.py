"""How activity runs over the recording: intervals, blocks of time, gaps, population events."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy import stats

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.recording.merged import TIME_TOLERANCE_S, MergedTrain

SHORT_S, MEDIUM_S = 0.001, 0.002
BLOCK_S = 300.0
BLOCK_SPIKES = 100  # on average at least; blocks of fewer differ by chance alone
MIN_BLOCKS = 4
GAP_S = 10.0
PAUSE_TIMES = 3.0
EVENT_TIMES_MEAN = 2.0  # a second is part of an event if it holds more than twice the mean
EVENT_PAUSE_S = 3
BUSY_SHARE_OF_TIME = 0.10
MAX_SECONDS = 10_000_000  # longer "recordings" have another unit of time


@dataclass(frozen=True, eq=False)
class Intervals:
    """Intervals between successive spikes of one unit inside one window, over all units.

    Parameters
    ----------
    length_s : (n,) seconds, in the order of the units
    unit : (n,) index of the unit
    n_per_unit, n_short, n_medium : (n_units,) intervals in all, below 1 ms, below 2 ms
    shortest_s : (n_units,) seconds, NaN without an interval
    """

    length_s: FloatArray
    unit: IntArray
    n_per_unit: IntArray
    n_short: IntArray
    n_medium: IntArray
    shortest_s: FloatArray

    @property
    def share_short(self) -> FloatArray:
        """(n_units,) share of intervals below 1 ms, NaN without an interval."""
        return self.n_short / np.where(self.n_per_unit > 0, self.n_per_unit, np.nan)

    @property
    def share_medium(self) -> FloatArray:
        """(n_units,) share of intervals below 2 ms, NaN without an interval."""
        return self.n_medium / np.where(self.n_per_unit > 0, self.n_per_unit, np.nan)


def intervals(train: MergedTrain) -> Intervals:
    """Intervals within units and windows; none across an exclusion, where spikes may be missing."""
    order = np.argsort(train.unit, kind="stable")
    time_s, unit = train.time_s[order], train.unit[order]
    stretch = np.searchsorted(train.observed[:, 0], time_s, side="right")
    same = (np.diff(unit) == 0) & (np.diff(stretch) == 0)
    length, owner = np.diff(time_s)[same], unit[1:][same]
    n = train.n_units
    shortest = np.full(n, np.inf)
    np.minimum.at(shortest, owner, length)
    return Intervals(
        length_s=length,
        unit=owner,
        n_per_unit=np.bincount(owner, minlength=n).astype(np.int64),
        n_short=np.bincount(owner[length < SHORT_S - TIME_TOLERANCE_S], minlength=n).astype(np.int64),
        n_medium=np.bincount(owner[length < MEDIUM_S - TIME_TOLERANCE_S], minlength=n).astype(np.int64),
        shortest_s=np.where(np.isfinite(shortest), shortest, np.nan),
    )


@dataclass(frozen=True, eq=False)
class Blocks:
    """Activity in equal blocks of observed time, five minutes each where that gives spikes enough.

    Parameters
    ----------
    table : start_s, stop_s (the recording's clock), n_spikes, rate_hz (mean over units), n_active_units
    counts : (n_blocks, n_units) spikes
    length_s : observed time in a block, seconds
    change_p : p-value of a Kruskal-Wallis test that counts in tenths of blocks come from one distribution; 1
        where it cannot be made
    """

    table: pd.DataFrame
    counts: IntArray
    length_s: float
    change_p: float

    @property
    def factor(self) -> float:
        """Busiest block over quietest; infinite where a block is empty, NaN where all are."""
        rates = self.table["n_spikes"].to_numpy(dtype=np.float64)
        if rates.max(initial=0.0) == 0.0:
            return float("nan")
        return float(rates.max() / rates.min()) if rates.min() > 0 else float("inf")


def blocks(train: MergedTrain) -> Blocks:
    """Rates over blocks of time; windows and the stretches around exclusions are joined end to end."""
    total = train.duration_s
    n_blocks = max(MIN_BLOCKS, min(round(total / BLOCK_S), train.n_spikes // BLOCK_SPIKES))
    length = total / n_blocks
    place = np.minimum((train.observed_time() / max(length, 1e-300)).astype(np.int64), n_blocks - 1)
    counts = np.bincount(place * train.n_units + train.unit, minlength=n_blocks * train.n_units)
    counts = counts.reshape(n_blocks, train.n_units).astype(np.int64)
    edges = length * np.arange(n_blocks + 1, dtype=np.float64)
    n_spikes = counts.sum(axis=1)
    table = pd.DataFrame(
        {
            "start_s": train.clock_time(edges[:-1]),
            "stop_s": train.clock_time(edges[1:] - 1e-9),
            "n_spikes": n_spikes,
            "rate_hz": n_spikes / train.n_units / max(length, 1e-300),
            "n_active_units": (counts > 0).sum(axis=1),
        }
    )
    tenth = np.minimum((train.observed_time() / max(length, 1e-300) * 10).astype(np.int64), 10 * n_blocks - 1)
    pieces = np.bincount(tenth, minlength=10 * n_blocks).reshape(n_blocks, 10)
    change_p = 1.0 if np.ptp(pieces) == 0 else float(stats.kruskal(*pieces).pvalue)
    return Blocks(table=table.round({"start_s": 6, "stop_s": 6}), counts=counts, length_s=length, change_p=change_p)


def come_and_go(activity: Blocks, *, min_spikes: int = 100) -> BoolArray:
    """(n_units,) units with many spikes and none in the first, or in the last, third of the blocks."""
    n_blocks = len(activity.counts)
    if n_blocks < MIN_BLOCKS:
        return np.zeros(activity.counts.shape[1], dtype=bool)
    active = activity.counts > 0
    third = int(np.ceil(n_blocks / 3))
    absent = ~active[:third].any(axis=0) | ~active[-third:].any(axis=0)
    return np.asarray(absent & (activity.counts.sum(axis=0) >= min_spikes))


def gaps(train: MergedTrain) -> pd.DataFrame:
    """start_s, stop_s, length_s of stretches of 10 s and more in which no unit fires, longest first."""
    starts, stops = [], []
    for edges in _edges(train):
        long = np.flatnonzero(np.diff(edges) >= GAP_S)
        starts.append(edges[long])
        stops.append(edges[long + 1])
    table = pd.DataFrame(
        {
            "start_s": np.concatenate(starts) if starts else np.empty(0),
            "stop_s": np.concatenate(stops) if stops else np.empty(0),
        }
    )
    table["length_s"] = table["stop_s"] - table["start_s"]
    return table.sort_values("length_s", ascending=False, kind="stable", ignore_index=True)


def paused(gap_lengths_s: FloatArray, longest_break_s: float) -> bool:
    """Whether acquisition may have stopped: a step in the lengths of silences, which activity alone does not make.

    Parameters
    ----------
    gap_lengths_s : of `gaps`, longest first, seconds
    longest_break_s : of `longest_break`, seconds
    """
    shorter = np.append(gap_lengths_s[1:], longest_break_s)
    return bool(np.any(gap_lengths_s > PAUSE_TIMES * shorter)) if gap_lengths_s.size else False


def longest_break(train: MergedTrain) -> float:
    """Longest stretch below 10 s in which no unit fires, seconds; 0 where there is none."""
    lengths = np.concatenate([np.zeros(1), *(np.diff(edges) for edges in _edges(train))])
    return float(lengths[lengths < GAP_S].max())


def _edges(train: MergedTrain) -> Iterator[FloatArray]:
    """For each observed stretch its start, its spikes and its stop, seconds."""
    for start, stop in train.observed:
        low, high = np.searchsorted(train.time_s, [start, stop])
        yield np.concatenate([[start], train.time_s[low:high], [stop]])


@dataclass(frozen=True, slots=True)
class Burstiness:
    """How unevenly spikes lie in time.

    Parameters
    ----------
    busiest_share : share of the spikes in the busiest 10 % of the seconds
    even_share : the same for independent spikes at a steady rate with as many spikes
    n_events : runs of seconds holding more than twice the mean; runs less than 3 s apart are one
    event_share_of_spikes, event_share_of_time : what these runs hold
    """

    busiest_share: float
    even_share: float
    n_events: int
    event_share_of_spikes: float
    event_share_of_time: float


def burstiness(train: MergedTrain) -> Burstiness | None:
    """Share of spikes in the busiest seconds, number of population events; None where there is too little of either."""
    n_seconds = int(train.duration_s)
    if not 20 <= n_seconds <= MAX_SECONDS or train.n_spikes < 20:
        return None
    counts = np.bincount(train.observed_time().astype(np.int64), minlength=n_seconds)[:n_seconds]
    n_busy = max(1, int(BUSY_SHARE_OF_TIME * n_seconds))
    mean = counts.mean()
    total = max(int(counts.sum()), 1)
    up = counts > EVENT_TIMES_MEAN * mean
    runs = np.flatnonzero(up)
    return Burstiness(
        busiest_share=float(np.sort(counts)[-n_busy:].sum() / total),
        even_share=even_share(float(mean)),
        n_events=int(1 + np.sum(np.diff(runs) > EVENT_PAUSE_S)) if runs.size else 0,
        event_share_of_spikes=float(counts[up].sum() / total),
        event_share_of_time=float(up.mean()),
    )


def even_share(mean: float) -> float:
    """Share of a Poisson variable's sum that its largest tenth of values holds."""
    top = int(stats.poisson.isf(BUSY_SHARE_OF_TIME, mean))
    above = float(stats.poisson.sf(top, mean))  # values above `top` are all in the tenth, the rest of it equals `top`
    return float(stats.poisson.sf(top - 1, mean)) + (BUSY_SHARE_OF_TIME - above) * top / mean
