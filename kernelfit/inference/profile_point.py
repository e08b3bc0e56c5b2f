"""One point of a profile: one parameter held, everything else climbed, and where that leads.

A point knows its objective, its slope (by the envelope theorem the score of the held parameter, less what the others
explain of it) and where the others stand. Where the optimiser stops a short step from the top, that step is taken and
its gain counted, which leaves an error of a higher order.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.fitting.arrow import Elimination, eliminate
from kernelfit.fitting.maximise import Optimum, maximise
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.inference.held import Held

POINT_TOLERANCE = 1e-4  # squared length of the last step in standard errors, which is taken and counted
POINT_ITERATIONS = 40
LARGEST_WEIGHTS = 25.0  # sum of the weights of an extrapolation: beyond it fewer points are safer


@dataclass(frozen=True, eq=False)
class PathPoint:
    """One point of a profile: x held; objective maximised over the rest, its slope and curvature by x."""

    x: float
    objective: float
    slope: float
    curvature: float  # expected information on x, the others estimated
    estimate: Estimate
    tangent: Estimate  # what the others move by for each unit of x
    converged: bool  # whether the others reached their top


def path_point(held: Held, x: float, start: Estimate, tolerance: float = POINT_TOLERANCE) -> PathPoint:
    """Climb everything else from `start` with x held."""
    problem = held.at(x)
    shared = start.shared.copy()
    shared[held.place] = x
    optimum = maximise(
        problem,
        Estimate(start.own, shared),
        held=held.mask,
        tolerance=tolerance,
        max_iterations=POINT_ITERATIONS,
    )
    return point_of(held, optimum)


def point_of(held: Held, optimum: Optimum) -> PathPoint:
    """The point of a profile at an optimum, x taken as held: one step on, by the quadratic the optimiser stopped at."""
    local, k = optimum.local, held.place
    x = float(local.estimate.shared[k])
    free = optimum.free.copy()
    free[k] = False
    nothing = Estimate(np.zeros_like(local.estimate.own), np.zeros_like(local.estimate.shared))
    if not local.finite:
        return PathPoint(x, -np.inf, np.nan, np.nan, local.estimate, nothing, optimum.converged)
    slope, curvature = float(local.score_shared[k]), float(local.information.shared[k, k])
    try:
        elimination = eliminate(local.information.only(free))
        own, part = elimination.solve(-local.information.cross[:, :, k], -local.information.shared[free, k])
    except np.linalg.LinAlgError:  # something else is not determined here: the point itself stands
        return PathPoint(x, local.objective, slope, curvature, local.estimate, nothing, optimum.converged)
    slope += float(np.sum(own * local.score_own) + part @ local.score_shared[free])
    curvature += float(np.sum(own * local.information.cross[:, :, k]) + part @ local.information.shared[free, k])
    objective, moved = _one_step_on(held.at(x), optimum, elimination, free)
    return PathPoint(x, objective, slope, curvature, moved, Estimate(own, _filled(part, free)), optimum.converged)


def settled(problem: Problem, optimum: Optimum) -> tuple[float, Estimate]:
    """Objective and estimate one step on from where the optimiser stopped, where that step is short."""
    if not optimum.local.finite:
        return -np.inf, optimum.estimate
    try:
        elimination = eliminate(optimum.local.information.only(optimum.free))
        return _one_step_on(problem, optimum, elimination, optimum.free)
    except np.linalg.LinAlgError:
        return optimum.local.objective, optimum.estimate


def _one_step_on(
    problem: Problem, optimum: Optimum, elimination: Elimination, free: BoolArray
) -> tuple[float, Estimate]:
    local, bounds = optimum.local, problem.bounds
    own, part = elimination.solve(local.score_own, local.score_shared[free])
    promised = 0.5 * float(np.sum(own * local.score_own) + part @ local.score_shared[free])
    if not optimum.converged or promised > POINT_TOLERANCE:
        return local.objective, local.estimate
    shared = np.clip(local.estimate.shared + _filled(part, free), bounds[:, 0], bounds[:, 1])
    return local.objective + promised, Estimate(local.estimate.own + own, shared)


def _filled(part: FloatArray, free: BoolArray) -> FloatArray:
    full = np.zeros(free.size)
    full[free] = part
    return full


def foreseen(known: list[PathPoint], x: float) -> Estimate:
    """Where the others are likely to stand at x: a polynomial through the known points, nearest first."""
    nearest = known[0]
    if len(known) == 1:
        step = x - nearest.x
        estimate, tangent = nearest.estimate, nearest.tangent
        return Estimate(estimate.own + step * tangent.own, estimate.shared + step * tangent.shared)
    for n in range(len(known), 0, -1):
        weight = _weights(np.array([p.x for p in known[:n]]), x)
        if np.sum(np.abs(weight)) <= LARGEST_WEIGHTS:
            break
    return _weighted(weight, [p.estimate for p in known[:n]])


def foreseen_in_plane(steps: FloatArray, estimates: list[Estimate]) -> Estimate:
    """Where the others are likely to stand at the origin of `steps` (m, 2), from estimates there, nearest first.

    A quadratic through them, or a plane, or the nearest itself, as much as they determine.
    """
    u, v = steps.T
    quadratic = np.column_stack([np.ones(len(u)), u, v, u**2, u * v, v**2])
    for basis in (quadratic, quadratic[:, :3]):
        weight = np.linalg.pinv(basis, rcond=1e-8)[0]
        reproduces = np.allclose(weight @ basis, np.eye(basis.shape[1])[0], atol=1e-6)
        if reproduces and np.sum(np.abs(weight)) <= LARGEST_WEIGHTS:
            return _weighted(weight, estimates)
    return estimates[0]


def _weighted(weight: FloatArray, estimates: list[Estimate]) -> Estimate:
    own = sum(w * e.own for w, e in zip(weight, estimates, strict=True))
    shared = sum(w * e.shared for w, e in zip(weight, estimates, strict=True))
    return Estimate(np.asarray(own), np.asarray(shared))


def _weights(places: FloatArray, x: float) -> FloatArray:
    """Lagrange's weights of values at `places` in the polynomial at x."""
    gaps = places[:, None] - places[None, :]
    np.fill_diagonal(gaps, 1.0)
    across = (x - places)[None, :].repeat(places.size, axis=0)
    np.fill_diagonal(across, 1.0)
    return np.asarray(np.prod(across / gaps, axis=1))
