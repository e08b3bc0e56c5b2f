"""What is known of the amplitude at each length: a statement that holds even where the length is not known.

Near an amplitude of zero the length and the leak mean nothing, and the interval of an amplitude that was estimated
beside them says little. With the length held, the amplitude is an ordinary parameter: its profile is close to a
parabola, zero inside or out. Walking through all lengths that the array can tell gives the set of amplitudes the
recording is compatible with at each, and the largest of them is what can be said whatever the length.
"""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Literal

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray
from kernelfit._validation import check_callback, check_level, flat_numbers, given_as, is_number
from kernelfit.errors import ArgumentError, Unavailable
from kernelfit.fitting.covariance import covariances
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.fitting.progress import ProgressCallback
from kernelfit.inference.held import Held, hold
from kernelfit.inference.not_found import widened_words
from kernelfit.inference.profile_conditions import check_converged, discrete_names, model_cut
from kernelfit.inference.profile_ends import ProfileInterval
from kernelfit.inference.profile_point import point_of
from kernelfit.inference.profile_walk import Walk, walk
from kernelfit.inference.scales import shared_names
from kernelfit.inference.scaling import Scaling, scaling_by

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording

LeakTreatment = float | Literal["re-estimated", "held"] | None

N_LENGTHS = 9
WALK_POINTS = 2
SWEEPS_A_LENGTH = 16
AMPLITUDE_NAME, LENGTH_NAME = "amplitude", "length_um"


@dataclass(frozen=True, eq=False)
class CompatibleAmplitudes:
    """Amplitudes that a likelihood-ratio test keeps at each length.

    Parameters
    ----------
    level : coverage at each length
    leak : "re-estimated" at every length and amplitude, "held", or "fixed" by the model
    leak_rate : held, fixed or, where it is re-estimated, of the fit, 1/s
    stated_at : where the amplitude is J, in words
    largest : largest |amplitude| kept at any length, by the robust kind where it can be had; infinite where an end is
        open
    sentence : what can be said whatever the length
    n_sweeps, seconds : what it cost
    """

    level: float
    leak: str
    leak_rate: float
    stated_at: str
    largest: float
    sentence: str
    n_sweeps: int
    seconds: float
    rows: pd.DataFrame = field(repr=False)

    @property
    def table(self) -> pd.DataFrame:
        """A fresh copy: by length_um, estimate (the best amplitude there), log_likelihood_drop below the best length
        tried, lower and upper (model kind), scaled_lower and scaled_upper (robust kind, NaN where it cannot be had),
        leak_rate at the best amplitude, note."""
        return self.rows.copy()


def compatible_amplitudes(
    fit: CouplingFit,
    lengths_um: Sequence[float] | FloatArray | None,
    level: float,
    leak: LeakTreatment,
    recording: Recording | None,
    threads: int | None,
    progress: ProgressCallback | None,
) -> CompatibleAmplitudes | Unavailable:
    """The set of amplitudes at each length; see `CouplingFit.compatible_amplitudes`."""
    check_level(level)
    check_callback(progress)
    check_converged(fit)
    refused = _one_of_each(fit)
    if refused is not None:
        return refused
    started = time.monotonic()
    problem = fit.problem(recording, threads=threads)
    lengths = _lengths(fit, problem, lengths_um)
    problem.clock.callback, problem.clock.stage = progress, "amplitudes at each length"
    problem.clock.expected_sweeps = SWEEPS_A_LENGTH * lengths.size
    held_leak = _held_leak(fit, problem, leak)
    rows = _walk_lengths(fit, problem, lengths, level, held_leak)
    best = np.nanmax([row.objective for row in rows])
    table = pd.DataFrame([row.as_dict(best) for row in rows])
    treatment = "fixed" if not problem.fits_leak else "re-estimated" if held_leak is None else "held"
    leak_rate = fit.leak_rate if held_leak is None else held_leak
    largest = max(row.largest for row in rows)
    stated_at = _stated_at(fit)
    return CompatibleAmplitudes(
        level=level,
        leak=treatment,
        leak_rate=leak_rate,
        stated_at=stated_at,
        largest=largest,
        sentence=_sentence(fit, rows, level, treatment, leak_rate, stated_at, largest),
        n_sweeps=problem.clock.sweeps,
        seconds=time.monotonic() - started,
        rows=table,
    )


