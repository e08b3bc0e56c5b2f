"""What may be asked of a profile, how far the likelihood must fall, and what its reader must know."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from kernelfit._validation import check_callback, check_level, check_whole, given_as
from kernelfit.errors import ArgumentError, NotConvergedError, Unavailable
from kernelfit.fitting.outcome import Note
from kernelfit.fitting.problem import Problem
from kernelfit.fitting.progress import ProgressCallback
from kernelfit.inference.intervals import critical_value
from kernelfit.inference.not_found import meaningless, search_root, told_by_sites, widened_words
from kernelfit.inference.profile_walk import Walked
from kernelfit.inference.scales import shared_names

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

FEWEST_POINTS = 2
SAME_SITE_NAME = "same_site"


def check_call(
    fit: CouplingFit, names: Mapping[str, str], level: float, n_points: int, progress: ProgressCallback | None
) -> None:
    """Refuse what cannot be profiled; `names` of parameters by argument. Raises ArgumentError, NotConvergedError."""
    known = (*shared_names(fit), *["leak_rate"] * (fit.model.leak_rate is not None))
    for argument, name in names.items():
        if not isinstance(name, str) or name not in known:
            raise ArgumentError(
                f"{given_as(argument, name)} is no parameter of this fit. Its parameters: {', '.join(known)}."
            )
    check_level(level)
    check_whole(n_points, "n_points", FEWEST_POINTS)
    check_callback(progress)
    check_converged(fit)


def check_converged(fit: CouplingFit) -> None:
    """Refuse a fit without an optimum (NotConvergedError)."""
    if not fit.converged:
        raise NotConvergedError(
            f"The fit did not converge ({fit.solver.message}), so there is no top from which the likelihood could "
            "fall. Try a simpler kernel, wider bins or a fixed leak rate first."
        )


def fixed_leak(fit: CouplingFit) -> Unavailable:
    """Why a leak rate that the model states has no profile."""
    return Unavailable(f"leak_rate is fixed by the model at {fit.leak_rate:g} 1/s: nothing was estimated")


def discrete_names(fit: CouplingFit) -> set[str]:
    """Names of parameters in which the likelihood jumps."""
    return {p.name for p in fit.model.kernel.parameters(fit.span) if p.discrete}


def is_penalised(problem: Problem) -> bool:
    """Whether the objective has penalties, on shared parameters or on those of the units."""
    return bool(problem.penalty.any()) or (problem.trace_decay.size > 0 and bool(problem.own_penalty.any()))


@dataclass(frozen=True)
class Cut:
    """Where the model kind is cut.

    root : of twice the drop; widened : the least a cut may be, in standard errors; with_zero : whether the interval is
    to hold 0
    """

    root: float
    widened: float
    with_zero: bool


def model_cut(fit: CouplingFit, name: str, level: float) -> Cut:
    """The cut of one parameter: a normal quantile; for an amplitude, widened where no coupling was found."""
    root = critical_value(level, np.inf)
    told = bool(told_by_sites(fit, [name])[0])
    searched = not fit.verdict.found and name not in meaningless(fit) and not told
    widened = search_root(fit, level) if searched else 0.0
    return Cut(max(root, widened), widened, searched and name != SAME_SITE_NAME)  # the test leaves same sites out


def profile_notes(fit: CouplingFit, problem: Problem, name: str, walked: Walked | None) -> tuple[Note, ...]:
    """What the reader of a profile must know."""
    notes: list[Note] = []
    if walked is not None and walked.gained > 0.0:
        value = walked.walk.held.value(walked.walk.top.x)
        notes.append(
            Note(
                "warning",
                f"The profile came upon a better optimum than the fit: {name} {value:.4g}, {walked.gained:.2g} "
                "log-likelihood units above. Curve and ends are measured from there.",
                name,
                "Do not quote the fit as the best; try a kernel with fewer parameters or a fixed leak rate.",
            )
        )
    if walked is not None and not all(p.converged for p in walked.walk.points):
        n = sum(not p.converged for p in walked.walk.points)
        notes.append(
            Note(
                "warning",
                f"At {n} of {len(walked.walk.points)} points of the curve the other parameters did not reach "
                "their top.",
                name,
                "Read the curve there as a lower limit of the likelihood.",
            )
        )
    if walked is not None and walked.rises_again:
        notes.append(
            Note(
                "warning",
                "The curve is not a single hill: having fallen, the likelihood rises again farther out. The ends are "
                "where it first falls far enough.",
                name,
                "Look at the curve; parameters that trade places need a simpler kernel.",
            )
        )
    if problem.penalty.any():
        notes.append(
            Note(
                "info",
                "The curve is of the penalised log-likelihood: the penalty on the kernel pulls the interval in.",
                name,
                "Set the smoothing to 0 to see what the recording says alone.",
            )
        )
    if not fit.verdict.found:
        shape = name in meaningless(fit)
        widened = f"the cut is {widened_words(fit)}, and " if widened_words(fit) else ""
        what = (
            f"No coupling was found, so {name} means nothing: its profile only shows what the recording does not say."
            if shape
            else f"No coupling was found: {widened}an interval that leaves 0 out is taken out to it."
        )
        notes.append(Note("warning", what, name, "fit.compatible_amplitudes() states what is left of the amplitude."))
    discrete = discrete_names(fit) - {name}
    if discrete:
        notes.append(
            Note(
                "info",
                f"{', '.join(sorted(discrete))} is held at its estimate: the likelihood jumps in it.",
                name,
                "Read it as an interval given that value.",
            )
        )
    return tuple(notes)
