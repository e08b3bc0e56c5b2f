"""Walking along a profile: one parameter held at one value after the other, out to where the likelihood has fallen.

The next place is foreseen from the slopes, where the others start there from the points already known, so that most
points take a single sweep. Ends are roots of a cubic through two points and their slopes, refined until a point lies
where the root is.
"""

from __future__ import annotations

from bisect import insort
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy.optimize import brentq

from kernelfit._typing import FloatArray
from kernelfit.errors import Unavailable
from kernelfit.fitting.maximise import LONGEST_SHARED_STEP, maximise
from kernelfit.fitting.problem import Estimate
from kernelfit.inference.held import Held
from kernelfit.inference.profile_ends import Crossing, ProfileInterval, interval_between
from kernelfit.inference.profile_point import PathPoint, foreseen, path_point, point_of

NEAR_ENOUGH = 2e-3  # of the cut, in roots of the drop: the cubic takes the end from there to a few millionths
MOST_POINTS = 40  # on one side
FARTHEST = 1e3  # first steps: an amplitude that has not been refused by then is not refused
MOST_REFINEMENTS = 40
HASTE = 4  # roots of cubics tried before a bracket is halved where they do not close in
MOST_HALVINGS = 40
NEARBY = 0.2  # standard errors from the top, where slopes are taken for its curvature
TIGHT_POINT = 1e-8
TOO_NEAR = 0.3  # of the first target: a target this near to the last point is passed over
OVERSHOOT = 1.06  # the walk ends a little beyond the last cut
BETTER = 1e-2  # log-likelihood units above the fit: another optimum, and no rounding
RISE = 0.05  # log-likelihood units: less is no second hill
MOST_RESTARTS = 3  # from better optima met on the way


class BetterOptimumError(Exception):
    """The walk came upon a point above the top it started from."""

    def __init__(self, point: PathPoint) -> None:
        super().__init__("a better optimum")
        self.point = point


