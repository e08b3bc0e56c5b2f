"""Recordings drawn from a fit: against the engine's simulator, and against a plain walk through every bin."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from worlds import array, model, simulated

import kernelfit as kf
from kernelfit.engine.simulate import simulate_counts
from kernelfit.errors import SimulationError
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.inference.bootstrap.simulation import live_stretches, simulate_grid

BIN_S = 0.01
AFTER_SPIKE = kf.terms.AfterSpike(time_constants_s=(0.02, 0.2))


def estimate_of(problem, *, amplitude=0.3, length_um=120.0, leak=40.0, seed=0):
    rng = np.random.default_rng(seed)
    own = np.zeros((problem.data.n_targets, 1 + problem.trace_decay.size))
    own[:, 0] = np.log(rng.uniform(4.0, 8.0, len(own)))
    own[:, 1:] = rng.uniform(-0.5, 0.2, own[:, 1:].shape)
    return Estimate(own, np.array([amplitude, np.log(length_um), np.log(leak)]))


def pairs_of(grid):
    return np.column_stack([grid.event_bin, grid.event_unit, grid.event_count])


def test_one_window_is_what_the_simulator_gives():
    recording = simulated(1, duration_s=20.0, bin_s=BIN_S)
    problem = make_problem(model(bin_s=BIN_S, after_spike=AFTER_SPIKE), recording)
    estimate = estimate_of(problem)
    grid = simulate_grid(problem, estimate, live_stretches(recording, BIN_S), np.random.default_rng(5))
    bins, units, counts = simulate_counts(
        problem.model.link, BIN_S, 40.0, estimate.own[:, 0], problem.tables(estimate.shared)[0], problem.data.n_bins,
        np.random.default_rng(5), trace_decay=problem.trace_decay, coefficient=estimate.own[:, 1:].T.copy(),
    )  # fmt: skip
    np.testing.assert_array_equal(pairs_of(grid), np.column_stack([bins, units, counts]))
    assert grid.counts_in_sum.sum() == counts.sum() > 500


def patchy():
    """Three windows with gaps, spikes in the gaps, an exclusion, a source-only unit and a silent one."""
    base = simulated(2, duration_s=30.0, bin_s=BIN_S)
    trains = {unit: base.spike_times(unit) for unit in base.unit_ids}
    trains[base.unit_ids[4]] = trains[base.unit_ids[4]][trains[base.unit_ids[4]] < 2.0]  # only before the first window
    recording = kf.Recording.from_arrays(trains, array(), [(3.0, 10.0), (12.0, 12.5), (20.0, 29.0)])
    recording = replace(recording, exclusion_bounds=np.array([[5.0, 5.3], [24.0, 26.0]]))
    return recording.select(source_only=[recording.unit_ids[0]])


def walk(problem, estimate, live, rng):
    """The same, bin by bin over the whole timeline."""
    grid, targets = problem.grid, problem.data.targets
    table, gamma = problem.tables(estimate.shared)[0], np.exp(-problem.leak(estimate.shared) * BIN_S)
    is_live = np.zeros(live[-1, 1], dtype=bool)
    for start, stop in live:
        is_live[start:stop] = True
    given = {}
    for t, unit, count in pairs_of(grid):
        if unit not in targets or t < 0 or t >= is_live.size or not is_live[t]:
            given.setdefault(int(t), []).append((unit, count))
    state, traces = np.zeros(targets.size), np.zeros((problem.trace_decay.size, targets.size))
    events = []
    for t in range(min([0, *given]), is_live.size):
        state, traces = gamma * state, problem.trace_decay[:, None] * traces
        here = list(given.get(t, []))
        if t >= 0 and is_live[t]:
            mean = BIN_S * np.exp(estimate.own[:, 0] + state + np.sum(estimate.own[:, 1:].T * traces, axis=0))
            for lane, (m, u) in enumerate(zip(mean, rng.random(targets.size), strict=True)):
                count, term = 0, np.exp(-m)
                while u >= term:
                    u, count = u - term, count + 1
                    term *= m / count
                if count:
                    here.append((targets[lane], count))
        for unit, count in sorted(here):
            events.append((t, unit, count))
            state = state + count * table[unit]
            if unit in targets:
                traces[:, targets == unit] += count
    return np.array(events)


def test_windows_gaps_exclusions_and_given_spikes():
    recording = patchy()
    problem = make_problem(model(bin_s=BIN_S, after_spike=AFTER_SPIKE, warm_up_s=0.5), recording)
    estimate, live = estimate_of(problem), live_stretches(recording, BIN_S)
    grid = simulate_grid(problem, estimate, live, np.random.default_rng(8))
    want = walk(problem, estimate, live, np.random.default_rng(8))
    np.testing.assert_array_equal(pairs_of(grid), want)
    # what is given stays: the source-only unit's spikes, and the unit that fires before the first window alone
    for unit in (0, 4):
        before, after = pairs_of(problem.grid), pairs_of(grid)
        np.testing.assert_array_equal(before[before[:, 1] == unit], after[after[:, 1] == unit])
    assert np.isin([0, 4], grid.event_unit).all()
    assert not np.isin([0, 4], problem.data.targets).any()
    # nothing is drawn where the recording was off
    new = pairs_of(grid)[np.isin(grid.event_unit, problem.data.targets)]
    old = pairs_of(problem.grid)
    old = {tuple(row) for row in old[np.isin(old[:, 1], problem.data.targets)]}
    off = [row for row in new if not any(a <= row[0] < b for a, b in live)]
    assert off
    assert {tuple(row) for row in off} <= old
    # counts in the sum are those of its bins
    inside = grid.bins_in_sum(grid.event_bin)
    want_counts = np.bincount(grid.event_unit[inside], weights=grid.event_count[inside], minlength=grid.n_units)
    np.testing.assert_array_equal(grid.counts_in_sum, want_counts)


def test_the_same_numbers_give_the_same_recording_and_others_another():
    recording = patchy()
    problem = make_problem(model(bin_s=BIN_S), recording)
    estimate, live = estimate_of(problem), live_stretches(recording, BIN_S)
    first, again, other = (
        pairs_of(simulate_grid(problem, estimate, live, np.random.default_rng(seed))) for seed in (1, 1, 2)
    )
    np.testing.assert_array_equal(first, again)
    assert first.shape != other.shape or (first != other).any()


def test_an_explosion_is_an_error():
    recording = simulated(1, duration_s=20.0, bin_s=BIN_S)
    problem = make_problem(model(bin_s=BIN_S), recording)
    live = live_stretches(recording, BIN_S)
    with pytest.raises(SimulationError, match="exploded"):
        simulate_grid(problem, estimate_of(problem, amplitude=3.0), live, np.random.default_rng(0))
