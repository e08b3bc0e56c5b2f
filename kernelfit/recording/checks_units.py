"""Findings about single units: silent ones, short intervals, shared sites, units that carry too much."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.recording.activity import come_and_go
from kernelfit.recording.evidence import Evidence
from kernelfit.recording.findings import CUT, LEAVE_OUT, Finding, counted, names, number, percent, seconds

FEW_SPIKES = 30  # fewer leave a baseline known to no better than a fifth either way
SHORT_SHARE = 0.01  # common practice, no source; ranges of 0.5 to 2 % are in use
DOUBLE_SHARE = 0.05  # of intervals below 1 ms, all units together
MIN_SHORT = 3  # intervals; one or two say nothing
DOMINANT_SHARE, DOMINANT_TIMES = 0.25, 3.0


def check_units(e: Evidence) -> Iterator[Finding]:
    """Findings about single units."""
    yield from _silent(e)
    yield from _short_intervals(e)
    yield from _same_site(e)
    yield from _uneven(e)


def _silent(e: Evidence) -> Iterator[Finding]:
    counts = e.train.counts()
    all_excluded = (counts == 0) & (e.n_excluded > 0)
    if all_excluded.any():
        yield Finding(
            "only_in_exclusions",
            "warning",
            f"{counted(int(all_excluded.sum()), 'unit')} with every spike inside the exclusions: nothing of "
            "them is left.",
            names(e.units_where(all_excluded)),
            "They hold artefacts only; leave them out with rec.select(min_spikes=1) or --min-spikes 1.",
        )
    silent = (counts == 0) & ~all_excluded
    if silent.any():
        yield Finding(
            "silent_units",
            "warning",
            f"{counted(int(silent.sum()), 'unit')} of {counts.size} without a spike in the windows.",
            names(e.units_where(silent)),
            "They stay in the result as silent, without a baseline. If they should have fired, compare the "
            "unit ids of the spikes and sites tables; to leave them out use rec.select(min_spikes=1), or "
            "--min-spikes 1.",
        )
    few = (counts > 0) & (counts < FEW_SPIKES)
    if few.any():
        yield Finding(
            "nearly_silent_units",
            "info",
            f"{counted(int(few.sum()), 'unit')} with fewer than {FEW_SPIKES} spikes: their baselines are hardly known.",
            names([f"{e.recording.unit_ids[k]} ({counts[k]})" for k in np.flatnonzero(few)]),
            f"To leave them out use rec.select(min_spikes={FEW_SPIKES}), or --min-spikes {FEW_SPIKES}, and see what "
            "changes.",
        )


def _short_intervals(e: Evidence) -> Iterator[Finding]:
    held = e.intervals
    n_all = int(held.n_per_unit.sum())
    if n_all == 0:
        return
    short, medium = held.n_short.sum() / n_all, held.n_medium.sum() / n_all
    bad = (held.n_short >= MIN_SHORT) & (np.nan_to_num(held.share_short) > SHORT_SHARE)
    listed = _ranked(e, bad, held.share_short)
    if short > DOUBLE_SHARE:
        yield Finding(
            "double_detection",
            "warning",
            f"{percent(float(short))} of all intervals within units are below 1 ms (shortest "
            f"{seconds(float(np.nanmin(held.shortest_s)))}): one spike was often counted twice.",
            listed,
            "Detect again with a dead time of 1 to 2 ms, or use bins of 5 ms and more and keep the after-spike term.",
        )
    elif bad.any():
        yield Finding(
            "intervals_below_1ms",
            "warning",
            f"{counted(int(bad.sum()), 'unit')} with more than 1 % of intervals below 1 ms, the usual mark "
            "(common practice, no source): several cells in one unit, or spikes counted twice.",
            listed,
            f"Sort again or leave them out ({LEAVE_OUT}), and see what changes.",
        )
    bad = (held.n_medium >= MIN_SHORT) & (np.nan_to_num(held.share_medium) > SHORT_SHARE)
    if bad.any():
        yield Finding(
            "intervals_below_2ms",
            "info",
            f"{counted(int(bad.sum()), 'unit')} with more than 1 % of intervals below 2 ms "
            f"({percent(float(medium))} over all units). Fast bursts give such intervals too.",
            _ranked(e, bad, held.share_medium),
            "Compare the interval histograms: a burst has a peak, contamination has none.",
        )


def _ranked(e: Evidence, mask: BoolArray, share: FloatArray) -> str:
    chosen = np.flatnonzero(mask)
    chosen = chosen[np.argsort(-share[chosen], kind="stable")]
    return names([f"{e.recording.unit_ids[k]} ({percent(float(share[k]))})" for k in chosen], shown=6)


def _same_site(e: Evidence) -> Iterator[Finding]:
    together = e.layout.same_site
    if not together.any() or e.layout.reference_um is None:
        return
    n_pairs = int(together.sum()) // 2
    first = np.flatnonzero(~np.tril(together, -1).any(axis=1) & together.any(axis=1))
    sites = ["+".join(e.units_where(together[k] | (np.arange(len(together)) == k))) for k in first]
    apart = int(np.sum(together & (e.layout.distance_um > 0.0))) // 2
    verb = "holds" if len(sites) == 1 else "hold"
    note = f" ({counted(apart, 'pair')} of them less than 1 µm apart, not at the same point)" if apart else ""
    yield Finding(
        "units_on_one_site",
        "info",
        f"{counted(len(sites), 'site')} of {e.layout.n_sites} {verb} several units, {counted(n_pairs, 'pair')}{note}.",
        names(sites, shown=6),
        "Such pairs are left out of the kernel by default, because a detector on one site misses "
        "overlapping spikes; same_site='own' (--same-site own) gives them a coefficient of their own.",
    )


def _uneven(e: Evidence) -> Iterator[Finding]:
    counts = e.train.counts()
    share = counts / max(int(counts.sum()), 1)
    heavy = (share > DOMINANT_SHARE) & (share * counts.size > DOMINANT_TIMES)
    if heavy.any() and counts.size >= 4:
        k = int(np.argmax(share))
        yield Finding(
            "dominant_unit",
            "warning",
            f"One unit holds {percent(float(share[k]))} of all spikes, {number(float(e.rate_hz[k]))} Hz "
            f"against a median of {number(float(np.median(e.rate_hz)))} Hz: it may carry the result alone.",
            e.recording.unit_ids[k],
            f"Fit once without it ({LEAVE_OUT}), and see what changes.",
        )
    lost = come_and_go(e.blocks)
    if lost.any():
        yield Finding(
            "units_come_or_go",
            "warning",
            f"{counted(int(lost.sum()), 'unit')} with many spikes and none at all during the first or the "
            "last third of the recording: a cell or contact that came or went. The model takes its silence "
            "for a low rate.",
            names(e.units_where(lost)),
            f"Cut the recording ({CUT}) or leave the units out ({LEAVE_OUT}).",
        )
