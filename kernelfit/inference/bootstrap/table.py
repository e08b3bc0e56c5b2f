"""Bootstrap intervals of the shared parameters as a table like `fit.parameters`."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit.inference.bootstrap.ends import Ends
from kernelfit.inference.bootstrap.replicated import spread_along

if TYPE_CHECKING:
    from kernelfit.inference.bootstrap.result import Bootstrap

NOTHING_TO_DESCRIBE = "not identified: no coupling to describe"
NOT_WIDENED = "no coupling found; not widened for the search over length and leak, as fit.parameters is"


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
    table = pd.DataFrame(
        {
            "estimate": estimate,
            "std_error": std_error,
            "lower": lower,
            "upper": upper,
            "unit": list(bootstrap.units),
            "n_used": n_used,
            "note": [_note(bootstrap, q, int(n_used[q]), ends[q]) for q in range(len(ends))],
        },
        index=pd.Index(bootstrap.names, name="parameter", dtype=object),
    )
    if not fit.verdict.found:
        family = fit.model.kernel.parameters(fit.span)
        shape = [p.name for p in family if p.shape] + ["leak_rate"] * (fit.model.leak_rate is None)
        table.loc[shape, ["estimate", "std_error", "lower", "upper"]] = np.nan
        table.loc[shape, "note"] = NOTHING_TO_DESCRIBE
    return table


def _note(bootstrap: Bootstrap, q: int, n_used: int, ends: Ends) -> str:
    parts = [_held(bootstrap, q) or ends.note]
    if n_used < bootstrap.n_replicates:
        parts.append(f"rests on {n_used} of {bootstrap.n_replicates} replicates")
    n_bound = int(np.sum(bootstrap.at_bound[bootstrap.converged, q] != 0))
    if 0 < n_bound < n_used:
        parts.append(f"at its bound in {n_bound} of {n_used} replicates")
    if not bootstrap.fit.verdict.found:
        parts.append(NOT_WIDENED)
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
