"""A bin width to start with, from what the correlograms show, and the reason in words.

Two things bound it. Below, detection faults: where dead times, double detections or artefacts bend the counts
at lags up to L, bins of 5 L leave about one disturbed pair in ten across a bin edge, where the model sees it.
Above, the coupling itself: bins much wider than the fall of the correlogram between neighbours cannot follow
it, and the travel of activity from site to site is lost beyond some 10 ms. A common practice, no theorem; a
fit should be repeated at half and twice the width.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.recording.correlogram import FINE_WIDTH_S, SLOW_STEPS, SLOW_WIDTH_S, FineCounts
from kernelfit.recording.findings import seconds

LADDER_S = (0.001, 0.002, 0.005, 0.010, 0.020, 0.050)
_WIDEST_S = 0.010
_FALLBACK_S = 0.005
_TIMES_DISTURBED = 5.0
_PART_OF_FALL = 10.0
_LEVEL_S = (0.010, 0.025)  # lags that show the level around short lags
_DEVIATION = 0.25  # of the level, either way
_DEVIATION_P = 1e-4
_REBIN = 5  # fine bins of 0.5 ms taken together to see the fall


@dataclass(frozen=True, slots=True)
class BinWidthAdvice:
    """A suggestion.

    Parameters
    ----------
    width_s : seconds
    reason : in words, full sentences
    disturbed_s : lag up to which detection faults bend the correlogram, 0 where none does
    fall_s : lag at which the excess between neighbours has fallen to half its peak; NaN where no excess shows
    """

    width_s: float
    reason: str
    disturbed_s: float
    fall_s: float


def disturbed_lag(fine: FineCounts, bands: BoolArray) -> float:
    """Lag up to which any of these bands departs from its level at 10 to 25 ms by over a quarter, seconds.

    Only a run that starts within the first two lag bins counts: a broad rise towards short lags is what
    coupling does.
    """
    if fine.width_s > 2.0 * FINE_WIDTH_S * (1 + 1e-9):
        return 0.0  # the steps of the times hide short lags; `advise` says so
    level = fine.between(*_LEVEL_S)
    reach = 0
    for b in np.flatnonzero(bands):
        n_level = int(fine.counts[b, level].sum())
        weight = fine.expected[b] / max(float(fine.expected[b, level].sum()), 1e-300)
        expected = n_level * weight
        counts = fine.counts[b]
        early = slice(0, fine.between(0.0, _LEVEL_S[0]).stop)
        share = weight[early] / (1.0 + weight[early])
        total = counts[early] + n_level
        low = stats.binom.cdf(counts[early], total, share) < _DEVIATION_P
        high = stats.binom.sf(counts[early] - 1, total, share) < _DEVIATION_P
        bent = (low & (counts[early] < (1 - _DEVIATION) * expected[early])) | (
            high & (counts[early] > (1 + _DEVIATION) * expected[early])
        )
        # A rise that falls off smoothly is the tissue; a fault jumps from one lag bin to the next.
        jumps = np.abs(np.diff(counts[: early.stop + 1])) > _DEVIATION * np.maximum(expected[early], 1.0)
        start = np.flatnonzero(bent[:2])
        if start.size == 0:
            continue
        end = int(start[0])
        while end + 1 < bent.size and bent[end + 1]:
            end += 1
        if jumps[: end + 1].any():
            reach = max(reach, end + 1)
    return reach * fine.width_s


def excess_fall(
    fine: FineCounts, slow_counts: FloatArray, slow_expected: FloatArray, band: int, *, from_s: float = 0.0
) -> float:
    """Lag at which the excess over chance in one band has fallen to half its peak, seconds.

    Parameters
    ----------
    fine : counts to 50 ms
    slow_counts, slow_expected : (n_lags,) of the same band, 50 ms to 5 s
    band : index of the band
    from_s : shorter lags are disturbed and left out

    Returns
    -------
    Seconds; NaN where the peak does not stand out from chance, infinite where the excess outlasts 5 s.
    """
    n = fine.counts.shape[1] // _REBIN * _REBIN
    lags = fine.lags_s[:n].reshape(-1, _REBIN).mean(axis=1)
    counts = fine.counts[band, :n].reshape(-1, _REBIN).sum(axis=1).astype(np.float64)
    expected = fine.expected[band, :n].reshape(-1, _REBIN).sum(axis=1)
    clean = lags - lags[0] >= from_s - 1e-9
    lags = np.concatenate([lags[clean], np.array(SLOW_STEPS) * SLOW_WIDTH_S])
    counts = np.concatenate([counts[clean], slow_counts])
    expected = np.concatenate([expected[clean], slow_expected])
    known = expected > 0
    lags, counts, expected = lags[known], counts[known], expected[known]
    if lags.size == 0:
        return float("nan")
    excess = counts / expected - 1.0
    certain = (counts - expected) / np.sqrt(expected) > 4.0
    if not certain.any():
        return float("nan")
    peak = int(np.flatnonzero(certain)[np.argmax(excess[certain])])
    after = np.flatnonzero(excess[peak:] <= excess[peak] / 2.0)
    return float(lags[peak + after[0]]) if after.size else float("inf")


def advise(
    *, disturbed_s: float, fall_s: float, share_short: float, step_s: float | None, artefacts_left_out: bool
) -> BinWidthAdvice:
    """The suggestion.

    Parameters
    ----------
    disturbed_s : see `disturbed_lag`
    fall_s : see `excess_fall`
    share_short : share of intervals within units below 1 ms
    step_s : time grid of the spikes, or None
    artefacts_left_out : proposed exclusions were left out before looking
    """
    reasons = []
    at_least = LADDER_S[0]
    if step_s is not None and step_s > LADDER_S[0] / 2:
        at_least = max(at_least, 2.0 * step_s)
        reasons.append(f"Times are stored in steps of {seconds(step_s)}; narrower bins than two steps show the steps.")
    if share_short > 0.05:
        disturbed_s = max(disturbed_s, 0.001)
        reasons.append(f"{100 * share_short:.0f} % of intervals within units are below 1 ms: spikes counted twice.")
    if disturbed_s > 0.0:
        at_least = max(at_least, _TIMES_DISTURBED * disturbed_s)
        reasons.append(
            f"At lags below {seconds(disturbed_s)} detection bends the counts; bins of {seconds(at_least)} "
            "and more leave at most about one such pair in ten across a bin edge."
        )
    if np.isnan(fall_s):
        wished = _FALLBACK_S
        reasons.append("Neighbours show no excess of coincidences over chance to go by.")
    else:
        wished = min(fall_s / _PART_OF_FALL, _WIDEST_S)
        takes = f"takes {seconds(fall_s)} to fall to half" if np.isfinite(fall_s) else "outlasts 5 s"
        if fall_s / _PART_OF_FALL > _WIDEST_S:
            follow = f"{seconds(_WIDEST_S)} bins follow it; wider ones lose the travel time between sites."
        else:
            follow = "bins of about a tenth of that follow it."
        reasons.append(f"The excess of spike pairs between neighbours {takes}: {follow}")
    width = max((w for w in LADDER_S if w <= wished * (1 + 1e-9)), default=LADDER_S[0])
    if width < at_least * (1 - 1e-9):
        width = min((w for w in LADDER_S if w >= at_least * (1 - 1e-9)), default=at_least)
        if width > wished:
            reasons.append("The two limits cross; the lower one was kept, and the fit will be coarse in time.")
    if artefacts_left_out:
        reasons.append("This holds with the proposed exclusions left out.")
    reasons.append("Repeat the fit at half and at twice this width.")
    return BinWidthAdvice(width_s=width, reason=" ".join(reasons), disturbed_s=disturbed_s, fall_s=fall_s)
