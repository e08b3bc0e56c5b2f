"""The derived figures. A new family is one file with a function that makes its figures, and one line here."""

from __future__ import annotations

from kernelfit._typing import FloatArray
from kernelfit.inference.derived.change import change_figures
from kernelfit.inference.derived.falls import fall_figures
from kernelfit.inference.derived.figure import DerivedFigure
from kernelfit.inference.derived.mass import mass_figures
from kernelfit.inference.derived.memory import memory_figures
from kernelfit.inference.derived.network import network_figures
from kernelfit.inference.derived.setting import Law
from kernelfit.inference.derived.signs import sign_figures
from kernelfit.inference.derived.slope import slope_figures


def derived_figures(law: Law, distances_um: FloatArray | None = None) -> tuple[DerivedFigure, ...]:
    """Every figure of a fit, in the order of the table.

    Parameters
    ----------
    law : the fit at its estimate
    distances_um : where the change of the rate is told; None: at the usual distances
    """
    setting = law.setting
    return (
        *fall_figures(setting),
        *sign_figures(setting, law),
        *mass_figures(setting),
        *slope_figures(setting),
        *change_figures(setting, distances_um),
        *network_figures(setting),
        *memory_figures(setting),
    )
