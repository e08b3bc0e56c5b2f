"""Which stretch of time, which event and which unit a result rests on: what the estimates would be without it.

One step from the fit, by the scores and the information of what is left (Pregibon 1981, Annals of Statistics 9,
705-724, for blocks of time); the largest are refitted, because one step understates a change that is not small.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray, IntArray
from kernelfit.engine.evaluate import SweepData, TimeBlocks
from kernelfit.fitting.arrow import Arrow, eliminate, solve_determined
from kernelfit.fitting.block_influence import block_influence, influence_left_out
from kernelfit.fitting.by_block import BlockSums, chosen_blocks, sums_by_block
from kernelfit.fitting.covariance import observed_information
from kernelfit.fitting.maximise import Optimum, Weighting, maximise, penalised
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.inference.scales import natural_values, shared_names
from kernelfit.recording.grid import Grid
from kernelfit.recording.recording import stretch_text

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording

REFIT_TOLERANCE = 1e-6
SHORTEST_EVENT_BINS = 10
EVENTS_PER_BLOCK = 4


@dataclass(frozen=True, eq=False)
class Influence:
    """What each estimate would be without a part of the recording.

    Parameters
    ----------
    parameters : names of the shared parameters that were estimated
    stretches : by block of time: start_s, stop_s, n_spikes, then for each parameter its change on leaving the block
        out, and the same in robust standard errors (`..._in_std_errors`)
    events : the same for stretches a quarter as long
    units : the same by unit, on no longer explaining it (its spikes still drive the others)
    refits : left_out ("stretch" or "unit"), which, parameter, one_step and refitted change, converged: for each
        parameter the stretch and the unit that move it most
    """

    parameters: tuple[str, ...]
    stretches: pd.DataFrame
    events: pd.DataFrame
    units: pd.DataFrame
    refits: pd.DataFrame


def influence(fit: CouplingFit, recording: Recording | None, threads: int | None) -> Influence:
    """See `CouplingFit.influence`."""
    problem = fit.problem(recording, threads=threads)
    blocks = chosen_blocks(problem, problem.leak(fit.shared), fit.uncertainty.block_curve)
    by_block = sums_by_block(problem, fit.estimate, blocks)
    parts = EVENTS_PER_BLOCK if blocks.n_bins.min() >= EVENTS_PER_BLOCK * SHORTEST_EVENT_BINS else 1
    short = sums_by_block(problem, fit.estimate, blocks.split(parts))
    local = penalised(problem, fit.estimate, by_block.together)
    variance = np.diag(fit.uncertainty.shared_model)
    work = _Work(fit, problem, observed_information(problem, local, variance, fit.free))
    stretches = _by_time(work, blocks, _without_blocks(work, by_block))
    events = _by_time(work, short.blocks, _first_order(work, short))
    units = _by_unit(work, by_block)
    return Influence(
        parameters=tuple(name for name, free in zip(shared_names(fit), fit.free, strict=True) if free),
        stretches=stretches,
        events=events,
        units=units,
        refits=_refits(work, blocks, stretches, units),
    )


@dataclass(frozen=True, eq=False)
class _Work:
    fit: CouplingFit
    problem: Problem
    information: Arrow  # observed

    @property
    def names(self) -> list[str]:
        """Names of the parameters that were estimated."""
        return [name for name, free in zip(shared_names(self.fit), self.fit.free, strict=True) if free]

    def changes(self, moves: FloatArray) -> FloatArray:
        """(n, free) natural changes of (n, free) moves on the working scale; NaN for what is not determined."""
        told = np.isfinite(np.diag(self.fit.uncertainty.shared("model")))[self.fit.free]
        there = np.tile(self.fit.shared, (len(moves), 1))
        there[:, self.fit.free] += np.where(told, moves, 0.0)  # along a direction without information a move is noise
        changes = natural_values(self.fit, there) - natural_values(self.fit, self.fit.shared)
        known = np.isfinite(self.fit.std_errors["model"].to_numpy(dtype=np.float64))
        return np.asarray(np.where(known, changes, np.nan)[:, self.fit.free])

    def columns(self, moves: FloatArray) -> dict[str, FloatArray]:
        """Change of each parameter, and the move on the working scale in robust standard errors."""
        error = np.sqrt(np.diag(self.fit.uncertainty.shared("robust")))[self.fit.free]
        changes = self.changes(moves)
        table: dict[str, FloatArray] = {}
        for k, name in enumerate(self.names):
            table[name] = changes[:, k]
            table[f"{name}_in_std_errors"] = moves[:, k] / error[k]
        return table


def _first_order(work: _Work, by_block: BlockSums) -> FloatArray:
    """(G, free) move on leaving each block out, the information taken as it is with it."""
    moves = block_influence(by_block.sums, eliminate(work.information), work.fit.free)
    return -moves.joined(by_block.finer).shared


def _without_blocks(work: _Work, by_block: BlockSums) -> FloatArray:
    """(G, free) move on leaving each block out, from the information that is left where that is known and enough."""
    enough = by_block.has_information and work.fit.uncertainty.weak_direction is None
    left = influence_left_out(by_block, work.information, work.fit.free) if enough else None
    return _first_order(work, by_block) if left is None else -left.shared


def _by_unit(work: _Work, by_block: BlockSums) -> pd.DataFrame:
    fit, free = work.fit, work.fit.free
    elimination = eliminate(work.information)
    score = by_block.sums.score.sum(axis=0)  # (n, P + Q)
    n_own = elimination.own_inverse.shape[1]
    own, shared = score[:, :n_own], score[:, n_own:][:, free]
    efficient = shared - np.einsum("npq,np->nq", elimination.reduced, own)
    moves = -solve_determined(elimination.schur, efficient.T).T
    table = {"n_spikes": fit.counts[fit.targets], **work.columns(moves)}
    return pd.DataFrame(table, index=pd.Index([fit.unit_ids[k] for k in fit.targets], name="unit", dtype=object))


def _by_time(work: _Work, blocks: TimeBlocks, moves: FloatArray) -> pd.DataFrame:
    start, stop = _seconds(work.problem.grid, blocks)
    spikes = _spikes(work.problem, blocks)
    return pd.DataFrame({"start_s": start, "stop_s": stop, "n_spikes": spikes, **work.columns(moves)})


def _seconds(grid: Grid, blocks: TimeBlocks) -> tuple[FloatArray, FloatArray]:
    """(G,) first and last moment of each block on the recording's clock, seconds."""
    first = np.full(blocks.n_blocks, np.iinfo(np.int64).max)
    last = np.zeros(blocks.n_blocks, dtype=np.int64)
    np.minimum.at(first, blocks.stretches[:, 2], blocks.stretches[:, 0])
    np.maximum.at(last, blocks.stretches[:, 2], blocks.stretches[:, 1])

    def clock(bins: IntArray, window: IntArray) -> FloatArray:
        return np.asarray(grid.window_start_s[window] + (bins - grid.window_first_bin[window]) * grid.bin_width)

    def window_of(bins: IntArray) -> IntArray:
        return np.searchsorted(grid.window_first_bin, bins, side="right") - 1

    return clock(first, window_of(first)), clock(last, window_of(last - 1))


