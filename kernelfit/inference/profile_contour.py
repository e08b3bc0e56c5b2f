"""The likelihood over two parameters at once, everything else climbed: a surface on a grid, and where to cut it.

The grid covers the widest region asked for: what is known from the profiles of either parameter gives its sides, and
from their points and those of the grid itself the others are foreseen at each further point, so that most take a single
sweep. The robust kind divides the drop, in each direction from the top, by the ratio of the two quadratic forms
(Chandler and Bate 2007, Biometrika 94, 167-183, section 3).
"""

from __future__ import annotations

import time
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from scipy.stats import chi2

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import ArgumentError, Unavailable
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.outcome import Note
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.fitting.progress import ProgressCallback
from kernelfit.inference.held import Held, hold
from kernelfit.inference.profile_conditions import check_call, discrete_names, fixed_leak, profile_notes
from kernelfit.inference.profile_point import (
    POINT_ITERATIONS,
    POINT_TOLERANCE,
    PathPoint,
    foreseen_in_plane,
    settled,
)
from kernelfit.inference.profile_walk import BETTER, Walked, walk
from kernelfit.inference.scaling import PlaneScaling, plane_scaling

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording

N_GRID = 11  # points along each side
LEVELS = (0.50, 0.90, 0.95)
WALK_POINTS = 4
NEIGHBOURS = 12  # points from which the next is foreseen


@dataclass(frozen=True, eq=False)
class ProfileContour:
    """The profile likelihood of two parameters on a grid. Plain data for a picture.

    Parameters
    ----------
    names, units, on_log : of the two parameters; whether the grid is even over the logarithm
    estimate : (2,) of the fit
    values_a, values_b : (n,), (m,) the grid, rising, in the parameters' own units
    drop : (n, m) how far the log-likelihood, maximised over everything else, lies below its top, nats
    scaled_drop : (n, m) the same divided by what bins that depend on each other make it too sure, or why not
    levels : (3,) of the contours
    critical, critical_scaled : (3,) the drops at which to draw them; chi-square of 2, and F quantile of the blocks
    converged : (n, m) whether everything else reached its top
    notes, n_sweeps, seconds : what a reader must know, and what it cost
    """

    names: tuple[str, str]
    units: tuple[str, str]
    on_log: tuple[bool, bool]
    estimate: FloatArray
    values_a: FloatArray
    values_b: FloatArray
    drop: FloatArray
    scaled_drop: FloatArray | Unavailable
    levels: FloatArray
    critical: FloatArray
    critical_scaled: FloatArray
    converged: BoolArray
    notes: tuple[Note, ...]
    n_sweeps: int
    seconds: float

    @property
    def table(self) -> pd.DataFrame:
        """A row for each point of the grid: both values, log_likelihood_drop, scaled_drop (NaN where not had)."""
        a, b = np.meshgrid(self.values_a, self.values_b, indexing="ij")
        scaled = np.full(self.drop.shape, np.nan) if isinstance(self.scaled_drop, Unavailable) else self.scaled_drop
        return pd.DataFrame(
            {
                self.names[0]: a.ravel(),
                self.names[1]: b.ravel(),
                "log_likelihood_drop": self.drop.ravel(),
                "scaled_drop": scaled.ravel(),
                "converged": self.converged.ravel(),
            }
        )


def profile_contour(
    fit: CouplingFit,
    names: tuple[str, str],
    recording: Recording | None,
    n_points: int,
    threads: int | None,
    progress: ProgressCallback | None,
) -> ProfileContour | Unavailable:
    """Profile of two shared parameters; see `CouplingFit.profile_contour`."""
    check_call(fit, names, LEVELS[-1], n_points)
    if names[0] == names[1]:
        raise ArgumentError(f"{names[0]!r} twice: a contour needs two different parameters.")
    if "leak_rate" in names and fit.model.leak_rate is not None:
        return fixed_leak(fit)
    jumps = discrete_names(fit) & set(names)
    if jumps:
        return Unavailable(f"the likelihood jumps in {jumps.pop()}: it has no contour")
    started = time.monotonic()
    problem = fit.problem(recording, threads=threads)
    problem.clock.callback, problem.clock.stage = progress, f"contour of {names[0]} and {names[1]}"
    problem.clock.expected_sweeps = int(1.3 * n_points**2) + 8 * WALK_POINTS
    pair = _hold_both(problem, fit.shared, names)
    if isinstance(pair, Unavailable):
        return pair
    gradients = np.array([h.gradient(fit.shared) for h in pair.single])
    scaling = plane_scaling(fit, gradients, bool(problem.penalty.any()))
    surface = _surface(fit, pair, scaling, n_points)
    if isinstance(surface, Unavailable):
        return surface
    first, second = pair.single
    scaled: FloatArray | Unavailable
    if isinstance(scaling, Unavailable):
        scaled, cuts = scaling, np.full(len(LEVELS), np.nan)
    else:
        steps = np.meshgrid(surface.x - surface.top[0], surface.y - surface.top[1], indexing="ij")
        scaled = surface.drop * scaling.factor(np.stack(steps, axis=-1))
        cuts = np.array([scaling.cut(level) for level in LEVELS])
    return ProfileContour(
        names=names,
        units=(first.unit, second.unit),
        on_log=(first.on_log, second.on_log),
        estimate=np.array([h.value(h.into(fit.estimate).shared[h.place]) for h in pair.single]),
        values_a=np.array([first.value(v) for v in surface.x]),
        values_b=np.array([second.value(v) for v in surface.y]),
        drop=surface.drop,
        scaled_drop=scaled,
        levels=np.array(LEVELS),
        critical=0.5 * np.asarray(chi2.ppf(LEVELS, 2)),
        critical_scaled=0.5 * cuts,
        converged=surface.converged,
        notes=_notes(fit, problem, names, surface),
        n_sweeps=problem.clock.sweeps,
        seconds=time.monotonic() - started,
    )


