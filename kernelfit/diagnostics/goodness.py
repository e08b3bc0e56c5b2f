"""Does the model describe the recording? KS tests of each unit and of all together; gain on constant rates."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from math import log

import numpy as np
import pandas as pd
from scipy.special import gammaln, xlogy
from statsmodels.stats.multitest import multipletests

from kernelfit._typing import FloatArray, IntArray
from kernelfit._validation import check_level, given_as
from kernelfit.diagnostics import ks
from kernelfit.diagnostics.independence import SerialIndependence, serial_independence
from kernelfit.diagnostics.rescaling import RescaledTrain, rescale, uniform_scale
from kernelfit.engine.compensator import Compensator
from kernelfit.errors import ArgumentError, RecordingError, Unavailable

COLUMNS = ("n_spikes", "ks_statistic", "p_value", "p_adjusted", "p_value_plain", "note")
POOLED = "all units"


@dataclass(frozen=True, eq=False, slots=True)
class KsCurve:
    """What a KS plot draws: z against the share of gaps up to it, and two half widths around the diagonal.

    Parameters
    ----------
    z : (n_gaps,) sorted, 1 - exp(-gap / mean gap), in [0, 1]
    share : (n_gaps,) k/n_gaps, the empirical distribution at z
    critical_half_width : a right model's curve stays within it with probability `level` (mean estimated);
        leaving it is the same as ``p_value < 1 - level``. NaN with fewer than `ks.SMALLEST_SAMPLE` gaps
    dkw_half_width : the wider band of Dvoretzky, Kiefer, Wolfowitz and Massart, for a fully known model.
        NaN without gaps
    level : of both
    """

    z: FloatArray
    share: FloatArray
    critical_half_width: float
    dkw_half_width: float
    level: float


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Goodness:
    """Goodness of fit by time rescaling, and gain over constant rates. Nothing here draws or refits.

    `p_value` and `ks_statistic` use gaps divided by their own mean and the null that knows of it: every
    unit's baseline was fitted to the same spikes. `p_value_plain` takes the gaps as they are and the law as
    fully known; it stands beside because it is what is usually printed, and rejects right models with a
    fitted baseline ten times too seldom. A small p-value says that the model misses something in that
    unit's timing; a large one says only that these spikes do not show it.

    Parameters
    ----------
    units : by unit id: n_spikes (in the sum), ks_statistic, p_value, p_adjusted (Benjamini & Hochberg 1995
        over the units tested), p_value_plain, note (why there is no test; empty otherwise)
    pooled : one row, the same columns: all units taken as one process
    deviance_explained : share of the deviance of constant rates that the model takes away, at most 1
    bits_per_spike : log-likelihood gained over constant rates, per spike in the sum
    level : of the bands
    seed : of the random places of spikes inside their bins; another seed moves p-values a little
    trains : rescaled spike times by unit, in the order of `units`
    pooled_train : the same of all units together
    """

    units: pd.DataFrame
    pooled: pd.DataFrame
    deviance_explained: float | Unavailable
    bits_per_spike: float | Unavailable
    level: float
    seed: int
    trains: tuple[RescaledTrain, ...] = field(repr=False)
    pooled_train: RescaledTrain = field(repr=False)

    def z(self, unit: str) -> FloatArray:
        """(n_gaps,) sorted z of one unit: 1 - exp(-gap / mean gap), uniform where the model is right.

        Empty where there is no gap or the expected counts are zero or not finite.

        Raises
        ------
        RecordingError : no such unit
        """
        return np.sort(_z(self._train(unit)))

    @property
    def pooled_z(self) -> FloatArray:
        """(n_gaps,) sorted z of all units taken as one process."""
        return np.sort(_z(self.pooled_train))

    def ks_curve(self, unit: str | None = None) -> KsCurve:
        """Data of the KS plot of one unit, or of all units taken as one process.

        Raises
        ------
        RecordingError : no such unit
        """
        z = self.pooled_z if unit is None else self.z(unit)
        n = z.size
        return KsCurve(
            z=z,
            share=np.arange(1, n + 1) / max(n, 1),
            critical_half_width=(
                ks.estimated_mean_critical_distance(n, self.level) if n >= ks.SMALLEST_SAMPLE else np.nan
            ),
            dkw_half_width=ks.dkw_half_width(n, self.level) if n > 0 else np.nan,
            level=self.level,
        )

    def serial_independence(self, unit: str | None = None, *, n_lags: int = 10) -> SerialIndependence | Unavailable:
        """Whether successive gaps of a unit (or of all units as one process) are independent, by Ljung-Box.

        Raises
        ------
        RecordingError : no such unit
        ArgumentError : n_lags below 1
        """
        train = self.pooled_train if unit is None else self._train(unit)
        return serial_independence(_z(train), n_lags=n_lags)

    @property
    def n_tested(self) -> int:
        """Units with a p-value."""
        return int(self.units["p_value"].notna().sum())

    @property
    def n_rejected(self) -> int:
        """Units whose `p_adjusted` is below 1 - level."""
        return int((self.units["p_adjusted"] < 1.0 - self.level).sum())

    def _train(self, unit: str) -> RescaledTrain:
        if not isinstance(unit, str) or unit not in self.units.index:
            known = ", ".join(map(repr, list(self.units.index[:3])))
            raise RecordingError(f"{given_as('unit', unit)} is not in this fit. Ids are text; the first are {known}.")
        place = self.units.index.get_loc(unit)
        if not isinstance(place, int):
            raise RecordingError(f"Unit {unit!r} is listed more than once.")
        return self.trains[place]


def goodness_of_fit(
    compensator: Compensator,
    unit_ids: Sequence[str],
    *,
    log_likelihood: float,
    null_log_likelihood: float,
    saturated_log_likelihood: float,
    n_spikes: int,
    seed: int,
    level: float = 0.95,
) -> Goodness:
    """Tests and gain figures of a fitted model.

    Parameters
    ----------
    compensator : what the model expected at the bins that hold spikes
    unit_ids : ids in the order of the compensator's units
    log_likelihood, null_log_likelihood : of the model and of constant rates, same bins, nats, ``- log y!``
        included
    saturated_log_likelihood : of rates equal to the counts (`saturated_log_likelihood`)
    n_spikes : spikes in the sum
    seed : of the random places of spikes inside their bins
    level : of the bands, 0.95 for 5 % tests

    Returns
    -------
    Goodness

    Raises
    ------
    ArgumentError : ids that do not fit the compensator, or a level outside (0, 1)
    """
    if len(unit_ids) != compensator.n_units:
        raise ArgumentError(f"{len(unit_ids)} unit ids for {compensator.n_units} units of the compensator.")
    check_level(level)
    trains, pooled = rescale(compensator, seed=seed)
    units = pd.DataFrame([_test(train) for train in trains], columns=list(COLUMNS))
    units.index = pd.Index(list(unit_ids), name="unit", dtype=object)
    units["p_adjusted"] = adjusted_p_values(units["p_value"].to_numpy(dtype=np.float64))
    together = pd.DataFrame([_test(pooled)], columns=list(COLUMNS))
    together.index = pd.Index([POOLED], name="unit", dtype=object)
    together["p_adjusted"] = together["p_value"]  # one test, nothing to adjust for
    return Goodness(
        units=units,
        pooled=together,
        deviance_explained=deviance_explained(log_likelihood, null_log_likelihood, saturated_log_likelihood),
        bits_per_spike=bits_per_spike(log_likelihood, null_log_likelihood, n_spikes),
        level=level,
        seed=seed,
        trains=trains,
        pooled_train=pooled,
    )


def _z(train: RescaledTrain) -> FloatArray:
    """(n_gaps,) z of gaps divided by their own mean, in time order; empty where they have none."""
    if _no_clock(train):
        return np.empty(0)
    gaps = train.gaps
    return uniform_scale(gaps / np.mean(gaps))


def _test(train: RescaledTrain) -> tuple[int, float, float, float, float, str]:
    """One row of the table; p_adjusted is left open."""
    reason = _no_test(train)
    if reason:
        return train.n_spikes, np.nan, np.nan, np.nan, np.nan, reason
    gaps = train.gaps
    distance = ks.ks_distance(_z(train))
    p_value = ks.estimated_mean_p_value(distance, gaps.size)
    plain = ks.known_p_value(ks.ks_distance(uniform_scale(gaps)), gaps.size)
    note = f"p-value is {ks.SMALLEST_P_VALUE:g} or less" if p_value <= ks.SMALLEST_P_VALUE else ""
    return train.n_spikes, distance, p_value, np.nan, plain, note


def _no_test(train: RescaledTrain) -> str:
    """Why a process cannot be tested, or an empty text."""
    if train.n_spikes == 0:
        return "no spike in the likelihood: silent there, or not among the explained units"
    if train.n_spikes <= ks.SMALLEST_SAMPLE:
        spikes = "1 spike" if train.n_spikes == 1 else f"{train.n_spikes} spikes"
        return f"{spikes} in the likelihood: too few to test, {ks.SMALLEST_SAMPLE + 1} are needed"
    return _no_clock(train)


def _no_clock(train: RescaledTrain) -> str:
    """Why a process has no gaps to divide by their mean, or an empty text."""
    if train.n_spikes < 2:
        return "no two spikes, no gap"
    if not np.all(np.isfinite(train.times)):
        return "the expected counts are not finite: the model has run away, see the fit's notes"
    if train.times[-1] <= train.times[0]:
        return "the expected counts between the spikes are zero"
    return ""


def adjusted_p_values(p_values: FloatArray) -> FloatArray:
    """Benjamini-Hochberg p-values over those that exist; NaN stays NaN and does not count.

    Source: Benjamini & Hochberg (1995), J. R. Statist. Soc. B 57, 289-300.
    """
    adjusted = np.full(p_values.shape, np.nan)
    there = np.isfinite(p_values)
    if there.any():
        adjusted[there] = multipletests(p_values[there], method="fdr_bh")[1]
    return adjusted


# --- gain over constant rates ----------------------------------------------------------------------------


def saturated_log_likelihood(counts: IntArray) -> float:
    """Poisson log-likelihood (nats) of rates equal to the counts; bins without spikes add nothing.

    Parameters
    ----------
    counts : spikes per bin and unit, any shape; zeros may be left out
    """
    y = np.asarray(counts, dtype=np.float64)
    return float(np.sum(xlogy(y, y) - y - gammaln(y + 1.0)))


def deviance_explained(log_likelihood: float, null: float, saturated: float) -> float | Unavailable:
    """1 - deviance of the model / deviance of constant rates; negative where the model does worse than those.

    Parameters
    ----------
    log_likelihood, null, saturated : of the model, of constant rates and of rates equal to the counts, nats
    """
    if not saturated > null:
        return Unavailable("constant rates already describe every count, or there is no spike.")
    return 1.0 - (saturated - log_likelihood) / (saturated - null)


def bits_per_spike(log_likelihood: float, null: float, n_spikes: int) -> float | Unavailable:
    """Log-likelihood (nats) over that of constant rates, in bits, per spike in the sum."""
    if n_spikes == 0:
        return Unavailable("there is no spike in the likelihood.")
    return (log_likelihood - null) / (n_spikes * log(2.0))
