"""What bounds, loose amplitudes and a verdict of no coupling do to intervals, of whatever kind: one rule for all."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.inference.edges import cut_notes, loose, natural_limits, run_off
from kernelfit.inference.intervals import WaldIntervals
from kernelfit.inference.not_found import meaningless, told_by_sites, widened_words

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

NOT_IDENTIFIED = "not identified"
NUMBERS = ["estimate", "std_error", "lower", "upper"]


def bounded_table(
    fit: CouplingFit, names: list[str], whole: WaldIntervals, units: Sequence[str], notes: Sequence[str]
) -> pd.DataFrame:
    """estimate, std_error, lower, upper, unit, note by parameter, with ends at the bounds that they would pass.

    Parameters
    ----------
    names, units, notes : of the K shared parameters; why an end was moved is added to its note
    whole : intervals on the natural scale, as their method makes them
    """
    inside = whole.within(natural_limits(fit))
    cut = cut_notes(fit, whole, inside)
    return pd.DataFrame(
        {
            "estimate": inside.estimate.copy(),
            "std_error": inside.std_error.copy(),
            "lower": inside.lower.copy(),
            "upper": inside.upper.copy(),
            "unit": list(units),
            "note": ["; ".join(part for part in pair if part) for pair in zip(notes, cut, strict=True)],
        },
        index=pd.Index(names, name="parameter", dtype=object),
    )


def state(fit: CouplingFit, table: pd.DataFrame, jacobian: FloatArray) -> None:
    """Take out of a table of intervals what cannot be said, and leave in what cannot be excluded.

    An amplitude that nothing holds is NaN, with an infinite end, and so is what goes with it. Where no coupling was
    found lengths, exponents and the leak are NaN and amplitudes hold 0, which the test does not exclude.

    Parameters
    ----------
    table : of `bounded_table`, already widened by its method for the search; changed in place
    jacobian : (K, Q) of the natural parameters by the working ones
    """
    table.loc[(jacobian[:, loose(fit)] != 0).any(axis=1), NUMBERS] = np.nan
    open_end = run_off(fit) & (np.count_nonzero(jacobian, axis=1) == 1)
    table.loc[open_end & (fit.at_bound < 0), "lower"] = -np.inf
    table.loc[open_end & (fit.at_bound > 0), "upper"] = np.inf
    if not fit.verdict.found:
        _without_coupling(fit, table)


def state_band(
    fit: CouplingFit, gradient: FloatArray, estimate: FloatArray, ends: tuple[FloatArray, FloatArray]
) -> None:
    """The same for a band on J(d): arrays (m,), changed in place; `gradient` (n, m) by the kernel's parameters."""
    lower, upper = ends
    if not fit.verdict.found:
        np.minimum(lower, 0.0, out=lower)
        np.maximum(upper, 0.0, out=upper)
    unknown = (gradient[loose(fit)[: fit.n_kernel]] != 0).any(axis=0)
    estimate[unknown] = lower[unknown] = upper[unknown] = np.nan


def loose_reason(fit: CouplingFit, jacobian_row: FloatArray) -> str:
    """Why a parameter has no value, where nothing holds it; else empty."""
    used = np.flatnonzero(jacobian_row)
    without = [q for q in used if run_off(fit)[q]] or [q for q in used if loose(fit)[q]]
    return f"{NOT_IDENTIFIED}: {fit.bound_reasons[without[0]]}" if without else ""


def _without_coupling(fit: CouplingFit, table: pd.DataFrame) -> None:
    nothing = "no coupling across distance" if fit.has_same_site else "no coupling"
    shape = table.index.isin(meaningless(fit))
    table.loc[shape, NUMBERS] = np.nan
    table.loc[shape, "note"] = f"{NOT_IDENTIFIED}: {nothing} to describe"
    there = np.isfinite(table["std_error"].to_numpy(dtype=np.float64)) & table["lower"].notna().to_numpy()
    chosen = ~shape & ~told_by_sites(fit, list(table.index)) & there
    tested = chosen & (table.index != "same_site")  # that test leaves pairs on one site out
    outside = tested & ((table["lower"] > 0) | (table["upper"] < 0)).to_numpy()
    widened = widened_words(fit)
    for name in table.index[chosen]:
        done = [widened] if widened else []
        if outside[table.index.get_loc(name)]:
            done.append(f"{'' if widened else 'taken '}out to 0, which the test of any coupling does not exclude")
        words = f"{nothing} found{'; interval ' if done else ''}{' and '.join(done)}"
        table.loc[name, "note"] = "; ".join(part for part in (words, str(table.loc[name, "note"])) if part)
    table.loc[tested, "lower"] = table.loc[tested, "lower"].clip(upper=0.0)
    table.loc[tested, "upper"] = table.loc[tested, "upper"].clip(lower=0.0)
