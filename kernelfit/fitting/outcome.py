"""Small immutable records that a finished fit carries beside its numbers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.fitting.search import StartRecord

Severity = Literal["error", "warning", "info"]


@dataclass(frozen=True)
class Note:
    """Something the reader of a fit must know: how grave, what, where, what to do."""

    severity: Severity
    what: str
    where: str
    remedy: str


@dataclass(frozen=True)
class SolverReport:
    """How the optimiser ended.

    converged; n_iterations: steps tried on the way to the best optimum; max_gradient: largest score component in
    standard
    errors; message: its own words; starts: every start tried
    """

    converged: bool
    n_iterations: int
    max_gradient: float
    message: str
    starts: tuple[StartRecord, ...]


@dataclass(frozen=True)
class ScoreTest:
    """What a term that is not in the model would add. statistic and df of a robust score test, its p-value, the gain in
    bits per spike that one step promises, and a sentence."""

    statistic: float
    df: int
    p_value: float
    bits_per_spike: float
    sentence: str


@dataclass(frozen=True, eq=False)
class FittedRates:
    """Rates over a stretch: time_s (T,) start of each bin; rate_hz and counts (T, n_units), NaN where not explained."""

    time_s: FloatArray
    rate_hz: FloatArray
    counts: FloatArray

    @property
    def population_rate_hz(self) -> FloatArray:
        """(T,) summed rate of the units explained."""
        return np.asarray(np.nansum(self.rate_hz, axis=1))
