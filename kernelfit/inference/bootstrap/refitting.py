"""What refitted replicates share: which parameters stay, which units can be explained, what went wrong."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.engine.evaluate import SweepData
from kernelfit.fitting.arrow import Arrow, eliminate, solve_symmetric
from kernelfit.fitting.maximise import Optimum
from kernelfit.fitting.problem import Clock, Estimate, Problem
from kernelfit.fitting.radius import discrete_parameter

TOLERANCE = 1e-8  # squared standard errors: a ten-thousandth of one is far below what replicates are read to


def held_parameters(problem: Problem) -> BoolArray:
    """(Q,) True for a discrete parameter, which has no slope to climb: it stays at the fit's value."""
    held = np.zeros(problem.n_shared, dtype=bool)
    place = discrete_parameter(problem)
    if place is not None:
        held[place] = True
    return held


def explaining(problem: Problem, estimate: Estimate, keep: BoolArray) -> tuple[Problem, Estimate]:
    """The problem without the targets that have no spike to explain, and the start for the others.

    A unit without spikes has its baseline at minus infinity and says nothing of the shared parameters.
    """
    if keep.all():
        return problem, estimate
    data = SweepData.from_grid(problem.grid, problem.data.targets[keep])
    return replace(problem, data=data, clock=Clock()), Estimate(estimate.own[keep], estimate.shared)


def inverse_information(information: Arrow, free: BoolArray) -> FloatArray:
    """(Q, Q) covariance of the free shared parameters from an information matrix; NaN rows for the others."""
    covariance = np.full((free.size, free.size), np.nan)
    try:
        schur = eliminate(information.only(free)).schur
        covariance[np.ix_(free, free)] = solve_symmetric(schur, np.eye(int(free.sum())))
    except np.linalg.LinAlgError:  # parameters that cannot be told apart have no standard error
        pass
    return covariance


def failure(optimum: Optimum) -> str:
    """Why an optimum is no estimate; empty where it is one."""
    if not optimum.local.finite:
        return "the likelihood is not finite"
    return "" if optimum.converged else optimum.message
