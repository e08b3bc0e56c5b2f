"""Evaluate the model at one point: blocks of target units in threads, reduced in a fixed order.

Targets are independent given the spikes, so each block of targets is one sweep of its own. How units fall into blocks
depends on their number alone, so results are the same to the bit for any number of threads.
"""

from __future__ import annotations

import itertools
import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import TypeVar

import numpy as np
from scipy.special import gammaln

from kernelfit._typing import FloatArray, IntArray
from kernelfit.engine.arithmetic import GRAM, LANE_PITCH
from kernelfit.engine.compensate import compensate_block, rates_block
from kernelfit.engine.compensator import Compensator
from kernelfit.engine.states import Dynamics, Events
from kernelfit.engine.sweep import Sums, sweep_block
from kernelfit.recording.grid import Grid

VECTOR = 8  # lanes come in multiples of one vector register of doubles
LANES_PER_BLOCK = LANE_PITCH  # measured: narrower blocks cost more a cell, wider ones leave threads idle

T = TypeVar("T")


@dataclass(frozen=True, eq=False)
class SweepData:
    """What a sweep needs of a recording: events by bin, the stretches in the sum, the units explained.

    Parameters
    ----------
    bin_width : seconds
    n_units : units of the recording, sources all of them
    targets : (n_targets,) unit indices whose spikes are explained, ascending
    active_bin : (A,) bins holding a spike; active_first : (A + 1,) first event of each
    event_unit, event_count : (E,) source unit and spikes
    stretches : (S, 2) bins [start, stop) in the sum
    log_factorials : sum of log y! over the targets' bins in the sum
    counts : (n_targets,) spikes of each target in the sum
    """

    bin_width: float
    n_units: int
    targets: IntArray
    active_bin: IntArray = field(repr=False)
    active_first: IntArray = field(repr=False)
    event_unit: IntArray = field(repr=False)
    event_count: FloatArray = field(repr=False)
    stretches: IntArray = field(repr=False)
    log_factorials: float
    counts: IntArray = field(repr=False)

    @classmethod
    def from_grid(cls, grid: Grid, targets: IntArray) -> SweepData:
        """The data of `grid` with these targets."""
        active_bin, first = np.unique(grid.event_bin, return_index=True)
        is_target = np.zeros(grid.n_units, dtype=bool)
        is_target[targets] = True
        summed = grid.bins_in_sum(grid.event_bin) & is_target[grid.event_unit]
        return cls(
            bin_width=grid.bin_width,
            n_units=grid.n_units,
            targets=np.asarray(targets, dtype=np.int64),
            active_bin=active_bin,
            active_first=np.append(first, grid.event_bin.size).astype(np.int64),
            event_unit=grid.event_unit,
            event_count=grid.event_count.astype(np.float64),
            stretches=grid.stretches,
            log_factorials=float(np.sum(gammaln(grid.event_count[summed] + 1.0))),
            counts=grid.counts_in_sum[targets],
        )

    @property
    def n_targets(self) -> int:
        """Units explained."""
        return int(self.targets.size)

    @property
    def n_bins(self) -> int:
        """Bins in the sum."""
        return int(np.sum(self.stretches[:, 1] - self.stretches[:, 0]))

    @property
    def n_spikes(self) -> int:
        """Spikes of the targets in the sum."""
        return int(self.counts.sum())


@dataclass(frozen=True, eq=False)
class Point:
    """Where the model is evaluated. Axes: tables, source units, targets.

    Parameters
    ----------
    link : code of kernelfit.engine.links
    leak : alpha, 1/s
    fit_leak : whether alpha is a parameter, the last shared one
    tables : (1 + K, n_units, n_targets) J of each pair, then its derivatives by the shared parameters
    baseline : (n_targets,) b_i
    trace_decay : (M,) decay per bin of each after-spike trace
    coefficient : (M, n_targets) after-spike coefficients
    """

    link: int
    leak: float
    fit_leak: bool
    tables: FloatArray
    baseline: FloatArray
    trace_decay: FloatArray
    coefficient: FloatArray

    @property
    def n_shared(self) -> int:
        """Shared parameters: the coupling's, then alpha where it is fitted."""
        return int(self.tables.shape[0]) - 1 + int(self.fit_leak)


