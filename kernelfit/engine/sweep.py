"""The forward-sensitivity sweep: one pass over time gives log-likelihood, score and expected information.

The states of kernelfit.engine.states fill a tile of a few bins at a time; the tile becomes rates and is added to the
sums of docs/model.md section 4. Nothing of the length of the recording is stored. The loops know no kernel, only
tables of J(d_ij) and its derivatives; kernelfit.engine.twin says the same in plain numpy and tests hold one against the
other.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.engine.arithmetic import (
    BINS_AT_ONCE,
    CELLS_PER_TILE,
    GRAM,
    LANE_PITCH,
    ROW_PITCH,
    add_by_lane,
    add_gram_block,
    add_gram_block_by_lane,
    add_gram_row_by_lane,
    add_products_by_lane,
    multiply_into,
)
from kernelfit.engine.compiled import compiled
from kernelfit.engine.links import fill_cells, is_canonical, log_rate, log_rate_slope
from kernelfit.engine.states import Dynamics, Events, States, advance, fill_rows, predictor_into


class Sums(NamedTuple):
    """What a sweep adds up for one block of targets. M traces, Q shared parameters, G blocks of time, S slots.

    log_likelihood (G, lanes): sum of y log mean - mean, without -log y!, not weighted
    score (G, 1 + M + Q, lanes): baseline, traces, shared; not weighted
    own_own (S, 1 + M, 1 + M, lanes): upper triangle, weighted by block of time and added to the slot of the block
    own_shared (S, 1 + M, Q, lanes): weighted
    shared_shared (S, padded Q, padded Q): upper triangle of GRAM x GRAM blocks, summed over lanes, weighted
    """

    log_likelihood: FloatArray
    score: FloatArray
    own_own: FloatArray
    own_shared: FloatArray
    shared_shared: FloatArray


@compiled
def weigh(gradients: FloatArray, first: int, w: FloatArray, end: int, weighted: FloatArray) -> None:
    """Multiply GRAM rows by `w`, and leave zeros from there to cell `end`."""
    for d in range(GRAM):
        multiply_into(gradients[first + d][: w.size], w, weighted[d][: w.size])
        weighted[d][w.size : end] = 0.0


@compiled
def add_information(
    w: FloatArray,
    gradients: FloatArray,
    n_traces: int,
    lanes: int,
    by_lane: FloatArray,
    shared: FloatArray,
    weighted: FloatArray,
) -> None:
    """Add a tile to sum omega grad grad': per lane where a unit's own parameters take part, else over all lanes.

    gradients : rows of the tile by shared parameters, then by a unit's own, each filled up to a multiple of GRAM
    by_lane : (own blocks, all blocks, GRAM * GRAM * LANE_PITCH) own rows by shared and own rows, own ones in the upper
        triangle of blocks; without traces only the first row of a block, the baseline's
    shared : (padded Q, padded Q) shared rows by shared rows
    weighted : (GRAM, ROW_PITCH) scratch
    """
    n = w.size
    n_bins = n // lanes
    end = -(-n_bins // BINS_AT_ONCE) * BINS_AT_ONCE * lanes
    n_rows, n_shared = gradients.shape[0], shared.shape[0]
    if n_traces == 0:
        weighted[0][:n] = w
        weighted[0][n:end] = 0.0
        for b in range(0, n_rows, GRAM):
            add_gram_row_by_lane(weighted[0], gradients[b : b + GRAM].ravel(), n_bins, lanes, by_lane[0, b // GRAM])
    else:
        for a in range(n_shared, n_rows, GRAM):
            weigh(gradients, a, w, end, weighted)
            for b in range(0, n_rows, GRAM):
                if b < n_shared or b >= a:
                    block = gradients[b : b + GRAM].ravel()
                    sums = by_lane[(a - n_shared) // GRAM, b // GRAM]
                    add_gram_block_by_lane(weighted.ravel(), block, n_bins, lanes, sums)
    for a in range(0, n_shared, GRAM):
        weigh(gradients, a, w, n, weighted)
        for b in range(a, n_shared, GRAM):
            add_gram_block(
                weighted[0][:n], weighted[1][:n], weighted[2][:n],
                gradients[b][:n], gradients[b + 1][:n], gradients[b + 2][:n], shared[a : a + GRAM, b : b + GRAM],
            )  # fmt: skip


@compiled
def unpack(by_lane: FloatArray, padded: int, own: FloatArray, own_shared: FloatArray) -> None:
    """Take `by_lane` apart: own (1 + M, 1 + M, lanes), its upper triangle, and own_shared (1 + M, Q, lanes)."""
    n_own, n_shared, lanes = own_shared.shape
    for a in range(n_own):
        for column in range(padded + n_own):
            at = (a % GRAM * GRAM + column % GRAM) * LANE_PITCH
            found = by_lane[a // GRAM, column // GRAM, at : at + lanes]
            if column < n_shared:
                own_shared[a, column] = found
            elif column >= padded + a:
                own[a, column - padded] = found


@compiled
def add_drift(slope: FloatArray, rows: FloatArray, first_trace_row: int, n_traces: int, drift: FloatArray) -> None:
    """Add a tile to sum D f' grad, the dense part of the score where the link is not canonical."""
    n = slope.size
    add_by_lane(slope, drift[0])
    for r in range(n_traces):
        add_products_by_lane(rows[first_trace_row + r][:n], slope, drift[1 + r])
    for r in range(drift.shape[0] - 1 - n_traces):
        add_products_by_lane(rows[1 + r][:n], slope, drift[1 + n_traces + r])


