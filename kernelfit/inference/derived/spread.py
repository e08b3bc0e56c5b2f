"""Intervals of derived figures by the delta method, with draws that show where a figure is lost altogether.

The delta method takes a figure for linear in the parameters. That says nothing about a figure that some of the
plausible parameters do not have (a change of sign, a fall within the array), so these are counted in draws from the
normal (or t) law of J(d), the law that bands show: where more than a tail of the interval has lost it on one side,
that end is open.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.row import Losses, Row, opened
from kernelfit.inference.derived.setting import DrawnLaw, Law
from kernelfit.inference.intervals import critical_value
from kernelfit.inference.not_found import search_root
from kernelfit.inference.parameters import too_few_blocks

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

N_DRAWS = 1000
SEED = 0  # of the draws: the same fit has the same table
STEP_IN_STD_ERRORS = 1e-3  # of the differences: small beside the curvature, large beside rounding
SMALLEST_STEP = 1e-6  # relative to the parameter
JUST_INSIDE = 1.0 + 1e-9  # a radius that takes in the pairs at its lower end


@dataclass(frozen=True, eq=False)
class DeltaSpread:
    """What the uncertainty of every figure of a fit follows from: covariance (Q, Q), half-width, draws."""

    fit: CouplingFit
    covariance: FloatArray
    critical: float
    level: float
    draws: Sequence[Law]

    @classmethod
    def of(cls, fit: CouplingFit, law: Law, level: float) -> DeltaSpread:
        """By the fit's own kind of covariance; wider where no coupling was found, for the search behind it."""
        freedom = fit.uncertainty.degrees_of_freedom(fit.covariance_kind)
        covariance = fit.uncertainty.shared(fit.covariance_kind)
        critical = critical_value(level, freedom)
        if not fit.verdict.found:
            critical = max(critical, search_root(fit, level))
        draws = draws_of(fit, law, covariance, freedom) if fit.verdict.found else []
        return cls(fit, covariance, critical, level, draws)

    def row(self, figure: DerivedFigure, law: Law, value: float) -> Row:
        """A figure that has `value` at the estimate, with its interval."""
        row = self._delta(figure, law, value)
        if self.fit.radius_interval is not None:
            row = self._over_radii(figure, law, row)
        if not row.has_interval:
            return row.with_note(self._why_no_interval())
        lost = Losses.among((figure.lost(draw) for draw in self.draws), len(self.draws))
        return opened(
            figure,
            row,
            lost,
            0.5 * (1.0 - self.level),
            "draws from the law of J(d)",
            at_edge=self.fit.radius_interval is not None,
        )

    @property
    def free(self) -> BoolArray:
        """(Q,) parameters with a variance."""
        return np.asarray(np.isfinite(np.diag(self.covariance)))

    def _delta(self, figure: DerivedFigure, law: Law, value: float) -> Row:
        free = self.free
        if not free.any():
            return Row(estimate=value)
        std_errors = np.sqrt(np.maximum(np.diag(self.covariance), 0.0))
        slope = gradient_of(figure, law, free, std_errors)[free]
        whole = np.zeros((free.size, 1))
        whole[free, 0] = slope
        if not self.fit.uncertainty.determines(whole)[0]:
            return Row(estimate=value)
        variance = float(slope @ self.covariance[np.ix_(free, free)] @ slope)
        std_error = float(np.sqrt(max(variance, 0.0)))
        half = self.critical * std_error
        if not figure.on_log:
            return Row(value, std_error, max(value - half, figure.least), min(value + half, figure.most))
        above = value - figure.least
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            factor = float(np.exp(np.float64(half) / above))
            return Row(value, std_error, figure.least + above / factor, figure.least + above * factor)

    def _over_radii(self, figure: DerivedFigure, law: Law, row: Row) -> Row:
        """The union of the intervals at both ends of a radius' interval, where the figure depends on the radius."""
        laws = laws_at_radii(self.fit, law)
        values = [figure.value(end) for end in laws]
        if all(value == row.estimate for value in values):
            return row
        rows = [self._delta(figure, e, v) for e, v in zip(laws, values, strict=True) if not isinstance(v, Lost)]
        lost = [value.reason for value in values if isinstance(value, Lost)]
        return union([row, *rows], lost[0] if lost else "")

    def _why_no_interval(self) -> str:
        few = too_few_blocks(self.fit, self.fit.covariance_kind)
        if few:
            return few
        if self.free.any():
            return "no standard error: the figure is lost as soon as a parameter moves"
        return "no standard error: the recording does not determine the parameters it depends on (see notes)"


