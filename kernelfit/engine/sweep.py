"""The forward-sensitivity sweep: one pass over time gives log-likelihood, score and expected information.

The states of kernelfit.engine.states fill a tile of a few bins at a time; the tile becomes rates and is added to the
sums of MODEL.md section 4. Nothing of the length of the recording is stored. The loops know no kernel, only tables of
J(d_ij) and its derivatives; kernelfit.engine.twin says the same in plain numpy and tests hold one against the other.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.engine.arithmetic import add_by_lane, add_gram_block, add_products_by_lane, multiply_into
from kernelfit.engine.compiled import compiled
from kernelfit.engine.links import fill_cells, is_canonical, log_rate, log_rate_slope
from kernelfit.engine.states import Dynamics, Events, States, advance, fill_rows, predictor_into

CELLS_PER_TILE = 1024  # ten rows of this many doubles stay in the second cache level
GRAM = 3  # rows per side of a gram block


class Sums(NamedTuple):
    """What a sweep adds up for one block of targets. M traces, Q shared parameters, G blocks of time.

    log_likelihood (G, lanes): sum of y log mean - mean, without -log y!, not weighted
    score (G, 1 + M + Q, lanes): baseline, traces, shared; not weighted
    own_own (1 + M, 1 + M, lanes): upper triangle, weighted by block of time
    own_shared (1 + M, Q, lanes): weighted
    shared_shared (padded Q, padded Q): upper triangle of GRAM x GRAM blocks, summed over lanes, weighted
    """

    log_likelihood: FloatArray
    score: FloatArray
    own_own: FloatArray
    own_shared: FloatArray
    shared_shared: FloatArray


@compiled
def add_information(
    w: FloatArray,
    rows: FloatArray,
    first_trace_row: int,
    cross: FloatArray,
    own: FloatArray,
    own_shared: FloatArray,
    shared: FloatArray,
    weighted: FloatArray,
) -> None:
    """Add a tile to sum omega grad grad': per lane where a unit's own parameters take part, else over all lanes."""
    n = w.size
    n_traces, n_shared = own_shared.shape[0], own_shared.shape[1]
    add_by_lane(w, cross[0])
    for r in range(n_traces):
        add_products_by_lane(rows[first_trace_row + r][:n], w, cross[1 + r])
    for r in range(n_shared):
        add_products_by_lane(rows[1 + r][:n], w, cross[1 + n_traces + r])
    for a in range(n_traces):
        multiply_into(rows[first_trace_row + a][:n], w, weighted[0][:n])
        for b in range(a, n_traces):
            add_products_by_lane(rows[first_trace_row + b][:n], weighted[0][:n], own[a, b])
        for b in range(n_shared):
            add_products_by_lane(rows[1 + b][:n], weighted[0][:n], own_shared[a, b])
    for a in range(0, n_shared, GRAM):
        for d in range(GRAM):
            multiply_into(rows[1 + a + d][:n], w, weighted[d][:n])
        for b in range(a, n_shared, GRAM):
            add_gram_block(
                weighted[0][:n], weighted[1][:n], weighted[2][:n], rows[1 + b][:n], rows[2 + b][:n], rows[3 + b][:n],
                shared[a : a + GRAM, b : b + GRAM],
            )  # fmt: skip


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
    baseline, coefficient : (lanes,) b_i; (M, lanes) after-spike coefficients
    sums : added to. A score without rows (G, 0, lanes) asks for the log-likelihood alone
    """
    lanes, n_traces = baseline.size, coefficient.shape[0]
    derivatives = sums.score.shape[1] > 0
    n_shared = sums.own_shared.shape[1]
    padded = sums.shared_shared.shape[0]
    bins_per_tile = max(4, CELLS_PER_TILE // lanes // 4 * 4)
    cells = bins_per_tile * lanes
    canonical = is_canonical(link)

    states = States(
        np.zeros((dynamics.tables.shape[0], lanes)),
        np.zeros(lanes if derivatives and fit_leak else 0),
        np.zeros((n_traces, lanes)),
    )
    first_trace_row = 1 + padded  # rows: U, shared gradients, zero rows up to a multiple of GRAM, traces
    rows = np.zeros((first_trace_row + n_traces, cells))
    weighted = np.zeros((GRAM, cells))
    eta, mean, scratch = np.zeros(cells), np.zeros(cells), np.zeros(cells)
    slope, weight = np.zeros(0 if canonical else cells), np.zeros(0 if canonical else cells)
    expected = np.zeros(lanes)
    cross = np.zeros((1 + n_traces + n_shared, lanes))  # sum of omega * gradient, baseline first
    drift = np.zeros((1 + n_traces + n_shared if not canonical else 1, lanes))
    own = np.zeros((n_traces, n_traces, lanes))
    own_shared = np.zeros((n_traces, n_shared, lanes))
    shared = np.zeros((padded, padded))

    active = 0
    at = events.active_bin[0] if events.active_bin.size > 0 else 0
    for s in range(stretches.shape[0]):
        start, stop, block = stretches[s, 0], stretches[s, 1], stretches[s, 2]
        active = advance(min(at, start - 1), start, active, events, dynamics, states)
        at = stop - 1
        expected[:] = 0.0
        cross[:] = 0.0
        drift[:] = 0.0
        own[:] = 0.0
        own_shared[:] = 0.0
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
                add_information(w, rows, first_trace_row, cross, own, own_shared, shared, weighted)
                if not canonical:
                    add_drift(slope[:n], rows, first_trace_row, n_traces, drift)
            add_events(
                link, t0, first, active, events, dynamics.bin_width, eta, rows, first_trace_row, n_traces,
                sums.log_likelihood[block], sums.score[block],
            )  # fmt: skip

        sums.log_likelihood[block] -= expected
        if derivatives:
            sums.score[block] -= cross if canonical else drift
            share = block_weight[block]
            sums.own_own[0] += share * cross[: 1 + n_traces]
            sums.own_own[1:, 1:] += share * own
            sums.own_shared[0] += share * cross[1 + n_traces :]
            sums.own_shared[1:] += share * own_shared
            sums.shared_shared[:] += share * shared
