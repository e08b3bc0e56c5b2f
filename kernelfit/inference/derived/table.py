"""The table of derived figures: estimate, standard error, interval, unit, and the reason where there is none."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit._validation import check_level, distances
from kernelfit.errors import Unavailable
from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.memory import TimeConstant
from kernelfit.inference.derived.network import SpectralRadius, leading_mode, stability_words
from kernelfit.inference.derived.registry import derived_figures
from kernelfit.inference.derived.replicates import ReplicateSpread, require_same_fit
from kernelfit.inference.derived.row import Row
from kernelfit.inference.derived.setting import Law, setting_of
from kernelfit.inference.derived.spread import DeltaSpread, depends_on
from kernelfit.inference.not_found import widened_words
from kernelfit.inference.parameters import FIXED

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.inference.bootstrap import Bootstrap
    from kernelfit.recording.recording import Recording

AT_LIMIT = 1e-6  # relative
NOT_FOUND = "not identified: no coupling to describe"


def derived_table(
    fit: CouplingFit,
    level: float,
    distances_um: FloatArray | None,
    bootstrap: Bootstrap | None,
    recording: Recording | None,
) -> pd.DataFrame:
    """Reach, sign change, trough, mass, slope, changes of the rate, stability and duration of a fit.

    Parameters
    ----------
    fit : its covariance kind is that of the delta method
    level : coverage, strictly between 0 and 1
    distances_um : (m,) µm, where the change of the rate by a spike is told; None: the smallest distance with pairs, the
        reference distance, the median of the pairs, twice the reference, those within range
    bootstrap : replicates of this fit, for percentile intervals; None: delta method
    recording : the one that was fitted, for a loaded fit that does not hold it

    Returns
    -------
    DataFrame : by name estimate, std_error, lower, upper, unit, note. NaN with the reason in the note where a figure
        does not exist (no change of sign), the array does not show it, or no coupling was found. An end of an interval
        is open, and stands at the end of what the figure can be, where more than a tail of its sampling distribution
        has lost it. `derived_figures` says in words what each figure is

    Raises
    ------
    ArgumentError : a level or a distance out of range, a bootstrap of another fit
    StorageError : `recording` is not the one that was fitted
    """
    check_level(level)
    if bootstrap is not None:
        require_same_fit(bootstrap, fit)
    law = setting_of(fit, recording).at(fit.shared)
    figures = derived_figures(law, None if distances_um is None else distances(distances_um))
    spread: DeltaSpread | ReplicateSpread
    if bootstrap is None:
        spread = DeltaSpread.of(fit, law, level)
    else:
        spread = ReplicateSpread.of(bootstrap, law, figures, level)
    return as_table(figures, [_row(figure, law, fit, spread) for figure in figures])


def as_table(figures: Sequence[DerivedFigure], rows: Sequence[Row]) -> pd.DataFrame:
    """A row for each figure, by name."""
    return pd.DataFrame(
        {
            "estimate": [r.estimate for r in rows],
            "std_error": [r.std_error for r in rows],
            "lower": [r.lower for r in rows],
            "upper": [r.upper for r in rows],
            "unit": [f.unit for f in figures],
            "note": ["; ".join(r.notes) for r in rows],
        },
        index=pd.Index([f.name for f in figures], name="figure", dtype=object),
    )


def _row(figure: DerivedFigure, law: Law, fit: CouplingFit, spread: DeltaSpread | ReplicateSpread) -> Row:
    reason = why_not(figure, law, fit)
    if reason:
        return Row(notes=(reason,))
    value = figure.value(law)
    if isinstance(value, Lost):
        return Row(notes=(value.reason,))
    if isinstance(figure, TimeConstant) and fit.model.leak_rate is not None:
        return Row(estimate=value, notes=(FIXED,))
    row = spread.row(figure, law, value).with_note(_taken_as_known(figure, law, fit))
    if row.has_interval and not fit.verdict.found:
        widened = widened_words(fit)
        row = row.with_note(f"no coupling found; interval {widened}" if widened else "no coupling found")
    return row.with_note(_stability(figure, law, row))


def why_not(figure: DerivedFigure, law: Law, fit: CouplingFit) -> str:
    """Why a figure means nothing in this fit although it could be computed, or ""."""
    leak_free = fit.model.leak_rate is None
    if not fit.verdict.found and (figure.of_shape or (figure.of_time and leak_free)):
        return NOT_FOUND
    reasons = []
    for q in np.flatnonzero(fit.at_bound).tolist():
        is_leak = leak_free and q == fit.shared.size - 1
        if figure.of_time if is_leak else figure.of_shape and _ends_the_range(fit, q) and depends_on(figure, law, q):
            reasons.append(fit.bound_reasons[q])
    return f"a parameter is at its bound: {'; '.join(reasons)}" if reasons else ""


def _ends_the_range(fit: CouplingFit, q: int) -> bool:
    """Whether a kernel parameter at its bound is as long or as steep as the array could show.

    The wide length of a difference of Gaussians also has a bound next to the narrow one, where J is as well determined
    as anywhere, and only the amplitudes of the two are not.
    """
    parameter = fit.model.kernel.parameters(fit.span)[q]
    value = fit.model.kernel.natural(fit.shared[: fit.n_kernel], fit.span)[q]
    low, high = parameter.limits(fit.span)
    return bool(value <= low * (1.0 + AT_LIMIT) or value >= high * (1.0 - AT_LIMIT))


def _taken_as_known(figure: DerivedFigure, law: Law, fit: CouplingFit) -> str:
    names = [p.name for p in fit.model.kernel.parameters(fit.span)]
    held = [names[q] for q in np.flatnonzero(fit.at_bound[: fit.n_kernel]).tolist() if depends_on(figure, law, q)]
    return f"{', '.join(held)} taken as known, at a bound" if held else ""


def _stability(figure: DerivedFigure, law: Law, row: Row) -> str:
    """How close to instability, for the spectral radius."""
    pairs = law.setting.pairs
    if not isinstance(figure, SpectralRadius) or isinstance(pairs, Unavailable):
        return ""
    suppresses = leading_mode(law, pairs)[0] < 0.0
    return stability_words(row.estimate, row.lower, row.upper, suppresses=suppresses)
