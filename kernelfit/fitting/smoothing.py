"""Weights of penalties chosen by the data: smoothing of a kernel, ridge of after-spike coefficients.

A penalty is a prior on how rough a curve is. Its weight is chosen where the marginal likelihood, the parameters
integrated out by Laplace's approximation, is highest: by the generalised Fellner-Schall update on the parabola of the
log-likelihood at the current estimate, which costs no sweep, in turn with a few scoring steps from there.

References
----------
Wood (2011), Journal of the Royal Statistical Society B 73, 3-36; Wood and Fasiolo (2017), Biometrics 73, 1071-1081.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.fitting.arrow import Arrow, SingularOwnBlock
from kernelfit.fitting.marginal import added_spread, best_weights, likely_range, likely_weights
from kernelfit.fitting.maximise import LOOSE, TIGHT, Optimum, maximise
from kernelfit.fitting.null import Null, first_estimate, without_coupling
from kernelfit.fitting.parabola import Parabola, PenalisedTerm, Penalty, reweighted
from kernelfit.fitting.penalties import after_spike_penalty, asked_for, weights_of, with_weights
from kernelfit.fitting.problem import Problem
from kernelfit.fitting.search import CLOSE, SearchResult, promising
from kernelfit.fitting.validation import HeldOut, best_held_out, held_out
from kernelfit.kernels import SmoothingChoice
from kernelfit.model.coupling import CouplingModel

MAX_ROUNDS = 15
STEPS_A_ROUND = 2
SETTLED = 1e-3  # log marginal likelihood that another round would gain
FARTHEST = np.log(1000.0)  # a log weight moves in a round: the parabola may be a poor one at first
FIRST_FREE = 0.1  # of the directions are left to the data at least by the first guess, and taken at least
BETWEEN = 1e-4  # tolerance of the climbs between two updates
VALIDATED_POINTS = 9
VALIDATED_INSIDE = 10.0  # the grid of validation keeps this far from the bounds, beyond which nothing changes
DIGITS = 4  # a weight is rounded to so many: no more is known of it, and it can be typed again


@dataclass(frozen=True)
class ChosenWeight:
    """The weight of one penalty, chosen by the data.

    Parameters
    ----------
    term : "kernel" (its smoothing) or "after-spike" (its ridge)
    chosen_by : "likelihood" or "validation"
    value : the weight
    lower, upper : bounds: outside of them nothing changes any more
    at_bound : -1 at the lower one (no smoothing), 1 at the upper one (nothing left but what is not penalised), else 0
    likely_from, likely_to : weights that hold 95 % of what the marginal likelihood makes likely
    """

    term: PenalisedTerm
    chosen_by: SmoothingChoice
    value: float
    lower: float
    upper: float
    at_bound: int
    likely_from: float
    likely_to: float


@dataclass(frozen=True)
class Smoothing:
    """How the weights of a fit were chosen.

    Parameters
    ----------
    weights : those chosen
    settled : whether they stopped changing
    n_rounds, n_sweeps : rounds of updating and climbing, and sweeps all of it took
    log_marginal_likelihood : at the weights chosen, nats, up to a constant that does not depend on them; NaN where the
        recording says nothing about some parameter
    held_out : log-likelihood of stretches of time left out against the smoothing, where validation chose it
    """

    weights: tuple[ChosenWeight, ...]
    settled: bool
    n_rounds: int
    n_sweeps: int
    log_marginal_likelihood: float
    held_out: HeldOut | None = None

    def of(self, term: PenalisedTerm) -> ChosenWeight | None:
        """The weight chosen for a term, or None where it was stated."""
        return next((w for w in self.weights if w.term == term), None)


# --- first guesses ----------------------------------------------------------------------------------------------------


def first_ridge(problem: Problem, asked: CouplingModel) -> Problem:
    """The ridge of the after-spike coefficients chosen without coupling, where it is left to the data."""
    wanted = tuple(p for p, _ in asked_for(problem, asked) if p.term == "after-spike")
    if not wanted:
        return problem
    bare = without_coupling(problem)
    penalties = (after_spike_penalty(bare),)
    weights = weights_of(problem, penalties)
    optimum = maximise(bare, first_estimate(bare), tolerance=LOOSE)
    climb = _climb(bare, optimum, penalties, weights, np.zeros(0, dtype=bool))
    return with_weights(problem, wanted, climb.weights)


def first_smoothing(problem: Problem, null: Null, asked: CouplingModel) -> Problem:
    """A first guess at the smoothing, where it is left to the data: from the one-step estimate of J in bands."""
    wanted = tuple(p for p, _ in asked_for(problem, asked) if p.term == "kernel")
    if not wanted:
        return problem
    sweep = promising(null.sweeps)[0]
    n = problem.n_kernel
    basis = problem.kernel.gradient(np.zeros(n), null.distance_um, problem.span)  # (K, bands)
    rough = wanted[0]
    penalty = Penalty("kernel", np.zeros(1), rough.shared[:n, :n], rough.scales, rough.floor)
    parabola = Parabola(
        own=np.zeros((0, 1)),
        shared=np.zeros(n),
        free=np.ones(n, dtype=bool),
        value=0.0,
        score_own=np.zeros((0, 1)),
        score_shared=basis @ sweep.information @ sweep.coupling,
        information=Arrow(np.zeros((0, 1, 1)), np.zeros((0, 1, n)), basis @ sweep.information @ basis.T),
    )
    start = np.ones(1)
    try:
        low, high = parabola.limits(0, (penalty,), start)
        weights, _ = best_weights(parabola, (penalty,), start)
    except np.linalg.LinAlgError:  # bands that say nothing: begin in the middle, the climb will tell
        return problem
    room = 1.0 / FIRST_FREE
    return with_weights(problem, wanted, np.clip(weights, low * room, max(high / room, low * room)))


# --- updating and climbing in turn ------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Climb:
    """A problem with its weights, an estimate near its top, and the parabola there."""

    problem: Problem
    optimum: Optimum
    weights: FloatArray
    bounds: FloatArray
    parabola: Parabola
    settled: bool
    n_rounds: int


def parabola_at(problem: Problem, optimum: Optimum, penalties: tuple[Penalty, ...], weights: FloatArray) -> Parabola:
    """The parabola at an optimum; the leak is taken as known where the data say nothing about it.

    Raises numpy's LinAlgError where there is none even so.
    """
    parabola = Parabola.at(optimum.local, optimum.free, penalties, weights)
    try:
        parabola.peak(penalties, weights)
    except SingularOwnBlock:
        raise
    except np.linalg.LinAlgError:
        if not (problem.fits_leak and optimum.free[-1]):
            raise
        free = optimum.free.copy()
        free[-1] = False
        parabola = Parabola.at(optimum.local, free, penalties, weights)
        parabola.peak(penalties, weights)
    return parabola


def _climb(
    problem: Problem, optimum: Optimum, penalties: tuple[Penalty, ...], weights: FloatArray, held: BoolArray
) -> _Climb:
    """Update weights on the parabola, climb a few steps, and again until the weights no longer change."""
    settled, n_rounds = False, 0
    while True:
        n_rounds += 1
        parabola = parabola_at(problem, optimum, penalties, weights)
        wanted, bounds = best_weights(parabola, penalties, weights)
        change = np.clip(np.log(wanted / weights), -FARTHEST, FARTHEST)
        new = _rounded(weights * np.exp(change))
        gain = parabola.peak(penalties, new).log_marginal - parabola.peak(penalties, weights).log_marginal
        settled = bool(gain < SETTLED) and bool((np.abs(change) < FARTHEST).all())
        problem = with_weights(problem, penalties, new)
        optimum = replace(optimum, local=reweighted(optimum.local, penalties, new - weights))
        weights = new
        if settled or n_rounds == MAX_ROUNDS:
            return _Climb(problem, optimum, weights, bounds, parabola, settled, n_rounds)
        optimum = maximise(problem, optimum.local, held=held, tolerance=BETWEEN, max_iterations=STEPS_A_ROUND)


def _rounded(weights: FloatArray) -> FloatArray:
    return np.array([float(f"{w:.{DIGITS - 1}e}") for w in weights])


# --- the whole of it --------------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Chosen:
    """A search with the weights that the data chose: the problem with them, its optima, how they were chosen.

    `added_spread` (Q, Q) is what not knowing the smoothing adds to the covariance of the shared parameters.
    """

    problem: Problem
    found: SearchResult
    smoothing: Smoothing | None
    added_spread: FloatArray


def choose(problem: Problem, found: SearchResult, asked: CouplingModel) -> Chosen:
    """Choose the weights that a model leaves to the data, and climb to the top that belongs to them.

    Where the recording says nothing about some parameters, so that there is nothing to integrate over, the first
    guesses stay, and the choice has not settled.

    Parameters
    ----------
    problem, found : with first guesses for the weights, and the optimum there
    asked : the model as the user stated it
    """
    wanted = asked_for(problem, asked)
    if not wanted:
        return Chosen(problem, found, None, np.zeros((problem.n_shared, problem.n_shared)))
    problem.clock.stage = "choosing the smoothing"
    try:
        return _choose(problem, found, wanted)
    except SingularOwnBlock:
        raise
    except np.linalg.LinAlgError:
        return _as_guessed(problem, found, wanted)


def _choose(problem: Problem, found: SearchResult, wanted: tuple[tuple[Penalty, SmoothingChoice], ...]) -> Chosen:
    before = problem.clock.sweeps
    penalties = tuple(p for p, _ in wanted)
    held = ~found.best.free & (found.best.at_bound == 0)
    climb = _climb(problem, found.best, penalties, weights_of(problem, penalties), held)
    weights, at_bound, table = climb.weights.copy(), _at_bound(climb.weights, climb.bounds), None
    for k, (penalty, choice) in enumerate(wanted):
        if choice == "validation":
            table = held_out(climb.problem, climb.optimum, penalty, _grid(climb.bounds[k]))
            weights[k], at_bound[k] = best_held_out(table)
    weights = _rounded(weights)
    problem = with_weights(climb.problem, penalties, weights)
    start = reweighted(climb.optimum.local, penalties, weights - climb.weights)
    found = _with_second(problem, found, maximise(problem, start, held=held, tolerance=TIGHT), held)
    parabola = parabola_at(problem, found.best, penalties, weights)
    added, chosen = np.zeros((problem.n_shared, problem.n_shared)), []
    for k, (penalty, choice) in enumerate(wanted):
        if penalty.term == "kernel":
            likely = likely_weights(parabola, penalties, weights, k)
            added = added_spread(parabola, penalties, weights, likely)
            ends = likely.quantile(0.025), likely.quantile(0.975)
        else:  # chosen from all units, so known well enough
            ends = likely_range(parabola, penalties, weights, k, climb.bounds[k])
        low, high = climb.bounds[k].tolist()
        chosen.append(ChosenWeight(penalty.term, choice, float(weights[k]), low, high, int(at_bound[k]), *ends))
    smoothing = Smoothing(
        weights=tuple(chosen),
        settled=climb.settled,
        n_rounds=climb.n_rounds,
        n_sweeps=problem.clock.sweeps - before,
        log_marginal_likelihood=parabola.peak(penalties, weights).log_marginal,
        held_out=table,
    )
    return Chosen(problem, found, smoothing, added)


def _as_guessed(problem: Problem, found: SearchResult, wanted: tuple[tuple[Penalty, SmoothingChoice], ...]) -> Chosen:
    """No choice: the weights are the first guesses, and nothing is known about others."""
    guesses = weights_of(problem, tuple(p for p, _ in wanted)).tolist()
    weights = [
        ChosenWeight(penalty.term, choice, guess, guess, guess, 0, guess, guess)
        for (penalty, choice), guess in zip(wanted, guesses, strict=True)
    ]
    smoothing = Smoothing(tuple(weights), False, 0, 0, np.nan)
    return Chosen(problem, found, smoothing, np.zeros((problem.n_shared, problem.n_shared)))


def _at_bound(weights: FloatArray, bounds: FloatArray) -> IntArray:
    near = 1.0 + 10.0**-DIGITS * 10.0  # a rounded weight is still at its bound
    return np.where(weights >= bounds[:, 1] / near, 1, np.where(weights <= bounds[:, 0] * near, -1, 0))


def _grid(bounds: FloatArray) -> FloatArray:
    """Smoothings to validate, from hardly any to as good as endless; one where any will do."""
    low, high = bounds.tolist()
    if high < low * VALIDATED_INSIDE**3:
        return _rounded(np.array([np.sqrt(low * high)]))
    return _rounded(np.geomspace(low * VALIDATED_INSIDE, high / VALIDATED_INSIDE, VALIDATED_POINTS))


def _with_second(problem: Problem, found: SearchResult, top: Optimum, held: BoolArray) -> SearchResult:
    """The search with its best optimum under the weights chosen, and its second one if it still comes close."""
    best = replace(top, n_iterations=top.n_iterations + found.best.n_iterations)
    if found.second is None:
        return replace(found, best=best)
    second = maximise(problem, found.second.estimate, held=held, tolerance=LOOSE)
    if second.local.objective > best.local.objective:
        best, second = maximise(problem, second.local, held=held, tolerance=TIGHT), best
    close = second.local.objective > best.local.objective - CLOSE
    return replace(found, best=best, second=second if close else None)
