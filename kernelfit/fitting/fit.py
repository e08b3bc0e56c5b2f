"""The whole fit, in order: null, coupling or not, search, standard errors, what must be said."""

from __future__ import annotations

import time
import warnings
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
from scipy.special import gammaln, xlogy

from kernelfit._typing import FloatArray
from kernelfit._validation import check_callback, check_seed, check_threads
from kernelfit.errors import FitWarning, NotIdentifiedError
from kernelfit.fitting.added_term import after_spike_test
from kernelfit.fitting.arrow import SingularOwnBlock
from kernelfit.fitting.bounds import bound_reasons, in_words, run_off_parameters
from kernelfit.fitting.covariance import Uncertainty, covariances
from kernelfit.fitting.detection import detect_coupling
from kernelfit.fitting.effective import term_sizes
from kernelfit.fitting.marginal import widened
from kernelfit.fitting.maximise import Optimum
from kernelfit.fitting.notes import fit_notes
from kernelfit.fitting.null import Null, fit_null
from kernelfit.fitting.outcome import SolverReport
from kernelfit.fitting.problem import Problem, make_problem
from kernelfit.fitting.progress import ProgressCallback
from kernelfit.fitting.radius import LEVEL, RadiusProfile, discrete_parameter, search_radius, variance_inflation
from kernelfit.fitting.result import CouplingFit, covariance_kind
from kernelfit.fitting.search import SearchResult, search
from kernelfit.fitting.smoothing import choose, first_ridge, first_smoothing
from kernelfit.fitting.smoothing_notes import smoothing_notes
from kernelfit.model.coupling import CouplingModel, CovarianceKind
from kernelfit.recording.recording import Recording, check_recording
from kernelfit.version import __version__


def fit_model(
    model: CouplingModel,
    recording: Recording,
    covariance: CovarianceKind = "robust",
    *,
    threads: int | None = None,
    seed: int = 0,
    progress: ProgressCallback | None = None,
) -> CouplingFit:
    """Estimate a model from a recording; see `CouplingModel.fit`."""
    kind = covariance_kind(covariance)
    check_recording(recording)
    check_threads(threads)
    check_seed(seed)
    check_callback(progress)
    started = time.monotonic()
    problem = make_problem(model, recording, threads=threads, progress=progress)
    try:
        problem = first_ridge(problem, model)
        null = fit_null(problem)
        verdict = detect_coupling(null, seed)
        problem = first_smoothing(problem, null, model)
        found, profile = _best(problem, null)
        chosen = choose(problem, found, model)
        problem, found, optimum = chosen.problem, chosen.found, chosen.found.best
        spread = widened(covariances(problem, optimum), chosen.added_spread)
        sizes = term_sizes(problem, optimum)
    except SingularOwnBlock as error:
        raise NotIdentifiedError(_undetermined_unit(problem, recording, error.place)) from error
    added = after_spike_test(problem, optimum, spread.block_curve) if problem.trace_decay.size == 0 else None
    notes = fit_notes(problem, recording, optimum, spread, verdict) + smoothing_notes(
        chosen.smoothing, sizes, problem.kernel
    )
    for note in notes:
        if note.severity != "info":
            warnings.warn(f"{note.what} {note.remedy}", FitWarning, stacklevel=3)
    likelihoods = _reference_likelihoods(problem)
    by_distance = problem.geometry.pairs_by_distance
    return CouplingFit(
        model=problem.model,
        unit_ids=recording.unit_ids,
        positions=recording.positions,
        origin=recording.origin,
        window_bounds=recording.window_bounds,
        targets=problem.data.targets,
        counts=problem.grid.counts_in_sum,
        n_bins=problem.data.n_bins,
        own=optimum.estimate.own,
        shared=optimum.estimate.shared,
        at_bound=optimum.at_bound,
        free=optimum.free,
        bound_reasons=bound_reasons(problem, optimum),
        span=problem.span,
        distinct_um=by_distance["distance_um"].to_numpy(),
        n_pairs=by_distance["n_pairs"].to_numpy(),
        has_same_site=problem.has_same_site,
        radius_interval=_radius_interval(problem, profile, spread),
        uncertainty=spread,
        covariance_kind=kind,
        log_likelihood=optimum.local.log_likelihood,
        null_log_likelihood=likelihoods.constant,
        saturated_log_likelihood=likelihoods.saturated,
        uncoupled_log_likelihood=null.optimum.local.log_likelihood,
        spectral_radius=_spectral_radius(problem, optimum),
        verdict=verdict,
        notes=notes,
        solver=_solver_report(found),
        second_optimum=_second_sentence(problem, found),
        after_spike_test=added,
        term_sizes=sizes,
        smoothing=chosen.smoothing,
        seed=seed,
        seconds=time.monotonic() - started,
        version=__version__,
        created=datetime.now(UTC).isoformat(timespec="seconds"),
        recording=recording,
    )


