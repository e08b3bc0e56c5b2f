"""Recordings simulated from the fit, each fitted again: what the estimates would scatter by if the model were true.

Reference
---------
Efron and Tibshirani (1993), An Introduction to the Bootstrap, chapter 6.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, ClassVar, cast

import numpy as np

from kernelfit._typing import BoolArray, IntArray
from kernelfit.engine.evaluate import SweepData
from kernelfit.errors import SimulationError
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.problem import Clock, Estimate, Problem
from kernelfit.inference.bootstrap.kind import BootstrapKind, Replicate
from kernelfit.inference.bootstrap.refitting import (
    TOLERANCE,
    explaining,
    failure,
    held_parameters,
    inverse_information,
)
from kernelfit.inference.bootstrap.simulation import live_stretches, simulate_grid

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording


@dataclass(frozen=True)
class Parametric(BootstrapKind):
    """Simulate the fitted model on the windows of the recording and fit it again from the estimate.

    It takes the model for true: where waves or slow states were left out of it, its intervals are as much too narrow
    as the model-based ones. The smoothing of a penalised kernel and the radius of a disc stay as fitted.
    """

    name: ClassVar[str] = "parametric"
    by_blocks: ClassVar[bool] = False

    def describe(self) -> dict[str, str]:
        return {"kind": self.name}

    def words(self, fit: CouplingFit) -> str:
        return "refits of recordings simulated from the fitted model"

    def replicator(self, fit: CouplingFit, recording: Recording | None) -> SimulatingReplicator:
        problem = fit.problem(recording, threads=1)
        live = live_stretches(cast("Recording", recording or fit.recording), fit.model.bin_width)
        return SimulatingReplicator(problem, fit.estimate, held_parameters(problem), live)


@dataclass(frozen=True, eq=False)
class SimulatingReplicator:
    """Simulations of `problem` at `estimate` in the bins of `live` (S, 2), and their refits."""

    problem: Problem
    estimate: Estimate
    held: BoolArray
    live: IntArray

    @property
    def refits(self) -> bool:
        """A refit is worth a process."""
        return True

    def replicate(self, rng: np.random.Generator) -> Replicate:
        """A fresh recording and its fit."""
        try:
            grid = simulate_grid(self.problem, self.estimate, self.live, rng)
        except SimulationError as error:
            return Replicate.failed(self.held.size, str(error))
        fires = grid.counts_in_sum[self.problem.data.targets] > 0
        if not fires.any():
            return Replicate.failed(self.held.size, "no unit fired in the simulated recording")
        data = SweepData.from_grid(grid, self.problem.data.targets)
        simulated = replace(self.problem, grid=grid, data=data, clock=Clock())
        if simulated.n_shared != self.problem.n_shared:
            return Replicate.failed(self.held.size, "no unit of a pair on one site fired in the simulated recording")
        problem, start = explaining(simulated, self.estimate, fires)
        optimum = maximise(problem, start, held=self.held, tolerance=TOLERANCE)
        trouble = failure(optimum)
        covariance = None if trouble else inverse_information(optimum.local.information, optimum.free)
        return Replicate(optimum.estimate.shared, optimum.at_bound, covariance, not trouble, trouble or optimum.message)
