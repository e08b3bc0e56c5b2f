"""One step from the fit: the scores of its blocks of time weighted at random. Needs no recording and no refit.

Reference
---------
Kline and Santos (2012), Journal of Econometric Methods 1, 23-41.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import NotIdentifiedError
from kernelfit.inference.bootstrap.blocks import require_blocks
from kernelfit.inference.bootstrap.kind import BootstrapKind, Replicate
from kernelfit.inference.bootstrap.weight_laws import WeightLaw, weight_law_from
from kernelfit.recording.findings import number

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording


@dataclass(frozen=True, init=False)
class OneStep(BootstrapKind):
    """theta* = theta + sum_g W_g psi_g, psi_g what block g moves the estimates by, W_g of mean 0 and variance 1.

    Weights of a law have mean 1: W is the weight less 1, over its standard deviation. The covariance of the replicates
    is that of the robust covariance, G/(G - 1) included where the weights sum to G (exponential, multinomial), without
    it where they are independent (rademacher, mammen). Parameters at a bound stay there. Where the data chose the
    smoothing of the kernel, that holds for the robust covariance at the smoothing chosen: what not knowing it
    adds to the intervals of the fit is not in the influence of blocks, so it is not in these replicates.

    Studentised intervals are best with multinomial and Mammen weights, whose third moment is 1 as that of resampling;
    exponential ones carry twice the skewness of the scores, random signs none.

    Parameters
    ----------
    law : "exponential" (the default), "multinomial", "rademacher", "mammen" or a `WeightLaw`

    Raises
    ------
    ArgumentError : no such law
    """

    law: WeightLaw
    name: ClassVar[str] = "one-step"
    by_blocks: ClassVar[bool] = True

    def __init__(self, law: str | WeightLaw = "exponential") -> None:
        object.__setattr__(self, "law", weight_law_from(law, refits=False))

    def describe(self) -> dict[str, str]:
        return {"kind": self.name, "law": self.law.name}

    def words(self, fit: CouplingFit) -> str:
        blocks = f"{fit.n_blocks} blocks of time of {number(fit.block_length_s)} s"
        return f"one step with {self.law.name} weights on {blocks}{_held_smoothing(fit)}"

    def replicator(self, fit: CouplingFit, recording: Recording | None) -> OneStepReplicator:
        require_blocks(fit)
        influence = fit.uncertainty.block_influence
        moves = np.asarray(np.isfinite(influence).all(axis=0))
        if not moves.any():
            raise NotIdentifiedError(
                "kind='one-step': the fit has no scores by block of time, because the recording does not tell its "
                "parameters apart (see fit.notes). Use kind='block-weights' or 'parametric'."
            )
        return OneStepReplicator(fit.shared, np.ascontiguousarray(influence[:, moves]), moves, fit.at_bound, self.law)


def _held_smoothing(fit: CouplingFit) -> str:
    """Say so where the intervals of the fit allow for more than the replicates do."""
    if fit.smoothing is None or fit.smoothing.of("kernel") is None:
        return ""
    return " at the smoothing chosen (what not knowing it adds to the intervals of the fit is not in the replicates)"


@dataclass(frozen=True, eq=False)
class OneStepReplicator:
    """Replicates of (Q,) `shared` from the influence (G, R) of the parameters that can move, marked in `moves` (Q,)."""

    shared: FloatArray
    influence: FloatArray
    moves: BoolArray
    at_bound: FloatArray
    law: WeightLaw

    @property
    def refits(self) -> bool:
        """One step is over before a process has started."""
        return False

    def replicate(self, rng: np.random.Generator) -> Replicate:
        """One step with fresh weights."""
        return self.with_weights(self.law.draw(len(self.influence), rng))

    def with_weights(self, weight: FloatArray) -> Replicate:
        """One step with these weights (G,)."""
        spread = self.law.spread(len(weight))
        shared = self.shared.copy()
        shared[self.moves] += (weight - 1.0) / spread @ self.influence
        covariance = np.full((shared.size, shared.size), np.nan)
        covariance[np.ix_(self.moves, self.moves)] = self.law.covariance(weight, self.influence) / spread**2
        return Replicate(shared, self.at_bound, covariance, True, "")
