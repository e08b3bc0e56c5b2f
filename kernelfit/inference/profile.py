"""Profile likelihood: every value of one parameter that a likelihood-ratio test keeps, everything else re-estimated.

Two kinds of interval come from one curve. "Model" takes the drop of the log-likelihood as it is and cuts twice the drop
at the chi-square quantile of one degree of freedom. "Robust" divides the drop by the ratio of the robust variance of
the parameter to the one that the curve implies (vertical scaling) and cuts it at the squared t quantile of the blocks
of time: that is the interval to believe where waves and slow states make bins depend on each other.

References
----------
Venzon and Moolgavkar (1988), Applied Statistics 37, 87-94. Chandler and Bate (2007), Biometrika 94, 167-183.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit.errors import Unavailable
from kernelfit.fitting.outcome import Note
from kernelfit.fitting.progress import ProgressCallback
from kernelfit.inference.held import Held, hold
from kernelfit.inference.profile_conditions import (
    Cut,
    check_call,
    discrete_names,
    fixed_leak,
    is_penalised,
    model_cut,
    profile_notes,
)
from kernelfit.inference.profile_ends import ProfileInterval
from kernelfit.inference.profile_walk import Walk, Walked, farther, walk
from kernelfit.inference.scales import natural_values, shared_names
from kernelfit.inference.scaling import Scaling, scaling_at, scaling_by

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording

N_POINTS = 8  # of the curve on each side
SWEEPS_A_POINT = 1.3  # about what a point takes, for the time left


@dataclass(frozen=True, eq=False)
class Profile:
    """The profile likelihood of one parameter.

    Parameters
    ----------
    name, unit : as in `fit.parameters`
    estimate : of the fit
    level : coverage of the intervals
    interval : by the drop as it is
    scaled : by the drop over `variance_ratio`, or the reason why it cannot be had
    variance_ratio : robust variance of the parameter over the one that the curve implies; NaN where `scaled` cannot be
        had
    on_log : whether the curve is near a parabola over the logarithm of the value
    penalised : whether the curve is of the penalised log-likelihood
    notes : what a reader must know
    n_sweeps, seconds : what it cost
    """

    name: str
    unit: str
    estimate: float
    level: float
    interval: ProfileInterval
    scaled: ProfileInterval | Unavailable
    variance_ratio: float
    on_log: bool
    penalised: bool
    notes: tuple[Note, ...]
    n_sweeps: int
    seconds: float
    table: pd.DataFrame = field(repr=False)

    @property
    def curve(self) -> pd.DataFrame:
        """A fresh copy of the curve, by rising value.

        value; log_likelihood_drop: how far the log-likelihood, maximised over everything else, lies below its top,
        nats; signed_root: root of twice the drop, negative below the estimate; a column for every other shared
        parameter, re-estimated; converged.
        """
        return self.table.copy()


def profile_parameter(
    fit: CouplingFit,
    name: str,
    level: float,
    recording: Recording | None,
    n_points: int,
    threads: int | None,
    progress: ProgressCallback | None,
) -> Profile | Unavailable:
    """Profile of one shared parameter; see `CouplingFit.profile`."""
    check_call(fit, {"name": name}, level, n_points, progress)
    started = time.monotonic()
    if name == "leak_rate" and fit.model.leak_rate is not None:
        return fixed_leak(fit)
    problem = fit.problem(recording, threads=threads)
    cut = model_cut(fit, name, level)
    problem.clock.callback, problem.clock.stage = progress, f"profile of {name}"
    problem.clock.expected_sweeps = int(2 * SWEEPS_A_POINT * (n_points + 3))
    if name in discrete_names(fit):
        from kernelfit.inference.profile_radius import profile_of_radius  # builds on this module

        return profile_of_radius(fit, problem, name, level, started)
    held = hold(problem, fit.shared, name)
    if isinstance(held, Unavailable):
        return held
    if fit.at_bound[held.gradient(fit.shared) != 0].any():
        walked, scaling = _from_a_bound(fit, held, cut, level, n_points)
    else:
        walked, scaling = _from_the_top(fit, held, cut, level, n_points)
    if isinstance(walked, Unavailable):
        return walked
    model = walked.interval("model", cut.root, with_zero=cut.with_zero)
    scaled: ProfileInterval | Unavailable
    if isinstance(scaling, Unavailable):
        scaled = scaling
    else:
        root = scaling.root_cut(cut.widened)
        scaled = walked.interval("robust", root, scaling.ratio, with_zero=cut.with_zero)
    return Profile(
        name=name,
        unit=held.unit,
        estimate=held.value(held.into(fit.estimate).shared[held.place]),
        level=level,
        interval=model,
        scaled=scaled,
        variance_ratio=scaling.ratio if isinstance(scaling, Scaling) else np.nan,
        on_log=held.on_log,
        penalised=is_penalised(problem),
        notes=profile_notes(fit, problem, name, walked),
        n_sweeps=problem.clock.sweeps,
        seconds=time.monotonic() - started,
        table=_table(fit, held, walked.walk),
    )


def _from_the_top(
    fit: CouplingFit, held: Held, cut: Cut, level: float, n_points: int
) -> tuple[Walked | Unavailable, Scaling | Unavailable]:
    """The walk of a parameter, and how the robust kind scales it."""
    scaling: Scaling | Unavailable = Unavailable("")

    def cuts(here: Walk) -> list[float]:
        nonlocal scaling
        scaling = scaling_by(fit, fit.uncertainty, held, here, level)
        return [cut.root, *([scaling.root_cut(cut.widened)] if isinstance(scaling, Scaling) else [])]

    walked = walk(held, held.into(fit.estimate), cuts, n_points)
    return walked, scaling


def _from_a_bound(
    fit: CouplingFit, held: Held, cut: Cut, level: float, n_points: int
) -> tuple[Walked | Unavailable, Scaling | Unavailable]:
    """The walk of a parameter whose estimate sits at its bound, its variances taken where the likelihood falls."""
    walked = walk(held, held.into(fit.estimate), lambda _: [cut.root], n_points)
    if isinstance(walked, Unavailable):
        return walked, walked
    ends = [c.x for c in walked.crossings.values() if c.x is not None]
    if not ends:
        return walked, Unavailable(f"{held.name} has no end at which its variance could be had")
    point = min(walked.walk.points, key=lambda p: abs(p.x - ends[0]))
    scaling = scaling_at(fit, held, point, level)
    if isinstance(scaling, Unavailable):
        return walked, scaling
    more = farther(walked, scaling.root_cut(cut.widened))
    return (walked, more) if isinstance(more, Unavailable) else (more, scaling)


def _table(fit: CouplingFit, held: Held, here: Walk) -> pd.DataFrame:
    drop = np.array([here.drop(p) for p in here.points])
    x = np.array([p.x for p in here.points])
    natural = natural_values(fit, np.array([held.back(p.estimate).shared for p in here.points]))
    table = pd.DataFrame(
        {
            "value": [held.value(v) for v in x],
            "log_likelihood_drop": drop,
            "signed_root": np.sign(x - here.top.x) * np.sqrt(2.0 * np.maximum(drop, 0.0)),
        }
    )
    for k, other in enumerate(shared_names(fit)):
        if other != held.name:
            table[other] = natural[:, k]
    table["converged"] = [p.converged for p in here.points]
    return table