def _undetermined_unit(problem: Problem, recording: Recording, place: int) -> str:
    unit = recording.unit_ids[problem.data.targets[place]]
    n = int(problem.data.counts[place])
    return (
        f"{recording.origin.name('spikes')}: unit {unit!r} has {n} spike{'s' * (n != 1)} in the bins that count, from "
        "which its baseline and after-spike coefficients cannot be told. Give the term a ridge (0.01 is the default of "
        "kf.terms.AfterSpike), or fewer time constants, or leave the unit out (recording.select(min_spikes=...))."
    )


def _best(problem: Problem, null: Null) -> tuple[SearchResult, RadiusProfile | None]:
    place = discrete_parameter(problem)
    if place is None:
        return search(problem, null), None
    return search_radius(problem, null, place)


@dataclass(frozen=True)
class _Likelihoods:
    constant: float
    saturated: float


def _reference_likelihoods(problem: Problem) -> _Likelihoods:
    """Constant rates, and a rate for every bin: what deviance is measured against. Nats, -log y! included."""
    data = problem.data
    counts = data.counts.astype(np.float64)
    constant = float(np.sum(xlogy(counts, counts / data.n_bins) - counts)) - data.log_factorials
    grid = problem.grid
    is_target = np.zeros(grid.n_units, dtype=bool)
    is_target[data.targets] = True
    y = grid.event_count[grid.bins_in_sum(grid.event_bin) & is_target[grid.event_unit]].astype(np.float64)
    return _Likelihoods(constant, float(np.sum(xlogy(y, y) - y - gammaln(y + 1.0))))


def _spectral_radius(problem: Problem, optimum: Optimum) -> float:
    """Largest absolute eigenvalue of E[f'_i] J(d_ij) / alpha; E[f'] is the mean rate under the exponential link."""
    slope = np.zeros(problem.data.n_units)
    slope[problem.data.targets] = problem.data.counts / (problem.data.n_bins * problem.data.bin_width)
    table = problem.tables(optimum.estimate.shared)[0]  # source, target
    square = np.zeros((problem.data.n_units, problem.data.n_units))
    square[problem.data.targets] = table.T
    matrix = slope[:, None] * square / problem.leak(optimum.estimate.shared)
    return float(np.max(np.abs(np.linalg.eigvals(matrix))))


def _solver_report(found: SearchResult) -> SolverReport:
    best = found.best
    return SolverReport(
        converged=best.converged,
        n_iterations=best.n_iterations,
        max_gradient=float(np.sqrt(max(best.decrement, 0.0))) if np.isfinite(best.decrement) else float("inf"),
        message=best.message,
        starts=found.starts,
    )


def _second_sentence(problem: Problem, found: SearchResult) -> str | None:
    if found.second is None or any(run_off_parameters(problem, o).any() for o in (found.best, found.second)):
        return None  # two points on a likelihood that no longer changes are no two optima

    def words(shared: FloatArray) -> str:
        family = problem.kernel.parameters(problem.span)
        natural = problem.kernel.natural(shared[: problem.n_kernel], problem.span)
        parts = [f"{in_words([p.name])} {v:.3g} {p.unit}".strip() for p, v in zip(family, natural, strict=True)]
        return ", ".join([*parts, f"time constant {1000 / problem.leak(shared):.3g} ms"])

    gap = found.best.local.objective - found.second.local.objective
    return (
        f"A second optimum lies only {gap:.2g} log-likelihood units below this one "
        f"({words(found.second.estimate.shared)} "
        f"against {words(found.best.estimate.shared)}): the recording hardly tells them apart."
    )


def _radius_interval(
    problem: Problem, profile: RadiusProfile | None, spread: Uncertainty
) -> tuple[float, float] | None:
    if profile is None:
        return None
    return profile.interval(LEVEL, problem.geometry.distinct_um, variance_inflation(spread))
