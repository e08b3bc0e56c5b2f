"""The sweep again in plain numpy, one bin at a time: slow, short, and what the compiled loops are held against."""

from __future__ import annotations

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.engine.evaluate import Evaluation, Point, SweepData, TimeBlocks


def dense_counts(data: SweepData) -> tuple[int, FloatArray]:
    """First bin and (n_bins, n_units) counts from the first event or stretch to the last bin of the sum."""
    first = int(min(data.stretches[0, 0], data.active_bin.min(initial=data.stretches[0, 0])))
    counts = np.zeros((int(data.stretches[-1, 1]) - first, data.n_units))
    bins = np.repeat(data.active_bin, np.diff(data.active_first)) - first
    inside = bins < counts.shape[0]
    counts[bins[inside], data.event_unit[inside]] = data.event_count[inside]
    return first, counts


def dense_gradients(data: SweepData, point: Point) -> tuple[int, IntArray, FloatArray, FloatArray]:
    """Every gradient of eta at every bin of the sum.

    Returns
    -------
    first bin of the timeline; (n_bins,) bins of the sum; (n_bins, n_targets) eta; (n_bins, n_targets, 1 + M + Q)
    gradients: baseline, traces, coupling parameters, leak
    """
    first, y = dense_counts(data)
    gamma = np.exp(-point.leak * data.bin_width)
    n_coupling = point.tables.shape[0] - 1
    n_traces = point.trace_decay.size
    coupling = np.zeros((n_coupling + 1, data.n_targets))
    leak = np.zeros(data.n_targets)
    traces = np.zeros((n_traces, data.n_targets))
    in_sum = np.zeros(y.shape[0], dtype=bool)
    for start, stop in data.stretches:
        in_sum[start - first : stop - first] = True
    eta, gradients = [], []
    before = np.zeros(data.n_units)
    for t in range(y.shape[0]):
        coupling = gamma * (coupling + before @ point.tables)
        leak = gamma * leak - data.bin_width * coupling[0]
        traces = point.trace_decay[:, None] * (traces + before[data.targets])
        before = y[t]
        if in_sum[t]:
            eta.append(point.baseline + coupling[0] + np.sum(point.coefficient * traces, axis=0))
            shared = [*coupling[1:], leak] if point.fit_leak else [*coupling[1:]]
            gradients.append(np.column_stack([np.ones(data.n_targets), *traces, *shared]))
    return first, np.flatnonzero(in_sum) + first, np.array(eta), np.array(gradients)


def evaluate_plainly(data: SweepData, point: Point, blocks: TimeBlocks, block_weight: FloatArray) -> Evaluation:
    """`kernelfit.engine.evaluate.evaluate` for the exponential link, in numpy."""
    first, bins, eta, gradients = dense_gradients(data, point)
    counts = dense_counts(data)[1][bins - first][:, data.targets]
    mean = data.bin_width * np.exp(eta)
    block = np.concatenate([np.full(stop - start, b) for start, stop, b in blocks.stretches])
    in_block = [block == b for b in range(blocks.n_blocks)]
    cell = counts * np.log(mean) - mean
    residual = (counts - mean)[..., None] * gradients
    information = np.einsum("t,tn,tnj,tnk->njk", block_weight[block], mean, gradients, gradients)
    n_own = 1 + point.trace_decay.size
    return Evaluation(
        log_likelihood=np.array([cell[rows].sum(axis=0) for rows in in_block]),
        score=np.array([residual[rows].sum(axis=0) for rows in in_block]),
        own_own=information[:, :n_own, :n_own],
        own_shared=information[:, :n_own, n_own:],
        shared_shared=information[:, n_own:, n_own:].sum(axis=0),
    )