def _stated_at(fit: CouplingFit) -> str:
    """Where the amplitude is J, in words."""
    if discrete_names(fit):
        return "within the radius"
    return "at distance 0" if fit.model.kernel.name == "mexican-hat" else f"at {fit.reference_distance_um:.4g} µm"


def _one_of_each(fit: CouplingFit) -> Unavailable | None:
    """Why this needs a kernel of one amplitude and one length, where the fit's is another."""
    names = [p.name for p in fit.model.kernel.parameters(fit.span)]
    if names == [AMPLITUDE_NAME, LENGTH_NAME]:
        return None
    kernel = fit.model.kernel.name
    if names == [AMPLITUDE_NAME]:
        return Unavailable(f"a {kernel} kernel has no length to hold: fit.profile('amplitude') says it all")
    return Unavailable(
        f"a {kernel} kernel has other parameters ({', '.join(names)}) than one amplitude and one length to hold"
    )


def _lengths(fit: CouplingFit, problem: Problem, lengths_um: Sequence[float] | FloatArray | None) -> FloatArray:
    """(L,) rising lengths to hold, µm: those asked for, or even log steps over those a fit starts its search from."""
    candidates = fit.model.kernel.radius_candidates(problem.geometry.distinct_um)
    low, high = np.exp(problem.bounds[1])
    if lengths_um is None:
        if candidates is not None:
            inside = candidates[(candidates > low) & (candidates < high)]
            return np.asarray(inside[np.unique(np.linspace(0, inside.size - 1, N_LENGTHS).astype(int))])
        started = np.exp(fit.model.kernel.shape_grid(problem.span)[:, 1])
        return np.asarray(np.geomspace(started.min(), started.max(), N_LENGTHS))
    remedy = f"Give lengths in µm that this array can tell, {low:.4g} to {high:.4g}."
    lengths = np.unique(flat_numbers(lengths_um, "lengths_um", remedy))
    wrong = lengths[~((lengths >= low) & (lengths <= high))]
    if wrong.size or not lengths.size:
        which = f"{wrong[0]:g}" if wrong.size else "none"
        raise ArgumentError(
            f"lengths_um: {which} is outside of the lengths that this array can tell, {low:.4g} to {high:.4g} µm."
        )
    return lengths


@dataclass(frozen=True, eq=False)
class _Row:
    length_um: float
    estimate: float
    objective: float
    leak_rate: float
    model: ProfileInterval | Unavailable
    scaled: ProfileInterval | Unavailable

    @property
    def kept(self) -> ProfileInterval | Unavailable:
        return self.model if isinstance(self.scaled, Unavailable) else self.scaled

    @property
    def largest(self) -> float:
        kept = self.kept
        return np.inf if isinstance(kept, Unavailable) else max(abs(kept.lower), abs(kept.upper))

    def as_dict(self, best: float) -> dict[str, float | str]:
        ends = [
            (np.nan, np.nan) if isinstance(i, Unavailable) else (i.lower, i.upper) for i in (self.model, self.scaled)
        ]
        reasons = [str(i) for i in (self.model, self.scaled) if isinstance(i, Unavailable)]
        kept = self.kept
        if not isinstance(kept, Unavailable):
            reasons += [r for r in (kept.lower_reason, kept.upper_reason) if r]
        return {
            "length_um": self.length_um,
            "estimate": self.estimate,
            "log_likelihood_drop": best - self.objective,
            "lower": ends[0][0],
            "upper": ends[0][1],
            "scaled_lower": ends[1][0],
            "scaled_upper": ends[1][1],
            "leak_rate": self.leak_rate,
            "note": "; ".join(dict.fromkeys(reasons)),
        }


def _held_leak(fit: CouplingFit, problem: Problem, leak: LeakTreatment) -> float | None:
    """The leak rate to hold, 1/s; None where it is climbed or fixed by the model. Raises ArgumentError."""
    if leak is None:
        leak = "re-estimated" if fit.verdict.found else "held"
    given = given_as("leak", leak)
    if isinstance(leak, str):
        if leak not in ("re-estimated", "held"):
            raise ArgumentError(f"{given} is not known. Say 're-estimated', 'held' or a leak rate in 1/s.")
        return fit.leak_rate if problem.fits_leak and leak == "held" else None
    if not problem.fits_leak:
        raise ArgumentError(f"{given}: the model fixes the leak rate at {fit.leak_rate:g} 1/s. Leave it out.")
    slowest, fastest = problem.leak_limits
    if not (is_number(leak) and slowest <= leak <= fastest):
        raise ArgumentError(f"{given} must be a rate from {slowest:.3g} to {fastest:.3g} 1/s.")
    return float(leak)


