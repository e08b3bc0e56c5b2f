"""Penalised maximum likelihood by Levenberg-Marquardt steps on the expected information.

The information of a step is that of Fisher scoring, which for the exponential link at fixed shapes is the Hessian
itself.
Steps that are too long or lose likelihood raise the damping (Marquardt 1963) instead of being clipped: a clipped Newton
step wanders where length and leak lie on a ridge. Where the model is wrong the expected information and the Hessian
differ, and scoring alone would crawl: what the score says of the difference is kept as a small symmetric correction of
the shared block (structured secant method: Dennis, Gay and Welsch 1981, ACM Transactions on Mathematical Software 7,
348-368, with the symmetric rank-one formula).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.linalg

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.engine.evaluate import Evaluation, TimeBlocks
from kernelfit.fitting.amplitudes import far_off, suppressing, tied
from kernelfit.fitting.arrow import Arrow, eliminate
from kernelfit.fitting.by_block import BlockSums, sums_by_block
from kernelfit.fitting.problem import Estimate, Problem

TIGHT = 1e-10  # squared length of the next step in standard errors; that step is taken too, which squares the error
LOOSE = 1e-2
MAX_ITERATIONS = 200
LONGEST_SHARED_STEP = 1.0  # on the log scale of lengths and leak: no more than a factor e at once
LONGEST_OWN_STEP = 5.0
FIRST_DAMPING = 1e-3
LARGEST_DAMPING = 1e12
SMALLEST_COSINE = 1e-8  # a secant condition nearer to orthogonal than this says nothing
MOST_CORRECTION = 10.0  # curvature that differs from the expected by more is not trusted
RIDGE_STEPS = 25  # steps along a ridge change parameters that the recording cannot tell apart, and nothing else
RIDGE_GAIN = 0.01  # log-likelihood units
ROUNDING = 1e-14  # of the log-likelihood: a loss smaller than this is no loss


@dataclass(frozen=True, eq=False)
class Local:
    """Penalised objective and its derivatives at an estimate."""

    estimate: Estimate
    objective: float
    log_likelihood: float
    score_own: FloatArray  # (n, P)
    score_shared: FloatArray  # (Q,)
    information: Arrow

    @property
    def finite(self) -> bool:
        """Whether nothing overflowed here."""
        parts = (
            self.score_own,
            self.score_shared,
            self.information.own,
            self.information.cross,
            self.information.shared,
        )
        return bool(np.isfinite(self.objective)) and all(bool(np.isfinite(p).all()) for p in parts)


@dataclass(frozen=True, eq=False)
class Weighting:
    """Weights of blocks of time in the objective: blocks, and (G,) one weight for each."""

    blocks: TimeBlocks
    weight: FloatArray


@dataclass(frozen=True, eq=False)
class Optimum:
    """Where the optimiser stopped.

    `free` marks the shared parameters that were estimated; the others were held, or sit at `at_bound` (-1 lower, 1
    upper). An amplitude without a bound is marked so where nothing holds it on that side, and what is tied to such a
    one is not free either.
    `decrement` is the squared length of the next step in standard errors. `by_block` holds the sums of the last sweep
    by blocks of time, where it was made so. `on_ridge` marks a climb that ended because steps no longer gained much.
    """

    local: Local
    free: BoolArray
    at_bound: FloatArray
    converged: bool
    n_iterations: int
    decrement: float
    message: str
    by_block: BlockSums | None = None
    on_ridge: bool = False

    @property
    def estimate(self) -> Estimate:
        """The parameters."""
        return self.local.estimate


def penalised(problem: Problem, estimate: Estimate, sums: Evaluation) -> Local:
    """Add the penalties to the sums of a sweep."""
    n_own = estimate.own.shape[1]
    ridge = np.full(n_own, problem.model.after_spike.ridge)
    ridge[0] = 0.0
    penalty = problem.penalty
    total = sums.score.sum(axis=0)
    log_likelihood = float(sums.log_likelihood.sum()) - problem.data.log_factorials
    own_cost = float(np.sum(ridge * estimate.own**2))
    shared_cost = float(estimate.shared @ penalty @ estimate.shared)
    return Local(
        estimate=estimate,
        objective=log_likelihood - 0.5 * (own_cost + shared_cost),
        log_likelihood=log_likelihood,
        score_own=total[:, :n_own] - ridge * estimate.own,
        score_shared=total[:, n_own:].sum(axis=0) - penalty @ estimate.shared,
        information=Arrow(sums.own_own + np.diag(ridge), sums.own_shared, sums.shared_shared + penalty),
    )


def evaluate_locally(problem: Problem, estimate: Estimate, weighting: Weighting | None = None) -> Local:
    """Penalised objective and derivatives at an estimate: one sweep. Not finite where rates overflow.

    With a weighting every block of time counts as often as its weight says; log y! counts once.
    """
    with np.errstate(over="ignore", invalid="ignore"):  # a step too far is seen by its objective and taken back
        if weighting is None:
            return penalised(problem, estimate, problem.evaluate(estimate))
        sums = problem.evaluate(estimate, blocks=weighting.blocks, block_weight=weighting.weight)
        weight = weighting.weight[:, None]
        weighted = replace(sums, log_likelihood=weight * sums.log_likelihood, score=weight[..., None] * sums.score)
        return penalised(problem, estimate, weighted)


def maximise(
    problem: Problem,
    start: Estimate | Local,
    *,
    held: BoolArray | None = None,
    tolerance: float = TIGHT,
    max_iterations: int = MAX_ITERATIONS,
    weighting: Weighting | None = None,
) -> Optimum:
    """Climb from `start` to the nearest optimum of the penalised log-likelihood.

    Parameters
    ----------
    problem, start : what to maximise and where from, moved into the bounds; a point evaluated before saves a sweep
    held : (Q,) True for shared parameters that stay where they are
    tolerance : stop when the next step is shorter than the square root of this, in standard errors
    max_iterations : steps tried before giving up
    weighting : weights of blocks of time; None: all count once

    Returns
    -------
    Optimum : the best point found, converged or not
    """
    bounds = problem.bounds
    held = np.zeros(problem.n_shared, dtype=bool) if held is None else held
    inside = _inside(start.estimate if isinstance(start, Local) else start, bounds)
    if isinstance(start, Local) and np.array_equal(inside.shared, start.estimate.shared):
        local = start
    else:
        local = evaluate_locally(problem, inside, weighting)
    if not local.finite:
        nowhere = np.zeros(problem.n_shared)
        return Optimum(local, ~held, nowhere, False, 0, np.inf, "the likelihood at the start is not finite")
    correction = np.zeros((problem.n_shared, problem.n_shared))
    driven_um = problem.driven_um if problem.n_kernel else np.empty(0)
    run_off = np.zeros(problem.n_shared, dtype=bool)
    damping, decrement, stale = FIRST_DAMPING, np.inf, 0
    gains: list[float] = []
    by_block: BlockSums | None = None
    message, converged, on_ridge, iteration = "", False, False, 0
    while iteration < max_iterations:
        iteration += 1
        run_off = _run_off(problem, local, run_off, driven_um)
        free = ~held & ~_pushed_out(local, bounds) & ~run_off
        try:
            step = _solve(local, free, 0.0, correction)
            decrement = step.gain
            if decrement < tolerance:
                converged, message = True, _at_the_top(tolerance)
                if tolerance <= TIGHT:
                    local, by_block = _last_step(problem, local, step, bounds, weighting)
                break
        except np.linalg.LinAlgError:
            decrement = np.inf
        trial, damping = _bounded_step(local, free, damping, bounds, correction)
        if trial is None:
            message = "no further step can be worked out: here the recording cannot tell the parameters apart"
            break
        candidate = evaluate_locally(problem, trial.estimate, weighting)
        slack = ROUNDING * abs(local.objective)
        gained = candidate.objective - local.objective
        if candidate.finite and gained >= -slack:
            stale = stale + 1 if gained <= slack else 0
            damping = _next_damping(damping, gained, trial.predicted)
            if not problem.concave:
                correction = _corrected(correction, local, candidate)
            local = candidate
            if stale >= 3:
                converged, message = True, "the log-likelihood no longer changes in its last digits"
                break
            gains.append(gained)
            if len(gains) > RIDGE_STEPS and sum(gains[-RIDGE_STEPS:]) < RIDGE_GAIN:
                converged, on_ridge = True, True
                message = (
                    f"the likelihood is flat here: {RIDGE_STEPS} steps raised its logarithm by less than "
                    f"{RIDGE_GAIN:g} in all"
                )
                break
        else:
            damping = max(damping * 10.0, FIRST_DAMPING)
            if damping > LARGEST_DAMPING:
                message = "no step raises the likelihood any more"
                break
    else:
        message = f"stopped after {max_iterations} steps, before the top of the likelihood"
        if np.isfinite(decrement):
            length = np.sqrt(max(decrement, 0.0))
            message += f": one more would move the estimates by up to {length:.2g} standard errors"
    pushed = _pushed_out(local, bounds)
    at_bound = np.where(pushed, np.where(local.estimate.shared <= bounds[:, 0], -1.0, 1.0), 0.0)
    run_off = _run_off(problem, local, run_off, driven_um) & ~held
    optimum = Optimum(
        local, ~held & ~pushed, at_bound, converged, iteration, float(decrement), message, by_block, on_ridge
    )
    return with_run_off(problem, optimum, run_off) if run_off.any() else optimum


def _at_the_top(tolerance: float) -> str:
    """What a next step shorter than the root of `tolerance`, in standard errors, means to a reader."""
    return (
        "the top of the likelihood is reached: one more step would move no estimate by as much as "
        f"1/{1.0 / np.sqrt(tolerance):,.0f} of its standard error"
    )


def with_run_off(problem: Problem, optimum: Optimum, run_off: BoolArray) -> Optimum:
    """The optimum with amplitudes that nothing holds marked, and what is tied to them no longer free."""
    free = optimum.free & ~run_off
    free &= ~tied(problem, optimum.local.information, run_off, free)
    return replace(
        optimum, free=free, at_bound=np.where(run_off, np.sign(optimum.estimate.shared), optimum.at_bound)
    )


@dataclass(frozen=True, eq=False)
class _Step:
    own: FloatArray
    shared: FloatArray
    gain: float  # score . step, twice the gain a quadratic would give


@dataclass(frozen=True, eq=False)
class _Trial:
    estimate: Estimate
    predicted: float


def _pushed_out(local: Local, bounds: FloatArray) -> BoolArray:
    """(Q,) True where a parameter sits at a bound and the score points outside."""
    x, g = local.estimate.shared, local.score_shared
    if x.size == 0:
        return np.zeros(0, dtype=bool)
    return np.asarray(((x <= bounds[:, 0]) & (g < 0)) | ((x >= bounds[:, 1]) & (g > 0)), dtype=bool)


def _run_off(problem: Problem, local: Local, before: BoolArray, driven_um: FloatArray) -> BoolArray:
    """(Q,) True for amplitudes so far off that the likelihood no longer changes with them, and not on their way back.

    One that got there (`before`) stays there while the others settle, unless they bring it back by a half.
    """
    x, g = local.estimate.shared, local.score_shared
    if x.size == 0:
        return before
    far = suppressing(problem, x, driven_um, far_off(problem))
    if before.any():
        far |= before & suppressing(problem, x, driven_um, 0.5 * far_off(problem))
    return np.asarray(far & (g * x > -RIDGE_GAIN), dtype=bool)


def _inside(estimate: Estimate, bounds: FloatArray) -> Estimate:
    """The estimate with its shared parameters moved into their bounds."""
    if not estimate.shared.size:
        return estimate
    return Estimate(estimate.own, np.clip(estimate.shared, bounds[:, 0], bounds[:, 1]))


def _last_step(
    problem: Problem, local: Local, step: _Step, bounds: FloatArray, weighting: Weighting | None
) -> tuple[Local, BlockSums | None]:
    """The point one undamped step on, unless rounding makes it a worse one, and its sums by block of time."""
    estimate = _inside(Estimate(local.estimate.own + step.own, local.estimate.shared + step.shared), bounds)
    by_block = None
    if weighting is None:
        with np.errstate(over="ignore", invalid="ignore"):
            by_block = sums_by_block(problem, estimate)
            candidate = penalised(problem, estimate, by_block.together)
    else:
        candidate = evaluate_locally(problem, estimate, weighting)
    slack = ROUNDING * abs(local.objective)
    better = candidate.finite and candidate.objective >= local.objective - slack
    return (candidate, by_block) if better else (local, None)


def _solve(local: Local, free: BoolArray, damping: float, correction: FloatArray) -> _Step:
    information = local.information.only(free)
    if damping > 0:
        information = information.damped(damping)
    elimination = eliminate(information)
    schur = elimination.schur + correction[np.ix_(free, free)]
    if _trusted(schur, elimination.schur):
        elimination = replace(elimination, schur=schur)
    own, part = elimination.solve(local.score_own, local.score_shared[free])
    shared = np.zeros(free.size)
    shared[free] = part
    gain = float(np.sum(local.score_own * own) + local.score_shared @ shared)
    if not np.isfinite(gain):
        raise np.linalg.LinAlgError("the step is not finite")
    return _Step(own, shared, gain)


def _corrected(correction: FloatArray, before: Local, after: Local) -> FloatArray:
    """Symmetric rank-one update, so that information and correction predict the change of score over the step."""
    step = after.estimate.shared - before.estimate.shared
    if not step.any():
        return correction
    try:
        here, there = eliminate(after.information), eliminate(before.information)
    except np.linalg.LinAlgError:  # nothing to learn from a point without information
        return correction
    change = there.efficient_score(before.score_own, before.score_shared)
    change = change - here.efficient_score(after.score_own, after.score_shared)
    missing = change - (here.schur + correction) @ step
    along = float(missing @ step)
    if abs(along) <= SMALLEST_COSINE * float(np.linalg.norm(missing) * np.linalg.norm(step)):
        return correction
    return correction + np.outer(missing, missing) / along


def _trusted(schur: FloatArray, expected: FloatArray) -> bool:
    """Is the corrected information positive definite, and not wildly different from the expected one?"""
    diagonal = np.diag(expected)
    if schur.shape[0] == 0 or not (diagonal > 0).all():
        return False
    scale = 1.0 / np.sqrt(diagonal)
    try:
        ratio = scipy.linalg.eigvalsh(schur * scale[:, None] * scale, expected * scale[:, None] * scale)
    except np.linalg.LinAlgError:
        return False
    return bool(ratio[0] > 1.0 / MOST_CORRECTION and ratio[-1] < MOST_CORRECTION)


def _bounded_step(
    local: Local, free: BoolArray, damping: float, bounds: FloatArray, correction: FloatArray
) -> tuple[_Trial | None, float]:
    """The least damped step that is not too long, moved into the bounds, and the damping it took."""
    bounded = np.isfinite(bounds).all(axis=1) if bounds.size else np.zeros(0, dtype=bool)
    while damping <= LARGEST_DAMPING:
        try:
            step = _solve(local, free, damping, correction)
        except np.linalg.LinAlgError:
            damping = max(10.0 * damping, FIRST_DAMPING)
            continue
        shared_too_long = np.max(np.abs(step.shared[bounded]), initial=0.0) > LONGEST_SHARED_STEP
        if shared_too_long or np.max(np.abs(step.own[:, 0]), initial=0.0) > LONGEST_OWN_STEP:
            damping = max(4.0 * damping, FIRST_DAMPING)
            continue
        moved = Estimate(local.estimate.own + step.own, local.estimate.shared + step.shared)
        return _Trial(_inside(moved, bounds), 0.5 * step.gain), damping
    return None, damping


def _next_damping(damping: float, gained: float, predicted: float) -> float:
    if predicted <= 0 or gained > 0.75 * predicted:
        return 0.1 * damping if damping > 1e-9 else 0.0
    return max(3.0 * damping, FIRST_DAMPING) if gained < 0.25 * predicted else damping