@dataclass(frozen=True, eq=False)
class _Pair:
    """Two parameters held at once: each by itself, and the problem in which both are coordinates.

    `both` is the one of the two (`base` says which) that may have needed other coordinates, the other held beside it.
    """

    single: tuple[Held, Held]
    both: Held
    base: int
    places: tuple[int, int]

    def point(self, x: float, y: float, start: Estimate) -> _Point:
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
        return _Point(x, y, objective, estimate, optimum.converged)

    def from_walk(self, k: int, point: PathPoint) -> _Point:
        """A point of the profile of parameter k, as one of the surface."""
        estimate = self.both.into(self.single[k].back(point.estimate))
        x, y = (float(estimate.shared[p]) for p in self.places)
        return _Point(x, y, point.objective, estimate, point.converged)


@dataclass(frozen=True, eq=False)
class _Point:
    x: float
    y: float
    objective: float
    estimate: Estimate
    converged: bool


@dataclass(frozen=True, eq=False)
class _Surface:
    x: FloatArray
    y: FloatArray
    top: tuple[float, float]
    best: float
    drop: FloatArray
    converged: BoolArray
    walks: tuple[Walked, Walked]


def _hold_both(problem: Problem, shared: FloatArray, names: tuple[str, str]) -> _Pair | Unavailable:
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
    return _Pair((first, second), both, base, places)


def _surface(
    fit: CouplingFit, pair: _Pair, scaling: PlaneScaling | Unavailable, n_points: int
) -> _Surface | Unavailable:
    walks: list[Walked] = []
    for k, held in enumerate(pair.single):
        cuts = [float(np.sqrt(chi2.ppf(LEVELS[-1], 2)))]
        if isinstance(scaling, PlaneScaling):
            cuts.append(float(np.sqrt(scaling.cut(LEVELS[-1]) * scaling.ratio(k))))
        walked = walk(held, held.into(fit.estimate), np.array(cuts), WALK_POINTS)
        if isinstance(walked, Unavailable):
            return walked
        walks.append(walked)
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
    return _Surface(sides[0], sides[1], (best.x, best.y), best.objective, drop, converged, (walks[0], walks[1]))


def _snake(n: int) -> list[tuple[int, int]]:
    """Rows of a square grid from the middle to one side, then to the other; each begins where the last one ended."""
    middle = n // 2
    rows = [*range(middle, n), *range(middle - 1, -1, -1)]
    path: list[tuple[int, int]] = []
    for k, i in enumerate(rows):
        along = range(n) if k % 2 == 0 else range(n - 1, -1, -1)
        path += [(i, j) for j in along]
    return path


def _notes(fit: CouplingFit, problem: Problem, names: tuple[str, str], surface: _Surface) -> tuple[Note, ...]:
    where = " and ".join(names)
    notes: list[Note] = []
    for name, walked in zip(names, surface.walks, strict=True):
        notes += [n for n in profile_notes(fit, problem, name, walked) if n.what not in [known.what for known in notes]]
    if not surface.converged.all():
        n, n_all = int((~surface.converged).sum()), surface.converged.size
        notes.append(
            Note(
                "warning",
                f"At {n} of {n_all} points of the surface the other parameters did not reach their top.",
                where,
                "Read the surface there as a lower limit of the likelihood.",
            )
        )
    highest = max(walked.walk.top.objective for walked in surface.walks)
    if surface.best > highest + BETTER:
        notes.append(
            Note(
                "warning",
                f"The surface came upon a better optimum than the fit, {surface.best - highest:.2g} log-likelihood "
                "units above. Drops are measured from there.",
                where,
                "Do not quote the fit as the best; try a kernel with fewer parameters or a fixed leak rate.",
            )
        )
    return tuple(notes)
