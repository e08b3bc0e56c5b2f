"""Any figure that follows from the shared parameters, with its replicates and their intervals."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, cast, get_args

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit._validation import check_level, given_as
from kernelfit.errors import ArgumentError
from kernelfit.inference.bootstrap.ends import (
    Ends,
    IntervalMethod,
    basic_ends,
    bca_ends,
    percentile_ends,
    studentised_ends,
)

if TYPE_CHECKING:
    from kernelfit.inference.bootstrap.result import Bootstrap

STEP = 1e-3  # of a standard error, for slopes by central differences

SharedFunction = Callable[[FloatArray], FloatArray]


@dataclass(frozen=True, eq=False)
class Replicated:
    """A figure of m numbers at the fit and at each of B replicates.

    Parameters
    ----------
    bootstrap : what it was replicated by
    function : (Q,) shared parameters on the working scale to (m,) numbers
    slope : (Q,) to (m, Q), its derivative
    estimate : (m,) at the fit
    values : (B, m) at each replicate; NaN where it failed or the figure is not defined there
    """

    bootstrap: Bootstrap
    function: SharedFunction
    slope: SharedFunction
    estimate: FloatArray
    values: FloatArray

    @classmethod
    def of(cls, bootstrap: Bootstrap, function: SharedFunction, slope: SharedFunction | None) -> Replicated:
        """Apply a function to the fit and to every replicate that converged."""

        def numbers(shared: FloatArray) -> FloatArray:
            return np.atleast_1d(np.asarray(function(shared), dtype=np.float64))

        def by_differences(shared: FloatArray) -> FloatArray:
            return central_differences(numbers, shared, bootstrap.steps)

        estimate = numbers(bootstrap.fit.shared)
        values = np.full((bootstrap.n_replicates, estimate.size), np.nan)
        for b in np.flatnonzero(bootstrap.converged):
            values[b] = numbers(bootstrap.replicates[b])
        return cls(bootstrap, numbers, by_differences if slope is None else slope, estimate, values)

    @property
    def n_used(self) -> pd.Series:
        """(m,) replicates in which it is a number."""
        return pd.Series(np.isfinite(self.values).sum(axis=0))

    @property
    def std_error(self) -> FloatArray:
        """(m,) standard deviation over the replicates; NaN from fewer than two."""
        spread = np.full(self.estimate.size, np.nan)
        for j, column in enumerate(self.values.T):
            used = column[np.isfinite(column)]
            if used.size >= 2:
                spread[j] = float(np.std(used, ddof=1))
        return spread

    def intervals(self, level: float = 0.95, method: str = "percentile") -> pd.DataFrame:
        """A row for each number: estimate, std_error, lower, upper, n_used, note.

        Parameters
        ----------
        level : coverage, strictly between 0 and 1
        method : "percentile", "basic", "studentised" or "bca" (kinds by blocks of time only)

        Raises
        ------
        ArgumentError : a level or a method that cannot be had
        """
        ends = self.ends(level, method)
        return pd.DataFrame(
            {
                "estimate": self.estimate,
                "std_error": self.std_error,
                "lower": [e.lower for e in ends],
                "upper": [e.upper for e in ends],
                "n_used": self.n_used.to_numpy(),
                "note": [self._note(j, e) for j, e in enumerate(ends)],
            }
        )

    def ends(self, level: float, method: str) -> list[Ends]:
        """Both ends for each number; see `intervals`."""
        known = interval_method(self.bootstrap, level, method)
        slope = self.slope(self.bootstrap.fit.shared) if known in ("studentised", "bca") else None
        own = self._own_std_errors() if known == "studentised" else None
        return [self._ends(j, level, known, slope, own) for j in range(self.estimate.size)]

    def _ends(
        self, j: int, level: float, method: IntervalMethod, slope: FloatArray | None, own: FloatArray | None
    ) -> Ends:
        estimate, values = float(self.estimate[j]), self.values[:, j]
        used = np.isfinite(values)
        if not np.isfinite(estimate):
            return Ends.missing("not defined at the estimate")
        if not used.any():
            return Ends.missing("no replicate to rest on")
        if np.ptp(values[used]) == 0.0:
            return Ends.missing("the same in every replicate")
        if method == "percentile":
            return percentile_ends(values[used], level)
        if method == "basic":
            return basic_ends(estimate, values[used], level)
        assert slope is not None
        if method == "bca":
            influence = self.bootstrap.block_influence @ slope[j, self.bootstrap.moving]
            return bca_ends(estimate, values[used], influence, level)
        assert own is not None
        used &= own[:, j] > 0
        return studentised_ends(
            estimate, spread_along(slope[j], self.bootstrap.fit_covariance), values[used], own[used, j], level
        )

    def _own_std_errors(self) -> FloatArray:
        """(B, m) of each replicate, from its own covariance; NaN where it has none."""
        boot = self.bootstrap
        errors = np.full(self.values.shape, np.nan)
        for b in np.flatnonzero(np.isfinite(self.values).any(axis=1)):
            slope = self.slope(boot.replicates[b])
            errors[b] = [spread_along(row, boot.own_covariances[b]) for row in slope]
        return errors

    def _note(self, j: int, ends: Ends) -> str:
        n_used, n = int(self.n_used.iloc[j]), self.bootstrap.n_replicates
        rests = "" if n_used == n else f"rests on {n_used} of {n} replicates"
        return "; ".join(part for part in (ends.note, rests) if part)


def interval_method(bootstrap: Bootstrap, level: float, method: str) -> IntervalMethod:
    """Check level and method of an interval.

    Raises
    ------
    ArgumentError : no such method, one the kind has not, or a level outside (0, 1)
    """
    check_level(level)
    if isinstance(method, str) and method == "bca" and not bootstrap.kind.by_blocks:
        raise ArgumentError(
            f"method='bca' needs the influence of blocks of time, which kind={bootstrap.kind.name!r} does not rest on. "
            "Say 'percentile', 'basic' or 'studentised', or use kind='one-step'."
        )
    if isinstance(method, str) and method in get_args(IntervalMethod):
        return cast(IntervalMethod, method)
    known = "'percentile', 'basic', 'studentised' or 'bca'"
    raise ArgumentError(f"{given_as('method', method)} is not known. Say {known}.")


def spread_along(slope: FloatArray, covariance: FloatArray) -> float:
    """Standard error of a number with this slope (Q,); NaN where it moves with a parameter that has none."""
    used = slope != 0
    variance = float(slope[used] @ covariance[np.ix_(used, used)] @ slope[used])
    return float(np.sqrt(max(variance, 0.0))) if np.isfinite(variance) else np.nan


def central_differences(function: SharedFunction, at: FloatArray, steps: FloatArray) -> FloatArray:
    """(m, Q) slopes of (m,) `function` at (Q,); 0 in parameters whose step is 0."""
    columns = []
    for q, step in enumerate(steps):
        if step == 0.0:
            columns.append(np.zeros(function(at).size))
            continue
        up, down = at.copy(), at.copy()
        up[q] += step
        down[q] -= step
        columns.append((function(up) - function(down)) / (2.0 * step))
    return np.stack(columns, axis=1)
