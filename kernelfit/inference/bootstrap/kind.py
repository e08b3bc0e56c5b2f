"""What a kind of bootstrap is, and what one replicate of it gives.

A kind is an immutable choice. For one fit it makes a `Replicator`, which turns a generator of random numbers into a
`Replicate`: that is all that differs between kinds, and all that the runner, the file and the result know of them. A
new kind is a subclass in a file of its own and a line in `registry.py`.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar, Protocol

import numpy as np

from kernelfit._typing import FloatArray

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.model.coupling import CovarianceKind
    from kernelfit.recording.recording import Recording


@dataclass(frozen=True, eq=False)
class Replicate:
    """One replicate of the shared parameters. Q of them, working scale.

    Parameters
    ----------
    shared : (Q,) estimates; NaN where nothing came out
    at_bound : (Q,) -1 or 1 where a parameter sits at its lower or upper bound, else 0
    covariance : (Q, Q) of the replicate's own estimates, NaN rows for what was not estimated; None: not to be had
    converged : whether it is an estimate at all
    message : the optimiser's words, or what went wrong
    """

    shared: FloatArray
    at_bound: FloatArray
    covariance: FloatArray | None
    converged: bool
    message: str

    @classmethod
    def failed(cls, n_shared: int, message: str) -> Replicate:
        """Nothing came out."""
        return cls(np.full(n_shared, np.nan), np.zeros(n_shared), None, False, message)


class Replicator(Protocol):
    """Makes replicates of one fit. It must survive being sent to another process."""

    @property
    def refits(self) -> bool:
        """Whether a replicate takes long enough to be worth a process of its own."""

    def replicate(self, rng: np.random.Generator) -> Replicate:
        """One replicate, from these random numbers and nothing else."""


@dataclass(frozen=True)
class BootstrapKind(ABC):
    """How replicates are made. Subclasses are frozen dataclasses whose fields are options."""

    name: ClassVar[str]
    by_blocks: ClassVar[bool]  # whether replicates come from the blocks of time of the robust covariance

    @property
    def covariance_kind(self) -> CovarianceKind:
        """The covariance of the fit that the replicates' own ones correspond to."""
        return "robust" if self.by_blocks else "model"

    @abstractmethod
    def describe(self) -> dict[str, str]:
        """Name and options as plain values: they identify the kind in a file."""

    @abstractmethod
    def words(self, fit: CouplingFit) -> str:
        """What is done, for a caption: "exponential weights on 60 blocks of time of 1 s"."""

    @abstractmethod
    def replicator(self, fit: CouplingFit, recording: Recording | None) -> Replicator:
        """Ready to make replicates of this fit.

        Raises
        ------
        StorageError : a recording is needed and there is none, or another one
        ModelError : too few blocks of time
        """
