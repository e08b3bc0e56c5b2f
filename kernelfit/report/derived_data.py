"""The kernel with the distances that are read off it: what their figure shows, built from a fit and its table."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit.errors import Unavailable
from kernelfit.report.content_figures import kernel_data
from kernelfit.report.figure_data import KernelData
from kernelfit.report.numbers import distance_label
from kernelfit.report.readings import is_exp

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

DEPTH = "trough_depth"
MARKED = {
    "half_distance_um": "half",
    "reach_um": "1/e (reach)",
    "sign_change_um": "sign change",
    "trough_um": "trough",
}
EDGE = "radius"
PEAK = "peak"  # a trough of a kernel that is negative close by


@dataclass(frozen=True)
class Mark:
    """One distance read off the kernel, µm, with its interval; an end that is infinite, or lies beyond what the array
    shows, is open. NaN ends: no interval."""

    name: str
    distance_um: float
    lower: float
    upper: float
    jump: float  # J there
    jump_lower: float = math.nan  # of a trough: the interval of its depth
    jump_upper: float = math.nan


@dataclass(frozen=True, eq=False)
class MarkedKernel:
    """The kernel with its marks, in the order of their rows."""

    title: str
    kernel: KernelData
    marks: tuple[Mark, ...]
    near_um: float  # smallest and largest distance with pairs
    far_um: float
    missing: tuple[tuple[str, str], ...]  # what has no number, and why

    def numbers(self) -> pd.DataFrame:
        """figure, distance_um, lower, upper, j, j_lower, j_upper"""
        rows = [(m.name, m.distance_um, m.lower, m.upper, m.jump, m.jump_lower, m.jump_upper) for m in self.marks]
        columns = ["figure", "distance_um", "lower", "upper", "j", "j_lower", "j_upper"]
        return pd.DataFrame(rows, columns=columns)


def marked_kernel(fit: CouplingFit, derived: pd.DataFrame) -> MarkedKernel | Unavailable:
    """The kernel with half-distance, reach, sign change and trough marked, where it has them.

    Parameters
    ----------
    fit : the fit
    derived : `fit.derived()`, of the level of the report's intervals
    """
    if not fit.verdict.found:
        return Unavailable("no coupling to describe")
    kernel = kernel_data(fit)
    if isinstance(kernel, Unavailable):
        return kernel
    if kernel.distance_um.size < 2:
        return Unavailable("all pairs of the array are at one distance")
    marked = [name for name in MARKED if fit.radius_interval is None or name != "half_distance_um"]  # one edge
    marks = tuple(_mark(fit, derived, name) for name in marked if math.isfinite(_number(derived, name, "estimate")))
    notes = derived["note"].to_dict()
    missing = tuple((name, str(notes[name])) for name in MARKED if math.isnan(_number(derived, name, "estimate")))
    if not marks:
        return Unavailable(missing[0][1])
    distances = fit.pairs_by_distance["distance_um"]
    return MarkedKernel(
        _title(fit, {m.name: m for m in marks}), kernel, marks, float(distances.min()), float(distances.max()), missing
    )


def _number(derived: pd.DataFrame, name: str, column: str) -> float:
    return float(derived[column].to_dict()[name])


def _mark(fit: CouplingFit, derived: pd.DataFrame, name: str) -> Mark:
    place, lower, upper = (_number(derived, name, column) for column in ("estimate", "lower", "upper"))
    jump = float(fit.kernel(np.array([place]))[0])
    if name == "sign_change_um":
        jump = 0.0
    if name != "trough_um":
        return Mark(MARKED[name] if fit.radius_interval is None else EDGE, place, lower, upper, jump)
    depth, low, high = (_number(derived, DEPTH, column) for column in ("estimate", "lower", "upper"))
    return Mark(MARKED[name] if depth < 0.0 else PEAK, place, lower, upper, depth, low, high)


def _title(fit: CouplingFit, marks: dict[str, Mark]) -> str:
    """The finding: where the effect turns, else how far it goes."""
    rate = "rate" if is_exp(fit) else "drive"
    turn, half, reach, edge = (
        marks.get(name) for name in (MARKED["sign_change_um"], MARKED["half_distance_um"], MARKED["reach_um"], EDGE)
    )
    if turn is not None:
        closest = float(fit.kernel(np.array([fit.span.smallest_um]))[0])
        first, then = ("raises", "lowers") if closest > 0.0 else ("lowers", "raises")
        return f"One spike {first} the {rate} closer than {distance_label(turn.distance_um)} and {then} it beyond"
    if edge is not None:
        return f"The effect of a spike ends at {distance_label(edge.distance_um)}"
    if reach is not None:
        return f"The effect of a spike has fallen to 37 % at {distance_label(reach.distance_um)}"
    if half is not None:
        return f"The effect of a spike has fallen to half at {distance_label(half.distance_um)}"
    return "The effect of a spike against distance"
