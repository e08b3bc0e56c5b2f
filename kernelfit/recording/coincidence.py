"""Exact coincidences between pairs of units: too many (one cell seen twice) or too few (detection dead time).

The measure of "too" is the pair's own level at lags of 5 to 10 ms, which shared bursts and waves raise just
as much. If nothing happens at short lags, the coincidences among the n spike pairs of both lag ranges are
binomial with the share of the short range; a one-sided test of that share, with false discoveries held at 1 %
over all pairs tested (Benjamini and Hochberg 1995, J. R. Statist. Soc. B 57, 289-300), decides.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy import stats
from statsmodels.stats.multitest import multipletests

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.recording.correlogram import FineCounts, lag_measure
from kernelfit.recording.layout import SAME_SITE, Layout
from kernelfit.recording.merged import TIME_TOLERANCE_S, MergedTrain, close_pairs, pair_sample

COINCIDENCE_S = 0.0005
LEVEL_FROM_S, LEVEL_TO_S = 0.005, 0.010
CLOSE_FROM_S, CLOSE_TO_S = 0.001, 0.003
FALSE_DISCOVERIES = 0.01
MIN_RATIO = 2.0  # times the level; a smaller excess bends little and may well be tissue
MIN_SHARE = 0.01  # of the spikes of the unit with fewer
MIN_EXCESS = 5.0  # coincidences
COARSEST_S = 0.002  # times in wider steps say nothing about exact coincidences
MIN_SPIKES = 100  # a unit with fewer says nothing about a share of 1 %
DEAD_TIME_RATIO = 0.5
DEAD_TIME_P = 1e-3

PAIR_COLUMNS = (
    "unit_a",
    "unit_b",
    "distance_um",
    "n_coincidences",
    "expected",
    "share_of_smaller",
    "p_adjusted",
)


@dataclass(frozen=True, eq=False)
class PairExcess:
    """Pairs of units with more coincidences than their level at 5 to 10 ms allows.

    Parameters
    ----------
    near, far : tables with the columns of `PAIR_COLUMNS`, largest share first; near pairs lie on one site or
        on adjacent ones
    n_near_tested, n_far_tested : pairs tested, those without a coincidence included
    """

    near: pd.DataFrame
    far: pd.DataFrame
    n_near_tested: int
    n_far_tested: int


def pair_excess(
    train: MergedTrain, layout: Layout, unit_ids: tuple[str, ...], step_s: float | None, width_s: float
) -> PairExcess:
    """Pairs with an excess of coincidences within `width_s` (0.5 ms, or one step of coarser times).

    Parameters
    ----------
    train : spikes, artefacts already left out: they would make every pair look like one cell
    layout : distances; pairs left out of the kernel are not tested
    unit_ids : names for the tables
    step_s : time grid of the spikes, or None
    width_s : what counts as a coincidence, seconds
    """
    if width_s > COARSEST_S * (1 + 1e-9):
        nothing = pd.DataFrame(columns=list(PAIR_COLUMNS))
        return PairExcess(near=nothing, far=nothing, n_near_tested=0, n_far_tested=0)
    looked_at = pair_sample(train, LEVEL_TO_S + width_s)
    first, second, coincident, level, close = _count_pairs(train, width_s, looked_at)
    n_lags = round(LEVEL_TO_S / width_s)
    measure = lag_measure(width_s, n_lags, step_s)
    short = measure[0]
    long, near = measure[_level_bins(width_s)].sum(), measure[_close_bins(width_s)].sum()
    p_value = np.maximum(
        stats.binom.sf(coincident - 1, coincident + level, short / (short + long)),
        stats.binom.sf(coincident - 1, coincident + close, short / (short + near)),
    )
    expected = np.maximum(level * short / long, close * short / near)
    counts = train.counts()
    smaller = np.minimum(counts[first], counts[second])
    excess = (coincident - expected) / looked_at
    large = (
        (coincident >= MIN_RATIO * expected)
        & (excess >= np.maximum(MIN_EXCESS, MIN_SHARE * smaller))
        & (smaller >= MIN_SPIKES)
    )
    tested = ~(layout.left_out[first, second])
    near_pair = layout.neighbours()
    upper = np.triu(~layout.left_out, 1)
    tables = []
    for is_near in (True, False):
        n_tests = int((upper & (near_pair == is_near)).sum())
        chosen = np.flatnonzero(tested & (near_pair[first, second] == is_near))
        adjusted = _adjusted(p_value[chosen], n_tests)
        flagged = (adjusted <= FALSE_DISCOVERIES) & large[chosen]
        k = chosen[flagged]
        share = excess[k] / np.maximum(smaller[k], 1)
        table = pd.DataFrame(
            {
                "unit_a": [unit_ids[i] for i in first[k]],
                "unit_b": [unit_ids[i] for i in second[k]],
                "distance_um": layout.distance_um[first[k], second[k]],
                "n_coincidences": coincident[k],
                "expected": expected[k],
                "share_of_smaller": share,
                "p_adjusted": adjusted[flagged],
            },
            columns=list(PAIR_COLUMNS),
        )
        order = np.argsort(-share, kind="stable")
        tables.append((table.iloc[order].reset_index(drop=True), n_tests))
    (near, n_near), (far, n_far) = tables
    return PairExcess(near=near, far=far, n_near_tested=n_near, n_far_tested=n_far)


def _level_bins(width_s: float) -> slice:
    first = round(LEVEL_FROM_S / width_s)
    return slice(first, max(round(LEVEL_TO_S / width_s), first + 1))


def _close_bins(width_s: float) -> slice:
    first = max(round(CLOSE_FROM_S / width_s), 1)
    return slice(first, max(round(CLOSE_TO_S / width_s), first + 1))


def _count_pairs(
    train: MergedTrain, width_s: float, share: float
) -> tuple[IntArray, IntArray, IntArray, IntArray, IntArray]:
    """Pairs that ever coincide: lower index, higher index, coincidences, spike pairs at 5 to 10 ms, at 1 to 3 ms."""
    ranges = (slice(0, 1), _level_bins(width_s), _close_bins(width_s))
    keys: tuple[list[IntArray], ...] = tuple([np.empty(0, dtype=np.int64)] for _ in ranges)
    for a, b, lag in close_pairs(train, ranges[1].stop * width_s, share):
        key = np.minimum(a, b) * train.n_units + np.maximum(a, b)
        place = ((lag + TIME_TOLERANCE_S) / width_s).astype(np.int64)
        for found, bins in zip(keys, ranges, strict=True):
            found.append(key[(place >= bins.start) & (place < bins.stop)])
    pair, coincident = np.unique(np.concatenate(keys[0]), return_counts=True)
    level, close = (_counted_at(np.concatenate(found), pair) for found in keys[1:])
    return pair // train.n_units, pair % train.n_units, coincident.astype(np.int64), level, close


def _counted_at(keys: IntArray, wanted: IntArray) -> IntArray:
    """How often each of the sorted `wanted` stands among `keys`."""
    keys = np.sort(keys)
    return np.searchsorted(keys, wanted, side="right") - np.searchsorted(keys, wanted, side="left")


def _adjusted(p_value: FloatArray, n_tests: int) -> FloatArray:
    """Benjamini-Hochberg p-values where `n_tests` pairs were tested and those not listed have p = 1."""
    if p_value.size == 0:
        return p_value
    padded = np.concatenate([p_value, np.ones(max(n_tests - p_value.size, 0))])
    return np.asarray(multipletests(padded, method="fdr_bh")[1][: p_value.size], dtype=np.float64)


def pairs_to_leave_out(excess: PairExcess) -> pd.DataFrame:
    """The near pairs that are perhaps one cell seen twice: a table for `exclude_pairs`, evidence beside.

    A unit that also coincides with many far ones is not one cell seen twice: something reached the whole
    array.
    """
    if excess.near.empty or excess.far.empty:
        return excess.near
    far_partners = pd.concat([excess.far["unit_a"], excess.far["unit_b"]]).value_counts()
    near_partners = pd.concat([excess.near["unit_a"], excess.near["unit_b"]]).value_counts()
    spread = far_partners.index[far_partners > near_partners.reindex(far_partners.index, fill_value=0)]
    suspect = excess.near["unit_a"].isin(spread) | excess.near["unit_b"].isin(spread)
    return excess.near[~suspect].reset_index(drop=True)


@dataclass(frozen=True, eq=False)
class DeadTime:
    """Missing coincidences per band of distance.

    Parameters
    ----------
    ratio : (n_bands,) coincidences relative to the level at 5 to 10 ms; NaN where the level is too low to
        tell
    missing : (n_bands,) True where they are certainly below half the level
    length_s : how long pairs stay below half the level, array-wide where that holds, else on one site; 0 if
        nowhere
    array_wide : all bands beyond the same site that can be judged miss them
    """

    ratio: FloatArray
    missing: BoolArray
    length_s: float
    array_wide: bool


def dead_time(fine: FineCounts, layout: Layout, step_s: float | None) -> DeadTime:
    """Whether one unit's spike hides those of others, by band of distance."""
    if fine.width_s > COARSEST_S * (1 + 1e-9):
        n_bands = len(layout.bands)
        return DeadTime(np.full(n_bands, np.nan), np.zeros(n_bands, dtype=bool), 0.0, False)
    bins = _level_bins(fine.width_s)
    measure = lag_measure(fine.width_s, fine.counts.shape[1], step_s)
    short, long = measure[0], measure[bins].sum()
    coincident = fine.counts[:, 0]
    level = fine.counts[:, bins].sum(axis=1)
    expected = level * short / long
    p_value = stats.binom.cdf(coincident, coincident + level, short / (short + long))
    judged = expected >= 10.0
    ratio = np.where(judged, coincident / np.where(judged, expected, 1.0), np.nan)
    missing = judged & (ratio < DEAD_TIME_RATIO) & (p_value < DEAD_TIME_P)
    apart = np.array([b.label != SAME_SITE for b in layout.bands])
    array_wide = bool((judged & apart).any() and missing[judged & apart].all())
    concerned = missing & apart if array_wide else missing & ~apart
    length = 0.0
    if concerned.any():
        pooled = fine.counts[concerned].sum(axis=0) / np.where(measure > 0, measure, np.nan)
        plateau = level[concerned].sum() / long
        recovered = np.flatnonzero(pooled >= DEAD_TIME_RATIO * plateau)
        length = float(recovered[0] if recovered.size else fine.counts.shape[1]) * fine.width_s
    return DeadTime(ratio=ratio, missing=missing, length_s=length, array_wide=array_wide)