def laws_at_radii(fit: CouplingFit, law: Law) -> list[Law]:
    """The law with the radius at both ends of its likelihood interval; none where no radius was profiled."""
    if fit.radius_interval is None:
        return []
    low, high = fit.radius_interval
    return [law.with_edge(low * JUST_INSIDE), law.with_edge(high)]


def union(rows: Sequence[Row], lost: str) -> Row:
    """The first row with an interval that holds those of all; `lost`: why one of them has none, or ""."""
    note = "over the 95 % likelihood interval of the radius"
    if lost:
        note = f"{note}, at one end of which there is none: {lost}"
    lower = np.nanmin([[r.estimate, r.lower] for r in rows])
    upper = np.nanmax([[r.estimate, r.upper] for r in rows])
    return Row(rows[0].estimate, np.nan, float(lower), float(upper), (*rows[0].notes, note))


# --- derivatives ------------------------------------------------------------------------------------------


def gradient_of(figure: DerivedFigure, law: Law, free: BoolArray, std_error: FloatArray) -> FloatArray:
    """(Q,) derivative by the free parameters, zero in the others; NaN where the figure is lost on both sides.

    Parameters
    ----------
    free : (Q,) parameters that were estimated
    std_error : (Q,) theirs, on the working scale; sets the step
    """
    known = figure.gradient(law)
    if known is not None:
        return np.where(free, known, 0.0)
    slope = np.zeros(law.shared.size)
    for q in np.flatnonzero(free).tolist():
        slope[q] = _difference(figure, law, q, float(std_error[q]))
    return slope


def depends_on(figure: DerivedFigure, law: Law, q: int) -> bool:
    """Whether the figure changes with parameter q at all."""
    return _difference(figure, law, q, 1e-3) != 0.0  # NaN: it is lost at once, so it does


def _difference(figure: DerivedFigure, law: Law, q: int, std_error: float) -> float:
    """Central difference, one-sided where the figure is lost on one side."""
    step = max(STEP_IN_STD_ERRORS * std_error, SMALLEST_STEP * abs(float(law.shared[q])))
    place, value = [], []
    for move in (-step, 0.0, step):
        shared = law.shared.copy()
        shared[q] += move
        got = figure.value(law.setting.at(shared))
        if not isinstance(got, Lost):
            place.append(float(shared[q]))
            value.append(got)
    return (value[-1] - value[0]) / (place[-1] - place[0]) if len(value) > 1 else np.nan


# --- draws ------------------------------------------------------------------------------------------------


def draws_of(fit: CouplingFit, law: Law, covariance: FloatArray, freedom: float) -> list[DrawnLaw]:
    """Laws drawn around the estimate, their parameters within the kernel's bounds; none without a covariance."""
    free = np.isfinite(np.diag(covariance))
    if not free.any():
        return []
    n, setting = fit.n_kernel, law.setting
    rng = np.random.default_rng(SEED)
    value, vector = np.linalg.eigh(covariance[np.ix_(free, free)])
    root = vector * np.sqrt(np.maximum(value, 0.0))  # rounding can leave an eigenvalue of 0 below it
    move = np.zeros((N_DRAWS, free.size))
    move[:, free] = rng.standard_normal((N_DRAWS, value.size)) @ root.T
    if np.isfinite(freedom):
        move *= np.sqrt(freedom / rng.chisquare(freedom, N_DRAWS))[:, None]
    shared = law.shared + move
    low, high = fit.model.kernel.bounds(fit.span).T
    shared[:, :n] = np.where(free[:n], np.clip(shared[:, :n], low, high), shared[:, :n])
    on_grid = move[:, :n] @ setting.kernel.gradient(law.shared[:n], setting.grid_um, setting.span)
    return [DrawnLaw(setting, row, law, step, moved) for row, step, moved in zip(shared, move, on_grid, strict=True)]
