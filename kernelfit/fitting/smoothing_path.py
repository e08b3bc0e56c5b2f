"""The kernel over a grid of smoothings: how much of its shape is the data's, and how much the penalty's."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray
from kernelfit._validation import check_truth_value, distances, flat_numbers
from kernelfit.errors import ArgumentError
from kernelfit.fitting.effective import term_sizes
from kernelfit.fitting.maximise import Optimum, evaluate_locally, maximise
from kernelfit.fitting.parabola import Penalty, reweighted
from kernelfit.fitting.penalties import kernel_penalty, with_weights
from kernelfit.fitting.problem import Problem
from kernelfit.fitting.smoothing import parabola_at
from kernelfit.fitting.validation import HeldOut, held_out
from kernelfit.kernels import DistanceRange, Kernel
from kernelfit.recording.recording import Recording

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

N_POINTS = 13
CLIMBED = 1e-4
INSIDE = 3.0  # the usual grid keeps this far from the bounds, beyond which nothing changes


@dataclass(frozen=True, eq=False)
class SmoothingPath:
    """A kernel refitted at each smoothing of a grid, everything else fitted anew too.

    Parameters
    ----------
    smoothing : (L,) ascending; that of the fit is among them, but for a fit without smoothing
    effective : (L,) effective parameters of the kernel
    log_likelihood : (L,) of the recording, nats, penalty left out
    log_marginal_likelihood : (L,) nats, up to a constant
    leak_rate : (L,) 1/s
    converged : (L,)
    theta : (L, K) coefficients of the kernel
    chosen : place of the fit's own smoothing, or None where it has none
    chosen_by : "stated", "likelihood" or "validation"
    held_out : log-likelihood of stretches of time left out, where asked for
    kernel, span, distinct_um : of the fit
    """

    smoothing: FloatArray
    effective: FloatArray
    log_likelihood: FloatArray
    log_marginal_likelihood: FloatArray
    leak_rate: FloatArray
    converged: BoolArray
    theta: FloatArray
    chosen: int | None
    chosen_by: str
    held_out: HeldOut | None
    kernel: Kernel
    span: DistanceRange
    distinct_um: FloatArray

    def kernels(self, distances_um: FloatArray) -> FloatArray:
        """(L, m) J at each distance (µm) under each smoothing."""
        d = distances(distances_um)
        return np.array([self.kernel.value(theta, d, self.span) for theta in self.theta])

    @property
    def table(self) -> pd.DataFrame:
        """A row for each smoothing: effective parameters and what each criterion says of it."""
        table = pd.DataFrame(
            {
                "smoothing": self.smoothing,
                "effective": self.effective,
                "log_likelihood": self.log_likelihood,
                "log_marginal_likelihood": self.log_marginal_likelihood,
                "held_out_log_likelihood": np.nan if self.held_out is None else self.held_out.total,
                "held_out_loss_std_error": np.nan if self.held_out is None else self.held_out.loss_std_error,
                "leak_rate": self.leak_rate,
                "converged": self.converged,
            }
        )
        table["chosen"] = np.arange(len(table)) == (-1 if self.chosen is None else self.chosen)
        return table


def smoothing_path(
    fit: CouplingFit,
    smoothing: Sequence[float] | FloatArray | None = None,
    *,
    validate: bool = False,
    recording: Recording | None = None,
    threads: int | None = None,
) -> SmoothingPath:
    """Refit a kernel at each smoothing of a grid; see `CouplingFit.smoothing_path`."""
    check_truth_value(validate, "validate")
    problem = fit.problem(recording, threads=threads)
    penalty = kernel_penalty(problem)
    if penalty is None:
        raise ArgumentError(
            f"smoothing_path: the kernel {problem.kernel.name!r} has no smoothing. Fit kf.kernels.Spline()."
        )
    now = float(getattr(problem.kernel, "smoothing", 0.0))
    local = evaluate_locally(problem, fit.estimate)
    at_fit = Optimum(local, fit.free, fit.at_bound, fit.converged, 0, np.inf, "")
    given = _grid(problem, at_fit, penalty, now) if smoothing is None else _checked(smoothing)
    grid = np.unique(np.append(given, now) if now > 0 else given)
    held = ~fit.free & (fit.at_bound == 0)
    begin = int(np.argmin(np.abs(np.log(grid) - np.log(now)))) if now > 0 else 0
    optima: dict[int, tuple[Problem, Optimum]] = {}
    for steps in (range(begin, grid.size), range(begin - 1, -1, -1)):
        near, weight = at_fit, now
        for k in steps:
            here = with_weights(problem, (penalty,), grid[[k]])
            start = reweighted(near.local, (penalty,), np.array([grid[k] - weight]))
            near, weight = maximise(here, start, held=held, tolerance=CLIMBED), float(grid[k])
            optima[k] = (here, near)
    ordered = [optima[k] for k in range(grid.size)]
    sizes = [term_sizes(here, optimum) for here, optimum in ordered]
    return SmoothingPath(
        smoothing=grid,
        effective=np.array([next(s.effective for s in size if s.term == "kernel") for size in sizes]),
        log_likelihood=np.array([optimum.local.log_likelihood for _, optimum in ordered]),
        log_marginal_likelihood=np.array(
            [_log_marginal(*ordered[k], penalty, float(grid[k])) for k in range(grid.size)]
        ),
        leak_rate=np.array([here.leak(optimum.estimate.shared) for here, optimum in ordered]),
        converged=np.array([optimum.converged for _, optimum in ordered]),
        theta=np.array([optimum.estimate.shared[: problem.n_kernel] for _, optimum in ordered]),
        chosen=int(np.argmin(np.abs(grid - now))) if now > 0 else None,
        chosen_by=_chosen_by(fit),
        held_out=held_out(*ordered[-1], penalty, grid) if validate else None,
        kernel=fit.model.kernel,
        span=fit.span,
        distinct_um=fit.distinct_um,
    )


def _grid(problem: Problem, optimum: Optimum, penalty: Penalty, now: float) -> FloatArray:
    """From hardly any smoothing to as good as endless, evenly on the log scale."""
    weight = np.array([max(now, 1.0)])
    if now == 0.0:  # a first look at what the data say, under some smoothing so that there is a parabola at all
        optimum = replace(optimum, local=reweighted(optimum.local, (penalty,), weight))
    low, high = parabola_at(problem, optimum, (penalty,), weight).limits(0, (penalty,), weight)
    low, high = low * INSIDE, high / INSIDE
    return np.geomspace(low, high, N_POINTS) if high > low else np.array([low])


def _checked(smoothing: Sequence[float] | FloatArray) -> FloatArray:
    remedy = "Give positive numbers, such as np.geomspace(0.1, 1e5, 13)."
    values = flat_numbers(smoothing, "smoothing", remedy)
    if not values.size or not (values > 0).all():
        held = f"holds {values.min():g}, which is not above 0" if values.size else "holds no number"
        raise ArgumentError(f"smoothing {held}. {remedy}")
    return np.sort(values)


def _log_marginal(problem: Problem, optimum: Optimum, penalty: Penalty, weight: float) -> float:
    try:
        parabola = parabola_at(problem, optimum, (penalty,), np.array([weight]))
    except np.linalg.LinAlgError:  # nothing to integrate over: the data say nothing about some combination
        return np.nan
    return parabola.peak((penalty,), np.array([weight])).log_marginal


def _chosen_by(fit: CouplingFit) -> str:
    chosen = None if fit.smoothing is None else fit.smoothing.of("kernel")
    return "stated" if chosen is None else chosen.chosen_by
