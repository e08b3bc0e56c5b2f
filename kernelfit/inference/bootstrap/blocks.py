"""The blocks of time that a fit's robust covariance was clustered by, found again on its recording."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.engine.evaluate import TimeBlocks
from kernelfit.errors import ModelError
from kernelfit.fitting.by_block import chosen_blocks
from kernelfit.fitting.covariance import REFUSED_BELOW
from kernelfit.fitting.problem import Problem
from kernelfit.recording.findings import number

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit


def require_blocks(fit: CouplingFit) -> None:
    """Refuse a bootstrap by blocks where there are too few (ModelError)."""
    if fit.n_blocks < REFUSED_BELOW:
        raise ModelError(
            f"{fit.origin.name('spikes')}: {fit.n_blocks} block{'s' * (fit.n_blocks != 1)} of time "
            f"({number(fit.block_length_s)} s each) cannot be resampled, {REFUSED_BELOW} are needed. Record longer, or "
            "use kind='parametric', which takes the model for true."
        )


def blocks_of(fit: CouplingFit, problem: Problem) -> TimeBlocks:
    """The same blocks, to the bin: the usual ones, or joined as `fit.uncertainty.block_curve` says."""
    return chosen_blocks(problem, problem.leak(fit.shared), fit.uncertainty.block_curve)


def counts_by_block(problem: Problem, blocks: TimeBlocks) -> FloatArray:
    """(G, n_targets) spikes of each target in each block."""
    grid = problem.grid
    column = np.full(grid.n_units, -1, dtype=np.int64)
    column[problem.data.targets] = np.arange(problem.data.n_targets)
    summed = grid.bins_in_sum(grid.event_bin) & (column[grid.event_unit] >= 0)
    row = np.searchsorted(blocks.stretches[:, 0], grid.event_bin[summed], side="right") - 1
    counts = np.zeros((blocks.n_blocks, problem.data.n_targets))
    np.add.at(counts, (blocks.stretches[row, 2], column[grid.event_unit[summed]]), grid.event_count[summed])
    return counts
