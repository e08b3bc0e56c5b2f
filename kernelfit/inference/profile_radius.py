"""The profile of a radius, in which the likelihood jumps: over the distances of the array, by fitting/radius.py."""

from __future__ import annotations

import time
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit.errors import Unavailable
from kernelfit.fitting.maximise import LOOSE, Optimum, maximise
from kernelfit.fitting.outcome import Note
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.fitting.radius import RadiusProfile, edge_critical, profile_around, variance_inflation
from kernelfit.inference.profile import Profile
from kernelfit.inference.profile_conditions import is_penalised, profile_notes
from kernelfit.inference.profile_ends import ProfileInterval
from kernelfit.inference.scales import natural_values, shared_names, shared_units
from kernelfit.inference.scaling import too_few_blocks

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit


def profile_of_radius(fit: CouplingFit, problem: Problem, name: str, level: float, started: float) -> Profile:
    """Profile of a discrete length: a point for each radius tried, everything else climbed.

    The cut is that of an edge, not chi-square (`fitting.radius.edge_critical`). The robust kind scales by the variance
    ratio of the amplitude, never below 1: a radius has no variance of its own.
    """
    names = shared_names(fit)
    place = names.index(name)
    refused = too_few_blocks(fit.uncertainty)
    ratio = variance_inflation(fit.uncertainty) if refused is None else 1.0
    profile, optima = _climbed(problem, place, *profile_around(problem, place, fit.estimate))
    drop = profile.objective.max() - profile.objective
    best = float(profile.radius_um[np.argmin(drop)])
    natural = natural_values(fit, np.array([o.estimate.shared for o in optima]))
    table = pd.DataFrame(
        {
            "value": profile.radius_um,
            "log_likelihood_drop": drop,
            "signed_root": np.sign(profile.radius_um - best) * np.sqrt(2.0 * drop),
        }
    )
    for k, other in enumerate(names):
        if other != name:
            table[other] = natural[:, k]
    table["converged"] = [o.converged for o in optima]
    edge = Note(
        "info",
        "The likelihood jumps at the distances of the array: a point for each radius between two of them that was "
        "tried, and the cut of an edge instead of chi-square.",
        name,
        "Read the ends as distances of the array.",
    )
    return Profile(
        name=name,
        unit=shared_units(fit)[place],
        estimate=float(np.exp(fit.shared[place])),
        level=level,
        interval=_interval("model", profile, problem, level, 1.0),
        scaled=refused if isinstance(refused, Unavailable) else _interval("robust", profile, problem, level, ratio),
        variance_ratio=ratio if refused is None else np.nan,
        on_log=True,
        penalised=is_penalised(problem),
        notes=(*profile_notes(fit, problem, name, None), edge, *_not_climbed(name, optima)),
        n_sweeps=problem.clock.sweeps,
        seconds=time.monotonic() - started,
        table=table,
    )


def _climbed(
    problem: Problem, place: int, profile: RadiusProfile, estimates: Sequence[Estimate]
) -> tuple[RadiusProfile, list[Optimum]]:
    """Every point once more from where it stands, for what the optimiser says of it: one sweep at a top."""
    held = np.arange(problem.n_shared) == place
    optima = [maximise(problem, estimate, held=held, tolerance=LOOSE) for estimate in estimates]
    return RadiusProfile(profile.radius_um, np.array([o.local.objective for o in optima])), optima


def _not_climbed(name: str, optima: Sequence[Optimum]) -> tuple[Note, ...]:
    """Say so where the rest did not reach its top."""
    n = sum(not o.converged for o in optima)
    if n == 0:
        return ()
    return (
        Note(
            "warning",
            f"At {n} of {len(optima)} radii the other parameters did not reach their top.",
            name,
            "Read the curve there as a lower limit of the likelihood.",
        ),
    )


def _interval(kind: str, profile: RadiusProfile, problem: Problem, level: float, ratio: float) -> ProfileInterval:
    lower, upper = profile.interval(level, problem.geometry.distinct_um, ratio)
    kept = 2.0 * (profile.objective.max() - profile.objective) <= ratio * edge_critical(level)
    reasons = [
        f"the log-likelihood never falls far enough {side} radius that can be told ({why})" if open_end else ""
        for open_end, side, why in (
            (bool(kept[0]), "down to the smallest", "a disc that holds only the closest pairs is kept"),
            (bool(kept[-1]), "up to the largest", "a disc that holds nearly every pair is kept, almost a flat kernel"),
        )
    ]
    return ProfileInterval(
        kind=kind,
        lower=0.0 if reasons[0] else lower,
        upper=np.inf if reasons[1] else upper,
        lower_open=bool(reasons[0]),
        upper_open=bool(reasons[1]),
        lower_reason=reasons[0],
        upper_reason=reasons[1],
        critical=0.5 * edge_critical(level),
    )
