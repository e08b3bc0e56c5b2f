"""Passes that read off rates instead of adding up derivatives: expected counts at spikes, and rates of a short
stretch."""

from __future__ import annotations

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.engine.arithmetic import CELLS_PER_TILE
from kernelfit.engine.compiled import compiled
from kernelfit.engine.links import fill_cells
from kernelfit.engine.states import Dynamics, Events, States, advance, fill_rows, predictor_into


@compiled
def compensate_block(
    link: int,
    events: Events,
    dynamics: Dynamics,
    stretches: IntArray,
    baseline: FloatArray,
    coefficient: FloatArray,
    before: FloatArray,
    within: FloatArray,
    pooled_before: FloatArray,
    pooled_within: FloatArray,
    so_far: FloatArray,
) -> None:
    """Expected counts of the lanes up to and in the bins that hold spikes; bins outside the sum are left alone.

    Parameters
    ----------
    before, within : (E,) filled for events of this block's lanes: expected count of the unit up to the start of the
        event's bin, over the bins of the sum, and in that bin
    pooled_before, pooled_within : (A,) the same for all lanes together, added to, by active bin
    so_far : (lanes,) zeros in, expected count over the whole sum out
    """
    lanes = baseline.size
    bins_per_tile = max(4, CELLS_PER_TILE // lanes // 4 * 4)
    cells = bins_per_tile * lanes
    states = States(np.zeros((1, lanes)), np.zeros(0), np.zeros((coefficient.shape[0], lanes)))
    rows = np.zeros((1 + coefficient.shape[0], cells))
    eta, mean, scratch = np.zeros(cells), np.zeros(cells), np.zeros(cells)
    slope, weight = np.zeros(cells), np.zeros(cells)
    active = 0
    at = events.active_bin[0] if events.active_bin.size > 0 else 0
    for s in range(stretches.shape[0]):
        start, stop = stretches[s, 0], stretches[s, 1]
        active = advance(min(at, start - 1), start, active, events, dynamics, states)
        at = stop - 1
        for t0 in range(start, stop, bins_per_tile):
            n_bins = min(bins_per_tile, stop - t0)
            n = n_bins * lanes
            here = active
            active = fill_rows(t0, n_bins, active, events, dynamics, states, rows, 1)
            predictor_into(baseline, coefficient, rows, 1, eta[:n])
            fill_cells(link, eta[:n], dynamics.bin_width, mean[:n], slope[:n], weight[:n], scratch[:n])
            for t in range(n_bins):
                now = mean[t * lanes : (t + 1) * lanes]
                if here < active and events.active_bin[here] == t0 + t:
                    for i in range(lanes):
                        pooled_before[here] += so_far[i]
                        pooled_within[here] += now[i]
                    for e in range(events.active_first[here], events.active_first[here + 1]):
                        lane = events.lane_of_unit[events.unit[e]]
                        if lane >= 0:
                            before[e] = so_far[lane]
                            within[e] = now[lane]
                    here += 1
                for i in range(lanes):
                    so_far[i] += now[i]


@compiled
def rates_block(
    link: int,
    events: Events,
    dynamics: Dynamics,
    start: int,
    baseline: FloatArray,
    coefficient: FloatArray,
    mean: FloatArray,
) -> None:
    """Expected counts of the lanes in the bins from `start` on, written to `mean` (n_bins, lanes)."""
    lanes = baseline.size
    states = States(np.zeros((1, lanes)), np.zeros(0), np.zeros((coefficient.shape[0], lanes)))
    rows = np.zeros((1 + coefficient.shape[0], lanes))
    eta, scratch, slope, weight = np.zeros(lanes), np.zeros(lanes), np.zeros(lanes), np.zeros(lanes)
    at = events.active_bin[0] if events.active_bin.size > 0 else 0
    active = advance(min(at, start - 1), start, 0, events, dynamics, states)
    for t in range(mean.shape[0]):
        active = fill_rows(start + t, 1, active, events, dynamics, states, rows, 1)
        predictor_into(baseline, coefficient, rows, 1, eta)
        fill_cells(link, eta, dynamics.bin_width, mean[t], slope, weight, scratch)
