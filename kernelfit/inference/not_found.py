"""What a verdict of no coupling does to an interval, for everything that states one."""

from __future__ import annotations

from typing import TYPE_CHECKING

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
