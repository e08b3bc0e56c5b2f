"""Kolmogorov-Smirnov distance of rescaled gaps, its p-values under two nulls, and bands for its plot.

Two nulls, because two questions are asked. Where the law is known to the last number (a true model), the
exact two-sided distribution holds. Where the mean of the gaps was fitted to the same spikes, as every
unit's baseline is, the distance comes out far smaller and that distribution would reject 0.5 % of true
models instead of 5 %; there the null of an exponential law with estimated mean holds (Lilliefors 1969, JASA
64, 387-389; exact: Durbin 1975, Biometrika 62, 5-22). Gaps divided by their own mean follow it exactly for
any true model, whatever the baseline was fitted to.
"""

from __future__ import annotations

from functools import cache
from math import log, sqrt

import numpy as np
from scipy.interpolate import PchipInterpolator
from scipy.optimize import brentq
from scipy.special import expit, logit
from scipy.stats import kstwo

from kernelfit._typing import FloatArray
from kernelfit.diagnostics.exponential_null_table import LOG_ODDS, SAMPLE_SIZES, SCALED_DISTANCE
from kernelfit.errors import ArgumentError

SMALLEST_SAMPLE = 5  # gaps; with fewer the distance says next to nothing, and the table ends
SMALLEST_P_VALUE = 1e-9  # the table is exact down to here; what lies below is returned as this
BROWN_COEFFICIENT = 1.36  # 95 %: the usual rounding up of 1.3581 (Brown et al. 2002)


def ks_distance(z: FloatArray) -> float:
    """Largest distance between the empirical distribution of z and the uniform one.

    Parameters
    ----------
    z : (n,) values in [0, 1], any order, n at least 1

    Returns
    -------
    max over i of i/n - z_(i) and z_(i) - (i - 1)/n
    """
    ordered = np.sort(z)
    n = ordered.size
    rank = np.arange(1, n + 1)
    return float(max(np.max(rank / n - ordered), np.max(ordered - (rank - 1) / n)))


# --- everything known ------------------------------------------------------------------------------------


def known_p_value(distance: float, n: int) -> float:
    """P(D >= distance) for n values of a fully known law, exact for finite n.

    Source: Kolmogorov (1933); finite samples as in Marsaglia, Tsang & Wang (2003, J. Stat. Softw. 8(18)).
    """
    return float(kstwo.sf(distance, n))


def known_critical_distance(n: int, level: float = 0.95) -> float:
    """Distance that n values of a known law stay below with this probability (Miller 1956, JASA 51, 111)."""
    _check_level(level)
    return float(kstwo.isf(1.0 - level, n))


# --- the mean estimated ----------------------------------------------------------------------------------


def estimated_mean_p_value(distance: float, n: int) -> float:
    """P(D >= distance) for n exponential gaps divided by their own mean.

    Parameters
    ----------
    distance : KS distance of z = 1 - exp(-gap / mean gap)
    n : number of gaps, at least `SMALLEST_SAMPLE`

    Returns
    -------
    p-value, within 0.1 % of its value where that is above 1e-5 and within 5 % below; never below
    `SMALLEST_P_VALUE`, which stands for "this or less"

    Raises
    ------
    ArgumentError : n below `SMALLEST_SAMPLE`
    """
    _check_sample(n)
    scaled = (distance - 0.2 / n) * _stretch(n)
    if scaled <= SCALED_DISTANCE[0]:
        return 1.0  # the table starts where p is 0.995 (n = 5) or more
    if scaled >= SCALED_DISTANCE[-1]:
        return SMALLEST_P_VALUE
    return max(float(expit(_log_odds_at(n)(scaled))), SMALLEST_P_VALUE)


def estimated_mean_critical_distance(n: int, level: float = 0.95) -> float:
    """KS distance that n exponential gaps divided by their mean stay below with probability `level`.

    Raises
    ------
    ArgumentError : n below `SMALLEST_SAMPLE`, or a level outside 0.01 to 1 - 1e-6
    """
    _check_sample(n)
    _check_level(level, lowest=0.01, highest=1 - 1e-6)
    curve = _log_odds_at(n)
    wanted = float(logit(1.0 - level))
    scaled = float(brentq(lambda s: float(curve(s)) - wanted, SCALED_DISTANCE[0], SCALED_DISTANCE[-1]))
    return scaled / _stretch(n) + 0.2 / n


def _stretch(n: int) -> float:
    """Factor that makes the distance nearly free of n (Stephens 1974, JASA 69, 730-737)."""
    return sqrt(n) + 0.26 + 0.5 / sqrt(n)


@cache
def _across_sizes() -> PchipInterpolator:
    """Log odds at the table's distances as a function of 1/sqrt(n)."""
    inverse_root = np.array([1.0 / sqrt(n) for n in SAMPLE_SIZES])
    return PchipInterpolator(inverse_root, np.array(LOG_ODDS), axis=0)


@cache
def _log_odds_at(n: int) -> PchipInterpolator:
    """Log odds of the p-value as a function of the scaled distance, monotone."""
    return PchipInterpolator(np.array(SCALED_DISTANCE), _across_sizes()(1.0 / sqrt(n)))


# --- bands for the plot ----------------------------------------------------------------------------------


def dkw_half_width(n: int, level: float = 0.95) -> float:
    """Half width of a band that holds the whole empirical distribution with at least `level`, for every n.

    Source: Dvoretzky, Kiefer & Wolfowitz (1956) with the constant of Massart (1990, Ann. Probab. 18,
    1269-1283).
    """
    _check_level(level)
    return sqrt(log(2.0 / (1.0 - level)) / (2.0 * n))


def brown_half_width(n: int) -> float:
    """1.36/sqrt(n): the 95 % band that KS plots of spike trains usually show (Brown et al. 2002)."""
    return BROWN_COEFFICIENT / sqrt(n)


def _check_sample(n: int) -> None:
    if n < SMALLEST_SAMPLE:
        raise ArgumentError(f"n={n}: the test with estimated mean needs at least {SMALLEST_SAMPLE} gaps.")


def _check_level(level: float, lowest: float = 0.0, highest: float = 1.0) -> None:
    if not lowest < level < highest:
        raise ArgumentError(f"level={level!r} is not between {lowest:g} and {highest:g}. 0.95 is usual.")
