"""How long the effect of a spike lasts."""

from __future__ import annotations

from dataclasses import dataclass

from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.setting import Law, Setting


@dataclass(frozen=True, kw_only=True)
class TimeConstant(DerivedFigure):
    """1 / alpha."""

    def value(self, law: Law) -> float | Lost:
        return 1.0 / law.leak


def memory_figures(setting: Setting) -> tuple[DerivedFigure, ...]:
    """time_constant_s."""
    return (
        TimeConstant(
            name="time_constant_s",
            unit="s",
            reads="time after which the effect of a spike has fallen to 1/e",
            least=0.0,
            on_log=True,
            of_time=True,
        ),
    )
