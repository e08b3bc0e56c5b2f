"""What each block of time moves the estimates by: the clusters of the sandwich, and the moves of the jackknife."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.engine.evaluate import Evaluation
from kernelfit.fitting.arrow import Arrow, Elimination, eliminate, solve_determined
from kernelfit.fitting.block_length import joined
from kernelfit.fitting.by_block import BlockSums

LEAST_LEFT = 1e-6  # of the information on a parameter, once a block is left out


@dataclass(frozen=True, eq=False)
class BlockInfluence:
    """What each block of time moves the estimates by: own (G, n, P) and free shared ones (G, Q)."""

    own: FloatArray
    shared: FloatArray

    def joined(self, size: int) -> BlockInfluence:
        """The same for each `size` neighbouring blocks together."""
        n = len(self.own)
        own = joined(self.own.reshape(n, -1), size)
        return BlockInfluence(own.reshape(len(own), *self.own.shape[1:]), joined(self.shared, size))

    @property
    def squared_shared(self) -> FloatArray:
        """(Q, Q) sum of products over blocks."""
        return np.asarray(self.shared.T @ self.shared)

    @property
    def squared_own(self) -> FloatArray:
        """(n, P, P) sum of products over blocks."""
        return np.asarray(np.einsum("gnp,gnq->npq", self.own, self.own))


def block_influence(sums: Evaluation, elimination: Elimination, free: BoolArray) -> BlockInfluence:
    """What each block of `sums` moves the estimates by, one step, along what the information determines.

    Parameters
    ----------
    sums, elimination : scores by block; the information of the free parameters, own ones eliminated
    free : (Q,) shared parameters that were estimated
    """
    n_own = elimination.own_inverse.shape[1]
    score_own = sums.score[..., :n_own]
    efficient = elimination.efficient_score(score_own, sums.score[..., n_own:].sum(axis=1)[:, free])
    shared = solve_determined(elimination.schur, efficient.T).T
    own = np.einsum("npk,gnk->gnp", elimination.own_inverse, score_own) - np.einsum(
        "npq,gq->gnp", elimination.reduced, shared
    )
    return BlockInfluence(own, shared)


def influence_left_out(by_block: BlockSums, information: Arrow, free: BoolArray) -> BlockInfluence | None:
    """What leaving out each block would take from the estimates, in one step from the information that is left.

    None where all that is known of some parameter stands in one block: without it nothing is left to estimate from.
    """
    whole = np.diag(eliminate(information).schur)
    sums = by_block.sums
    n_own = sums.own_own.shape[-1]
    n_fine = len(sums.score)
    scores = joined(sums.score.reshape(n_fine, -1), by_block.finer).reshape(-1, *sums.score.shape[1:])
    own, shared = [], []
    for g, score in enumerate(scores):
        here = Arrow(sums.own_own[g], sums.own_shared[g], sums.shared_shared[g]).only(free)
        rest = Arrow(information.own - here.own, information.cross - here.cross, information.shared - here.shared)
        try:
            left = eliminate(rest)
            own_step, shared_step = left.solve(score[:, :n_own], score[:, n_own:].sum(axis=0)[free])
        except np.linalg.LinAlgError:
            return None
        if (np.diag(left.schur) < LEAST_LEFT * whole).any():
            return None
        own.append(own_step)
        shared.append(shared_step)
    return BlockInfluence(np.array(own), np.array(shared))
