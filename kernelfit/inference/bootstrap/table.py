"""Bootstrap intervals of the shared parameters as a table like `fit.parameters`."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.inference.bootstrap.ends import Ends
from kernelfit.inference.bootstrap.replicated import spread_along
from kernelfit.inference.intervals import WaldIntervals, critical_value
from kernelfit.inference.not_found import meaningless, search_root, told_by_sites
from kernelfit.inference.stated import bounded_table, loose_reason, state

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.inference.bootstrap.result import Bootstrap


def interval_table(bootstrap: Bootstrap, level: float, method: str) -> pd.DataFrame:
    """See `Bootstrap.intervals`."""
    scale, fit = bootstrap.scale, bootstrap.fit
    replicated = bootstrap.of(scale, slope=scale.jacobian)
    ends = replicated.ends(level, method)
    estimate = scale.to_natural(replicated.estimate)
    lower = scale.to_natural(np.array([e.lower for e in ends]))
    upper = scale.to_natural(np.array([e.upper for e in ends]))
    slope = scale.natural_jacobian(fit.shared)
    std_error = np.array([spread_along(row, bootstrap.covariance) for row in slope])
    n_used = replicated.n_used.to_numpy()
    whole = _widened(fit, bootstrap.names, WaldIntervals(estimate, std_error, lower, upper), level)
    notes = [_note(bootstrap, q, int(n_used[q]), ends[q], slope[q]) for q in range(len(ends))]
    table = bounded_table(fit, list(bootstrap.names), whole, bootstrap.units, notes)
    table.insert(5, "n_used", n_used)
    state(fit, table, slope)
    return table


def _widened(fit: CouplingFit, names: tuple[str, ...], whole: WaldIntervals, level: float) -> WaldIntervals:
    """Where no coupling was found: reaches of amplitudes as much longer as the search over length and leak asks."""
    factor = max(search_root(fit, level) / critical_value(level, np.inf), 1.0)
    kept = np.isin(names, meaningless(fit)) | told_by_sites(fit, list(names))
    by = np.where(kept, 1.0, factor)
    if fit.verdict.found or (by == 1.0).all():
        return whole
    estimate = whole.estimate
    return replace(
        whole, lower=estimate + by * (whole.lower - estimate), upper=estimate + by * (whole.upper - estimate)
    )


def _note(bootstrap: Bootstrap, q: int, n_used: int, ends: Ends, jacobian_row: FloatArray) -> str:
    parts = [loose_reason(bootstrap.fit, jacobian_row) or _held(bootstrap, q) or ends.note]
    if n_used < bootstrap.n_replicates:
        parts.append(f"rests on {n_used} of {bootstrap.n_replicates} replicates")
    n_bound = int(np.sum(bootstrap.at_bound[bootstrap.converged, q] != 0))
    if 0 < n_bound < n_used:
        parts.append(f"at its bound in {n_bound} of {n_used} replicates")
    return "; ".join(part for part in parts if part)


def _held(bootstrap: Bootstrap, q: int) -> str:
    """Why a parameter is the same in every replicate, where it is."""
    used = bootstrap.replicates[bootstrap.converged, q]
    if used.size == 0 or np.ptp(used) > 0:
        return ""
    fit = bootstrap.fit
    if fit.at_bound[q] != 0:
        return "at its bound in every replicate: " + "; ".join(fit.bound_reasons[q : q + 1])
    family = fit.model.kernel.parameters(fit.span)
    if q < len(family) and family[q].discrete:
        return "held at the fit's value in every replicate; fit.parameters has its likelihood interval"
    return ""
