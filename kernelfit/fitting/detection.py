"""Is there any coupling to describe? A test that holds although leak and length mean nothing without coupling.

Where a parameter vanishes under the null (Davies 1977), the estimate of the amplitude at the best-looking length and
leak is too extreme to be judged by its own standard error. The statistic here is the largest, over the leaks of the
grid, of the quadratic form of the efficient score of coupling in bands of distance, taken at the fit without coupling.
Under the null the block scores are as likely to be of one sign as of the other, so flipping the signs of whole blocks
of time gives its distribution (the multiplier idea of Hansen 1996 with random signs), bursts and all.

The form is weighted by the inverse expected information, not by the spread of the scores themselves: where units fire
seldom and a band happens to hold no coincidence, its scores are all small, of one sign and alike, and divided by their
own spread they would look certain. A spread above the expected one, that of bursts, is divided out, so that one leak
does not drown the others; flips that spread less than expected are stretched to it. Blocks are joined as long as
neighbours go together, which they do where rates drift over more than a block.

Where pairs on one site have a coefficient of their own, coupling across distance is asked for beside it, and the
coefficient is tested by itself, in the same way, at the fit without any coupling.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from kernelfit._typing import FloatArray
from kernelfit.fitting.null import Null, NullSweep

N_TEST_BANDS = 4
N_FLIPS = 1999
MORE_FLIPS = 19_999  # where the first ones leave open on which side of the level p lies
NEAR = 3.0  # Monte-Carlo standard errors of p
LEVEL = 0.05
FEWEST_BLOCKS = 6  # with fewer there are too few patterns of signs for a p-value of 5 %
ENOUGH_BLOCKS = 12  # no joining below this
TOGETHER = 1.3  # standard errors of the correlation of neighbouring blocks
SEARCH_LEVELS = (0.0, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.98, 0.99, 0.995, 0.999)  # and 0.95
ROUNDING = 1e-9  # a pattern of signs as extreme as the observed one must not miss it by rounding


@dataclass(frozen=True)
class CouplingVerdict:
    """Whether coupling was found, before anything is said about its shape.

    Parameters
    ----------
    found : p_value at most 0.05
    p_value : of the sign-flip test of any coupling
    critical_z : how many standard errors an amplitude chosen for its length and leak must lie from zero
    sentence : the verdict in words
    same_site_found : whether units on one site were found to be coupled by a coefficient of their own, which tells the
        leak too
    search_roots : roots of the quantiles of the largest squared z over the search, at SEARCH_LEVELS
    """

    found: bool
    p_value: float
    critical_z: float
    sentence: str
    same_site_found: bool = False
    search_roots: tuple[float, ...] = ()

    def __post_init__(self) -> None:
        object.__setattr__(self, "search_roots", tuple(self.search_roots))  # a list where they were read from a file

    def critical_at(self, level: float) -> float:
        """How many standard errors such an amplitude must lie from zero at another level; `critical_z` at 95 %.

        Between the levels of `search_roots` linear in log(1 - level); beyond the last in proportion to the normal
        quantile, which grows faster than the root of a statistic of several directions; never below the first.
        """
        known = (*SEARCH_LEVELS, 1.0 - LEVEL) if self.search_roots else (1.0 - LEVEL,)
        roots = (*self.search_roots, self.critical_z)
        order = np.argsort(known)
        levels, root = np.array(known)[order], np.array(roots)[order]
        if level <= levels[-1]:
            return float(np.interp(-np.log1p(-level), -np.log1p(-levels), root))
        return float(root[-1] * norm.ppf(0.5 * (1.0 + level)) / norm.ppf(0.5 * (1.0 + levels[-1])))


def detect_coupling(null: Null, seed: int) -> CouplingVerdict:
    """Test the sweeps of a null fit for any coupling.

    Parameters
    ----------
    null : the fit without coupling and its sweeps by leak rate
    seed : of the sign flips
    """
    test = _tested([_directions(sweep) for sweep in null.sweeps], seed)
    on_sites = [_Directions(s.same_site.block_score, s.same_site.information) for s in null.sweeps if s.same_site]
    same_site = _tested(on_sites, seed) if on_sites else None
    found = test.p_value <= LEVEL
    same_site_found = same_site is not None and same_site.p_value <= LEVEL
    return CouplingVerdict(
        found, test.p_value, test.critical_z, _sentence(test, same_site), same_site_found, test.search_roots
    )


@dataclass(frozen=True)
class _Test:
    """p-value of the largest statistic over the leaks, quantiles of the largest |z|, and blocks flipped."""

    p_value: float
    critical_z: float
    search_roots: tuple[float, ...]
    n_blocks: int
    n_flips: int

    @property
    def shown(self) -> str:
        p = "< 0.001" if self.p_value < 0.001 else f"= {self.p_value:.2g}"
        return f"{p} from {self.n_flips:,} flips"


def _tested(directions: list[_Directions], seed: int) -> _Test:
    """Flip the signs of whole blocks of time, more often where p comes out near the level."""
    rng = np.random.default_rng(seed)
    directions = _joined(directions)
    observed = max(float(d.form(d.scores.sum(axis=0)[None])[0]) / max(d.excess, 1.0) for d in directions)
    flipped, searched = _flips(directions, N_FLIPS, rng)
    p_value = _share_reaching(observed, flipped)
    if abs(p_value - LEVEL) <= NEAR * np.sqrt(LEVEL * (1.0 - LEVEL) / N_FLIPS):
        more_flipped, more_searched = _flips(directions, MORE_FLIPS - N_FLIPS, rng)
        flipped, searched = np.append(flipped, more_flipped), np.append(searched, more_searched)
        p_value = _share_reaching(observed, flipped)
    *roots, critical_z = (float(np.sqrt(np.quantile(searched, q))) for q in (*SEARCH_LEVELS, 1.0 - LEVEL))
    return _Test(p_value, critical_z, tuple(roots), directions[0].scores.shape[0], flipped.size)


def _share_reaching(observed: float, flipped: FloatArray) -> float:
    """p-value: the observed signs count as one pattern more."""
    return (1.0 + float(np.sum(flipped >= observed * (1.0 - ROUNDING)))) / (flipped.size + 1.0)


def _flips(directions: list[_Directions], n: int, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """(n,) largest statistic over the leaks of each pattern of signs, and the same in robust standard errors."""
    signs = rng.choice(np.array([-1.0, 1.0]), size=(n, directions[0].scores.shape[0]))
    flipped, searched = np.zeros(n), np.zeros(n)
    for d in directions:
        # not by matrix product: the threads of a linear algebra library keep a core busy for a while after their work,
        # and the sweeps that follow need it
        draws = np.einsum("fg,gk->fk", signs, d.scores)
        flipped = np.maximum(flipped, d.form(draws) / d.excess if d.excess > 0 else 0.0)
        own = np.linalg.pinv(d.spread, rcond=1e-10, hermitian=True)  # in units of robust standard errors
        searched = np.maximum(searched, np.sum((draws @ own) * draws, axis=1))
    return flipped, searched


def _sentence(test: _Test, same_site: _Test | None) -> str:
    across = "" if same_site is None else " across distance"
    nothing = "Length and leak rate mean nothing here."
    beside = ""
    if same_site is not None:
        told = same_site.p_value <= LEVEL
        beside = f" Units on one site {'are' if told else 'are not shown to be'} coupled (p {same_site.shown})."
        if told:
            nothing = "The kernel's length means nothing here; the leak rate is that of units on one site."
    if test.n_blocks < FEWEST_BLOCKS:
        blocks = f"{test.n_blocks} block{'s' * (test.n_blocks != 1)} of time"
        return (
            f"No coupling{across} to describe: the recording is too short to test for any ({blocks}; {FEWEST_BLOCKS} "
            f"are needed). {nothing}"
        )
    blocks = f"{test.n_blocks} blocks of time cut for this test"  # those of the standard errors are others
    shown = f"test of any coupling{across}, sign flips of {blocks}: p {test.shown}"
    if test.p_value <= LEVEL:
        return f"Units' rates change after spikes of other units{across} ({shown}).{beside}"
    return f"No coupling{across} to describe: no coupling{across} could be shown ({shown}).{beside} {nothing}"


@dataclass(frozen=True, eq=False)
class _Directions:
    """Scores by block of time in a few bands at one leak, (G, K), and their expected information (K, K)."""

    scores: FloatArray
    information: FloatArray

    @property
    def spread(self) -> FloatArray:
        """(K, K) sum of the products of the scores by block."""
        return np.asarray(self.scores.T @ self.scores)

    def form(self, scores: FloatArray) -> FloatArray:
        """(n,) quadratic form of (n, K) scores, weighted by the inverse expected information."""
        weight = np.linalg.pinv(self.information, rcond=1e-10, hermitian=True)
        return np.asarray(np.sum((scores @ weight) * scores, axis=1))

    @property
    def excess(self) -> float:
        """Spread of the scores over the expected one, averaged over the bands that carry information."""
        rank = int(np.linalg.matrix_rank(self.information, hermitian=True))
        return float(self.form(self.scores).sum()) / rank if rank else 0.0

    def togetherness(self) -> float:
        """Correlation of neighbouring blocks, in its standard errors where there is none."""
        scores = self.scores - self.scores.mean(axis=0)
        own, both = self.form(scores), self.form(scores[:-1] + scores[1:])
        correlation = 0.5 * float(np.sum(both - own[:-1] - own[1:])) / max(float(own.sum()), np.finfo(float).tiny)
        return float(correlation * np.sqrt(len(scores)))

    def joined(self) -> _Directions:
        """Each two neighbouring blocks as one; an odd last one stands alone."""
        first = np.arange(0, len(self.scores), 2)
        return _Directions(np.add.reduceat(self.scores, first, axis=0), self.information)


def _directions(sweep: NullSweep) -> _Directions:
    sums = _sums(sweep.block_score.shape[1], N_TEST_BANDS)
    return _Directions(sweep.block_score @ sums, sums.T @ sweep.information @ sums)


def _joined(directions: list[_Directions]) -> list[_Directions]:
    """Join blocks two by two while neighbours go together at some leak and enough blocks are left."""
    while len(directions[0].scores) >= 2 * ENOUGH_BLOCKS and max(d.togetherness() for d in directions) > TOGETHER:
        directions = [d.joined() for d in directions]
    return directions


def _sums(n_bands: int, n: int) -> FloatArray:
    """(n_bands, at most n) adds neighbouring bands up: fewer directions, more power."""
    groups = np.array_split(np.arange(n_bands), min(n, n_bands))
    return np.array([np.isin(np.arange(n_bands), g) for g in groups], dtype=np.float64).T
