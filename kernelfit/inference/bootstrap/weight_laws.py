"""Laws of random weights on blocks of time. A new law is one class here and one line in `WEIGHT_LAWS`.

A law draws one weight for each block, with mean 1. Weights of the first two stand for a resampled recording: none is
negative, and their sum is the number of blocks. Those of the last two only perturb the scores of the recording that
was made, so they can be negative and serve one step, not a refit.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit._validation import given_as
from kernelfit.errors import ArgumentError

GOLDEN = 0.5 * (1.0 + np.sqrt(5.0))  # the two values of Mammen's law are GOLDEN and 1 - GOLDEN, about 0


@dataclass(frozen=True)
class WeightLaw(ABC):
    """Random weights on blocks, and what a replicate's own standard error follows from."""

    name: ClassVar[str]
    refits: ClassVar[bool]  # whether the weights are those of a recording, so that it can be refitted with them

    @abstractmethod
    def draw(self, n_blocks: int, rng: np.random.Generator) -> FloatArray:
        """(G,) weights of mean 1."""

    @abstractmethod
    def spread(self, n_blocks: int) -> float:
        """Standard deviation of a weight."""

    @abstractmethod
    def perturbed(self, weight: FloatArray, influence: FloatArray) -> FloatArray:
        """(G, Q) what each block contributes to a replicate's own sum of squares; see `covariance`."""

    def covariance(self, weight: FloatArray, influence: FloatArray) -> FloatArray:
        """(Q, Q) robust covariance of a replicate's estimates: clustered by the blocks as they were weighted.

        Parameters
        ----------
        weight : (G,) as drawn
        influence : (G, Q) what each block of weight 1 moves the estimates by
        """
        n_blocks = len(weight)
        part = self.perturbed(weight, influence)
        return np.asarray(n_blocks / (n_blocks - 1.0) * (part.T @ part))


@dataclass(frozen=True)
class _Resampling(WeightLaw):
    """Weights of a resampled recording: a block of weight w counts as w blocks."""

    refits: ClassVar[bool] = True

    def perturbed(self, weight: FloatArray, influence: FloatArray) -> FloatArray:
        mean = weight @ influence / len(weight)
        return np.asarray(np.sqrt(weight)[:, None] * (influence - mean))


@dataclass(frozen=True)
class _Perturbing(WeightLaw):
    """Independent weights 1 + W: the score of each block times W of mean 0 and variance 1."""

    refits: ClassVar[bool] = False

    def spread(self, n_blocks: int) -> float:
        return 1.0

    def perturbed(self, weight: FloatArray, influence: FloatArray) -> FloatArray:
        part = (weight - 1.0)[:, None] * influence
        return np.asarray(part - part.mean(axis=0))


@dataclass(frozen=True)
class Exponential(_Resampling):
    """Independent exponential weights, scaled to mean 1: Dirichlet weights on the blocks (Rubin 1981).

    References
    ----------
    Rubin (1981), Annals of Statistics 9, 130-134.
    """

    name: ClassVar[str] = "exponential"

    def draw(self, n_blocks: int, rng: np.random.Generator) -> FloatArray:
        weight = rng.standard_exponential(n_blocks)
        return np.asarray(weight / weight.mean())

    def spread(self, n_blocks: int) -> float:
        return float(np.sqrt((n_blocks - 1.0) / (n_blocks + 1.0)))


@dataclass(frozen=True)
class Multinomial(_Resampling):
    """How often each block is drawn when as many as there are are drawn with replacement (Carlstein 1986).

    References
    ----------
    Carlstein (1986), Annals of Statistics 14, 1171-1179; Efron (1979), Annals of Statistics 7, 1-26.
    """

    name: ClassVar[str] = "multinomial"

    def draw(self, n_blocks: int, rng: np.random.Generator) -> FloatArray:
        return np.bincount(rng.integers(n_blocks, size=n_blocks), minlength=n_blocks).astype(np.float64)

    def spread(self, n_blocks: int) -> float:
        return float(np.sqrt((n_blocks - 1.0) / n_blocks))


@dataclass(frozen=True)
class Rademacher(_Perturbing):
    """Random signs: W = 1 or -1, each with probability one half."""

    name: ClassVar[str] = "rademacher"

    def draw(self, n_blocks: int, rng: np.random.Generator) -> FloatArray:
        return 2.0 * rng.integers(2, size=n_blocks).astype(np.float64)


@dataclass(frozen=True)
class Mammen(_Perturbing):
    """The two values whose mean is 0 and whose variance and third moment are 1, so that skewness comes back too.

    References
    ----------
    Mammen (1993), Annals of Statistics 21, 255-285.
    """

    name: ClassVar[str] = "mammen"

    def draw(self, n_blocks: int, rng: np.random.Generator) -> FloatArray:
        low = rng.random(n_blocks) < GOLDEN / np.sqrt(5.0)
        return np.asarray(np.where(low, 2.0 - GOLDEN, 1.0 + GOLDEN))


WEIGHT_LAWS: dict[str, type[WeightLaw]] = {law.name: law for law in (Exponential, Multinomial, Rademacher, Mammen)}


def weight_law_from(law: str | WeightLaw, *, refits: bool) -> WeightLaw:
    """The law of a name.

    Parameters
    ----------
    law : a name of `WEIGHT_LAWS` or a law itself
    refits : True where its weights must be those of a recording, none negative

    Raises
    ------
    ArgumentError : no such law, or one that a refit cannot use
    """
    fitting = [name for name, known in WEIGHT_LAWS.items() if known.refits or not refits]
    made = law if isinstance(law, WeightLaw) else None
    if isinstance(law, str) and law in WEIGHT_LAWS:
        made = WEIGHT_LAWS[law]()
    if made is None or (refits and not made.refits):
        why = "is not known" if made is None else "has negative weights, which a refit cannot use"
        given = made.name if made is not None else law
        raise ArgumentError(f"{given_as('law', given)} {why}. Say {', '.join(repr(name) for name in fitting)}.")
    return made