@dataclass(frozen=True, eq=False)
class TimeBlocks:
    """The sum cut into blocks of time: stretches (n, 3) of [start, stop, block], and each block's length in bins."""

    stretches: IntArray
    n_bins: IntArray

    @property
    def n_blocks(self) -> int:
        """Number of blocks."""
        return int(self.n_bins.size)

    def split(self, parts: int) -> TimeBlocks:
        """Each block cut into `parts` nearly equal ones, or as many as it has bins where that is less for any."""
        parts = max(1, min(parts, int(self.n_bins.min(initial=parts))))
        rows: list[tuple[int, int, int]] = []
        done = np.zeros(self.n_blocks, dtype=np.int64)
        edges = self.n_bins[:, None] * np.arange(1, parts + 1) // parts
        for start, stop, block in self.stretches:
            at = int(start)
            while at < stop:
                part = int(np.searchsorted(edges[block], done[block], side="right"))
                end = min(int(stop), at + int(edges[block, part] - done[block]))
                rows.append((at, end, int(block) * parts + part))
                done[block] += end - at
                at = end
        return TimeBlocks(np.array(rows, dtype=np.int64).reshape(-1, 3), np.diff(edges, prepend=0, axis=1).ravel())

    def join(self, size: int) -> TimeBlocks:
        """Each `size` neighbouring blocks as one; what is left over at the end stands alone."""
        stretches = self.stretches.copy()
        stretches[:, 2] //= size
        return TimeBlocks(stretches, np.add.reduceat(self.n_bins, np.arange(0, self.n_blocks, size)))


@dataclass(frozen=True, eq=False)
class Evaluation:
    """Sums over time at one point. G blocks of time, n targets, M traces, Q shared parameters; nats and per parameter.

    log_likelihood (G, n), without -log y!; score (G, n, 1 + M + Q), baseline, traces, shared; own_own (n, 1 + M, 1 +
    M); own_shared (n, 1 + M, Q); shared_shared (Q, Q). Information by parts of time has a leading axis. Without
    derivatives all but the first are empty.
    """

    log_likelihood: FloatArray
    score: FloatArray
    own_own: FloatArray
    own_shared: FloatArray
    shared_shared: FloatArray


def whole(data: SweepData) -> TimeBlocks:
    """All of the sum as one block of time."""
    stretches = np.column_stack([data.stretches, np.zeros(len(data.stretches), dtype=np.int64)])
    return TimeBlocks(np.ascontiguousarray(stretches), np.array([data.n_bins], dtype=np.int64))


