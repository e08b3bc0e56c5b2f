"""How much of a drop of the log-likelihood counts where bins depend on each other: vertical scaling.

The robust variance of a parameter over the one that the curve itself implies, the inverse of its curvature at the top,
says how much too sure the likelihood is. Dividing the drop by that ratio gives it the curvature that the robust
variance asks for and keeps its shape, and with it open ends and skew (Chandler and Bate 2007, Biometrika 94, 167-183).
For several parameters at once the ratio depends on the direction: it is that of the two quadratic forms.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import f as f_distribution

from kernelfit._typing import FloatArray
from kernelfit.engine.time_blocks import time_blocks
from kernelfit.errors import Unavailable
from kernelfit.fitting.covariance import REFUSED_BELOW, Uncertainty
from kernelfit.inference.held import Held
from kernelfit.inference.intervals import critical_value
from kernelfit.inference.profile_point import PathPoint
from kernelfit.inference.profile_walk import Walk

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.model.coupling import CovarianceKind


@dataclass(frozen=True)
class Scaling:
    """Robust variance of one parameter over the one its likelihood implies, and the t quantile that goes with it."""

    ratio: float
    critical: float

    def root_cut(self, at_least: float = 0.0) -> float:
        """Root of twice the unscaled drop at which the scaled interval ends."""
        return float(max(self.critical, at_least) * np.sqrt(self.ratio))


@dataclass(frozen=True, eq=False)
class PlaneScaling:
    """The same for two parameters: covariances (2, 2) of the coordinates held, implied by the likelihood and robust.

    `at_most` bounds the factor, 1 where a penalty is part of the curve.
    """

    implied: FloatArray
    robust: FloatArray
    degrees_of_freedom: float
    at_most: float = np.inf

    def factor(self, step: FloatArray) -> FloatArray:
        """(...,) by what the drop is multiplied, for steps (..., 2) from the top; 1 at the top itself."""
        forms = [np.einsum("...i,ij,...j->...", step, np.linalg.inv(c), step) for c in (self.robust, self.implied)]
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = np.where(forms[1] > 0.0, forms[0] / forms[1], 1.0)
        return np.asarray(np.minimum(ratio, self.at_most))

    def cut(self, level: float) -> float:
        """Twice the scaled drop at that level."""
        return plane_cut(level, self.degrees_of_freedom)


def plane_cut(level: float, degrees_of_freedom: float) -> float:
    """Twice the scaled drop of two parameters at a level: twice the F quantile of 2 and the blocks less one."""
    return 2.0 * float(f_distribution.ppf(level, 2, degrees_of_freedom))


def scaled_kind(fit: CouplingFit, spread: Uncertainty) -> CovarianceKind:
    """The covariance that scales: the jackknife where the fit's tables use it and it was made, else the robust one."""
    made = fit.covariance_kind == "jackknife" and spread.shared_jackknife is not None
    return "jackknife" if made else "robust"


def robust_covariance(fit: CouplingFit, spread: Uncertainty, gradients: FloatArray) -> FloatArray | Unavailable:
    """(k, k) robust covariance of coordinates with gradients (k, Q) by the working parameters, or why there is none."""
    refused = too_few_blocks(spread)
    if refused is not None:
        return refused
    used = (gradients != 0).any(axis=0)
    g = gradients[:, used]
    covariance = np.asarray(g @ spread.shared(scaled_kind(fit, spread))[np.ix_(used, used)] @ g.T)
    if not np.isfinite(covariance).all() or np.linalg.matrix_rank(covariance, hermitian=True) < len(gradients):
        return Unavailable("no robust variance to scale the likelihood by: the fit has none")
    return covariance


def scaling_by(fit: CouplingFit, spread: Uncertainty, held: Held, here: Walk, level: float) -> Scaling | Unavailable:
    """The scaling of a parameter by a robust covariance and the curvature of its profile at the top."""
    gradient = held.gradient(held.back(here.top.estimate).shared)
    variance = robust_covariance(fit, spread, gradient[None])
    if isinstance(variance, Unavailable):
        return variance
    return _scaling(fit, held, float(variance[0, 0]) * here.curvature(), level, spread)


def scaling_at(fit: CouplingFit, held: Held, point: PathPoint, level: float) -> Scaling | Unavailable:
    """The scaling of a parameter whose estimate sits at its bound, at a point where the likelihood falls: a sweep.

    At the bound the likelihood hardly depends on it. Here the spread of its scores by block of time, less what the
    other parameters explain of them, is compared with the expected one.
    """
    refused = too_few_blocks(fit.uncertainty)
    if refused is not None:
        return refused
    problem = held.at(point.x)
    blocks = time_blocks(problem.grid, fit.uncertainty.block_length_s)
    score = problem.evaluate(point.estimate, blocks=blocks).score
    n_own = point.estimate.own.shape[1]
    own, shared = score[..., :n_own], score[..., n_own:].sum(axis=1)
    efficient = shared[:, held.place] + shared @ point.tangent.shared
    efficient = efficient + np.einsum("gnp,np->g", own, point.tangent.own)
    if not point.curvature > 0.0:
        return Unavailable(f"{held.name} has no variance where the likelihood falls")
    spread = float(np.var(efficient, ddof=1)) * efficient.size
    return _scaling(fit, held, spread / point.curvature, level, fit.uncertainty)


def _scaling(fit: CouplingFit, held: Held, ratio: float, level: float, spread: Uncertainty) -> Scaling:
    if held.problem.penalty.any():  # the sandwich leaves out what the penalty may be wrong by
        ratio = max(ratio, 1.0)
    freedom = spread.degrees_of_freedom(scaled_kind(fit, spread))
    return Scaling(ratio, critical_value(level, freedom))


def too_few_blocks(spread: Uncertainty) -> Unavailable | None:
    """Why there is no robust variance, where there is none."""
    if spread.n_blocks >= REFUSED_BELOW:
        return None
    blocks = f"{spread.n_blocks} block{'s' * (spread.n_blocks != 1)} of time"
    return Unavailable(f"no robust variance to scale the likelihood by: {blocks}, {REFUSED_BELOW} are needed")
