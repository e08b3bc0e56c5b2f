"""What one spike does to the rate of a unit at chosen distances, in per cent, at the moment of the spike."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.setting import Law, Setting
from kernelfit.kernels.base import SAME_DISTANCE_UM


@dataclass(frozen=True, kw_only=True)
class PercentChange(DerivedFigure):
    """100 (e^J - 1) at one distance. On the log scale from -100 % its interval is that of J, transformed."""

    distance_um: float

    def value(self, law: Law) -> float | Lost:
        setting = law.setting
        if not setting.in_percent:
            return Lost("a change in per cent of the rate follows from J under the exponential link only")
        inside = setting.near_um - SAME_DISTANCE_UM <= self.distance_um <= setting.far_um + SAME_DISTANCE_UM
        if not inside:
            return Lost(f"the array has no pairs at this distance (it has them at {setting.where})")
        return float(100.0 * np.expm1(law.one(self.distance_um)))


def usual_distances(setting: Setting) -> tuple[tuple[float, str], ...]:
    """(distance in µm, what it is): nearest, reference, median, twice the reference, those in range, each once."""
    reference = setting.span.reference_um
    wanted = (
        (setting.near_um, "the smallest with pairs"),
        (reference, "the reference distance"),
        (setting.median_um, "the median of the pairs"),
        (2.0 * reference, "twice the reference distance"),
    )
    named: dict[str, tuple[float, str]] = {}
    for distance, what in wanted:
        if setting.near_um <= distance <= setting.far_um:
            before = named.get(_name(distance))
            named[_name(distance)] = (distance, what if before is None else f"{before[1]} and {what}")
    return tuple(named.values())


def change_figures(setting: Setting, distances_um: FloatArray | None) -> tuple[DerivedFigure, ...]:
    """percent_change_at_..._um for each distance, rising; None: the usual ones."""
    if distances_um is None:
        told = usual_distances(setting)
    else:
        told = tuple({_name(float(d)): (float(d), "") for d in distances_um}.values())
    return tuple(
        PercentChange(
            name=_name(distance),
            unit="%",
            reads=f"change of the rate by one spike at {distance:,.4g} µm{f' ({what})' if what else ''}, at its moment",
            least=-100.0,
            on_log=True,
            distance_um=distance,
        )
        for distance, what in sorted(told)
    )


def _name(distance_um: float) -> str:
    return f"percent_change_at_{f'{distance_um:.1f}'.removesuffix('.0')}_um"