@dataclass(eq=False)
class Walk:
    """A profile while it is walked; grows with every point tried.

    Parameters
    ----------
    held : the parameter
    top : the point with everything climbed
    points : all so far, by x
    """

    held: Held
    top: PathPoint
    points: list[PathPoint] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.points.append(self.top)

    def drop(self, point: PathPoint) -> float:
        """Log-likelihood units below the top."""
        return self.top.objective - point.objective

    def limit(self, sign: int) -> float:
        """How far x may go on one side; no nearer than the top, which a fit may have put beyond."""
        low, high = self.held.limits()
        return max(high, self.top.x) if sign > 0 else min(low, self.top.x)

    def try_at(self, x: float) -> PathPoint:
        """One more point, from where the known ones say the others stand. Raises BetterOptimumError."""
        near = sorted(self.points, key=lambda p: abs(p.x - x))
        start = self._start(near[:4], x)
        point = path_point(self.held, x, start)
        astray = not point.converged or self.drop(point) > 4.0 * max(self._expected_drop(near[0], x), 1.0)
        if astray:  # foreseen too boldly: from the neighbour itself
            again = path_point(self.held, x, near[0].estimate)
            point = max(point, again, key=lambda p: (p.converged, p.objective))
        if point.objective > self.top.objective + BETTER:
            raise BetterOptimumError(point)
        if np.isfinite(point.objective):
            insort(self.points, point, key=lambda p: p.x)
        return point

    def side(self, sign: int) -> list[PathPoint]:
        """Points from the top outwards on one side (-1 lower, 1 upper), the top first."""
        outward = [p for p in self.points if sign * (p.x - self.top.x) >= 0.0]
        return sorted(outward, key=lambda p: sign * p.x)

    def curvature(self) -> float:
        """Observed curvature of the objective at the top, everything else climbed: from the slopes on either side.

        Expected curvature where x may not move to both sides. The two points join the others.
        """
        step = NEARBY / float(np.sqrt(self.top.curvature))
        places = [self.top.x + sign * step for sign in (-1, 1)]
        if places[0] < self.limit(-1) or places[1] > self.limit(1):
            return self.top.curvature
        sides: list[PathPoint] = []
        for x in places:
            sides.append(path_point(self.held, x, self._start([self.top, *sides], x), TIGHT_POINT))
        self.points = [sides[0], *self.points, sides[1]]
        observed = (sides[0].slope - sides[1].slope) / (2.0 * step)
        return observed if observed > 0.0 else self.top.curvature

    def out(self, sign: int, targets: FloatArray) -> None:
        """Walk out on one side, from target to target.

        Parameters
        ----------
        sign : -1 lower, 1 upper
        targets : rising roots of twice the drop to aim at; the walk ends beyond the last one, or where x may not go on
        """
        limit = self.limit(sign)
        here = self.side(sign)[-1]
        first = None
        while len(self.side(sign)) <= MOST_POINTS and here.x != limit:
            reached = float(np.sqrt(2.0 * max(self.drop(here), 0.0)))
            if reached > targets[-1] / np.sqrt(OVERSHOOT):  # past the last cut
                return
            left = targets[targets > reached + TOO_NEAR * targets[0]]
            step = self._step(sign, 0.5 * float(left[0] if left.size else targets[-1]) ** 2)
            first = step if first is None else first
            if abs(here.x + sign * step - self.top.x) > FARTHEST * first:
                return
            x = here.x + sign * step
            x = x if sign * (limit - x) > 0.0 else limit
            for _ in range(MOST_HALVINGS):
                point = self.try_at(x)
                if np.isfinite(point.objective):
                    break
                x = 0.5 * (x + here.x)  # rates overflow there
            else:
                return
            here = point

    def crossing(self, sign: int, cut: float) -> Crossing:
        """Where the root of twice the drop reaches `cut` on one side."""
        goal = 0.5 * cut**2
        for n in range(MOST_REFINEMENTS):
            side = self.side(sign)
            beyond = next((k for k, p in enumerate(side) if self.drop(p) >= goal), None)
            if beyond is None:
                return Crossing(None, self.drop(side[-1]), side[-1].x, side[-1].x == self.limit(sign))
            a, b = side[beyond - 1], side[beyond]
            x = self._root_between(a, b, goal)
            if min(self._root_distance(p, cut) for p in (a, b)) <= NEAR_ENOUGH:
                break
            self.try_at(x if n < HASTE or n % 2 else 0.5 * (a.x + b.x))
        return Crossing(x, goal, x, False)

    def _start(self, known: list[PathPoint], x: float) -> Estimate:
        start = foreseen(known, x)
        beside = list(self.held.beside)
        start.shared[beside] = self.top.estimate.shared[beside]  # not left to the rounding of a weighted sum
        return start

    # --- foreseeing -------------------------------------------------------------------------------------

    def _root_distance(self, point: PathPoint, cut: float) -> float:
        return abs(float(np.sqrt(2.0 * max(self.drop(point), 0.0))) / cut - 1.0)

    def _step(self, sign: int, goal: float) -> float:
        """How far on the drop is foreseen to reach `goal`, by the last slope and how it has changed."""
        side = self.side(sign)
        here = side[-1]
        slope, bend = -sign * here.slope, here.curvature
        longest = np.inf
        if len(side) > 1:
            before = side[-2]
            length = abs(here.x - before.x)
            bend = (slope + sign * before.slope) / length
            longest = 3.0 * length
        if self.held.on_log:
            longest = min(longest, LONGEST_SHARED_STEP)
        missing = goal - self.drop(here)
        rising = slope**2 + 2.0 * bend * missing
        if slope + np.sqrt(max(rising, 0.0)) <= 0.0 or rising < 0.0:  # it levels off
            return float(longest if np.isfinite(longest) else 1.0)
        return float(min(2.0 * missing / (slope + np.sqrt(rising)), longest))

    def _expected_drop(self, near: PathPoint, x: float) -> float:
        step = x - near.x
        return self.drop(near) - near.slope * step + 0.5 * near.curvature * step**2

    def _root_between(self, a: PathPoint, b: PathPoint, goal: float) -> float:
        """Root of the cubic that has the drops and slopes of both points, less `goal`."""
        length = b.x - a.x

        def above(t: float) -> float:
            s = 1.0 - t
            value = self.drop(a) * s * s * (1.0 + 2.0 * t) + self.drop(b) * t * t * (3.0 - 2.0 * t)
            return float(value - length * (a.slope * t * s * s - b.slope * t * t * s) - goal)

        if above(0.0) >= 0.0:
            return a.x
        return float(a.x + length * brentq(above, 0.0, 1.0, xtol=1e-10)) if above(1.0) > 0.0 else b.x


