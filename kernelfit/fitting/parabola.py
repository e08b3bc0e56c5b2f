"""The log-likelihood near a point as a parabola: where its top lies, and what it weighs, for any strength of a penalty.

Strengths of penalties are chosen on the parabola, which costs no sweep. Own parameters and the leak count as unknown
too: they are eliminated, so that the cost stays linear in the number of units.

Reference
---------
Marginal likelihood by Laplace's approximation: Wood (2011), Journal of the Royal Statistical Society B 73, 3-36.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Literal

import numpy as np
from scipy.optimize import brentq

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.fitting.arrow import Arrow, Elimination, eliminate, solve_leniently, solve_symmetric
from kernelfit.fitting.maximise import Local

NO_INFORMATION = 1e-7  # of the information on what a penalty weighs were all else known: less is none, and rounding
NULL_SPACE = 1e-10  # of the largest eigenvalue of a penalty
LEAST_FREE = 1e-3  # of the directions that a penalty weighs: less than this left free, or taken, is none

PenalisedTerm = Literal["kernel", "after-spike"]


@dataclass(frozen=True, eq=False)
class Penalty:
    """A penalty 1/2 w x'Rx whose weight w is to be chosen.

    Parameters
    ----------
    term : what it smooths
    own : (P,) diagonal of R in the block of each unit's own parameters
    shared : (Q, Q) R on the shared parameters
    scales : (rank,) eigenvalues of R above zero, those of all units
    floor : fixed ridge on the same parameters
    """

    term: PenalisedTerm
    own: FloatArray
    shared: FloatArray
    scales: FloatArray
    floor: float = 0.0

    def cost(self, own: FloatArray, shared: FloatArray) -> float:
        """x'Rx."""
        return float(np.sum(self.own * own**2) + shared @ self.shared @ shared)

    def log_determinant(self, weight: float) -> float:
        """Of the prior's precision on the parameters it weighs."""
        return float(np.sum(np.log(self.floor + weight * self.scales)))

    def directions(self, weight: float) -> float:
        """Derivative of `log_determinant` by the log weight: the rank of R, where there is no floor."""
        return float(np.sum(weight * self.scales / (self.floor + weight * self.scales)))


@dataclass(frozen=True, eq=False)
class Peak:
    """The top of a parabola under penalties.

    Parameters
    ----------
    own, shared : where it lies, (n, P) and (Q,)
    own_variance : (n, P) diagonal of the inverse penalised information
    covariance : (F, F) the same for the free shared parameters
    log_marginal : log marginal likelihood, up to a constant that does not depend on the weights
    free_directions : (n_penalties,) rank - w tr(V R): directions left to the data out of those a penalty weighs
    costs : (n_penalties,) w x'Rx
    """

    own: FloatArray
    shared: FloatArray
    own_variance: FloatArray
    covariance: FloatArray
    log_marginal: float
    free_directions: FloatArray
    costs: FloatArray

    @property
    def slope(self) -> FloatArray:
        """(n_penalties,) derivative of the log marginal likelihood by the log weights, the information held."""
        return 0.5 * (self.free_directions - self.costs)