def lane_blocks(n_targets: int) -> list[slice]:
    """Slices of targets swept together: about LANES_PER_BLOCK each, two at least from 16 targets on."""
    groups = -(-n_targets // VECTOR)
    n_blocks = min(groups, max(-(-n_targets // LANES_PER_BLOCK), 2 if n_targets >= 2 * VECTOR else 1))
    edges = [VECTOR * (groups * k // n_blocks) for k in range(n_blocks)] + [n_targets]
    return [slice(a, b) for a, b in itertools.pairwise(edges)]


def _in_threads(work: Callable[[slice], T], slices: list[slice], threads: int | None) -> list[T]:
    n_threads = min(len(slices), threads or os.cpu_count() or 1)
    if n_threads == 1:
        return [work(part) for part in slices]
    with ThreadPoolExecutor(n_threads) as pool:
        return list(pool.map(work, slices))


def _events(data: SweepData, part: slice) -> Events:
    lane = np.full(data.n_units, -1, dtype=np.int64)
    units = data.targets[part]
    lane[units] = np.arange(units.size)
    return Events(data.active_bin, data.active_first, data.event_unit, data.event_count, lane)


def _dynamics(data: SweepData, point: Point, part: slice, n_tables: int) -> Dynamics:
    tables = np.ascontiguousarray(point.tables[:n_tables, :, part])
    return Dynamics(float(point.leak), float(data.bin_width), point.trace_decay, tables)


def evaluate(
    data: SweepData,
    point: Point,
    *,
    derivatives: bool = True,
    blocks: TimeBlocks | None = None,
    block_weight: FloatArray | None = None,
    information_slot: IntArray | None = None,
    threads: int | None = None,
) -> Evaluation:
    """Log-likelihood, and with `derivatives` score and expected information, at one point.

    Parameters
    ----------
    data, point : the recording's counts and where to evaluate
    derivatives : False for the log-likelihood alone, several times cheaper
    blocks : blocks of time to keep apart in log-likelihood and score; None: one
    block_weight : (n_blocks,) weight of each block in the information; log-likelihood and score come by block,
        unweighted
    information_slot : (n_blocks,) part of the information that each block is added to, parts numbered from 0, where
        it is to be kept by parts of time; None: all together
    threads : at most this many; None: as many as the machine has. The result does not depend on it

    Returns
    -------
    Evaluation
    """
    blocks = whole(data) if blocks is None else blocks
    weight = np.ones(blocks.n_blocks) if block_weight is None else np.ascontiguousarray(block_weight, dtype=np.float64)
    n_own = 1 + point.trace_decay.size
    n_shared = point.n_shared if derivatives else 0
    padded = -(-n_shared // GRAM) * GRAM
    n_rows = n_own + n_shared if derivatives else 0
    n_tables = point.tables.shape[0] if derivatives else 1
    by_part = information_slot is not None
    slot = np.zeros(blocks.n_blocks, dtype=np.int64) if information_slot is None else np.asarray(information_slot)
    n_slots = int(slot.max(initial=0)) + 1

    def sweep(part: slice) -> Sums:
        lanes = data.targets[part].size
        sums = Sums(
            np.zeros((blocks.n_blocks, lanes)),
            np.zeros((blocks.n_blocks, n_rows, lanes)),
            np.zeros((n_slots, n_own, n_own, lanes)),
            np.zeros((n_slots, n_own, n_shared, lanes)),
            np.zeros((n_slots, padded, padded)),
        )
        sweep_block(
            point.link, point.fit_leak, _events(data, part), _dynamics(data, point, part, n_tables),
            blocks.stretches, weight, slot,
            np.ascontiguousarray(point.baseline[part]), np.ascontiguousarray(point.coefficient[:, part]), sums,
        )  # fmt: skip
        return sums

    parts = _in_threads(sweep, lane_blocks(data.n_targets), threads)
    log_likelihood = np.concatenate([p.log_likelihood for p in parts], axis=1)
    if not derivatives:
        nothing = np.empty((0, 0, 0))
        return Evaluation(log_likelihood, nothing, nothing, nothing, np.empty((0, 0)))
    own = np.triu(np.concatenate([np.moveaxis(p.own_own, -1, 1) for p in parts], axis=1))
    own_shared = np.concatenate([np.moveaxis(p.own_shared, -1, 1) for p in parts], axis=1)
    shared = np.zeros((n_slots, n_shared, n_shared))
    for p in parts:  # in the order of the targets, whichever thread came first
        shared += np.triu(p.shared_shared[:, :n_shared, :n_shared])
    own += np.swapaxes(np.triu(own, 1), -1, -2)
    shared += np.swapaxes(np.triu(shared, 1), -1, -2)
    return Evaluation(
        log_likelihood=log_likelihood,
        score=np.concatenate([np.moveaxis(p.score, -1, 1) for p in parts], axis=1),
        own_own=own if by_part else own[0],
        own_shared=own_shared if by_part else own_shared[0],
        shared_shared=shared if by_part else shared[0],
    )


def compensate(data: SweepData, point: Point, *, threads: int | None = None) -> Compensator:
    """Expected counts up to and in every bin of the sum that holds a spike, by unit and for all targets together."""
    stretches = whole(data).stretches
    n_events, n_active = data.event_unit.size, data.active_bin.size

    def sweep(part: slice) -> tuple[FloatArray, ...]:
        lanes = data.targets[part].size
        before, within = np.full(n_events, np.nan), np.full(n_events, np.nan)
        pooled_before, pooled_within, so_far = np.zeros(n_active), np.zeros(n_active), np.zeros(lanes)
        compensate_block(
            point.link, _events(data, part), _dynamics(data, point, part, 1), stretches,
            np.ascontiguousarray(point.baseline[part]), np.ascontiguousarray(point.coefficient[:, part]),
            before, within, pooled_before, pooled_within, so_far,
        )  # fmt: skip
        return before, within, pooled_before, pooled_within, so_far

    slices = lane_blocks(data.n_targets)
    parts = _in_threads(sweep, slices, threads)
    before, within = parts[0][0], parts[0][1]
    for other in parts[1:]:
        filled = ~np.isnan(other[0])
        before[filled], within[filled] = other[0][filled], other[1][filled]
    pooled_before, pooled_within = sum(p[2] for p in parts), sum(p[3] for p in parts)
    total = np.zeros(data.n_units)
    total[data.targets] = np.concatenate([p[4] for p in parts])

    summed = ~np.isnan(before)
    order = np.flatnonzero(summed)[np.lexsort((before[summed], data.event_unit[summed]))]
    active_of_event = np.repeat(np.arange(n_active), np.diff(data.active_first))
    pooled_count = np.bincount(active_of_event[summed], weights=data.event_count[summed], minlength=n_active).astype(
        np.int64
    )
    holds = pooled_count > 0
    return Compensator(
        unit=data.event_unit[order].astype(np.int32),
        before=before[order],
        within=within[order],
        count=data.event_count[order].astype(np.int64),
        total=total,
        pooled_before=np.asarray(pooled_before)[holds],
        pooled_within=np.asarray(pooled_within)[holds],
        pooled_count=pooled_count[holds],
        pooled_total=float(total.sum()),
    )


def expected_counts(
    data: SweepData, point: Point, first_bin: int, n_bins: int, *, threads: int | None = None
) -> FloatArray:
    """(n_bins, n_targets) expected counts in the bins from `first_bin` on, whether they are in the sum or not."""

    def sweep(part: slice) -> FloatArray:
        mean = np.zeros((n_bins, data.targets[part].size))
        rates_block(
            point.link, _events(data, part), _dynamics(data, point, part, 1), first_bin,
            np.ascontiguousarray(point.baseline[part]), np.ascontiguousarray(point.coefficient[:, part]), mean,
        )  # fmt: skip
        return mean

    return np.concatenate(_in_threads(sweep, lane_blocks(data.n_targets), threads), axis=1)
