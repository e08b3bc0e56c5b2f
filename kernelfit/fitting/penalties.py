"""The penalties of a problem whose weights can be left to the data, and problems with other weights."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.fitting.parabola import Penalty
from kernelfit.fitting.problem import Problem
from kernelfit.kernels import SmoothingChoice
from kernelfit.model.coupling import CouplingModel


def kernel_penalty(problem: Problem) -> Penalty | None:
    """The penalty on the kernel that a smoothing parameter weighs, or None for a family without."""
    rough = problem.kernel.roughness(problem.span)
    if rough is None:
        return None
    shared = np.zeros((problem.n_shared, problem.n_shared))
    shared[: problem.n_kernel, : problem.n_kernel] = rough
    value = np.linalg.eigvalsh(rough)
    scales = value[value > 1e-10 * value.max()]
    return Penalty("kernel", np.zeros(1 + problem.trace_decay.size), shared, scales, problem.kernel.ridge)


def after_spike_penalty(problem: Problem) -> Penalty:
    """The ridge on the after-spike coefficients of all units."""
    own = np.ones(1 + problem.trace_decay.size)
    own[0] = 0.0
    scales = np.ones(problem.data.n_targets * problem.trace_decay.size)
    return Penalty("after-spike", own, np.zeros((problem.n_shared, problem.n_shared)), scales)


def asked_for(problem: Problem, asked: CouplingModel) -> tuple[tuple[Penalty, SmoothingChoice], ...]:
    """The penalties whose weight a model leaves to the data, and to what of them."""
    wanted: list[tuple[Penalty, SmoothingChoice]] = []
    choice, penalty = asked.kernel.smoothing_choice, kernel_penalty(problem)
    if choice is not None and penalty is not None:
        wanted.append((penalty, choice))
    if asked.after_spike.ridge == "likelihood":
        wanted.append((after_spike_penalty(problem), "likelihood"))
    return tuple(wanted)


def weights_of(problem: Problem, penalties: tuple[Penalty, ...]) -> FloatArray:
    """(n_penalties,) the weights that a problem has now."""
    now = {"kernel": getattr(problem.kernel, "smoothing", 0.0), "after-spike": problem.model.after_spike.ridge}
    return np.array([now[p.term] for p in penalties], dtype=np.float64)


def with_weights(problem: Problem, penalties: tuple[Penalty, ...], weights: FloatArray) -> Problem:
    """The same problem with other weights."""
    by_term = {p.term: float(w) for p, w in zip(penalties, weights, strict=True)}
    model = problem.model.settled(smoothing=by_term.get("kernel"), ridge=by_term.get("after-spike"))
    kernel = problem.kernel.with_smoothing(by_term["kernel"]) if "kernel" in by_term else problem.kernel
    return replace(problem, model=model, kernel=kernel)