@compiled
def add_events(
    link: int,
    t0: int,
    first: int,
    last: int,
    events: Events,
    bin_width: float,
    eta: FloatArray,
    rows: FloatArray,
    first_trace_row: int,
    n_traces: int,
    log_likelihood: FloatArray,
    score: FloatArray,
) -> None:
    """Add the spikes of the tile's active bins `first` to `last` to log-likelihood (lanes,) and score (q, lanes)."""
    lanes = log_likelihood.size
    log_width = math.log(bin_width)
    for active in range(first, last):
        t = events.active_bin[active] - t0
        for e in range(events.active_first[active], events.active_first[active + 1]):
            lane = events.lane_of_unit[events.unit[e]]
            if lane < 0:
                continue
            cell = t * lanes + lane
            log_likelihood[lane] += events.n_spikes[e] * (log_rate(link, eta[cell]) + log_width)
            if score.shape[0] == 0:
                continue
            pull = events.n_spikes[e] * log_rate_slope(link, eta[cell])
            score[0, lane] += pull
            for r in range(n_traces):
                score[1 + r, lane] += pull * rows[first_trace_row + r, cell]
            for r in range(score.shape[0] - 1 - n_traces):
                score[1 + n_traces + r, lane] += pull * rows[1 + r, cell]


@compiled
def sweep_block(
    link: int,
    fit_leak: bool,
    events: Events,
    dynamics: Dynamics,
    stretches: IntArray,
    block_weight: FloatArray,
    block_slot: IntArray,
    baseline: FloatArray,
    coefficient: FloatArray,
    sums: Sums,
) -> None:
    """One pass over time for one block of targets, added to `sums`.

    Parameters
    ----------
    link : code of kernelfit.engine.links
    fit_leak : carry A, the derivative by the leak rate, as last shared parameter
    stretches : (n, 3) bins [start, stop) in the sum and the block of time each belongs to
    block_weight : (G,) weight of each block of time in the information
    block_slot : (G,) slot its information is added to: one for all, or one for each
    baseline, coefficient : (lanes,) b_i; (M, lanes) after-spike coefficients
    sums : added to. A score without rows (G, 0, lanes) asks for the log-likelihood alone
    """
    lanes, n_traces = baseline.size, coefficient.shape[0]
    derivatives = sums.score.shape[1] > 0
    n_shared = sums.own_shared.shape[2]
    padded = sums.shared_shared.shape[1]
    n_own_rows = -(-(1 + n_traces) // GRAM) * GRAM
    bins_per_tile = max(1, CELLS_PER_TILE // lanes // BINS_AT_ONCE) * BINS_AT_ONCE
    cells = bins_per_tile * lanes
    canonical = is_canonical(link)

    states = States(
        np.zeros((dynamics.tables.shape[0], lanes)),
        np.zeros(lanes if derivatives and fit_leak else 0),
        np.zeros((n_traces, lanes)),
    )
    # rows: U; shared gradients; the baseline's gradient, which is 1, and the traces. Zero rows up to multiples of GRAM
    first_trace_row = 2 + padded
    rows = np.zeros((1 + padded + n_own_rows, ROW_PITCH))
    rows[1 + padded] = 1.0
    weighted = np.zeros((GRAM, ROW_PITCH))
    eta, mean, scratch = np.zeros(cells), np.zeros(cells), np.zeros(cells)
    slope, weight = np.zeros(0 if canonical else cells), np.zeros(0 if canonical else cells)
    expected = np.zeros(lanes)
    drift = np.zeros((1 + n_traces + n_shared if not canonical else 1, lanes))
    by_lane = np.zeros((n_own_rows // GRAM, (padded + n_own_rows) // GRAM, GRAM * GRAM * LANE_PITCH))
    own = np.zeros((1 + n_traces, 1 + n_traces, lanes))
    own_shared = np.zeros((1 + n_traces, n_shared, lanes))
    shared = np.zeros((padded, padded))

    active = 0
    at = events.active_bin[0] if events.active_bin.size > 0 else 0
    for s in range(stretches.shape[0]):
        start, stop, block = stretches[s, 0], stretches[s, 1], stretches[s, 2]
        active = advance(min(at, start - 1), start, active, events, dynamics, states)
        at = stop - 1
        expected[:] = 0.0
        drift[:] = 0.0
        by_lane[:] = 0.0
        shared[:] = 0.0
        for t0 in range(start, stop, bins_per_tile):
            n_bins = min(bins_per_tile, stop - t0)
            n = n_bins * lanes
            first = active
            active = fill_rows(t0, n_bins, active, events, dynamics, states, rows, first_trace_row)
            predictor_into(baseline, coefficient, rows, first_trace_row, eta[:n])
            fill_cells(link, eta[:n], dynamics.bin_width, mean[:n], slope[:n], weight[:n], scratch[:n])
            add_by_lane(mean[:n], expected)
            if derivatives:
                w = mean[:n] if canonical else weight[:n]
                add_information(w, rows[1:], n_traces, lanes, by_lane, shared, weighted)
                if not canonical:
                    add_drift(slope[:n], rows, first_trace_row, n_traces, drift)
            add_events(
                link, t0, first, active, events, dynamics.bin_width, eta, rows, first_trace_row, n_traces,
                sums.log_likelihood[block], sums.score[block],
            )  # fmt: skip

        sums.log_likelihood[block] -= expected
        if derivatives:
            unpack(by_lane, padded, own, own_shared)
            if canonical:
                sums.score[block, : 1 + n_traces] -= own[0]
                sums.score[block, 1 + n_traces :] -= own_shared[0]
            else:
                sums.score[block] -= drift
            share, slot = block_weight[block], block_slot[block]
            sums.own_own[slot] += share * own
            sums.own_shared[slot] += share * own_shared
            sums.shared_shared[slot] += share * shared
