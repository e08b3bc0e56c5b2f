"""How much recording an estimate is worth, beside what was counted: spikes, time, stretches of it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.fitting.block_length import neighbour_correlation
from kernelfit.inference.not_found import meaningless
from kernelfit.inference.scales import shared_names

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit


def worth_table(fit: CouplingFit) -> pd.DataFrame:
    """What the recording is worth for each shared parameter, by name; columns of `CouplingFit.worth`.

    ratio : robust over model-based standard error, on the working scale
    spikes, seconds : of an ideal recording, one in which every bin is independent given the model, that would leave the
        estimate as uncertain: those counted, over the square of the ratio, never more than were counted
    independent_stretches, carrying_stretches : by the functions below

    NaN for lengths, exponents and the leak where no coupling was found: they mean nothing.
    """
    with np.errstate(invalid="ignore", divide="ignore"):  # no variance, no ratio
        ratio = np.sqrt(np.diag(fit.uncertainty.shared("robust")) / np.diag(fit.uncertainty.shared("model")))
    share = 1.0 / np.maximum(ratio, 1.0) ** 2
    influence = fit.uncertainty.block_influence
    names = shared_names(fit)
    table = pd.DataFrame(
        {
            "ratio": ratio,
            "spikes": share * fit.n_spikes,
            "seconds": share * fit.duration_s,
            "independent_stretches": independent_stretches(influence),
            "carrying_stretches": carrying_stretches(influence),
        },
        index=pd.Index(names, name="parameter", dtype=object),
    )
    if not fit.verdict.found:
        table.loc[[name for name in names if name in meaningless(fit)]] = np.nan
    return table


def independent_stretches(influence: FloatArray) -> FloatArray:
    """(Q,) blocks of (G, Q) influences, fewer where neighbours go together: G (1 - r)/(1 + r), at most G.

    r is the correlation of neighbouring blocks, of a dependence that dies out by the same factor from block to block
    (the effective sample of a first-order autoregression); one that is negative counts as none.
    """
    r = np.maximum(neighbour_correlation(influence), 0.0)
    return np.asarray(len(influence) * (1.0 - r) / (1.0 + r))


def carrying_stretches(influence: FloatArray) -> FloatArray:
    """(Q,) how many of the blocks carry an estimate, (sum d^2)^2 / sum d^4 of (G, Q) influences d.

    All of them where they pull equally hard, G/3 where the pulls are normal, k where k equal ones outweigh the rest.
    """
    pull = influence - influence.mean(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.sum(pull**2, axis=0) ** 2 / np.sum(pull**4, axis=0))
