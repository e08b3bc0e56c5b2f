"""Sums kept apart by blocks of time: what robust covariance, jackknife, influence and bootstrap are made from."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from kernelfit.engine.evaluate import Evaluation, TimeBlocks
from kernelfit.engine.time_blocks import time_blocks
from kernelfit.fitting.block_length import FINER, BlockCurve
from kernelfit.fitting.problem import Estimate, Problem

N_BLOCKS = 100
SHORTEST_BLOCK_S = 1.0
SHORTEST_BLOCK_TAUS = 20.0
FEWEST_BLOCKS = 10  # with 20 tau above a tenth of the recording there would soon be one block, and no variance
SHORTENED = 0.95  # of a block's length, time and again
MOST_NUMBERS = 20_000_000  # of the information by block: 160 MB


@dataclass(frozen=True, eq=False)
class BlockSums:
    """Sums of a sweep with scores by fine blocks of time.

    Parameters
    ----------
    blocks : the blocks, each made of `finer` neighbouring fine ones
    finer : fine blocks in a block
    sums : scores by fine block; information by block, or in one part where that would fill the memory
    """

    blocks: TimeBlocks
    finer: int
    sums: Evaluation

    @property
    def has_information(self) -> bool:
        """Whether the information is known for each block."""
        return len(self.sums.own_own) == self.blocks.n_blocks

    @property
    def together(self) -> Evaluation:
        """The same with the information of all parts added up."""
        return replace(
            self.sums,
            own_own=self.sums.own_own.sum(axis=0),
            own_shared=self.sums.own_shared.sum(axis=0),
            shared_shared=self.sums.shared_shared.sum(axis=0),
        )


def block_length_s(duration_s: float, leak: float) -> float:
    """About a hundred blocks, none shorter than max(1 s, 20 tau) (docs/model.md section 8).

    A leak so slow that fewer than `FEWEST_BLOCKS` would be left, as one not identified may be, gets shorter ones.
    """
    slow = min(SHORTEST_BLOCK_TAUS / leak, duration_s / FEWEST_BLOCKS)
    return max(duration_s / N_BLOCKS, SHORTEST_BLOCK_S, slow)


def usual_blocks(problem: Problem, leak: float) -> TimeBlocks:
    """Blocks of the usual length at a leak rate (1/s), or shorter ones where windows would leave fewer than
    `FEWEST_BLOCKS`: a window little longer than a block is one block, however much is left over."""
    duration_s = problem.grid.duration_s
    shortest = min(max(duration_s / N_BLOCKS, SHORTEST_BLOCK_S), duration_s)
    length_s = min(block_length_s(duration_s, leak), duration_s)
    blocks = time_blocks(problem.grid, length_s)
    while blocks.n_blocks < FEWEST_BLOCKS and length_s > shortest:
        length_s = max(shortest, SHORTENED * length_s)
        blocks = time_blocks(problem.grid, length_s)
    return blocks


def chosen_blocks(problem: Problem, leak: float, curve: BlockCurve) -> TimeBlocks:
    """The blocks that a curve of standard errors chose: the usual ones, or longer ones, cut anew."""
    usual = usual_blocks(problem, leak)
    longer = curve.factor(fine_parts(usual))
    if longer <= 1:
        return usual
    return time_blocks(problem.grid, longer * problem.grid.duration_s / usual.n_blocks)


def fine_parts(blocks: TimeBlocks) -> int:
    """Fine blocks in one of these."""
    return FINER if blocks.n_bins.min() >= FINER else 1


def sums_by_block(problem: Problem, estimate: Estimate, blocks: TimeBlocks | None = None) -> BlockSums:
    """One sweep. Blocks of the usual length, cut finer for the scores, or those that are given."""
    finer = 1
    if blocks is None:
        blocks = usual_blocks(problem, problem.leak(estimate.shared))
        finer = fine_parts(blocks)
    fine = blocks.split(finer)
    slot = np.arange(fine.n_blocks) // finer
    n_own = 1 + problem.trace_decay.size
    size_of_part = problem.data.n_targets * n_own * (n_own + problem.n_shared) + problem.n_shared**2
    if blocks.n_blocks * size_of_part > MOST_NUMBERS:
        slot = np.zeros_like(slot)
    return BlockSums(blocks, finer, problem.evaluate(estimate, blocks=fine, information_slot=slot))