@dataclass(frozen=True, eq=False)
class Parabola:
    """Log-likelihood less fixed penalties near a point: value, score, information there.

    Parameters
    ----------
    own, shared : (n, P), (Q,) the point
    free : (Q,) shared parameters that move; the others are known
    value, score_own, score_shared, information : there; information in the free shared parameters alone
    """

    own: FloatArray
    shared: FloatArray
    free: BoolArray
    value: float
    score_own: FloatArray
    score_shared: FloatArray
    information: Arrow

    @classmethod
    def at(cls, local: Local, free: BoolArray, penalties: tuple[Penalty, ...], weights: FloatArray) -> Parabola:
        """From the objective at a point, these penalties at these weights taken out of it again."""
        bare = reweighted(local, penalties, -weights)
        return cls(
            own=local.estimate.own,
            shared=local.estimate.shared,
            free=free,
            value=bare.objective,
            score_own=bare.score_own,
            score_shared=bare.score_shared,
            information=bare.information.only(free),
        )

    @cached_property
    def _eliminated(self) -> Elimination:
        return eliminate(self.information)

    def _under(self, penalties: tuple[Penalty, ...], weights: FloatArray) -> Elimination:
        """Penalised information with the own blocks eliminated; anew only where a penalty weighs own parameters."""
        own = np.sum([w * p.own for p, w in zip(penalties, weights, strict=True)], axis=0)
        shared = np.sum([w * p.shared for p, w in zip(penalties, weights, strict=True)], axis=0)
        shared = shared[np.ix_(self.free, self.free)]
        if np.any(own):
            here = self.information
            return eliminate(Arrow(here.own + np.diag(own), here.cross, here.shared + shared))
        return replace(self._eliminated, schur=self._eliminated.schur + shared)

    def peak(self, penalties: tuple[Penalty, ...], weights: FloatArray) -> Peak:
        """Where the top lies under these penalties. Raises numpy's LinAlgError where there is none."""
        elimination = self._under(penalties, weights)
        score_own, score_shared = self.score_own, self.score_shared
        for p, w in zip(penalties, weights, strict=True):
            score_own = score_own - w * p.own * self.own
            score_shared = score_shared - w * (p.shared @ self.shared)
        own_step, step = elimination.solve(score_own, score_shared[self.free])
        own, shared = self.own + own_step, self.shared.copy()
        shared[self.free] += step
        covariance = solve_symmetric(elimination.schur, np.eye(step.size))
        through_shared = np.einsum("npq,qr,npr->np", elimination.reduced, covariance, elimination.reduced)
        own_variance = np.diagonal(elimination.own_inverse, axis1=1, axis2=2) + through_shared
        spread = np.zeros((self.free.size, self.free.size))
        spread[np.ix_(self.free, self.free)] = covariance
        costs, free_directions, prior = [], [], 0.0
        top = self.value + 0.5 * float(np.sum(score_own * own_step) + score_shared[self.free] @ step)
        for p, w in zip(penalties, weights, strict=True):
            trace = float(np.sum(own_variance * p.own) + np.sum(spread * p.shared))
            costs.append(w * p.cost(own, shared))
            free_directions.append(p.directions(float(w)) - w * trace)
            prior += p.log_determinant(float(w))
            top -= 0.5 * w * p.cost(self.own, self.shared)
        size = -float(np.sum(np.linalg.slogdet(elimination.own_inverse)[1]))
        size += float(np.linalg.slogdet(elimination.schur)[1])
        return Peak(
            own=own,
            shared=shared,
            own_variance=own_variance,
            covariance=covariance,
            log_marginal=top + 0.5 * prior - 0.5 * size,
            free_directions=np.array(free_directions),
            costs=np.array(costs),
        )

    def limits(self, k: int, penalties: tuple[Penalty, ...], weights: FloatArray) -> tuple[float, float]:
        """Lowest and highest weight of penalty k that make a difference, the others at their weights.

        Below the lowest as good as all directions are left to the data, above the highest as good as none is.
        """
        informed = self._informed(k, penalties, weights)
        if informed.size == 0:
            return 1.0, 1.0  # the data say nothing at all: any weight will do
        least = LEAST_FREE * penalties[k].scales.size
        low, high = np.log(informed.min()) - 30.0, np.log(informed.max()) + 30.0

        def taken(log_weight: float) -> float:
            return float(np.sum(1.0 / (1.0 + informed / np.exp(log_weight))))

        least = min(least, 0.25 * informed.size)
        lowest = brentq(lambda x: taken(x) - least, low, high)
        highest = brentq(lambda x: informed.size - taken(x) - least, low, high)
        return float(np.exp(lowest)), float(np.exp(highest))

    def _informed(self, k: int, penalties: tuple[Penalty, ...], weights: FloatArray) -> FloatArray:
        """Information on the directions that penalty k weighs and the data speak of, in units of R."""
        penalty, others = penalties[k], weights.copy()
        others[k] = 0.0
        if np.any(penalty.own):  # unit by unit, the shared parameters taken as known
            weighed = penalty.own > 0
            own = self.information.own + np.diag(
                np.sum([w * p.own for p, w in zip(penalties, others, strict=True)], axis=0)
            )
            rest = own[:, ~weighed][:, :, ~weighed]
            across = own[:, ~weighed][:, :, weighed]
            left = own[:, weighed][:, :, weighed] - np.swapaxes(across, 1, 2) @ np.linalg.solve(rest, across)
            return _above_rounding(np.asarray(np.linalg.eigvalsh(left).ravel()), own[:, weighed][:, :, weighed])
        schur = self._under(penalties, others).schur
        value, vector = np.linalg.eigh(penalty.shared[np.ix_(self.free, self.free)])
        weighed = value > NULL_SPACE * value.max(initial=0.0)
        turn = vector / np.sqrt(np.where(weighed, value, 1.0))
        turned = turn.T @ schur @ turn
        across = turned[np.ix_(~weighed, weighed)]
        left = turned[np.ix_(weighed, weighed)] - across.T @ solve_leniently(turned[np.ix_(~weighed, ~weighed)], across)
        return _above_rounding(np.asarray(np.linalg.eigvalsh(0.5 * (left + left.T))), turned[np.ix_(weighed, weighed)])


def _above_rounding(information: FloatArray, alone: FloatArray) -> FloatArray:
    """Those that are more than what rounding leaves of the information when all else is taken as known."""
    largest = float(np.max(np.abs(alone), initial=0.0))
    return information[information > NO_INFORMATION * largest]


def reweighted(local: Local, penalties: tuple[Penalty, ...], change: FloatArray) -> Local:
    """The objective at the same point with the weights of penalties changed by so much: no sweep is needed."""
    own, shared = local.estimate.own, local.estimate.shared
    for p, w in zip(penalties, change, strict=True):
        arrow = local.information
        local = replace(
            local,
            objective=local.objective - 0.5 * float(w) * p.cost(own, shared),
            score_own=local.score_own - w * p.own * own,
            score_shared=local.score_shared - w * (p.shared @ shared),
            information=Arrow(arrow.own + np.diag(w * p.own), arrow.cross, arrow.shared + w * p.shared),
        )
    return local
