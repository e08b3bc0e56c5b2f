"""Invented recordings and model points for the engine's tests, and what rounding may change in their sums."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit.engine.evaluate import Evaluation, Point, SweepData, TimeBlocks
from kernelfit.engine.time_blocks import time_blocks
from kernelfit.engine.twin import dense_counts, dense_gradients
from kernelfit.model.links import EXP
from kernelfit.recording.grid import Grid, make_grid
from kernelfit.recording.recording import Recording

BIN_S = 0.01


def recording(rng, n_units, *, rate_hz=6.0, windows=((0.0, 2.0), (2.355, 3.5), (5.0, 6.127)), exclusions=(), silent=()):
    """Uniform spikes from a second before the first window to after the last; `silent` units have none."""
    start, stop = windows[0][0] - 1.0, windows[-1][1] + 0.3
    trains = [np.sort(rng.uniform(start, stop, rng.poisson(rate_hz * (stop - start)))) for _ in range(n_units)]
    for k in silent:
        trains[k] = np.empty(0)
    return Recording(
        tuple(f"u{k}" for k in range(n_units)),
        rng.uniform(0, 500, (n_units, 2)),
        tuple(trains),
        np.array(windows),
        np.array(exclusions, dtype=np.float64).reshape(-1, 2),
    )


def random_point(rng, data, n_coupling, n_traces, fit_leak):
    """A point in an arbitrary place: tables, their derivatives and after-spike coefficients are random numbers."""
    n_units, n = data.n_units, data.n_targets
    tables = rng.normal(0, 0.3 / np.sqrt(n_units), (1 + n_coupling, n_units, n))
    if n_coupling:
        tables[1:] *= np.sqrt(n_units)
    return Point(
        link=EXP,
        leak=float(rng.uniform(3.0, 60.0)),
        fit_leak=fit_leak,
        tables=tables,
        baseline=np.log(rng.uniform(3, 12, n)),
        trace_decay=np.exp(-data.bin_width / np.geomspace(0.01, 0.4, n_traces)) if n_traces else np.empty(0),
        coefficient=rng.normal(0, 0.2, (n_traces, n)),
    )


@dataclass(frozen=True)
class Case:
    """Everything `evaluate` is asked about."""

    grid: Grid
    data: SweepData
    point: Point
    blocks: TimeBlocks
    weight: np.ndarray


def make_case(
    seed, n_units, n_coupling, n_traces, *, fit_leak=True, targets=None, warm_up_s=0.0, block_s=0.7, **options
):
    """A recording of `recording`, a random point, blocks of time and their weights."""
    rng = np.random.default_rng(seed)
    grid = make_grid(recording(rng, n_units, **options), BIN_S, warm_up_s=warm_up_s)
    chosen = np.flatnonzero(grid.counts_in_sum > 0) if targets is None else np.asarray(targets)
    data = SweepData.from_grid(grid, chosen)
    blocks = time_blocks(grid, block_s)
    weight = rng.exponential(size=blocks.n_blocks)
    return Case(grid, data, random_point(rng, data, n_coupling, n_traces, fit_leak), blocks, weight)


def sizes(data, point, blocks, weight):
    """The sums of `evaluate` with every term made positive: rounding is a share of these, whatever is left of them."""
    first, bins, eta, gradients = dense_gradients(data, point)
    counts = dense_counts(data)[1][bins - first][:, data.targets]
    mean, gradients = data.bin_width * np.exp(eta), np.abs(gradients)
    block = np.concatenate([np.full(stop - start, b) for start, stop, b in blocks.stretches])
    rows = [block == b for b in range(blocks.n_blocks)]
    cell = counts * np.abs(np.log(mean)) + mean
    pull = (counts + mean)[..., None] * gradients
    information = np.einsum("tn,tnj,tnk->njk", weight[block][:, None] * mean, gradients, gradients, optimize=True)
    n_own = 1 + point.trace_decay.size
    return Evaluation(
        log_likelihood=np.array([cell[r].sum(axis=0) for r in rows]),
        score=np.array([pull[r].sum(axis=0) for r in rows]),
        own_own=information[:, :n_own, :n_own],
        own_shared=information[:, :n_own, n_own:],
        shared_shared=information[:, n_own:, n_own:].sum(axis=0),
    )


SUMS = ("log_likelihood", "score", "own_own", "own_shared", "shared_shared")


def assert_agree(got, want, size, relative=1e-12):
    """Every sum of `got` equals that of `want` to `relative` of the size of what was added up."""
    for name in SUMS:
        a, b, s = (getattr(e, name) for e in (got, want, size))
        assert a.shape == b.shape, name
        share = np.abs(a - b) / (s + 1e-300)
        assert (share <= relative).all(), f"{name}: {np.sum(share > relative)} of {a.size} differ, by {share.max():.1e}"