def _walk_lengths(
    fit: CouplingFit, problem: Problem, lengths: FloatArray, level: float, held_leak: float | None
) -> list[_Row]:
    """A row for each length, outwards from the fit's, each started from its neighbour."""
    beside = (1,) if held_leak is None else (1, problem.n_shared - 1)
    shared = fit.shared.copy()
    if held_leak is not None:
        shared[-1] = np.log(held_leak)
    held = hold(problem, fit.shared, AMPLITUDE_NAME)
    if isinstance(held, Unavailable):
        raise TypeError(held.reason)  # the families let in here have an amplitude that is a working parameter
    held = replace(held, beside=beside)
    middle = int(np.argmin(np.abs(np.log(lengths) - fit.shared[1])))
    rows: dict[int, _Row] = {}
    for order in (range(middle, lengths.size), range(middle - 1, -1, -1)):
        start = Estimate(fit.own, shared)
        for k in order:
            rows[k], start = _at_length(fit, held, float(lengths[k]), level, start)
    return [rows[k] for k in sorted(rows)]


def _at_length(fit: CouplingFit, held: Held, length_um: float, level: float, start: Estimate) -> tuple[_Row, Estimate]:
    problem = held.problem
    shared = start.shared.copy()
    shared[1] = np.log(length_um)
    beside: BoolArray = held.mask & (np.arange(problem.n_shared) != held.place)
    optimum = maximise(problem, Estimate(start.own, shared), held=beside)
    estimate = optimum.estimate
    spread = covariances(problem, optimum)
    cut = model_cut(fit, AMPLITUDE_NAME, level)
    scaling: Scaling | Unavailable = Unavailable("")

    def cuts(here: Walk) -> list[float]:
        nonlocal scaling
        scaling = scaling_by(fit, spread, held, here, level)
        return [cut.root, *([scaling.root_cut(cut.widened)] if isinstance(scaling, Scaling) else [])]

    walked = walk(held, estimate, cuts, WALK_POINTS, point_of(held, optimum))
    model: ProfileInterval | Unavailable
    scaled: ProfileInterval | Unavailable
    if isinstance(walked, Unavailable):
        model = scaled = walked
    else:
        estimate = walked.walk.top.estimate
        model = walked.interval("model", cut.root, with_zero=cut.with_zero)
        if isinstance(scaling, Unavailable):
            scaled = scaling
        else:
            scaled = walked.interval("robust", scaling.root_cut(cut.widened), scaling.ratio, with_zero=cut.with_zero)
    row = _Row(
        length_um=length_um,
        estimate=float(estimate.shared[held.place]),
        objective=optimum.local.objective,
        leak_rate=problem.leak(estimate.shared),
        model=model,
        scaled=scaled,
    )
    return row, estimate


def _sentence(
    fit: CouplingFit, rows: list[_Row], level: float, leak: str, leak_rate: float, stated_at: str, largest: float
) -> str:
    span = f"Whatever the length from {_whole(rows[0].length_um)} to {_whole(rows[-1].length_um)} µm"
    if not np.isfinite(largest):
        where = [row.length_um for row in rows if not np.isfinite(row.largest)]
        return (
            f"{span}, no limit to the amplitude can be stated: at {_whole(where[0])} µm the likelihood never falls far "
            "enough."
        )
    kind = "robust" if all(isinstance(row.scaled, ProfileInterval) for row in rows) else "model-based"
    how = {
        "held": f"the leak held at {leak_rate:.3g} 1/s",
        "fixed": f"the leak fixed at {leak_rate:.3g} 1/s",
        "re-estimated": "the leak re-estimated at each",
    }[leak]
    widened = f", {widened_words(fit)}" if widened_words(fit) else ""
    names = ", ".join(n for n in shared_names(fit) if n not in (AMPLITUDE_NAME, LENGTH_NAME, "leak_rate"))
    also = f" and {names}" if names else ""
    return (
        f"{span}, |J| {stated_at} is below {largest:.3g} per spike "
        f"({100 * level:g} % {kind} profile intervals{widened}; {how}{also})."
    )


def _whole(length_um: float) -> str:
    return f"{length_um:.0f}" if length_um >= 10.0 else f"{length_um:.2g}"
