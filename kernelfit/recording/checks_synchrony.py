"""Findings about firing at the same moment: artefacts, one cell seen twice, dead times."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from scipy import stats

from kernelfit._typing import FloatArray
from kernelfit.recording.coincidence import COARSEST_S, pairs_to_leave_out
from kernelfit.recording.correlogram import lag_measure
from kernelfit.recording.evidence import Evidence
from kernelfit.recording.findings import LEAVE_OUT, Finding, counted, names, number, percent, seconds

LOST_SHARE = 0.5
MUCH = 0.25  # of the spikes: then the events are perhaps the tissue's own
FAR_RATIO, FAR_P = 1.25, 1e-4


def check_synchrony(e: Evidence) -> Iterator[Finding]:
    """Findings about firing at the same moment."""
    yield from _whole_array(e)
    yield from _far_coincidences(e)
    yield from _pairs(e)
    yield from _dead_time(e)


def _whole_array(e: Evidence) -> Iterator[Finding]:
    events = e.events
    if len(events.bounds) == 0:
        return
    share = events.n_spikes_inside / e.train.n_spikes
    most = events.units_at_once
    doubt = " That is so much that it may be how this tissue fires: look at the raster first." if share > MUCH else ""
    yield Finding(
        "whole_array_events",
        "warning",
        f"{counted(len(events.bounds), 'moment')} at which {events.threshold} or more of {events.n_active} active "
        f"units fire within 1 ms of one spike (median {number(float(np.median(most)))}, at most {int(most.max())}); "
        f"trains shifted by up to 50 ms have {_few(events.expected_by_chance)}. Of all spikes, {percent(share)} lie "
        "there, and make distant units look coupled.",
        f"{_stretch(events.bounds)}; see proposed_exclusions",
        "Leave them out: rec.with_exclusions(inspection.proposed_exclusions), or --exclusions "
        f"proposed_exclusions.csv.{doubt}",
    )
    counts = e.train.counts()
    lost = (counts > 0) & (e.n_proposed == counts)
    if lost.any():
        yield Finding(
            "only_in_proposed",
            "warning",
            f"{counted(int(lost.sum()), 'unit')} with every spike inside these moments: artefacts and nothing else.",
            names(e.units_where(lost)),
            f"The exclusions leave nothing of them; leave them out ({LEAVE_OUT}).",
        )
    most_lost = (counts > 0) & (e.n_proposed > LOST_SHARE * counts) & ~lost
    if most_lost.any():
        yield Finding(
            "mostly_in_proposed",
            "warning",
            f"{counted(int(most_lost.sum()), 'unit')} with more than half of their spikes inside these moments: "
            "sites that hardly saw tissue.",
            names(e.units_where(most_lost)),
            f"Consider leaving them out ({LEAVE_OUT}), and see what changes.",
        )


def _stretch(bounds: FloatArray) -> str:
    first, last = (f"{t:,.2f} s" for t in (bounds[0, 0], bounds[-1, 1]))
    return f"at {first}" if len(bounds) == 1 else f"from {first} to {last}"


def _few(expected: float) -> str:
    """How many such moments, in words that may end a sentence before one that begins with a number."""
    return "fewer than one" if expected < 1.0 else f"about {number(expected, 2)} of them"


def _far_coincidences(e: Evidence) -> Iterator[Finding]:
    fine, bands = e.fine_masked, e.layout.bands
    if fine.width_s > COARSEST_S * (1 + 1e-9):
        return
    measure = lag_measure(fine.width_s, fine.counts.shape[1], e.step_s)
    bins = fine.between(0.005, 0.010)
    share = measure[0] / (measure[0] + measure[bins].sum())
    rows = []
    for b in range(2, len(bands)):
        short, level = int(fine.counts[b, 0]), int(fine.counts[b, bins].sum())
        ratio = short * (1.0 - share) / max(level * share, 1e-300)
        if level and ratio > FAR_RATIO and stats.binom.sf(short - 1, short + level, share) < FAR_P:
            rows.append(f"{bands[b].label}: {number(ratio, 2)} times")
    if rows:
        left = "still " if len(e.events.bounds) else ""
        yield Finding(
            "far_coincidences",
            "warning",
            f"Units far apart {left}fire within {seconds(fine.width_s)} more often than 5 to 10 ms apart. Tissue is "
            "not that fast over such distances: smaller artefacts, cross-talk or a common reference.",
            "; ".join(rows),
            "Look for interference in the raw recording; bins of 10 ms and more take such pairs into one bin, "
            "where the model does not see them.",
        )


def _pairs(e: Evidence) -> Iterator[Finding]:
    proposed = pairs_to_leave_out(e.excess)
    if len(proposed):
        shares = proposed["share_of_smaller"].to_numpy(dtype=np.float64)
        pairs = zip(proposed["unit_a"], proposed["unit_b"], shares, strict=True)
        listed = [f"{a}-{b} ({percent(float(share))})" for a, b, share in pairs]
        yield Finding(
            "one_cell_twice",
            "warning",
            f"Among {e.excess.n_near_tested:,} neighbouring pairs, {len(proposed):,} fire within "
            f"{seconds(e.fine.width_s)} more than twice as often as at lags of 1 to 3 and of 5 to 10 ms: perhaps "
            "one cell seen twice. In brackets: the excess as a share of the smaller unit's spikes.",
            names(listed, shown=6),
            "Leave the pairs out of the kernel: --exclude-pairs proposed_pairs.csv, or exclude_pairs=... when "
            "reading. Where the share is large, keep one of the units.",
        )


def _dead_time(e: Evidence) -> Iterator[Finding]:
    dead = e.dead_time
    bands = e.layout.bands
    if dead.array_wide:
        apart = dead.missing & (np.arange(len(bands)) > 0)
        low, high = float(np.nanmin(dead.ratio[apart])), float(np.nanmax(dead.ratio[apart]))
        spread = f"{number(100 * low, 2)} to {percent(high)}" if high > 1.05 * low else percent(high)
        yield Finding(
            "array_dead_time",
            "warning",
            f"Units at all distances hardly ever fire together: coincidences within {seconds(e.fine.width_s)} are "
            f"at {spread} of their level at 5 to 10 ms, for about {seconds(dead.length_s)}. One unit's spike blocks "
            "the detection of all others.",
            "whole array",
            f"Use bins of at least {seconds(5 * dead.length_s)}: in narrower ones the dead time looks like "
            "suppression.",
        )
    elif dead.missing[0]:
        yield Finding(
            "same_site_dead_time",
            "info",
            f"Pairs on one site have {percent(float(dead.ratio[0]))} of the coincidences within "
            f"{seconds(e.fine.width_s)} that their level at 5 to 10 ms asks for, for about "
            f"{seconds(dead.length_s)}: one detector cannot see two spikes at once.",
            "pairs on one site",
            "Keep such pairs out of the kernel (the default).",
        )
