"""How many parameters a penalised fit has in effect: tr((I + S)^-1 I), I the information and S the penalties."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit.fitting.arrow import eliminate, solve_leniently
from kernelfit.fitting.maximise import Optimum
from kernelfit.fitting.problem import Problem


@dataclass(frozen=True)
class TermSize:
    """One term of a model: how many coefficients it has, and how many of them are left to the data in effect."""

    term: str
    coefficients: int
    effective: float


def term_sizes(problem: Problem, optimum: Optimum) -> tuple[TermSize, ...]:
    """Every term of a model with its effective number of parameters; penalties are 0 for most.

    Shared parameters at a bound or profiled elsewhere count as one each, as they do among the coefficients.
    """
    free = optimum.free
    elimination = eliminate(optimum.local.information.only(free))
    covariance = solve_leniently(elimination.schur, np.eye(int(free.sum())))
    through_shared = np.einsum("npq,qr,npr->np", elimination.reduced, covariance, elimination.reduced)
    own_variance = np.diagonal(elimination.own_inverse, axis1=1, axis2=2) + through_shared
    n, n_own = own_variance.shape
    taken_own = problem.own_penalty @ own_variance.sum(axis=0)
    taken = float(np.sum(covariance * problem.penalty[np.ix_(free, free)]))
    sizes = [TermSize("baselines", n, float(n))]
    if n_own > 1:
        sizes.append(TermSize("after-spike", n * (n_own - 1), n * (n_own - 1) - float(taken_own)))
    sizes.append(TermSize("kernel", problem.n_kernel, problem.n_kernel - taken))
    if problem.has_same_site:
        sizes.append(TermSize("same-site", 1, 1.0))
    if problem.fits_leak:
        sizes.append(TermSize("leak", 1, 1.0))
    return tuple(sizes)
