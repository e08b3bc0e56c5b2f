"""Covariances of a fit: inverse expected information, and the sandwich of scores clustered by blocks of time.

The sandwich holds the Hessian of the objective, as its authors have it: in lengths, exponents and the leak rate it
differs from the expected information wherever the model is wrong (kernelfit.fitting.curvature).

Where few blocks carry most of the information the sandwich is too narrow, because the estimates follow the blocks they
are judged by. The one-step jackknife sees that: what the estimates would be without each block, from the information
that is left.

Where some combination of parameters changes nothing, covariances are those of what is determined, and `determines` says
of a parameter, or of a figure made from several, whether it is.

References
----------
Huber (1967); White (1982), Econometrica 50, 1-25; Liang and Zeger (1986), Biometrika 73, 13-22. Jackknife form of the
cluster variance: Bell and McCaffrey (2002), Survey Methodology 28, 169-181.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import ArgumentError
from kernelfit.fitting.arrow import SMALLEST_EIGENVALUE, Arrow, Determined, eliminate, solve_determined
from kernelfit.fitting.block_influence import block_influence, influence_left_out
from kernelfit.fitting.block_length import BlockCurve, block_curve
from kernelfit.fitting.by_block import chosen_blocks, sums_by_block
from kernelfit.fitting.curvature import excess_curvature
from kernelfit.fitting.maximise import Local, Optimum, Weighting, penalised
from kernelfit.fitting.problem import Problem
from kernelfit.model.coupling import CovarianceKind

REFUSED_BELOW = 6  # blocks: a variance of fewer numbers means nothing
LOADS = SMALLEST_EIGENVALUE**0.5  # share of a weak direction that would add as much variance as all else being known


@dataclass(frozen=True, eq=False)
class Uncertainty:
    """Covariances on the working scale; parameters that were held or sit at a bound have rows of NaN.

    They hold nothing along the weak directions: ask `determines` before a variance is quoted.

    Parameters
    ----------
    shared_model, shared_robust : (Q, Q)
    own_model, own_robust : (n_targets, P, P), each unit's own parameters
    shared_jackknife, own_jackknife : the same, one-step jackknife over blocks; None where a block holds all that is
        known of some parameter, or where information by block would fill the memory
    block_influence : (G, Q) what each block of time moved the shared estimates by (one step); NaN where there is a
        weak direction, as what blocks move along it is not known
    n_blocks, block_length_s : clusters of the robust kind
    block_curve : standard errors against the length of the blocks, from which it was chosen
    weak_moves : (W, Q) combinations of parameters that change nothing, in units of `alone`, each of length 1; the
        weakest first, mostly none
    alone : (Q,) model-based standard errors, were everything else known
    """

    shared_model: FloatArray
    shared_robust: FloatArray
    own_model: FloatArray
    own_robust: FloatArray
    shared_jackknife: FloatArray | None
    own_jackknife: FloatArray | None
    block_influence: FloatArray
    n_blocks: int
    block_length_s: float
    block_curve: BlockCurve
    weak_moves: FloatArray
    alone: FloatArray

    @property
    def weak_direction(self) -> FloatArray | None:
        """(Q,) the combination of parameters the recording says least about, or None where it tells all apart."""
        return self.weak_moves[0] if len(self.weak_moves) else None

    def determines(self, gradient: FloatArray) -> BoolArray:
        """(m,) whether the recording determines figures with these derivatives by the working parameters.

        Parameters
        ----------
        gradient : (K, m) by the first K shared parameters; those that were not estimated count as known

        Returns
        -------
        False for figures of which weak directions make up more than `LOADS`
        """
        size = np.nan_to_num(self.alone[: len(gradient)])[:, None] * gradient
        along = np.linalg.norm(np.nan_to_num(self.weak_moves[:, : len(gradient)]) @ size, axis=0)
        return np.asarray(along <= LOADS * np.linalg.norm(size, axis=0))

    def shared(self, kind: CovarianceKind) -> FloatArray:
        """(Q, Q) of that kind. Raises ArgumentError for a jackknife that was not made."""
        if kind == "jackknife":
            return self._made(self.shared_jackknife)
        return self.shared_robust if kind == "robust" else self.shared_model

    def own(self, kind: CovarianceKind) -> FloatArray:
        """(n, P, P) of that kind. Raises ArgumentError for a jackknife that was not made."""
        if kind == "jackknife":
            return self._made(self.own_jackknife)
        return self.own_robust if kind == "robust" else self.own_model

    @property
    def jackknife_over_robust(self) -> float:
        """Largest ratio of their standard errors over the shared parameters; NaN where there is none."""
        if self.shared_jackknife is None:
            return float("nan")
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = np.sqrt(np.diag(self.shared_jackknife) / np.diag(self.shared_robust))
        return float(np.nanmax(ratio)) if np.isfinite(ratio).any() else float("nan")

    def degrees_of_freedom(self, kind: CovarianceKind) -> float:
        """Blocks less one, infinite for the model-based kind."""
        return np.inf if kind == "model" else float(self.n_blocks - 1)

    def _made(self, jackknife: FloatArray | None) -> FloatArray:
        if jackknife is None and self.n_blocks < REFUSED_BELOW:
            raise ArgumentError(
                f"covariance='jackknife' cannot be had here: the recording makes {self.n_blocks} "
                f"block{'s' * (self.n_blocks != 1)} of time, and {REFUSED_BELOW} are needed. Use 'model'."
            )
        if jackknife is None and self.weak_direction is not None:
            raise ArgumentError(
                "covariance='jackknife' cannot be had here: some parameters cannot be told apart (see fit.notes), and "
                "what each block does to them is not known. Use 'robust'."
            )
        if jackknife is None:
            raise ArgumentError(
                "covariance='jackknife' cannot be had here: without one of the blocks of time some parameter would not "
                "be determined, or there are too many units for the information of every block. Use 'robust'."
            )
        return jackknife


def covariances(problem: Problem, optimum: Optimum) -> Uncertainty:
    """All covariances at an optimum.

    One sweep with scores by block of time, where the optimiser did not leave it; one more where blocks are joined; two
    for each parameter in which the predictor is not linear.
    """
    free = optimum.free
    problem.clock.stage = "standard errors"
    usual = optimum.by_block if optimum.by_block is not None else sums_by_block(problem, optimum.estimate)
    local = penalised(problem, optimum.estimate, usual.together)
    elimination = eliminate(local.information.only(free))
    split = Determined.of(elimination.schur)
    weak = len(split.weak) > 0
    inverse = solve_determined(elimination.schur, np.eye(int(free.sum())))
    variance = np.diag(_spread(inverse, free))
    information = observed_information(problem, local, variance, free)
    observed = eliminate(information)
    influence = block_influence(usual.sums, observed, free)
    curve = block_curve(influence.shared, usual.finer, problem.grid.duration_s)
    used = usual
    if curve.factor(usual.finer) > 1:
        blocks = chosen_blocks(problem, problem.leak(optimum.estimate.shared), curve)
        used = sums_by_block(problem, optimum.estimate, blocks)
        influence = block_influence(used.sums, observed, free)
    influence = influence.joined(used.finer)
    n_blocks = used.blocks.n_blocks
    correction = n_blocks / (n_blocks - 1.0) if n_blocks >= REFUSED_BELOW else np.nan
    left_out = None
    if not weak and n_blocks >= REFUSED_BELOW and used.has_information:
        left_out = influence_left_out(used, information, free)
    through_shared = elimination.reduced @ inverse
    result = Uncertainty(
        shared_model=_spread(inverse, free),
        shared_robust=_spread(correction * influence.squared_shared, free),
        own_model=elimination.own_inverse + through_shared @ np.swapaxes(elimination.reduced, 1, 2),
        own_robust=correction * influence.squared_own,
        shared_jackknife=None if left_out is None else _spread(left_out.squared_shared / correction, free),
        own_jackknife=None if left_out is None else left_out.squared_own / correction,
        block_influence=_columns(np.full_like(influence.shared, np.nan) if weak else influence.shared, free),
        n_blocks=n_blocks,
        block_length_s=float(np.mean(used.blocks.n_bins)) * problem.data.bin_width,
        block_curve=curve.over(free),
        weak_moves=_columns(split.weak, free),
        alone=_columns(split.scale[None], free)[0],
    )
    loose = ~result.determines(np.eye(free.size))
    return replace(result, block_curve=result.block_curve.without(loose)) if loose.any() else result


def observed_information(
    problem: Problem, local: Local, variance: FloatArray, free: BoolArray, weighting: Weighting | None = None
) -> Arrow:
    """The observed information of the free parameters: minus the Hessian of the penalised objective.

    Where it is not positive definite, as beside a top that was not reached, the expected one takes its place; so it
    does where parameters cannot be told apart.

    Parameters
    ----------
    problem, local : the model on the recording, and its derivatives at the optimum
    variance : (Q,) model-based, working scale; NaN where there is none
    free : (Q,) parameters that were estimated
    weighting : of blocks of time, as `local` was made with
    """
    expected = local.information.only(free)
    if len(Determined.of(eliminate(expected).schur).weak):
        return expected
    excess = excess_curvature(problem, local, np.sqrt(variance), weighting)
    if not excess.any():
        return expected
    observed = Arrow(expected.own, expected.cross, expected.shared + excess[np.ix_(free, free)])
    return expected if len(Determined.of(eliminate(observed).schur).weak) else observed


def _spread(matrix: FloatArray, free: BoolArray) -> FloatArray:
    full = np.full((free.size, free.size), np.nan)
    full[np.ix_(free, free)] = matrix
    return full


def _columns(matrix: FloatArray, free: BoolArray) -> FloatArray:
    full = np.full((matrix.shape[0], free.size), np.nan)
    full[:, free] = matrix
    return full
