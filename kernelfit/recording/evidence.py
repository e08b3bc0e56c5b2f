"""Everything an inspection measures, gathered once; the checks only read it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.recording.activity import (
    Blocks,
    Burstiness,
    Intervals,
    blocks,
    burstiness,
    gaps,
    intervals,
    longest_break,
)
from kernelfit.recording.artefacts import WholeArrayEvents, whole_array_events
from kernelfit.recording.bin_width import BinWidthAdvice, advise, disturbed_lag, excess_fall
from kernelfit.recording.coincidence import DeadTime, PairExcess, dead_time, pair_excess
from kernelfit.recording.correlogram import COLUMNS, FineCounts, correlogram_table, fine_counts
from kernelfit.recording.layout import SAME_SITE, Layout, lay_out
from kernelfit.recording.merged import MergedTrain, inside, merge_intervals, merge_trains, time_step
from kernelfit.recording.recording import Recording


@dataclass(frozen=True, eq=False)
class Evidence:
    """What was measured on a recording.

    Parameters
    ----------
    recording : the recording
    layout : distances between its units
    train : spikes in the windows and outside the exclusions
    masked : the same without the proposed exclusions
    step_s : time grid of the spikes, or None
    intervals, blocks, gaps, burstiness : of `train`; `burstiness` is that of `masked`
    longest_break_s : the longest silence of `train` that is too short for `gaps`
    events : whole-array events, proposed for exclusion
    fine, fine_masked : short-lag pair counts of both trains
    correlograms, correlograms_masked : tables of both; the same table where nothing is proposed
    excess, dead_time : coincidences, of `masked`
    advice : bin width, of `masked`
    n_excluded : (n_units,) spikes of each unit in the windows that the recording's own exclusions hold
    n_proposed : (n_units,) spikes of each unit that the proposed exclusions hold
    n_outside : spikes outside all windows
    """

    recording: Recording
    layout: Layout
    train: MergedTrain
    masked: MergedTrain
    step_s: float | None
    intervals: Intervals
    blocks: Blocks
    gaps: pd.DataFrame
    longest_break_s: float
    burstiness: Burstiness | None
    events: WholeArrayEvents
    fine: FineCounts
    fine_masked: FineCounts
    correlograms: pd.DataFrame
    correlograms_masked: pd.DataFrame
    excess: PairExcess
    dead_time: DeadTime
    advice: BinWidthAdvice
    n_excluded: IntArray
    n_proposed: IntArray
    n_outside: int

    @property
    def rate_hz(self) -> FloatArray:
        """(n_units,) spikes per second of observed time."""
        return self.train.counts() / max(self.train.duration_s, 1e-300)

    def units_where(self, mask: BoolArray) -> list[str]:
        """Ids of the units where the mask is true, in their order."""
        return [self.recording.unit_ids[k] for k in np.flatnonzero(mask)]


def gather(recording: Recording, *, seed: int) -> Evidence:
    """Measure everything.

    Parameters
    ----------
    recording : what was recorded
    seed : of the random shifts that tell artefacts from chance
    """
    layout = lay_out(recording)
    train = merge_trains(recording)
    step_s = time_step(train)
    events = whole_array_events(train, rng=np.random.default_rng(seed))
    proposes = len(events.bounds) > 0
    masked = train.without(events.bounds) if proposes else train
    fine = fine_counts(train, layout, step_s)
    table = correlogram_table(train, layout, fine)
    fine_masked = fine_counts(masked, layout, step_s) if proposes else fine
    table_masked = correlogram_table(masked, layout, fine_masked) if proposes else table
    held = intervals(train)
    apart = np.array([b.label != SAME_SITE for b in layout.bands])
    disturbed_s = disturbed_lag(fine_masked, apart)
    share_short = float(held.n_short.sum() / max(int(held.n_per_unit.sum()), 1))
    bounds = merge_intervals(np.array(recording.exclusion_bounds))
    in_windows = [t[inside(t, np.array(recording.window_bounds))] for t in recording.trains]
    return Evidence(
        recording=recording,
        layout=layout,
        train=train,
        masked=masked,
        step_s=step_s,
        intervals=held,
        blocks=blocks(train),
        gaps=gaps(train),
        longest_break_s=longest_break(train),
        burstiness=burstiness(masked),
        events=events,
        fine=fine,
        fine_masked=fine_masked,
        correlograms=table,
        correlograms_masked=table_masked,
        excess=pair_excess(masked, layout, recording.unit_ids, step_s, fine.width_s),
        dead_time=dead_time(fine_masked, layout, step_s),
        advice=advise(
            disturbed_s=disturbed_s,
            fall_s=_neighbours_fall(table_masked, fine_masked, layout, disturbed_s),
            share_short=share_short,
            step_s=step_s,
            artefacts_left_out=proposes,
        ),
        n_excluded=np.array([int(inside(t, bounds).sum()) for t in in_windows], dtype=np.int64),
        n_proposed=train.counts() - masked.counts(),
        n_outside=int(sum(t.size for t in recording.trains) - sum(t.size for t in in_windows)),
    )


def _neighbours_fall(table: pd.DataFrame, fine: FineCounts, layout: Layout, from_s: float) -> float:
    """Half-fall of the excess in the nearest band that is not the same site; NaN without one."""
    n_pairs = layout.pairs_in_band()
    usable = [b for b in range(len(layout.bands)) if layout.bands[b].label != SAME_SITE and n_pairs[b] > 0]
    if not usable or table.columns.tolist() != list(COLUMNS):
        return float("nan")
    band = usable[0]
    slow = table[(table["band"] == layout.bands[band].label) & (table["scale"] == "slow")]
    return excess_fall(
        fine,
        slow["n_coincidences"].to_numpy(dtype=np.float64),
        slow["expected"].to_numpy(dtype=np.float64),
        band,
        from_s=from_s,
    )
