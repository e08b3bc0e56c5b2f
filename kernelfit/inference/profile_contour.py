"""The likelihood over two parameters at once, everything else climbed: a surface on a grid, and where to cut it.

The robust kind divides the drop, in each direction from the top, by the ratio of the two quadratic forms
(Chandler and Bate 2007, Biometrika 94, 167-183, section 3).
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from scipy.stats import chi2

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import ArgumentError, Unavailable
from kernelfit.fitting.outcome import Note
from kernelfit.fitting.problem import Problem
from kernelfit.fitting.progress import ProgressCallback
from kernelfit.inference.profile_conditions import check_call, discrete_names, fixed_leak, profile_notes
from kernelfit.inference.profile_surface import LEVELS, WALK_POINTS, Surface, hold_both, surface_of
from kernelfit.inference.profile_walk import BETTER
from kernelfit.inference.scaling import robust_covariance

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording


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
    check_call(fit, {"first": names[0], "second": names[1]}, LEVELS[-1], n_points, progress)
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
    pair = hold_both(problem, fit.shared, names)
    if isinstance(pair, Unavailable):
        return pair
    gradients = np.array([h.gradient(fit.shared) for h in pair.single])
    robust = robust_covariance(fit, fit.uncertainty, gradients)
    surface = surface_of(fit, pair, robust, n_points)
    if isinstance(surface, Unavailable):
        return surface
    first, second = pair.single
    scaled: FloatArray | Unavailable
    scaling = surface.scaling
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


def _notes(fit: CouplingFit, problem: Problem, names: tuple[str, str], surface: Surface) -> tuple[Note, ...]:
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
