"""The objective over two parameters: what is held, the grid, and from where each point is climbed.

What is known from the profiles of either parameter gives the sides of the grid, and from their points and those of the
grid itself the others are foreseen at each further point, so that most take a single sweep.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import Unavailable
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.inference.held import Held, hold
from kernelfit.inference.profile_point import (
    POINT_ITERATIONS,
    POINT_TOLERANCE,
    PathPoint,
    foreseen_in_plane,
    settled,
)
from kernelfit.inference.profile_walk import Walk, Walked, walk
from kernelfit.inference.scaling import PlaneScaling, plane_cut

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

LEVELS = (0.50, 0.90, 0.95)
WALK_POINTS = 4
NEIGHBOURS = 12  # points from which the next is foreseen


@dataclass(frozen=True, eq=False)
class Pair:
    """Two parameters held at once: each by itself, and the problem in which both are coordinates.

    `both` is the one of the two (`base` says which) that may have needed other coordinates, the other held beside it.
    """

    single: tuple[Held, Held]
    both: Held
    base: int
    places: tuple[int, int]

    def point(self, x: float, y: float, start: Estimate) -> SurfacePoint:
        """Climb everything else."""
        shared = start.shared.copy()
        shared[list(self.places)] = x, y
        # in changed coordinates the bounds of the others follow from the value that is held
        problem = self.both.at((x, y)[self.base])
        optimum = maximise(
            problem,
            Estimate(start.own, shared),
            held=self.both.mask,
            tolerance=POINT_TOLERANCE,
            max_iterations=POINT_ITERATIONS,
        )
        objective, estimate = settled(problem, optimum)
        return SurfacePoint(x, y, objective, estimate, optimum.converged)

    def from_walk(self, k: int, point: PathPoint) -> SurfacePoint:
        """A point of the profile of parameter k, as one of the surface."""
        estimate = self.both.into(self.single[k].back(point.estimate))
        x, y = (float(estimate.shared[p]) for p in self.places)
        return SurfacePoint(x, y, point.objective, estimate, point.converged)


@dataclass(frozen=True, eq=False)
class SurfacePoint:
    """One point of a surface: two coordinates held, everything else climbed."""

    x: float
    y: float
    objective: float
    estimate: Estimate
    converged: bool


@dataclass(frozen=True, eq=False)
class Surface:
    """The objective on a grid: coordinates held (n,), (m,), where its top lies, drop (n, m), and how it is scaled."""

    x: FloatArray
    y: FloatArray
    top: tuple[float, float]
    best: float
    drop: FloatArray
    converged: BoolArray
    walks: tuple[Walked, Walked]
    scaling: PlaneScaling | Unavailable


def hold_both(problem: Problem, shared: FloatArray, names: tuple[str, str]) -> Pair | Unavailable:
    """Two shared parameters as coordinates of one problem, or why they cannot be held together."""
    first = hold(problem, shared, names[0])
    if isinstance(first, Unavailable):
        return first
    second = hold(problem, shared, names[1], (first.place,))
    if isinstance(second, Unavailable):
        second = hold(problem, shared, names[1])
        if isinstance(second, Unavailable):
            return second
        again = hold(problem, shared, names[0], (second.place,))
        if isinstance(again, Unavailable):
            return again
        first = again
    if first.problem is not problem and second.problem is not problem:
        return Unavailable(f"{names[0]} and {names[1]} both mix several parameters, and cannot be held together")
    base = int(second.problem is not problem)
    places = (first.place, second.place)
    one = (first, second)[base]
    both = replace(one, beside=(*one.beside, places[1 - base]))
    return Pair((first, second), both, base, places)


def surface_of(fit: CouplingFit, pair: Pair, robust: FloatArray | Unavailable, n_points: int) -> Surface | Unavailable:
    """Walk the profile of either parameter, then the grid between their outermost points."""
    walks: list[Walked] = []
    implied = np.zeros((2, 2))
    freedom = fit.uncertainty.degrees_of_freedom("robust")
    at_most = 1.0 if pair.both.problem.penalty.any() else np.inf  # of the factor: a penalty is not scaled away
    for k, held in enumerate(pair.single):

        def cuts(here: Walk, k: int = k) -> list[float]:
            implied[k] = _implied(pair, k, here)
            if isinstance(robust, Unavailable):
                return [float(np.sqrt(chi2.ppf(LEVELS[-1], 2)))]
            ratio = max(float(robust[k, k] / implied[k, k]), 1.0 / at_most)
            return [float(np.sqrt(c)) for c in (chi2.ppf(LEVELS[-1], 2), plane_cut(LEVELS[-1], freedom) * ratio)]

        walked = walk(held, held.into(fit.estimate), cuts, WALK_POINTS)
        if isinstance(walked, Unavailable):
            return walked
        walks.append(walked)
    scaling: PlaneScaling | Unavailable
    if isinstance(robust, Unavailable):
        scaling = robust
    else:
        scaling = PlaneScaling(0.5 * (implied + implied.T), robust, freedom, at_most)
    known = [pair.from_walk(k, p) for k, walked in enumerate(walks) for p in walked.walk.points]
    sides = [np.linspace(w.walk.points[0].x, w.walk.points[-1].x, n_points) for w in walks]
    objective, converged = np.full((n_points, n_points), np.nan), np.zeros((n_points, n_points), dtype=bool)
    size = np.array([np.ptp(side) for side in sides])
    for i, j in _snake(n_points):
        x, y = float(sides[0][i]), float(sides[1][j])
        near = sorted(known, key=lambda p: np.hypot((p.x - x) / size[0], (p.y - y) / size[1]))[:NEIGHBOURS]
        steps = np.array([[(p.x - x) / size[0], (p.y - y) / size[1]] for p in near])
        point = pair.point(x, y, foreseen_in_plane(steps, [p.estimate for p in near]))
        if not point.converged:
            again = pair.point(x, y, near[0].estimate)
            point = max(point, again, key=lambda p: (p.converged, p.objective))
        objective[i, j], converged[i, j] = point.objective, point.converged
        if np.isfinite(point.objective):
            known.append(point)
    best = max(known, key=lambda p: p.objective)
    drop = best.objective - objective
    return Surface(sides[0], sides[1], (best.x, best.y), best.objective, drop, converged, (walks[0], walks[1]), scaling)


def _implied(pair: Pair, k: int, here: Walk) -> FloatArray:
    """Row k (2,) of the covariance that the likelihood implies: its curvature, and how the other follows."""
    variance = 1.0 / here.curvature()
    near = sorted(here.points, key=lambda p: abs(p.x - here.top.x))[:3]
    low, high = min(near, key=lambda p: p.x), max(near, key=lambda p: p.x)
    row = np.array([variance, variance])
    if high.x > low.x:
        ends = [pair.from_walk(k, p) for p in (low, high)]
        other = [(e.y if k == 0 else e.x) for e in ends]
        row[1 - k] = variance * (other[1] - other[0]) / (high.x - low.x)
    else:
        row[1 - k] = 0.0
    return row


def _snake(n: int) -> list[tuple[int, int]]:
    """Rows of a square grid from the middle to one side, then to the other; each begins where the last one ended."""
    middle = n // 2
    rows = [*range(middle, n), *range(middle - 1, -1, -1)]
    path: list[tuple[int, int]] = []
    for k, i in enumerate(rows):
        along = range(n) if k % 2 == 0 else range(n - 1, -1, -1)
        path += [(i, j) for j in along]
    return path
