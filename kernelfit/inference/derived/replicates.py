"""Intervals of derived figures from bootstrap replicates: percentiles, with ends open where replicates have lost it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit._validation import given_as
from kernelfit.errors import ArgumentError
from kernelfit.inference.bootstrap.ends import percentile_ends
from kernelfit.inference.bootstrap.result import Bootstrap
from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.row import Losses, Row, opened
from kernelfit.inference.derived.setting import Law
from kernelfit.inference.derived.spread import laws_at_radii, union
from kernelfit.inference.intervals import critical_value
from kernelfit.inference.not_found import search_root

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit


@dataclass(frozen=True, eq=False)
class ReplicateSpread:
    """Every figure at every replicate.

    Parameters
    ----------
    bootstrap, level : the replicates, and the coverage of intervals
    figures : in the order of the columns
    values : (B, R, m) by replicate that converged, radius (the estimate's, then both ends of its interval) and figure;
        infinite, with its sign, where a figure is lost on a known side, else NaN
    """

    bootstrap: Bootstrap
    level: float
    figures: tuple[DerivedFigure, ...]
    values: FloatArray

    @classmethod
    def of(cls, bootstrap: Bootstrap, law: Law, figures: Sequence[DerivedFigure], level: float) -> ReplicateSpread:
        """Evaluate `figures` at every replicate."""
        fit = bootstrap.fit

        def numbers(shared: FloatArray) -> FloatArray:
            here = law.setting.at(shared)
            return np.array([f.number(one) for one in (here, *laws_at_radii(fit, here)) for f in figures])

        values = bootstrap.of(numbers).values[bootstrap.converged]
        return cls(bootstrap, level, tuple(figures), values.reshape(len(values), -1, len(figures)))

    def row(self, figure: DerivedFigure, law: Law, value: float) -> Row:
        """A figure that has `value` at the estimate, with its interval."""
        fit, column = self.bootstrap.fit, self.figures.index(figure)
        laws = [law, *laws_at_radii(fit, law)]
        at_estimate = [figure.value(one) for one in laws]
        rows = [
            self._percentiles(figure, v, self.values[:, r, column])
            for r, v in enumerate(at_estimate)
            if not isinstance(v, Lost)
        ]
        row = rows[0]
        if any(v != value for v in at_estimate):
            lost = [v.reason for v in at_estimate if isinstance(v, Lost)]
            row = union(rows, lost[0] if lost else "")
        if not row.has_interval:
            return row
        used = self.bootstrap.replicates[self.bootstrap.converged]
        missing = used[~np.isfinite(self.values[:, 0, column])]
        losses = Losses.among((figure.lost(law.setting.at(shared)) for shared in missing), len(used))
        return opened(
            figure, row, losses, 0.5 * (1.0 - self.level), "replicates", at_edge=fit.radius_interval is not None
        )

    def _percentiles(self, figure: DerivedFigure, value: float, replicates: FloatArray) -> Row:
        """Percentiles over the replicates; one that is lost counts as beyond all others on its side."""
        there = replicates[np.isfinite(replicates)]
        if there.size < 2:
            return Row(estimate=value, notes=("fewer than two replicates have it",))
        if np.ptp(there) == 0.0:
            return Row(value, 0.0, value, value)
        ordered = np.clip(replicates[~np.isnan(replicates)], there.min(), there.max())
        ends = percentile_ends(ordered, self.level)
        row = Row(value, float(np.std(there, ddof=1)), ends.lower, ends.upper, (ends.note,) if ends.note else ())
        n, n_all = there.size, self.bootstrap.n_replicates
        if n < n_all:
            row = row.with_note(f"rests on {n} of {n_all} replicates")
        return self._widened(figure, row)

    def _widened(self, figure: DerivedFigure, row: Row) -> Row:
        """Where no coupling was found: as much wider as the search over length and leak asks."""
        factor = search_root(self.bootstrap.fit, self.level) / critical_value(self.level, np.inf)
        if factor <= 1.0:
            return row
        least = figure.least if figure.on_log else 0.0

        def stretched(end: float) -> float:
            if figure.on_log:
                return float(least + (row.estimate - least) * ((end - least) / (row.estimate - least)) ** factor)
            return row.estimate + factor * (end - row.estimate)

        return replace(row, lower=stretched(row.lower), upper=stretched(row.upper))


def require_same_fit(bootstrap: Bootstrap, fit: CouplingFit) -> None:
    """Refuse a bootstrap of another fit, or what is none (ArgumentError)."""
    if not isinstance(bootstrap, Bootstrap):
        raise ArgumentError(f"{given_as('bootstrap', bootstrap)} is no bootstrap. Pass fit.bootstrap(...) of this fit.")
    if not np.array_equal(bootstrap.fit.shared, fit.shared) or bootstrap.fit.unit_ids != fit.unit_ids:
        raise ArgumentError("bootstrap=: these are replicates of another fit. Pass fit.bootstrap(...) of this one.")