def _spikes(problem: Problem, blocks: TimeBlocks) -> IntArray:
    """(G,) spikes of explained units in each block."""
    grid = problem.grid
    target = np.zeros(grid.n_units, dtype=bool)
    target[problem.data.targets] = True
    counted = grid.bins_in_sum(grid.event_bin) & target[grid.event_unit]
    row = np.searchsorted(blocks.stretches[:, 0], grid.event_bin[counted], side="right") - 1
    return np.bincount(blocks.stretches[row, 2], weights=grid.event_count[counted], minlength=blocks.n_blocks).astype(
        np.int64
    )


def _refits(work: _Work, blocks: TimeBlocks, stretches: pd.DataFrame, units: pd.DataFrame) -> pd.DataFrame:
    """For each parameter the stretch and the unit that move it most, refitted without it; each is refitted once."""
    done: dict[tuple[str, int], Optimum] = {}
    rows = []
    for k, name in enumerate(work.names):
        for kind, table in (("stretch", stretches), ("unit", units)):
            size = np.abs(table[f"{name}_in_std_errors"].to_numpy())
            if not np.isfinite(size).any() or (kind == "unit" and len(units) < 2):
                continue
            worst = int(np.nanargmax(size))
            if (kind, worst) not in done:
                done[kind, worst] = (
                    _without_stretch(work, blocks, worst) if kind == "stretch" else _without_unit(work, worst)
                )
            refitted = done[kind, worst]
            move = (refitted.estimate.shared - work.fit.shared)[work.fit.free]
            rows.append(
                {
                    "left_out": kind,
                    "which": units.index[worst]
                    if kind == "unit"
                    else stretch_text(stretches["start_s"][worst], stretches["stop_s"][worst]),
                    "parameter": name,
                    "one_step": float(table[name].iloc[worst]),
                    "refitted": float(work.changes(move[None])[0, k]),
                    "converged": refitted.converged,
                }
            )
    columns = ["left_out", "which", "parameter", "one_step", "refitted", "converged"]
    return pd.DataFrame(rows, columns=columns)


def _without_stretch(work: _Work, blocks: TimeBlocks, g: int) -> Optimum:
    weight = np.ones(blocks.n_blocks)
    weight[g] = 0.0
    weighting = Weighting(blocks, weight)
    return maximise(
        work.problem, work.fit.estimate, held=~work.fit.free, tolerance=REFIT_TOLERANCE, weighting=weighting
    )


def _without_unit(work: _Work, place: int) -> Optimum:
    left = np.delete(np.arange(work.problem.data.n_targets), place)
    data = SweepData.from_grid(work.problem.grid, work.problem.data.targets[left])
    fewer = replace(work.problem, data=data)
    start = Estimate(work.fit.own[left], work.fit.shared)
    return maximise(fewer, start, held=~work.fit.free, tolerance=REFIT_TOLERANCE)
