"""Where the profile likelihood has fallen far enough, and what is said where it never does."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit.inference.held import Held


@dataclass(frozen=True)
class ProfileInterval:
    """A profile-likelihood interval.

    Parameters
    ----------
    kind : "model" or "robust"
    lower, upper : in the parameter's own unit; an open end is infinite, or 0 below for a parameter that is never
        negative
    lower_open, upper_open : whether the likelihood never falls far enough on that side
    lower_reason, upper_reason : why, in words; empty where the end was found
    critical : how far the (scaled) log-likelihood must fall
    """

    kind: str
    lower: float
    upper: float
    lower_open: bool
    upper_open: bool
    lower_reason: str
    upper_reason: str
    critical: float


@dataclass(frozen=True)
class Crossing:
    """Where the drop reaches a cut: x, or None with the drop reached at the last place tried and the reason."""

    x: float | None
    reached: float
    last: float
    at_limit: bool


def interval_between(
    kind: str, held: Held, lower: Crossing, upper: Crossing, cut: float, ratio: float, *, with_zero: bool
) -> ProfileInterval:
    """The interval between two crossings of a cut, a root of twice the drop that was scaled by `ratio`."""
    low, low_reason = _end(held, lower, -1, 0.5 * cut**2)
    high, high_reason = _end(held, upper, 1, 0.5 * cut**2)
    if with_zero:
        low, high = min(low, 0.0), max(high, 0.0)
    return ProfileInterval(
        kind, low, high, bool(low_reason), bool(high_reason), low_reason, high_reason, 0.5 * cut**2 / ratio
    )


def _end(held: Held, crossing: Crossing, sign: int, needed: float) -> tuple[float, str]:
    if crossing.x is not None:
        return held.value(crossing.x), ""
    fallen = f"the log-likelihood never falls far enough (by {max(crossing.reached, 0.0):.2g} of {needed:.3g} needed)"
    value = held.value(crossing.last)
    where = f"{value:.4g} {held.unit}".strip()
    if crossing.at_limit:
        why = f"{fallen} up to the {'largest' if sign > 0 else 'smallest'} value that can be told, {where}"
        reason = f"{why} ({held.limit_reason(sign > 0)})"
    else:
        reason = f"{fallen} up to {where}, where the search ended"
    return (np.inf if sign > 0 else 0.0 if held.on_log else -np.inf), reason
