"""Figures of the other terms and of the fit's quality: after-spike curves and KS plots."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullFormatter

from kernelfit.report.figure_data import AfterSpikeData, KsData, KsGlanceData, KsPanel
from kernelfit.report.figures_kernel import WIDE_TITLE, title, title_over_all
from kernelfit.report.look import (
    BAND_ALPHA,
    DATA,
    LOWERING,
    NULL,
    ONE_COLUMN_MM,
    RAISING,
    TWO_COLUMNS_MM,
    log_ticks,
    look,
    new_figure,
    number_text,
    thousands,
)

_SMALLEST_SHOWN = 0.01  # a refractory trough goes to 0, which a log axis cannot show


def draw_after_spike(data: AfterSpikeData) -> Figure:
    """Rate multiplier against the time since a unit's own spike: median, quartiles and a few units."""
    with look():
        figure = new_figure(ONE_COLUMN_MM, 62.0)
        ax = figure.subplots()
        lag_ms = data.lag_s * 1e3
        few = np.maximum(data.few, _SMALLEST_SHOWN)
        for k, curve in enumerate(few):
            ax.plot(lag_ms, curve, color=DATA, alpha=0.45, linewidth=0.6, label="single units" if k == 0 else None)
        low, high = (np.maximum(v, _SMALLEST_SHOWN) for v in (data.lower_quartile, data.upper_quartile))
        ax.fill_between(lag_ms, low, high, color=RAISING, alpha=BAND_ALPHA, linewidth=0, label="middle half")
        ax.plot(lag_ms, np.maximum(data.median, _SMALLEST_SHOWN), color=RAISING, label="median")
        ax.axhline(1.0, color=NULL, linestyle="--", linewidth=0.8)
        ax.set_xscale("log")
        ax.set_yscale("log")
        shown = np.concatenate([few.ravel(), low, high, [1.0]])
        bottom, top = float(np.nanmin(shown)) / 1.2, float(np.nanmax(shown)) * 1.2
        ax.set_ylim(bottom, top)
        ax.set_xlim(lag_ms[0], lag_ms[-1])
        ax.yaxis.set_major_locator(FixedLocator(log_ticks(bottom, top)))
        for axis in (ax.xaxis, ax.yaxis):
            axis.set_major_formatter(FuncFormatter(lambda v, _: number_text(v)))
            axis.set_minor_formatter(NullFormatter())
        ax.set_xlabel("time since the unit's own spike (ms)")
        ax.set_ylabel("rate multiplier")
        ax.legend(loc="best")
        title(ax, data.title)
        return figure


def draw_ks(data: KsData) -> Figure:
    """KS plots of a few units and of all together, and every unit's statistic over its critical value."""
    with look():
        figure = new_figure(TWO_COLUMNS_MM, 111.0)
        grid = figure.add_gridspec(2, 1, height_ratios=[1.12, 1.0])
        upper, lower = figure.add_subfigure(grid[0]), figure.add_subfigure(grid[1])
        axes = np.atleast_1d(upper.subplots(1, len(data.panels), sharey=True))
        for k, (ax, panel) in enumerate(zip(axes, data.panels, strict=True)):
            _ks_panel(ax, panel)
            if k == 0:
                ax.set_ylabel("observed share of intervals")
        upper.supxlabel("share expected under the fitted model", fontsize=7.5)
        title_over_all(figure, data.title, WIDE_TITLE)
        _ks_glance(lower.subplots(), data.glance)
        return figure


def _ks_panel(ax: Axes, panel: KsPanel) -> None:
    ends = np.array([0.0, 1.0])
    colour = LOWERING if panel.rejected else RAISING
    ax.fill_between(ends, ends - panel.test_band, ends + panel.test_band, color=DATA, alpha=BAND_ALPHA, linewidth=0)
    for sign in (-1.0, 1.0):
        ax.plot(ends, ends + sign * panel.free_band, color=DATA, linewidth=0.5)
    ax.plot(ends, ends, color=NULL, linestyle="--", linewidth=0.8)
    ax.plot(panel.expected, panel.observed, color=colour, linewidth=1.2)
    ax.set_xlim(0.0, 1.0)
    ax.set_ylim(0.0, 1.0)
    ax.set_aspect("equal")
    ax.set_xticks([0.0, 0.5, 1.0], ["0", "0.5", "1"])
    ax.set_yticks([0.0, 0.5, 1.0], ["0", "0.5", "1"])
    ax.grid(False)
    ax.set_title(panel.title, fontsize=7.5, fontweight="normal")


def _ks_glance(ax: Axes, data: KsGlanceData) -> None:
    place = np.arange(1, data.ratio.size + 1)
    for rejected, colour, marker, label in (
        (False, RAISING, "o", "described"),
        (True, LOWERING, "X", "not described"),
    ):
        chosen = data.rejected == rejected
        ax.plot(
            place[chosen],
            data.ratio[chosen],
            linestyle="none",
            marker=marker,
            markersize=4.0 if data.ratio.size <= 150 else 3.0,
            markeredgewidth=0.0,
            color=colour,
            label=f"{label}: {int(chosen.sum())}",
        )
    ax.axhline(1.0, color=NULL, linestyle="--", linewidth=0.8)
    ax.set_xlim(0.0, data.ratio.size + 1.0)
    ax.set_ylim(0.0, max(1.5, float(data.ratio.max()) * 1.08))
    ax.xaxis.set_major_locator(MaxNLocator(nbins=8, integer=True, steps=[1, 2, 5, 10]))
    thousands(ax.xaxis)
    ax.set_xlabel("units, best described first")
    ax.set_ylabel("KS statistic / critical value")
    ax.legend(
        loc="upper left",
        title=f"after correction for {data.ratio.size} test{'s' * (data.ratio.size != 1)}",
        alignment="left",
    )
