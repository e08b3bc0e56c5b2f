"""Figures that follow from a fit: how far the coupling reaches, how much it sums to, how long it lasts, each with its
interval or with the reason why there is none."""

from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.registry import derived_figures
from kernelfit.inference.derived.setting import Law, Setting, setting_of
from kernelfit.inference.derived.table import derived_table

__all__ = ["DerivedFigure", "Law", "Lost", "Setting", "derived_figures", "derived_table", "setting_of"]
