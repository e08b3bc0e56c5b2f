"""Both covariances of a fit: inverse expected information, and the sandwich of scores clustered by blocks of time.

References
----------
Huber (1967); White (1982), Econometrica 50, 1-25; Liang and Zeger (1986), Biometrika 73, 13-22.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.engine.time_blocks import time_blocks
from kernelfit.fitting.arrow import eliminate, solve_symmetric
from kernelfit.fitting.maximise import Optimum, penalised
from kernelfit.fitting.problem import Problem

N_BLOCKS = 100
SHORTEST_BLOCK_S = 1.0
SHORTEST_BLOCK_TAUS = 20.0
FEWEST_BLOCKS = 10  # with 20 tau above a tenth of the recording there would soon be one block, and no variance
SMALLEST_EIGENVALUE = (
    1e-9  # of the information scaled to a unit diagonal: below this two parameters cannot be told apart
)


@dataclass(frozen=True, eq=False)
class Covariances:
    """Covariances on the working scale; parameters that were held or sit at a bound have rows of NaN.

    Parameters
    ----------
    shared_model, shared_robust : (Q, Q)
    own_model, own_robust : (n_targets, P, P), each unit's own parameters
    block_influence : (G, Q) what each block of time moved the shared estimates by (one step)
    n_blocks, block_length_s : clusters of the robust kind
    weak_direction : (Q,) the combination of parameters the recording says nothing about, or None
    """

    shared_model: FloatArray
    shared_robust: FloatArray
    own_model: FloatArray
    own_robust: FloatArray
    block_influence: FloatArray
    n_blocks: int
    block_length_s: float
    weak_direction: FloatArray | None


def block_length_s(duration_s: float, leak: float) -> float:
    """About a hundred blocks, none shorter than max(1 s, 20 tau) (docs/model.md section 8).

    A leak so slow that fewer than `FEWEST_BLOCKS` would be left, as one not identified may be, gets shorter ones.
    """
    slow = min(SHORTEST_BLOCK_TAUS / leak, duration_s / FEWEST_BLOCKS)
    return max(duration_s / N_BLOCKS, SHORTEST_BLOCK_S, slow)


def covariances(problem: Problem, optimum: Optimum) -> Covariances:
    """Both covariances at an optimum: one sweep with scores by block of time."""
    free = optimum.free
    length_s = block_length_s(problem.grid.duration_s, problem.leak(optimum.estimate.shared))
    blocks = time_blocks(problem.grid, min(length_s, problem.grid.duration_s))
    problem.clock.stage = "standard errors"
    sums = problem.evaluate(optimum.estimate, blocks=blocks)
    local = penalised(problem, optimum.estimate, sums)
    elimination = eliminate(local.information.only(free))
    n_own = optimum.estimate.own.shape[1]
    block_own = sums.score[..., :n_own]
    efficient = elimination.efficient_score(block_own, sums.score[..., n_own:].sum(axis=1)[:, free])

    weak = _weak_direction(elimination.schur)
    if weak is None:
        inverse = solve_symmetric(elimination.schur, np.eye(int(free.sum())))
        influence = solve_symmetric(elimination.schur, efficient.T).T
    else:
        inverse = np.full((int(free.sum()), int(free.sum())), np.nan)
        influence = np.full_like(efficient, np.nan)
    through_shared = elimination.reduced @ np.nan_to_num(inverse)
    own_model = elimination.own_inverse + through_shared @ np.swapaxes(elimination.reduced, 1, 2)
    own_influence = np.einsum("npk,gnk->gnp", elimination.own_inverse, block_own) - np.einsum(
        "npq,gq->gnp", elimination.reduced, np.nan_to_num(influence)
    )
    n_blocks = blocks.n_blocks
    correction = n_blocks / (n_blocks - 1.0) if n_blocks > 1 else np.nan
    return Covariances(
        shared_model=_spread(inverse, free),
        shared_robust=_spread(correction * influence.T @ influence, free),
        own_model=own_model,
        own_robust=correction * np.einsum("gnp,gnq->npq", own_influence, own_influence),
        block_influence=_columns(influence, free),
        n_blocks=n_blocks,
        block_length_s=float(np.mean(blocks.n_bins)) * problem.data.bin_width,
        weak_direction=None if weak is None else _columns(weak[None], free)[0],
    )


def _weak_direction(schur: FloatArray) -> FloatArray | None:
    """The combination of parameters without information, or None where there is none."""
    if schur.shape[0] == 0:
        return None
    diagonal = np.diag(schur)
    if not (diagonal > 0).all():
        return np.asarray(diagonal <= 0, dtype=np.float64)
    scale = 1.0 / np.sqrt(diagonal)
    value, vector = np.linalg.eigh(schur * scale[:, None] * scale[None, :])
    return None if value[0] > SMALLEST_EIGENVALUE else np.asarray(vector[:, 0])


def _spread(matrix: FloatArray, free: BoolArray) -> FloatArray:
    full = np.full((free.size, free.size), np.nan)
    full[np.ix_(free, free)] = matrix
    return full


def _columns(matrix: FloatArray, free: BoolArray) -> FloatArray:
    full = np.full((matrix.shape[0], free.size), np.nan)
    full[:, free] = matrix
    return full
