"""Figure of a bootstrap: the distribution of its replicates, and what each method makes an interval of."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from kernelfit._typing import FloatArray
from kernelfit.report.bootstrap_data import ReplicatedParameter, ReplicatesData
from kernelfit.report.figures_kernel import WIDE_TITLE, title_over_all
from kernelfit.report.look import (
    DATA,
    INK,
    NULL,
    RAISING,
    TWO_COLUMNS_MM,
    log_ticks,
    look,
    new_figure,
    number_text,
    thousands,
)

MOST_PANELS = 4  # parameters beside each other
N_BARS = 36
OUTERMOST = 0.002  # share of the replicates beyond either end of the axis: a few far ones would flatten the rest
_HEADROOM = 1.12  # over the bars, for what lies beyond the axis
_FEW_TIMES = 3.0  # a log axis that spans less shows the steps of a linear one
_HISTOGRAM_MM, _ROW_MM, _AROUND_MM = 34.0, 4.6, 22.0


def draw_replicates(data: ReplicatesData) -> Figure:
    """A column for each parameter: histogram of the replicates, and under it a row for each kind of interval.

    Bars count replicates; the dashed line is the estimate. The first method stands in the estimate's colour.
    """
    with look():
        shown = data.parameters[:MOST_PANELS]
        n_rows = max((len(p.intervals) for p in shown), default=1)
        under_mm = _ROW_MM * (n_rows + 0.5)
        figure = new_figure(TWO_COLUMNS_MM, _AROUND_MM + _HISTOGRAM_MM + under_mm)
        axes = figure.subplots(
            2, max(len(shown), 1), squeeze=False, sharex="col", height_ratios=[_HISTOGRAM_MM, under_mm]
        )
        for k, parameter in enumerate(shown):
            limits, bars = _axis(parameter)
            _histogram(axes[0, k], parameter, bars)
            _rows(axes[1, k], parameter, labelled=k == 0)
            axes[0, k].set_xlim(*limits)
            _ticks(axes[1, k], parameter, limits)
        if shown:
            axes[0, 0].set_ylabel("replicates")
        title_over_all(figure, data.title, WIDE_TITLE)
        return figure


def _axis(parameter: ReplicatedParameter) -> tuple[tuple[float, float], FloatArray]:
    """Limits of the axis, and edges of the bars: equal steps of the logarithm where intervals are made on it."""
    inside = np.quantile(parameter.values, [OUTERMOST, 1.0 - OUTERMOST])
    ends = [e for i in parameter.intervals if i.known for e in (i.lower, i.upper) if np.isfinite(e)]
    low, high = min([inside[0], parameter.estimate, *ends]), max([inside[1], parameter.estimate, *ends])
    if parameter.on_log and low > 0.0:
        pad = (high / low) ** 0.05
        low, high = low / pad, high * pad
        return (low, high), np.geomspace(low, high, N_BARS + 1)
    pad = 0.05 * (high - low)
    return (low - pad, high + pad), np.linspace(low - pad, high + pad, N_BARS + 1)


def _histogram(ax: Axes, parameter: ReplicatedParameter, edges: FloatArray) -> None:
    ax.hist(parameter.values, bins=list(edges), color=DATA, alpha=0.55)
    ax.axvline(parameter.estimate, color=NULL, linestyle="--", linewidth=0.8)
    if parameter.on_log and edges[0] > 0.0:
        ax.set_xscale("log")
    ax.yaxis.set_major_locator(MaxNLocator(nbins=4, integer=True))
    thousands(ax.yaxis)
    ax.set_ylim(top=_HEADROOM * ax.get_ylim()[1])
    beyond = int(np.sum((parameter.values < edges[0]) | (parameter.values > edges[-1])))
    if beyond:
        ax.annotate(
            f"{beyond} beyond the axis", (1.0, 1.0), xycoords="axes fraction", ha="right", va="top", fontsize=6.5,
            color=INK,
        )  # fmt: skip
    ax.tick_params(labelbottom=False)


def _rows(ax: Axes, parameter: ReplicatedParameter, *, labelled: bool) -> None:
    ax.axvline(parameter.estimate, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
    for row, interval in enumerate(parameter.intervals):
        first, from_replicates = row == 0, row + 1 < len(parameter.intervals)
        colour = RAISING if first else INK if from_replicates else DATA
        if not interval.known:
            ax.annotate(
                "none", (parameter.estimate, row), ha="center", va="center", fontsize=7, color=DATA,
                bbox={"facecolor": "white", "pad": 1.0, "linewidth": 0.0},
            )  # fmt: skip
            continue
        ax.plot([interval.lower, interval.upper], [row, row], color=colour, linewidth=2.0 if first else 1.2)
        ax.plot([interval.lower, interval.upper], [row, row], color=colour, marker="|", markersize=6, linestyle="none")
    ax.set_ylim(len(parameter.intervals) - 0.4, -0.6)
    words = [i.kind for i in parameter.intervals] if labelled else []
    ax.set_yticks(range(len(parameter.intervals)) if labelled else [], words)
    ax.tick_params(axis="y", length=0)
    ax.grid(axis="y", visible=False)
    ax.set_xlabel(f"{parameter.name} ({parameter.unit})" if parameter.unit else parameter.name)


def _ticks(ax: Axes, parameter: ReplicatedParameter, limits: tuple[float, float]) -> None:
    if not (parameter.on_log and limits[0] > 0.0):
        ax.xaxis.set_major_locator(MaxNLocator(nbins=4))
        thousands(ax.xaxis)
        return
    if limits[1] < _FEW_TIMES * limits[0]:
        ax.xaxis.set_major_locator(MaxNLocator(nbins=4, steps=[1, 2, 5, 10]))
    else:
        ax.xaxis.set_major_locator(FixedLocator(log_ticks(*limits)))
    ax.xaxis.set_minor_locator(NullLocator())
    ax.xaxis.set_major_formatter(FuncFormatter(lambda x, _: number_text(x, 2)))
