"""What the observed information has over the expected one.

The sandwich of Huber (1967) and White (1982) has the Hessian of the objective inside, not the information expected
under the model. Where the predictor is linear in the parameters the two are one under the exponential link; they differ
in lengths, exponents and the leak rate, by the sum of residuals times second derivatives. That sum is as large as the
relative standard errors where the model is true, and stays where it is not.
"""

from __future__ import annotations

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.fitting.maximise import Local, Weighting, evaluate_locally
from kernelfit.fitting.problem import Estimate, Problem

STEP = 1e-3  # of a standard error: differences of scores are then good to about six digits
LONGEST_STEP = 1e-2  # on the log scale, where there hardly is a standard error


def curved_parameters(problem: Problem) -> BoolArray:
    """(Q,) True for shared parameters in which the predictor is not linear; a discrete one has no slope at all."""
    family = problem.kernel.parameters(problem.span)
    kernel = [p.shape and not p.discrete for p in family]
    return np.array([*kernel, *[False] * problem.has_same_site, *[True] * problem.fits_leak], dtype=bool)


def excess_curvature(
    problem: Problem, local: Local, std_errors: FloatArray, weighting: Weighting | None = None
) -> FloatArray:
    """Minus the Hessian of the penalised objective less its expected information, in the shared parameters.

    Own parameters take part in neither: the predictor is linear in them, and its slope by a shared parameter does not
    depend on them. Two sweeps for each curved parameter.

    Parameters
    ----------
    problem : the model on the recording
    local : objective and derivatives at the optimum
    std_errors : (Q,) working scale; parameters without any are left out
    weighting : of blocks of time, as `local` was made with

    Returns
    -------
    (Q, Q) symmetric; 0 where the predictor is linear in both parameters
    """
    size = std_errors.size
    excess = np.zeros((size, size))
    curved = np.flatnonzero(curved_parameters(problem) & np.isfinite(std_errors))
    for q in curved:
        step = np.zeros(size)
        step[q] = min(STEP * std_errors[q], LONGEST_STEP)
        up, down = (
            evaluate_locally(
                problem, Estimate(local.estimate.own, local.estimate.shared + sign * step), weighting
            ).score_shared
            for sign in (1.0, -1.0)
        )
        excess[:, q] = (down - up) / (2.0 * step[q]) - local.information.shared[:, q]
    both = np.ix_(curved, curved)
    corner = 0.5 * (excess[both] + excess[both].T)
    excess = excess + excess.T
    excess[both] = corner
    known = np.isfinite(std_errors)
    return np.asarray(np.where(known[:, None] & known, excess, 0.0))