@dataclass(frozen=True, eq=False)
class Walked:
    """A finished walk, with the better optimum it may have come upon."""

    walk: Walk
    crossings: dict[tuple[int, float], Crossing]
    gained: float  # log-likelihood units above the fit; 0 where the fit was the best

    @property
    def rises_again(self) -> bool:
        """Whether the likelihood, having fallen, rises again farther out."""
        drops = [np.array([self.walk.drop(p) for p in self.walk.side(sign)]) for sign in (-1, 1)]
        return any(bool((np.maximum.accumulate(d) - d > RISE).any()) for d in drops)

    def interval(self, kind: str, cut: float, ratio: float = 1.0, *, with_zero: bool = False) -> ProfileInterval:
        """The interval at a cut of the walk; `ratio` is by how much twice the drop was scaled down for it.

        `with_zero` takes it out to 0, where a test of no coupling does not exclude that there is none.
        """
        lower, upper = (self.crossings[sign, cut] for sign in (-1, 1))
        return interval_between(kind, self.walk.held, lower, upper, cut, ratio, with_zero=with_zero)


def walk(
    held: Held,
    start: Estimate,
    choose_cuts: Callable[[Walk], Sequence[float]],
    n_points: int,
    top: PathPoint | None = None,
) -> Walked | Unavailable:
    """Walk a profile out to the farthest cut on both sides, and find where it crosses each.

    Parameters
    ----------
    held : the parameter
    start : the optimum, in the coordinates of `held`
    choose_cuts : roots of twice the drop, from the walk at its top
    n_points : aimed at on each side
    top : the point at the optimum, where it is known
    """
    top = path_point(held, float(start.shared[held.place]), start) if top is None else top
    first = top.objective
    for _ in range(MOST_RESTARTS):
        if not top.curvature > 0.0:
            return Unavailable(f"the recording says nothing about {held.name}: the likelihood does not change with it")
        if _rises(held, top):
            top = _climbed(held, top)
        here = Walk(held, top)
        try:
            cuts = choose_cuts(here)
            for sign in (1, -1):
                here.out(sign, _targets(np.array(cuts), n_points))
            crossings = {(sign, cut): here.crossing(sign, cut) for sign in (1, -1) for cut in cuts}
            return Walked(here, crossings, top.objective - first)
        except BetterOptimumError as found:
            top = _climbed(held, found.point)
    return Unavailable(f"the likelihood has so many tops that no profile of {held.name} could be walked")


def farther(walked: Walked, cut: float) -> Walked | Unavailable:
    """The same walk with one more cut, farther out or not."""
    here = walked.walk
    try:
        for sign in (1, -1):
            here.out(sign, np.array([OVERSHOOT * cut]))
        crossings = {(sign, cut): here.crossing(sign, cut) for sign in (1, -1)}
    except BetterOptimumError:
        return Unavailable(f"farther out there is a better optimum than the one {here.held.name} was profiled from")
    return Walked(here, {**walked.crossings, **crossings}, walked.gained)


def _targets(cuts: FloatArray, n_points: int) -> FloatArray:
    """Rising roots of twice the drop to aim at: evenly spaced, the nearest moved onto each cut, the last beyond."""
    last = float(cuts.max())
    targets = last * np.arange(1, n_points + 1) / n_points
    for cut in np.unique(cuts):
        targets[np.argmin(np.abs(targets - cut))] = cut
    return np.unique(np.append(targets[:-1], OVERSHOOT * last))


def _rises(held: Held, top: PathPoint) -> bool:
    """Whether the likelihood rises from a point that should be its top, and may do so."""
    low, high = held.limits()
    at_limit = top.x >= high if top.slope > 0.0 else top.x <= low
    return bool(not at_limit and top.slope**2 > 2.0 * BETTER * top.curvature)


def _climbed(held: Held, point: PathPoint) -> PathPoint:
    """The top of the hill a point lies on, nothing held."""
    beside = held.mask & (np.arange(held.problem.n_shared) != held.place)
    return point_of(held, maximise(held.problem, point.estimate, held=beside))
