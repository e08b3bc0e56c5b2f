"""What the sweep carries from bin to bin, and how it moves: the recursions of docs/model.md sections 3 and 4.

A block of target units ("lanes") is swept at a time. `States.coupling` holds U and its derivatives P_k just after a
bin's spikes were added; the next bin starts by decaying them. Named tuples, because compiled code takes them apart for
nothing.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.engine.compiled import compiled, inlined

NO_BIN = -(2**62)  # stands for the next active bin where there is none; no timeline reaches it

_U = np.uint64(0)  # row of U in States.coupling and in a tile


class Events(NamedTuple):
    """Non-empty (bin, unit) of a recording by bin, and which units are lanes of this block.

    active_bin (A,) bins that hold a spike; active_first (A + 1,) their first row in unit and count; unit (E,) source
    index;
    n_spikes (E,) spikes; lane_of_unit (n_units,) lane, or -1 where the unit is not a target of this block.
    """

    active_bin: IntArray
    active_first: IntArray
    unit: IntArray
    n_spikes: FloatArray
    lane_of_unit: IntArray


class Dynamics(NamedTuple):
    """leak (1/s), bin_width (s), trace_decay (M,) decay per bin of each after-spike trace, tables (1 + K, n_units,
    lanes):
    the jump of U, then of each P_k, that a spike of the unit causes in the lane."""

    leak: float
    bin_width: float
    trace_decay: FloatArray
    tables: FloatArray


class States(NamedTuple):
    """coupling (1 + K, lanes): U and P_k; leak (lanes,) or empty: A = dU/dalpha; traces (M, lanes): own
    after-spike traces."""

    coupling: FloatArray
    leak: FloatArray
    traces: FloatArray


@compiled
def decay(n_bins: int, dynamics: Dynamics, states: States) -> None:
    """Let the states run `n_bins` bins without a spike: U by gamma^g, A to gamma^g (A - g D U), traces by their
    own decay."""
    factor = math.exp(-dynamics.leak * dynamics.bin_width * n_bins)
    u = states.coupling[0]
    for i in range(states.leak.size):
        states.leak[i] = factor * (states.leak[i] - n_bins * dynamics.bin_width * u[i])
    for k in range(states.coupling.shape[0]):
        row = states.coupling[k]
        for i in range(row.size):
            row[i] *= factor
    for m in range(states.traces.shape[0]):
        row = states.traces[m]
        factor = dynamics.trace_decay[m] ** n_bins
        for i in range(row.size):
            row[i] *= factor


@inlined
def jump(active: int, events: Events, dynamics: Dynamics, states: States) -> None:
    """Add the spikes of one active bin to the states: a row of each table per source, and one to own traces."""
    for e in range(events.active_first[active], events.active_first[active + 1]):
        unit = events.unit[e]
        count = events.n_spikes[e]
        for k in range(states.coupling.shape[0]):
            row = states.coupling[k]
            jumps = dynamics.tables[k, unit]
            for i in range(row.size):
                row[i] += count * jumps[i]
        lane = events.lane_of_unit[unit]
        if lane >= 0:
            for m in range(states.traces.shape[0]):
                states.traces[m, lane] += count


@compiled
def advance(at: int, stop: int, active: int, events: Events, dynamics: Dynamics, states: States) -> int:
    """Carry the states from bin `at` to bin `stop - 1`, spikes on the way included; returns the next active bin's
    index."""
    while active < events.active_bin.size and events.active_bin[active] < stop:
        decay(events.active_bin[active] - at, dynamics, states)
        at = events.active_bin[active]
        jump(active, events, dynamics, states)
        active += 1
    if stop - 1 > at:
        decay(stop - 1 - at, dynamics, states)
    return active


@inlined
def fill_rows(
    t0: int,
    n_bins: int,
    active: int,
    events: Events,
    dynamics: Dynamics,
    states: States,
    rows: FloatArray,
    first_trace_row: int,
) -> int:
    """Fill a tile of `n_bins` bins from bin `t0` on with the states (rows U, P_k, A; then the traces).

    Each bin decays every state, writes it into its row of the tile and then adds the bin's own spikes. Returns the next
    active bin's index. The decay is written out here: a call a bin would cost as much as the bin.
    """
    gamma = math.exp(-dynamics.leak * dynamics.bin_width)
    width = dynamics.bin_width
    coupling, leak, traces, trace_decay = states.coupling, states.leak, states.traces, dynamics.trace_decay
    lanes = coupling.shape[1]
    next_bin = events.active_bin[active] if active < events.active_bin.size else NO_BIN
    n_lanes, n_coupling = np.uint64(lanes), np.uint64(coupling.shape[0])  # unsigned: see kernelfit.engine.arithmetic
    trace_row = np.uint64(first_trace_row)
    for t in range(n_bins):
        at = np.uint64(t) * n_lanes
        for k in range(n_coupling):
            for i in range(n_lanes):
                now = gamma * coupling[k, i]
                coupling[k, i] = now
                rows[k, at + i] = now
        for i in range(np.uint64(leak.size)):
            now = gamma * leak[i] - width * coupling[_U, i]
            leak[i] = now
            rows[n_coupling, at + i] = now
        for m in range(np.uint64(traces.shape[0])):
            g = trace_decay[m]
            for i in range(n_lanes):
                now = g * traces[m, i]
                traces[m, i] = now
                rows[trace_row + m, at + i] = now
        if next_bin == t0 + t:
            jump(active, events, dynamics, states)
            active += 1
            next_bin = events.active_bin[active] if active < events.active_bin.size else NO_BIN
    return active


@inlined
def predictor_into(
    baseline: FloatArray, coefficient: FloatArray, rows: FloatArray, first_trace_row: int, eta: FloatArray
) -> None:
    """eta = b + U + sum_m c_m S_m over a tile; coefficient (M, lanes)."""
    lanes, trace_row = np.uint64(baseline.size), np.uint64(first_trace_row)
    for at in range(np.uint64(0), np.uint64(eta.size), lanes):
        for i in range(lanes):
            eta[at + i] = baseline[i] + rows[_U, at + i]
        for m in range(np.uint64(coefficient.shape[0])):
            for i in range(lanes):
                eta[at + i] += coefficient[m, i] * rows[trace_row + m, at + i]
