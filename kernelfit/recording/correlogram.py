"""Cross-correlograms pooled by distance: how often pairs of units fire at each lag, relative to chance.

Chance is what trains with the same rates would do if they knew nothing of each other: n_a n_b / T per unit of
lag. Two scales are counted: fine (lags to 50 ms, where detection shows its faults) and slow (lags to 5 s,
where bursts and waves live). The fine counts come from the walk over close pairs; the slow ones from counts
in 50 ms bins, a stretch of time at a go, so that memory does not grow with the recording.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray, IntArray
from kernelfit.recording.layout import Layout
from kernelfit.recording.merged import TIME_TOLERANCE_S, MergedTrain, close_pairs, pair_sample

FINE_WIDTH_S = 0.0005
FINE_MAX_S = 0.050
SLOW_WIDTH_S = 0.050
SLOW_STEPS: tuple[int, ...] = (*range(1, 21), *range(22, 41, 2), *range(45, 101, 5))  # of 50 ms: to 5 s
_PAIR_COST = 30  # a pair of spikes costs as much as so many cells of bin, unit, lag and band
_CHUNK_COUNTS = 400_000  # counts held at once: enough to be quick, few enough for a processor's cache
COLUMNS = (
    "band",
    "from_um",
    "to_um",
    "scale",
    "lag_s",
    "width_s",
    "n_pairs",
    "n_coincidences",
    "expected",
    "relative",
)


@dataclass(frozen=True, eq=False)
class FineCounts:
    """Spike pairs per band and fine lag bin.

    Parameters
    ----------
    width_s : width of a lag bin, seconds
    counts : (n_bands, n_lags) unordered spike pairs looked at
    expected : (n_bands, n_lags) the same by chance
    share : of all spike pairs that were looked at
    """

    width_s: float
    counts: IntArray
    expected: FloatArray
    share: float

    @property
    def lags_s(self) -> FloatArray:
        """(n_lags,) middle of each lag bin, seconds."""
        return (np.arange(self.counts.shape[1], dtype=np.float64) + 0.5) * self.width_s

    def between(self, start_s: float, stop_s: float) -> slice:
        """The lag bins from `start_s` up to `stop_s`; at least one."""
        first = round(start_s / self.width_s)
        return slice(first, max(round(stop_s / self.width_s), first + 1))


def lag_measure(width_s: float, n_lags: int, step_s: float | None) -> FloatArray:
    """(n_lags,) length of lag, both signs taken together, that each lag bin stands for, seconds.

    Times on a grid can only differ by whole steps, and lag 0 has no second sign, so that the first bin is
    narrower than it looks: with a step of 0.1 ms a first bin of 0.5 ms holds 9 of the 10 steps the others
    hold.
    """
    measure = np.full(n_lags, 2.0 * width_s)
    if step_s is not None:
        edge = np.ceil(np.arange(n_lags + 1) * width_s / step_s - 1e-6)
        measure = 2.0 * step_s * np.diff(edge)
        measure[0] -= step_s
    return measure


def fine_width(step_s: float | None) -> float:
    """Width of the fine lag bins, seconds: 0.5 ms, or one step of coarser times."""
    if step_s is None or step_s <= FINE_WIDTH_S / 2.0:
        return FINE_WIDTH_S
    return float(step_s * max(1, math.ceil(FINE_WIDTH_S / step_s - 1e-6)))


def chance_products(train: MergedTrain, layout: Layout) -> FloatArray:
    """(n_bands,) sum of n_a n_b / T^2 over the unordered pairs of each band, 1/s^2."""
    rate = train.counts() / max(train.duration_s, 1e-300)
    upper = np.triu_indices(layout.n_units, 1)
    band = layout.band_of_pair[upper]
    kept = band >= 0
    weights = (rate[upper[0]] * rate[upper[1]])[kept]
    return np.bincount(band[kept], weights=weights, minlength=len(layout.bands)).astype(np.float64)


def fine_counts(train: MergedTrain, layout: Layout, step_s: float | None) -> FineCounts:
    """Spike pairs of different units per band of distance and fine lag bin, with what chance would give.

    Parameters
    ----------
    train : spikes of all units
    layout : their distances
    step_s : time grid of the spikes (`merged.time_step`), or None
    """
    width = fine_width(step_s)
    n_lags = max(round(FINE_MAX_S / width), 10)
    n_bands = len(layout.bands)
    counts = np.zeros((n_bands + 1) * n_lags, dtype=np.int64)  # the last row takes the pairs left out
    share = pair_sample(train, n_lags * width)
    for first, second, lag in close_pairs(train, n_lags * width, share):
        place = np.minimum(((lag + TIME_TOLERANCE_S) / width).astype(np.int64), n_lags - 1)
        band = layout.band_of_pair[first, second] % (n_bands + 1)
        counts += np.bincount(band * n_lags + place, minlength=counts.size)
    lags = (np.arange(n_lags, dtype=np.float64) + 0.5) * width
    measure = lag_measure(width, n_lags, step_s) * train.overlap_s(lags)
    return FineCounts(
        width_s=width,
        counts=counts.reshape(n_bands + 1, n_lags)[:n_bands],
        expected=share * np.outer(chance_products(train, layout), measure),
        share=share,
    )


def slow_counts(train: MergedTrain, layout: Layout) -> tuple[IntArray, FloatArray]:
    """Spike pairs per band at lags of 50 ms to 5 s: counts and expected, each (n_bands, n_lags).

    A lag of k bins takes in all pairs whose 50 ms bins are k apart. Two ways lead to the same counts: over the pairs of
    spikes where those are few, over the bins where spikes are dense; the cheaper one is taken.
    """
    lengths = train.windows[:, 1] - train.windows[:, 0]
    n_bins = np.floor(lengths / SLOW_WIDTH_S + 1e-6).astype(np.int64)
    start = train.windows[train.window, 0]
    bins = ((train.time_s - start) / SLOW_WIDTH_S + 1e-6).astype(np.int64)
    whole = bins < n_bins[train.window]  # an incomplete last bin is left out
    spikes = BinnedSpikes(bins[whole], train.unit[whole], train.window[whole], n_bins)
    reach_s = (max(SLOW_STEPS) + 1) * SLOW_WIDTH_S
    n_pairs = int(np.sum(np.searchsorted(train.time_s, train.time_s + reach_s) - np.arange(train.n_spikes)))
    n_cells = int(np.sum(n_bins + max(SLOW_STEPS))) * layout.n_units * len(SLOW_STEPS) * len(layout.bands)
    by_pairs = n_pairs * _PAIR_COST < n_cells
    counts = counts_by_pairs(spikes, layout) if by_pairs else counts_by_bins(spikes, layout)
    bin_pairs = np.maximum(n_bins[:, None] - np.array(SLOW_STEPS), 0).sum(axis=0)
    share = train.duration_s / max(float(lengths.sum()), 1e-300)
    per_bin_pair = 2.0 * SLOW_WIDTH_S**2 * chance_products(train, layout)
    return counts, np.outer(per_bin_pair, bin_pairs * share)


@dataclass(frozen=True, eq=False)
class BinnedSpikes:
    """Spikes by 50 ms bin of their window, sorted by window and bin; `n_bins` (n_windows,) whole bins."""

    bin: IntArray
    unit: IntArray
    window: IntArray
    n_bins: IntArray


def counts_by_pairs(spikes: BinnedSpikes, layout: Layout) -> IntArray:
    """(n_bands, n_lags) spike pairs, from the pairs of spikes."""
    n_bands, n_lags = len(layout.bands), len(SLOW_STEPS)
    lag_of_step = np.full(max(SLOW_STEPS) + 1, -1)
    lag_of_step[np.array(SLOW_STEPS)] = np.arange(n_lags)
    total = np.zeros(n_bands * n_lags, dtype=np.int64)
    earlier = np.arange(spikes.bin.size)
    shift = 0
    while earlier.size:
        shift += 1
        earlier = earlier[earlier + shift < spikes.bin.size]
        step = spikes.bin[earlier + shift] - spikes.bin[earlier]
        near = (step <= max(SLOW_STEPS)) & (spikes.window[earlier] == spikes.window[earlier + shift])
        earlier, step = earlier[near], step[near]
        lag = lag_of_step[step]
        band = layout.band_of_pair[spikes.unit[earlier], spikes.unit[earlier + shift]]
        kept = (lag >= 0) & (band >= 0)
        total += np.bincount(band[kept] * n_lags + lag[kept], minlength=total.size)
    return total.reshape(n_bands, n_lags)


def counts_by_bins(spikes: BinnedSpikes, layout: Layout) -> IntArray:
    """(n_bands, n_lags) spike pairs, from dense counts of a stretch of bins at a go."""
    n_units = layout.n_units
    total = np.zeros((len(layout.bands), len(SLOW_STEPS)))
    reach = max(SLOW_STEPS)
    chunk = max(_CHUNK_COUNTS // n_units, reach)
    bands = np.flatnonzero(layout.pairs_in_band())
    masks = np.concatenate([layout.band_of_pair == b for b in bands] or [np.empty((n_units, 0))], axis=1)
    masks = masks.astype(np.float32)  # (n_units, n_used_bands * n_units)
    for w, n_bins in enumerate(spikes.n_bins):
        mine = slice(*np.searchsorted(spikes.window, [w, w + 1]))
        bins, units = spikes.bin[mine], spikes.unit[mine]
        for first in range(0, int(n_bins), chunk):
            last = min(first + chunk, int(n_bins))
            low, middle, high = np.searchsorted(bins, [first, last, last + reach])
            if low == middle:
                continue
            key = (bins[low:high] - first) * n_units + units[low:high]
            counts = np.bincount(key, minlength=(last - first + reach) * n_units).astype(np.float32)
            counts = counts.reshape(-1, n_units)
            early = counts[: last - first]
            later = (counts @ masks).reshape(len(counts), bands.size, n_units)
            for place, b in enumerate(bands):
                partners = np.ascontiguousarray(later[:, place])
                for k, step in enumerate(SLOW_STEPS):
                    # A sum per bin first: single precision holds it.
                    per_bin = np.einsum("ij,ij->i", early, partners[step : step + last - first])
                    total[b, k] += per_bin.sum(dtype=np.float64)
    return np.rint(total).astype(np.int64)


def correlogram_table(train: MergedTrain, layout: Layout, fine: FineCounts) -> pd.DataFrame:
    """Both scales as one table, a row per band, scale and lag; bands without pairs are left out.

    Columns
    -------
    band, from_um, to_um : the band of distance
    scale : "fine" or "slow"
    lag_s, width_s : middle and width of the lag bin, seconds
    n_pairs : pairs of units in the band
    n_coincidences, expected : spike pairs at that lag, either unit first, and how many chance would give
    relative : their ratio, 1 at chance; NaN where chance would give none
    """
    slow, slow_expected = slow_counts(train, layout)
    scales = (
        ("fine", fine.lags_s, fine.width_s, fine.counts, fine.expected),
        ("slow", np.array(SLOW_STEPS) * SLOW_WIDTH_S, SLOW_WIDTH_S, slow, slow_expected),
    )
    n_pairs = layout.pairs_in_band()
    parts = []
    for b, band in enumerate(layout.bands):
        if n_pairs[b] == 0:
            continue
        for scale, lags, width, counts, expected in scales:
            part = pd.DataFrame({"lag_s": lags, "n_coincidences": counts[b], "expected": expected[b]})
            part["band"], part["from_um"], part["to_um"], part["scale"] = (
                band.label,
                band.from_um,
                band.to_um,
                scale,
            )
            part["width_s"], part["n_pairs"] = width, int(n_pairs[b])
            part["relative"] = part["n_coincidences"] / part["expected"].where(part["expected"] > 0)
            parts.append(part[list(COLUMNS)])
    return pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=list(COLUMNS))
