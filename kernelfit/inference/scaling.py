"""How much of a drop of the log-likelihood counts where bins depend on each other: vertical scaling.

The robust over the model-based variance of a parameter says how much too sure the likelihood is of it. Dividing the
drop by that ratio gives it the curvature that the robust variance asks for and keeps its shape, and with it open ends
and skew (Chandler and Bate 2007, Biometrika 94, 167-183). For several parameters at once the ratio depends on the
direction: it is that of the two quadratic forms.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import f as f_distribution

from kernelfit._typing import FloatArray
from kernelfit.errors import Unavailable
from kernelfit.fitting.covariance import REFUSED_BELOW, Uncertainty, covariances
from kernelfit.fitting.maximise import maximise
from kernelfit.inference.held import Held
from kernelfit.inference.intervals import critical_value
from kernelfit.inference.profile_point import PathPoint

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.model.coupling import CovarianceKind


@dataclass(frozen=True)
class Scaling:
    """Robust over model-based variance of one parameter, and the t quantile that goes with it."""

    ratio: float
    critical: float

    def root_cut(self, at_least: float = 0.0) -> float:
        """Root of twice the unscaled drop at which the scaled interval ends."""
        return float(max(self.critical, at_least) * np.sqrt(self.ratio))


@dataclass(frozen=True, eq=False)
class PlaneScaling:
    """The same for two parameters: both covariances (2, 2) of the coordinates held, and degrees of freedom.

    `at_most` bounds the factor, 1 where a penalty is part of the curve.
    """

    model: FloatArray
    robust: FloatArray
    degrees_of_freedom: float
    at_most: float = np.inf

    def factor(self, step: FloatArray) -> FloatArray:
        """(...,) by what the drop is multiplied, for steps (..., 2) from the top; 1 at the top itself."""
        forms = [np.einsum("...i,ij,...j->...", step, np.linalg.inv(c), step) for c in (self.robust, self.model)]
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = np.where(forms[1] > 0.0, forms[0] / forms[1], 1.0)
        return np.asarray(np.minimum(ratio, self.at_most))

    def cut(self, level: float) -> float:
        """Twice the scaled drop at that level: F quantile of 2 and the blocks less one."""
        return 2.0 * float(f_distribution.ppf(level, 2, self.degrees_of_freedom))

    def ratio(self, k: int) -> float:
        """Robust over model-based variance of parameter k."""
        return max(float(self.robust[k, k] / self.model[k, k]), 1.0 / self.at_most)


def scaled_kind(fit: CouplingFit, spread: Uncertainty) -> CovarianceKind:
    """The covariance that scales: the jackknife where the fit's tables use it and it was made, else the robust one."""
    made = fit.covariance_kind == "jackknife" and spread.shared_jackknife is not None
    return "jackknife" if made else "robust"


def variance_scaling(fit: CouplingFit, held: Held, level: float) -> Scaling | Unavailable:
    """The scaling of a parameter at the fit, or why there is none."""
    refused = too_few_blocks(fit.uncertainty)
    if refused is not None:
        return refused
    return _penalised(held, scaling_by(fit, fit.uncertainty, held.gradient(fit.shared), level, held.name))


def scaling_at(fit: CouplingFit, held: Held, point: PathPoint, level: float) -> Scaling | Unavailable:
    """The scaling of a parameter at a point of its profile: one or two sweeps.

    For a parameter whose estimate sits at its bound, where the likelihood hardly depends on it: its variances mean
    something only where the likelihood falls.
    """
    problem = held.at(point.x)
    optimum = maximise(problem, point.estimate, held=held.mask)
    freed = optimum.free.copy()
    freed[held.place] = True
    spread = covariances(problem, replace(optimum, free=freed))
    gradient = np.zeros(freed.size)
    gradient[held.place] = 1.0
    return _penalised(held, too_few_blocks(spread) or scaling_by(fit, spread, gradient, level, held.name))


def _penalised(held: Held, scaling: Scaling | Unavailable) -> Scaling | Unavailable:
    """A ratio of 1 at least under a penalty: the sandwich leaves out what the penalty may be wrong by."""
    if isinstance(scaling, Scaling) and held.problem.penalty.any():
        return replace(scaling, ratio=max(scaling.ratio, 1.0))
    return scaling


def scaling_by(
    fit: CouplingFit, spread: Uncertainty, gradient: FloatArray, level: float, name: str
) -> Scaling | Unavailable:
    """The scaling of a parameter by covariances; `gradient` (Q,) is its derivative by the working parameters."""
    used = gradient != 0
    kind = scaled_kind(fit, spread)
    model, robust = (float(gradient[used] @ spread.shared(k)[np.ix_(used, used)] @ gradient[used]) for k in _both(kind))
    if not (model > 0.0 and np.isfinite(robust) and robust > 0.0):
        return Unavailable(f"{name} has no robust variance to scale the likelihood by")
    return Scaling(robust / model, critical_value(level, spread.degrees_of_freedom(kind)))


def plane_scaling(fit: CouplingFit, gradients: FloatArray, penalised: bool) -> PlaneScaling | Unavailable:
    """The scaling of two parameters with gradients (2, Q) by the working parameters."""
    spread = fit.uncertainty
    refused = too_few_blocks(spread)
    if refused is not None:
        return refused
    kind = scaled_kind(fit, spread)
    used = (gradients != 0).any(axis=0)
    g = gradients[:, used]
    model, robust = (g @ spread.shared(k)[np.ix_(used, used)] @ g.T for k in _both(kind))
    for covariance in (model, robust):
        if not np.isfinite(covariance).all() or np.linalg.matrix_rank(covariance, hermitian=True) < 2:
            return Unavailable("one of the two parameters has no robust variance to scale the likelihood by")
    return PlaneScaling(model, robust, spread.degrees_of_freedom(kind), 1.0 if penalised else np.inf)


def too_few_blocks(spread: Uncertainty) -> Unavailable | None:
    """Why there is no robust variance, where there is none."""
    if spread.n_blocks >= REFUSED_BELOW:
        return None
    blocks = f"{spread.n_blocks} block{'s' * (spread.n_blocks != 1)} of time"
    return Unavailable(f"no robust variance to scale the likelihood by: {blocks}, {REFUSED_BELOW} are needed")


def _both(kind: CovarianceKind) -> tuple[CovarianceKind, CovarianceKind]:
    return "model", kind
