"""How steeply the coupling falls at the reference distance, as the exponent of the power of distance it follows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.setting import Law, Setting

STEP = 1e-4  # of the logarithm of distance


@dataclass(frozen=True, kw_only=True)
class LogLogSlope(DerivedFigure):
    """d log |J| / d log d at the reference distance."""

    def value(self, law: Law) -> float | Lost:
        lost = self.lost(law)
        if lost is not None:
            return lost
        below, above = self._around(law)
        return float(np.log(above / below) / (2.0 * STEP))

    def lost(self, law: Law) -> Lost | None:
        setting = law.setting
        if not setting.reference_seen:
            return Lost(f"the array has no pairs at the reference distance ({setting.span.reference_um:,.4g} µm)")
        below, above = self._around(law)
        if below == above:
            return Lost(f"the {setting.kernel.name} kernel does not change around the reference distance")
        return None if below > 0.0 and above > 0.0 else Lost("J is zero at the reference distance")

    def _around(self, law: Law) -> FloatArray:
        """|J| a step below and above the reference distance."""
        return np.abs(law(law.setting.span.reference_um * np.exp([-STEP, STEP])))


def slope_figures(setting: Setting) -> tuple[DerivedFigure, ...]:
    """log_log_slope."""
    return (
        LogLogSlope(
            name="log_log_slope",
            unit="",
            reads="power of distance that the effect of a spike follows around the reference distance",
            of_shape=True,
        ),
    )
