"""What a verdict of no coupling does to an interval, for everything that states one."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import BoolArray

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit


def searched_over(fit: CouplingFit) -> str:
    """What the fit chose to make the coupling look largest: "length and leak", one of them, or "" for nothing."""
    parts = ["length"] * any(p.shape for p in fit.model.kernel.parameters(fit.span))
    return " and ".join(parts + ["leak"] * (fit.model.leak_rate is None))


def widened_words(fit: CouplingFit) -> str:
    """What was done to an interval and why, or ""."""
    chosen = searched_over(fit)
    return f"widened for the search over {chosen}" if chosen and not fit.verdict.found else ""


def search_root(fit: CouplingFit, level: float) -> float:
    """The least half-width of an amplitude's interval, in standard errors: 0 where coupling was found.

    0 too where nothing was searched over: a kernel without a shape at a leak that was stated has the standard errors of
    its coefficients and no others.
    """
    if fit.verdict.found or not searched_over(fit):
        return 0.0
    return fit.verdict.critical_at(level)


def meaningless(fit: CouplingFit) -> tuple[str, ...]:
    """Names of parameters that mean nothing without coupling: shapes, and the leak unless pairs on one site tell it."""
    shapes = [p.name for p in fit.model.kernel.parameters(fit.span) if p.shape]
    return (*shapes, *["leak_rate"] * (not fit.verdict.same_site_found))


def told_by_sites(fit: CouplingFit, names: list[str]) -> BoolArray:
    """(K,) parameters that pairs on one site tell, whether or not there is coupling across distance."""
    known = fit.verdict.same_site_found
    own = known or fit.model.leak_rate is not None  # with a leak that was stated nothing was searched over
    return np.array([(name == "same_site" and own) or (name == "leak_rate" and known) for name in names], dtype=bool)
