"""Is there any coupling to describe? A test that holds although leak and length mean nothing without coupling.

Where a parameter vanishes under the null (Davies 1977), the estimate of the amplitude at the best-looking length and
leak
is too extreme to be judged by its own standard error. The statistic here is the largest, over the leaks of the grid, of
the quadratic form of the efficient score of coupling in bands of distance, taken at the fit without coupling. Under
the null the block scores are as likely to be of one sign as of the other, so flipping the signs of whole blocks of time
gives its distribution (the multiplier idea of Hansen 1996 with random signs), bursts and all.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.fitting.null import Null

N_TEST_BANDS = 4
N_FLIPS = 1999
LEVEL = 0.05


@dataclass(frozen=True)
class CouplingVerdict:
    """Whether coupling was found, before anything is said about its shape.

    Parameters
    ----------
    found : p_value at most 0.05
    p_value : of the sign-flip test of any coupling
    critical_z : how many standard errors an amplitude chosen for its length and leak must lie from zero
    sentence : the verdict in words
    """

    found: bool
    p_value: float
    critical_z: float
    sentence: str


def detect_coupling(null: Null, seed: int) -> CouplingVerdict:
    """Test the sweeps of a null fit for any coupling.

    Parameters
    ----------
    null : the fit without coupling and its sweeps by leak rate
    seed : of the sign flips
    """
    rng = np.random.default_rng(seed)
    n_blocks = null.sweeps[0].block_score.shape[0]
    signs = rng.choice(np.array([-1.0, 1.0]), size=(N_FLIPS, n_blocks))
    observed, flipped = 0.0, np.zeros(N_FLIPS)
    for sweep in null.sweeps:
        scores = _coarse(sweep.block_score, N_TEST_BANDS)
        weight = np.linalg.pinv(scores.T @ scores, rcond=1e-10, hermitian=True)
        total = scores.sum(axis=0)
        observed = max(observed, float(total @ weight @ total))
        draws = signs @ scores
        flipped = np.maximum(flipped, np.sum((draws @ weight) * draws, axis=1))
    p_value = (1.0 + float(np.sum(flipped >= observed))) / (N_FLIPS + 1.0)
    critical_z = float(np.sqrt(np.quantile(flipped, 1.0 - LEVEL)))
    found = p_value <= LEVEL
    shown = "< 0.001" if p_value < 0.001 else f"= {p_value:.2g}"
    sentence = (
        f"Units' rates change after spikes of other units (test of any coupling, sign flips of {n_blocks} blocks of "
        f"time: p {shown})."
        if found
        else f"No coupling to describe: the recording is described as well without any (test of any coupling, sign "
        f"flips of {n_blocks} blocks of time: p {shown}). Length and leak rate mean nothing here."
    )
    return CouplingVerdict(found, p_value, critical_z, sentence)


def _coarse(scores: FloatArray, n: int) -> FloatArray:
    """Add neighbouring bands up until at most n are left: fewer directions, more power."""
    groups = np.array_split(np.arange(scores.shape[1]), min(n, scores.shape[1]))
    return np.column_stack([scores[:, g].sum(axis=1) for g in groups])
