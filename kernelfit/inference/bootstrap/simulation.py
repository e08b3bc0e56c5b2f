"""A recording drawn from a fitted model on the windows of the one that was made.

What the fit takes as given is given here too: spikes of source-only units, and spikes before and between windows. All
other spikes are drawn, bin by bin, in the windows less their exclusions, warm-up included.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.engine.simulate import CHUNK_BINS, MOST_PER_BIN, step_bins
from kernelfit.errors import SimulationError
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.recording.grid import Grid, make_grid
from kernelfit.recording.recording import Recording

ROOM = 4096  # events per call of the compiled loop, at least


def live_stretches(recording: Recording, bin_width: float) -> IntArray:
    """(S, 2) bins [start, stop) in which the recording was on: windows less exclusions."""
    return make_grid(recording, bin_width).stretches


def simulate_grid(problem: Problem, estimate: Estimate, live: IntArray, rng: np.random.Generator) -> Grid:
    """Counts of a recording drawn from the model at an estimate.

    Parameters
    ----------
    problem : the model on the recording that was made
    estimate : its parameters
    live : (S, 2) bins [start, stop) to draw spikes in
    rng : one uniform number for each target and bin drawn, in order of time

    Raises
    ------
    SimulationError : a unit is about to fire more than five times in a bin: the network has exploded
    """
    grid, targets = problem.grid, problem.data.targets
    is_target = np.zeros(grid.n_units, dtype=bool)
    is_target[targets] = True
    given = ~(is_target[grid.event_unit] & _inside(live, grid.event_bin))
    bins, units, counts = grid.event_bin[given], grid.event_unit[given], grid.event_count[given]
    walk = _Walk(problem, estimate, live, rng, at=int(min(live[0, 0], bins.min(initial=live[0, 0]))))
    active, first = np.unique(bins, return_index=True)
    for k, (start, stop) in enumerate(itertools.pairwise([*first, bins.size])):
        walk.advance(int(active[k]) + 1)
        walk.receive(units[start:stop], counts[start:stop])
    walk.advance(int(live[-1, 1]))
    return _with_events(
        grid,
        np.concatenate([bins, *walk.bins]),
        np.concatenate([units, *(targets[lanes] for lanes in walk.lanes)]),
        np.concatenate([counts, *walk.counts]),
    )


def _inside(stretches: IntArray, bins: IntArray) -> BoolArray:
    k = np.searchsorted(stretches[:, 0], bins, side="right") - 1
    return np.asarray((k >= 0) & (bins < stretches[np.maximum(k, 0), 1]), dtype=bool)


def _with_events(grid: Grid, bins: IntArray, units: IntArray, counts: IntArray) -> Grid:
    order = np.lexsort((units, bins))
    summed = grid.bins_in_sum(bins)
    in_sum = np.bincount(units[summed], weights=counts[summed], minlength=grid.n_units).astype(np.int64)
    return replace(
        grid, event_bin=bins[order], event_unit=units[order], event_count=counts[order], counts_in_sum=in_sum
    )


@dataclass(eq=False)
class _Walk:
    """The state of the targets (lanes) on the way through the timeline; `at` is the next bin."""

    problem: Problem
    estimate: Estimate
    live: IntArray
    rng: np.random.Generator
    at: int

    def __post_init__(self) -> None:
        problem, estimate = self.problem, self.estimate
        targets = problem.data.targets
        self.table: FloatArray = problem.tables(estimate.shared)[0]  # jump by source unit and target lane
        self.lane = np.full(problem.data.n_units, -1, dtype=np.int64)
        self.lane[targets] = np.arange(targets.size)
        self.between: FloatArray = np.ascontiguousarray(self.table[targets])
        self.leak = problem.leak(estimate.shared)
        self.baseline: FloatArray = np.ascontiguousarray(estimate.own[:, 0])
        self.coefficient: FloatArray = np.ascontiguousarray(estimate.own[:, 1:].T)
        self.state: FloatArray = np.zeros(targets.size)
        self.traces: FloatArray = np.zeros((problem.trace_decay.size, targets.size))
        self.bins: list[IntArray] = []
        self.lanes: list[IntArray] = []
        self.counts: list[IntArray] = []

    def advance(self, to: int) -> None:
        """Up to, not including, bin `to`: draw where the recording was on, let the state decay elsewhere."""
        while self.at < to:
            k = int(np.searchsorted(self.live[:, 1], self.at, side="right"))  # the stretch here, or the next one
            start, stop = self.live[k] if k < len(self.live) else (to, to)
            if self.at < start:
                self._rest(min(to, int(start)))
            else:
                self._run(min(to, int(stop)))

    def receive(self, units: IntArray, counts: IntArray) -> None:
        """Given spikes, in the bin just passed."""
        self.state += counts @ self.table[units]
        own = self.lane[units] >= 0
        self.traces[:, self.lane[units[own]]] += counts[own]

    def _rest(self, to: int) -> None:
        n_bins = to - self.at
        self.state *= np.exp(-self.leak * self.problem.data.bin_width * n_bins)
        self.traces *= self.problem.trace_decay[:, None] ** n_bins
        self.at = to

    def _run(self, to: int) -> None:
        n = self.baseline.size
        room = max(ROOM, 4 * n)
        while self.at < to:
            uniform = self.rng.random((min(CHUNK_BINS, to - self.at), n))
            course = np.zeros(len(uniform))
            done = 0
            while done < len(uniform):
                bins, lanes, counts = (np.empty(room, dtype=np.int64) for _ in range(3))
                n_bins, filled = step_bins(
                    self.problem.model.link.code, self.problem.data.bin_width, self.leak, self.baseline, self.between,
                    self.problem.trace_decay, self.coefficient, self.state, self.traces, course[done:],
                    uniform[done:], MOST_PER_BIN, bins, lanes, counts, 0,
                )  # fmt: skip
                if n_bins < 0:
                    raise SimulationError(
                        f"the simulated network exploded: a unit was about to fire more than {MOST_PER_BIN:g} times in "
                        f"a bin of {1000 * self.problem.data.bin_width:g} ms"
                    )
                self.bins.append(bins[:filled] + self.at + done)
                self.lanes.append(lanes[:filled])
                self.counts.append(counts[:filled])
                done += n_bins
            self.at += len(uniform)
