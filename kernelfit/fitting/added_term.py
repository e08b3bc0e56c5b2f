"""What a term that is not in the model would add, judged by its score at the fit: one sweep, no refit.

Reference
---------
Rao (1948), Proceedings of the Cambridge Philosophical Society 44, 50-57; the variance is that of scores by block of
time.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from scipy.stats import chi2

from kernelfit.errors import Unavailable
from kernelfit.fitting.arrow import Arrow, eliminate, solve_leniently
from kernelfit.fitting.block_length import BlockCurve
from kernelfit.fitting.by_block import chosen_blocks
from kernelfit.fitting.maximise import Optimum
from kernelfit.fitting.outcome import ScoreTest
from kernelfit.fitting.problem import Estimate, Problem
from kernelfit.model.terms import AfterSpike

EVERY = 2  # every second time constant of the term: a coarser basis tells as well whether anything is there, for less
LEVEL = 0.05
LITTLE = 0.01  # bits per spike (own choice): below a hundredth the description of the spike times hardly improves


def fewest_blocks(n_terms: int) -> int:
    """Blocks of time that a score test of so many coefficients needs.

    A sum of scores over the spread of its own G parts cannot exceed G, whatever the recording holds: with fewer blocks
    than the critical value of the test it could only ever say that nothing is there.
    """
    return math.floor(float(chi2.isf(LEVEL, n_terms))) + 1


def after_spike_test(problem: Problem, optimum: Optimum, curve: BlockCurve) -> ScoreTest | Unavailable:
    """Score test of a lag basis common to all units at a fit without after-spike effects; with few blocks, why not.

    Parameters
    ----------
    problem, optimum : the fit
    curve : which blocks of time its standard errors rest on; those of the test are the same
    """
    constants = AfterSpike().constants(problem.data.bin_width)[::EVERY]
    n_traces = constants.size
    here = replace(problem, trace_decay=np.exp(-problem.data.bin_width / constants))
    own = np.column_stack([optimum.estimate.own, np.zeros((problem.data.n_targets, n_traces))])
    blocks = chosen_blocks(problem, problem.leak(optimum.estimate.shared), curve)
    needed = fewest_blocks(n_traces)
    if blocks.n_blocks < needed:
        counted = f"{blocks.n_blocks} block{'s' * (blocks.n_blocks != 1)} of time"
        return Unavailable(
            f"the recording is too short to tell what an after-spike term would add ({counted}, {needed} are needed)"
        )
    problem.clock.stage = "what an after-spike term would add"
    sums = here.evaluate(Estimate(own, optimum.estimate.shared), blocks=blocks)

    free = optimum.free
    corner = np.concatenate(
        [
            np.concatenate([sums.own_own[:, 1:, 1:].sum(axis=0), sums.own_shared[:, 1:, free].sum(axis=0)], axis=1),
            np.concatenate(
                [sums.own_shared[:, 1:, free].sum(axis=0).T, sums.shared_shared[np.ix_(free, free)]], axis=1
            ),
        ]
    )
    cross = np.concatenate([sums.own_own[:, :1, 1:], sums.own_shared[:, :1, free]], axis=2)
    elimination = eliminate(Arrow(sums.own_own[:, :1, :1], cross, corner))
    shared_score = np.concatenate(
        [sums.score[..., 1 : 1 + n_traces], sums.score[..., 1 + n_traces :][..., free]], axis=-1
    ).sum(axis=1)
    efficient = elimination.efficient_score(sums.score[..., :1], shared_score)
    test, rest = np.arange(n_traces), np.arange(n_traces, efficient.shape[1])
    schur = elimination.schur
    if rest.size:
        weights = solve_leniently(schur[np.ix_(rest, rest)], schur[np.ix_(rest, test)])
        efficient = efficient[:, test] - efficient[:, rest] @ weights
        schur = schur[np.ix_(test, test)] - schur[np.ix_(test, rest)] @ weights
    score = efficient.sum(axis=0)
    statistic = float(score @ np.linalg.pinv(efficient.T @ efficient, rcond=1e-10, hermitian=True) @ score)
    p_value = float(chi2.sf(statistic, n_traces))
    gain = 0.5 * float(score @ np.linalg.pinv(schur, rcond=1e-10, hermitian=True) @ score)
    bits = gain / (problem.data.n_spikes * np.log(2.0))
    return ScoreTest(statistic, n_traces, p_value, bits, _advice(bits, p_value))


def _advice(bits: float, p_value: float) -> str:
    """How much a term would add, and how sure that is: two questions, as little is shown by many spikes, and much
    may not be by few."""
    shown = "p < 0.001" if p_value < 0.001 else f"p = {p_value:.2g}"
    said = f"about {bits:.2g} bits per spike ({shown})"
    fit = "fit with after_spike='basis' (--after-spike basis)"
    if p_value <= LEVEL and bits >= LITTLE:
        return (
            f"A unit's own past matters here: an after-spike term would add {said}. Without it the kernel absorbs part "
            f"of it; {fit}."
        )
    if p_value <= LEVEL:
        return f"A unit's own past can be seen here, but an after-spike term would add little: {said}."
    if bits >= LITTLE:
        return (
            f"An after-spike term might add {said}: too much to leave aside, and too uncertain to be told from chance; "
            f"{fit} and compare."
        )
    return f"An after-spike term would add little: {said}."
