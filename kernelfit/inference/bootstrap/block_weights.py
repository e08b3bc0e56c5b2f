"""Refits with random weights on the fit's blocks of time: nothing is copied, no block is cut.

References
----------
Carlstein (1986), Annals of Statistics 14, 1171-1179; Rubin (1981), Annals of Statistics 9, 130-134.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.engine.evaluate import TimeBlocks
from kernelfit.fitting.arrow import eliminate, solve_symmetric
from kernelfit.fitting.covariance import observed_information
from kernelfit.fitting.maximise import Optimum, Weighting, maximise, penalised
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.inference.bootstrap.blocks import blocks_of, counts_by_block, require_blocks
from kernelfit.inference.bootstrap.kind import BootstrapKind, Replicate
from kernelfit.inference.bootstrap.refitting import (
    TOLERANCE,
    explaining,
    failure,
    held_parameters,
    inverse_information,
)
from kernelfit.inference.bootstrap.weight_laws import WeightLaw, weight_law_from
from kernelfit.recording.findings import number

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording


@dataclass(frozen=True, init=False)
class BlockWeights(BootstrapKind):
    """Each block of time counts as often as its random weight says, and the model is fitted again from the estimate.

    The blocks are those of the robust covariance. The smoothing of a penalised kernel and the radius of a disc stay as
    fitted.

    Parameters
    ----------
    law : "exponential" (the default) or "multinomial"

    Raises
    ------
    ArgumentError : no such law, or one with negative weights
    """

    law: WeightLaw
    name: ClassVar[str] = "block-weights"
    by_blocks: ClassVar[bool] = True

    def __init__(self, law: str | WeightLaw = "exponential") -> None:
        object.__setattr__(self, "law", weight_law_from(law, refits=True))

    def describe(self) -> dict[str, str]:
        return {"kind": self.name, "law": self.law.name}

    def words(self, fit: CouplingFit) -> str:
        blocks = f"{fit.n_blocks} blocks of time of {number(fit.block_length_s)} s"
        return f"refits with {self.law.name} weights on {blocks}"

    def replicator(self, fit: CouplingFit, recording: Recording | None) -> WeightedReplicator:
        require_blocks(fit)
        problem = fit.problem(recording, threads=1)
        blocks = blocks_of(fit, problem)
        return WeightedReplicator(
            problem, fit.estimate, held_parameters(problem), blocks, counts_by_block(problem, blocks), self.law
        )


@dataclass(frozen=True, eq=False)
class WeightedReplicator:
    """Refits of `problem` from `estimate`; `counts` (G, n_targets) spikes by block."""

    problem: Problem
    estimate: Estimate
    held: BoolArray
    blocks: TimeBlocks
    counts: FloatArray
    law: WeightLaw

    @property
    def refits(self) -> bool:
        """A refit is worth a process."""
        return True

    def replicate(self, rng: np.random.Generator) -> Replicate:
        """A refit with fresh weights."""
        return self.with_weights(self.law.draw(self.blocks.n_blocks, rng))

    def with_weights(self, weight: FloatArray) -> Replicate:
        """A refit with these weights (G,)."""
        fires = weight @ self.counts > 0
        if not fires.any():
            return Replicate.failed(self.held.size, "no unit fires in the blocks that were drawn")
        problem, start = explaining(self.problem, self.estimate, fires)
        optimum = maximise(
            problem, start, held=self.held, tolerance=TOLERANCE, weighting=Weighting(self.blocks, weight)
        )
        trouble = failure(optimum)
        covariance = None if trouble else self._covariance(problem, optimum, weight)
        return Replicate(optimum.estimate.shared, optimum.at_bound, covariance, not trouble, trouble or optimum.message)

    def _covariance(self, problem: Problem, optimum: Optimum, weight: FloatArray) -> FloatArray | None:
        """Clustered by the blocks as they were weighted, by the observed information as that of the fit is."""
        free, n_own = optimum.free, optimum.estimate.own.shape[1]
        sums = problem.evaluate(optimum.estimate, blocks=self.blocks, block_weight=weight)
        weighted = replace(sums, score=weight[:, None, None] * sums.score)
        covariance = np.full((free.size, free.size), np.nan)
        try:
            local = penalised(problem, optimum.estimate, weighted)
            variance = np.diag(inverse_information(local.information, free))
            weighting = Weighting(self.blocks, weight)
            elimination = eliminate(observed_information(problem, local, variance, free, weighting))
            shared = sums.score[..., n_own:].sum(axis=1)[:, free]
            efficient = elimination.efficient_score(sums.score[..., :n_own], shared)
            influence = solve_symmetric(elimination.schur, efficient.T).T
        except np.linalg.LinAlgError:  # parameters that cannot be told apart have no standard error
            return None
        covariance[np.ix_(free, free)] = self.law.covariance(weight, influence)
        return covariance
