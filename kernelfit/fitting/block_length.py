"""How long the blocks of time of the robust covariance must be, read off the recording.

Blocks are clusters: scores may depend on each other within one and not between two. Where a recording has states that
outlast a block, neighbouring blocks go together, the sum of their scores spreads more than the parts say, and standard
errors grow with the length of the blocks. The length is taken where that stops for good: one step beyond the longest at
which neighbouring blocks are detectably correlated, as long as enough are left. Shorter lengths without a correlation
are passed over, as slow states show only once a block has summed them up: blocks much shorter than a state hold so much
other noise that the little they share with their neighbours is lost in it.

Reference
---------
Carlstein (1986), Annals of Statistics 14, 1171-1179, for blocks of time that do not overlap; the correlation of
neighbouring ones as the sign that they are too short: own.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from scipy.stats import norm

from kernelfit._typing import BoolArray, FloatArray

FINER = 4  # parts of a block of the usual length, to show the curve to the left of it
FEWEST_JOINED = 20  # joining goes on while at least this many are left
LEVEL = 0.05  # of the tests of correlation between neighbours and of growth beyond the length used


@dataclass(frozen=True, eq=False)
class BlockCurve:
    """Standard errors against the length of the blocks. L lengths, ascending, Q shared parameters.

    Parameters
    ----------
    length_s : (L,) mean length, seconds
    n_blocks : (L,)
    std_error : (L, Q) working scale; NaN rows of parameters that were not estimated
    correlation : (L, Q) of neighbouring blocks' influence
    threshold : (L,) correlation that would be seen by chance in one of twenty recordings, for the largest parameter
    chosen : place of the length that is used
    settled : whether neighbours are uncorrelated there, as far as can be told
    """

    length_s: FloatArray
    n_blocks: FloatArray
    std_error: FloatArray
    correlation: FloatArray
    threshold: FloatArray
    chosen: int
    settled: bool

    @property
    def flat_beyond(self) -> bool | None:
        """Whether standard errors of longer blocks are no larger than those used, but for chance; None: no longer ones.

        Smaller ones are no sign of anything: fewer blocks scatter more. Chance is that of all lengths and parameters
        looked at, `LEVEL` together; a standard error from G blocks is good to 1/sqrt(2 (G - 1)) of it.
        """
        if self.chosen + 1 >= self.length_s.size:
            return None
        at_chosen = self.std_error[self.chosen]
        known = np.isfinite(at_chosen) & (at_chosen > 0)
        growth = self.std_error[self.chosen + 1 :, known] / at_chosen[known] - 1.0
        error = 1.0 / np.sqrt(2.0 * (self.n_blocks[self.chosen + 1 :] - 1.0))
        allowed = norm.ppf((1.0 - LEVEL) ** (1.0 / max(growth.size, 1))) * error
        return bool((growth <= allowed[:, None]).all())

    def factor(self, usual: int) -> int:
        """How many blocks of the usual length, `usual` fine ones, go into one of the chosen length."""
        return int(2**self.chosen) // usual

    def over(self, free: BoolArray) -> BlockCurve:
        """The same with a column for every shared parameter, NaN for those not estimated."""

        def wide(columns: FloatArray) -> FloatArray:
            full = np.full((len(columns), free.size), np.nan)
            full[:, free] = columns
            return full

        return replace(self, std_error=wide(self.std_error), correlation=wide(self.correlation))

    def without(self, loose: BoolArray) -> BlockCurve:
        """The same with NaN for some of the shared parameters."""
        blank = np.where(loose, np.nan, 0.0)
        return replace(self, std_error=self.std_error + blank, correlation=self.correlation + blank)

    def table(self, names: tuple[str, ...]) -> pd.DataFrame:
        """One row for each length: block_length_s, n_blocks, chosen, then std_error and correlation by parameter."""
        columns: dict[str, object] = {
            "block_length_s": self.length_s,
            "n_blocks": self.n_blocks.astype(np.int64),
            "chosen": np.arange(self.length_s.size) == self.chosen,
        }
        for q, name in enumerate(names):
            columns[f"{name}_std_error"] = self.std_error[:, q]
            columns[f"{name}_correlation"] = self.correlation[:, q]
        return pd.DataFrame(columns)


def joined(influence: FloatArray, size: int) -> FloatArray:
    """(ceil(G / size), Q) sums over `size` neighbouring blocks; what is left over stands alone."""
    return np.asarray(np.add.reduceat(influence, np.arange(0, len(influence), size), axis=0))


def neighbour_correlation(influence: FloatArray) -> FloatArray:
    """(Q,) first-order autocorrelation of the influence of blocks, in order of time; sums are zero at an optimum."""
    spread = np.sum(influence**2, axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.sum(influence[1:] * influence[:-1], axis=0) / spread)


def block_curve(influence: FloatArray, usual: int, duration_s: float) -> BlockCurve:
    """The curve, and the length to use: twice the longest one at which neighbours go together, or the usual one.

    Parameters
    ----------
    influence : (A, Q) what each fine block moves the estimates by, in order of time
    usual : fine blocks in one of the usual length, the shortest that may be chosen
    duration_s : seconds in the sum
    """
    n_fine = len(influence)
    sizes = [1]
    while sizes[-1] < usual or n_fine // (2 * sizes[-1]) >= FEWEST_JOINED:
        sizes.append(2 * sizes[-1])
    rows = [joined(influence, size) for size in sizes]
    n_blocks = np.array([len(r) for r in rows], dtype=np.float64)
    correlation = np.array([neighbour_correlation(r) for r in rows])
    n_estimated = max(1, int(np.isfinite(influence).all(axis=0).sum()))
    threshold = norm.ppf((1.0 - LEVEL) ** (1.0 / n_estimated)) / np.sqrt(n_blocks)
    together = _largest(correlation) + 1.0 / n_blocks > threshold
    first = sizes.index(usual)
    chosen = first
    for k in range(first, len(sizes)):
        if together[k]:
            chosen = min(k + 1, len(sizes) - 1)
    with np.errstate(invalid="ignore", divide="ignore"):
        correction = np.where(n_blocks > 1, n_blocks / (n_blocks - 1.0), np.nan)
    std_error = np.sqrt(correction[:, None] * np.array([np.sum(r**2, axis=0) for r in rows]))
    return BlockCurve(
        length_s=duration_s / n_blocks,
        n_blocks=n_blocks,
        std_error=std_error,
        correlation=correlation,
        threshold=np.asarray(threshold),
        chosen=chosen,
        settled=not bool(together[chosen]),
    )


def _largest(correlation: FloatArray) -> FloatArray:
    return np.asarray(np.max(np.nan_to_num(correlation, nan=-1.0), axis=1, initial=-1.0))
