"""Drawing of the figures of an inspection; the array map is drawn by `figures_array`."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullFormatter

from kernelfit._typing import FloatArray
from kernelfit.report.figures_kernel import WIDE_TITLE, title, title_over_all
from kernelfit.report.inspection_data import (
    BandCurve,
    CorrelogramData,
    IntervalData,
    IntervalPanel,
    RateCourseData,
    StretchData,
)
from kernelfit.report.look import DATA, INK, LOWERING, NULL, RAISING, TWO_COLUMNS_MM, look, new_figure, thousands
from kernelfit.report.numbers import count_text, number_text, time_text

_POINTS_PER_MM = 72.0 / 25.4
_RASTERISE_FROM = 20_000  # strokes; beyond, a drawing of single strokes is too large to open
MOST_TICKS = 3  # with their units, on an axis a quarter of two columns wide
_ABOVE = 1.15  # of the largest value shown


def draw_stretch(data: StretchData) -> Figure:
    """Spikes of a stretch on top, mean rate under it, proposed exclusions marked in both."""
    with look():
        n_rows = len(data.rows)
        raster_mm = float(np.clip(1.4 * n_rows, 30.0, 95.0))
        figure = new_figure(TWO_COLUMNS_MM, raster_mm + 42.0)
        top, under = figure.subplots(2, 1, sharex=True, height_ratios=[raster_mm, 28.0])
        times = np.concatenate(data.rows)
        place = np.repeat(np.arange(n_rows), [row.size for row in data.rows])
        top.plot(
            times,
            place,
            linestyle="none",
            marker="|",
            color=INK,
            markersize=max(0.8 * raster_mm / n_rows * _POINTS_PER_MM, 0.6),
            markeredgewidth=0.5,
            rasterized=times.size > _RASTERISE_FROM,
        )
        top.set_ylim(-0.8, n_rows - 0.2)
        top.set_yticks([])
        top.grid(False)
        top.spines["bottom"].set_visible(False)
        top.tick_params(bottom=False)
        top.set_ylabel("1 unit" if n_rows == 1 else f"{count_text(n_rows)} units")
        title(top, data.title, characters=WIDE_TITLE)
        under.fill_between(data.time_s, 0.0, data.rate_hz, color=DATA, alpha=0.6, linewidth=0, step="mid")
        under.set_xlim(data.start_s, data.stop_s)
        under.set_ylim(bottom=0.0)
        under.yaxis.set_major_locator(MaxNLocator(4))
        thousands(under.xaxis)
        under.set_xlabel("time on the recording's clock (s)")
        under.set_ylabel("rate per unit (Hz)")
        _marks(top, data.marked.mean(axis=1) if data.marked.size else np.empty(0))
        for start, stop in data.excluded:
            for ax in (top, under):
                ax.axvspan(start, stop, facecolor="none", edgecolor=NULL, hatch="////", linewidth=0.0)
        return figure


def _marks(ax: Axes, times_s: FloatArray) -> None:
    """Small triangles above the axes where exclusions are proposed."""
    if times_s.size == 0:
        return
    (marks,) = ax.plot(
        times_s,
        np.full(times_s.size, 1.0),
        transform=ax.get_xaxis_transform(),
        linestyle="none",
        marker="v",
        color=LOWERING,
        markersize=3.0,
        markeredgewidth=0.0,
        clip_on=False,
    )
    marks.set_in_layout(False)  # it hangs over the edge of the axes on purpose


def draw_rate_course(data: RateCourseData) -> Figure:
    """Mean rate over the whole recording, its blocks as steps, proposed exclusions as marks on top."""
    with look():
        figure = new_figure(TWO_COLUMNS_MM, 52.0)
        ax = figure.subplots()
        known = np.isfinite(data.rate_hz)
        ax.fill_between(
            data.time_s, 0.0, np.where(known, data.rate_hz, 0.0), where=known, color=DATA, alpha=0.6, linewidth=0
        )
        for k, ((start, stop), rate) in enumerate(zip(data.block_edges_s, data.block_hz, strict=True)):
            ax.plot([start, stop], [rate, rate], color=RAISING, linewidth=1.6, label="block" if k == 0 else None)
        ax.set_xlim(np.nanmin(data.time_s) - data.bin_s / 2.0, np.nanmax(data.time_s) + data.bin_s / 2.0)
        ax.set_ylim(0.0, _ABOVE * max(float(np.nanmax(data.rate_hz)), 1e-9))
        _marks(ax, data.marked_s)
        thousands(ax.xaxis)
        ax.set_xlabel("time on the recording's clock (s)")
        ax.set_ylabel("rate per unit (Hz)")
        title(ax, data.title, characters=WIDE_TITLE)
        return figure


def draw_intervals(data: IntervalData) -> Figure:
    """Interval histograms on a log axis, 1 and 2 ms marked."""
    with look():
        n = len(data.panels)
        figure = new_figure(TWO_COLUMNS_MM, 58.0)
        axes = figure.subplots(1, max(n, 2), sharex=True, squeeze=False)[0]
        for ax, panel in zip(axes, data.panels, strict=False):
            _interval_panel(ax, panel)
        for ax in axes[n:]:
            ax.set_visible(False)
        axes[0].set_ylabel("share per factor of ten (%)")
        title_over_all(figure, data.title, WIDE_TITLE)
        return figure


def _interval_panel(ax: Axes, panel: IntervalPanel) -> None:
    ax.stairs(100.0 * panel.per_decade, panel.edges_s, fill=True, color=DATA, alpha=0.6)
    ax.stairs(100.0 * panel.per_decade, panel.edges_s, color=INK, linewidth=0.6)
    ax.set_xscale("log")
    ax.set_ylim(bottom=0.0)
    for mark in (0.001, 0.002):
        ax.axvline(mark, color=NULL, linestyle="--", linewidth=0.8)
    low, high = min(float(panel.edges_s[0]), 0.001), float(panel.edges_s[-1])
    ticks = [10.0**k for k in range(-5, 7) if low <= 10.0**k <= high]
    ax.xaxis.set_major_locator(FixedLocator(ticks[:: 1 + (len(ticks) - 1) // MOST_TICKS]))
    ax.xaxis.set_major_formatter(FuncFormatter(lambda v, _: time_text(v).replace("\N{NO-BREAK SPACE}", " ")))
    ax.xaxis.set_minor_formatter(NullFormatter())
    ax.yaxis.set_major_locator(MaxNLocator(4))
    ax.set_xlabel("interval")
    below = number_text(100.0 * panel.share_short, 2)
    ax.set_title(
        f"{panel.label}\n{count_text(panel.n_intervals)} intervals,\n{below} % below 1 ms",
        fontweight="normal",
        fontsize=7.5,
    )


def draw_correlograms(data: CorrelogramData) -> Figure:
    """A column per band of distance: short lags on top, long lags under them; chance dashed."""
    with look():
        n = len(data.bands)
        figure = new_figure(TWO_COLUMNS_MM, 92.0)
        axes = figure.subplots(2, n, sharey="row", squeeze=False)
        for row, scale in enumerate(("fine", "slow")):
            curves: list[BandCurve] = [(band.fine if scale == "fine" else band.slow) for band in data.bands]
            factor = 1e3 if scale == "fine" else 1.0
            highest = max((float(np.nanmax(c.relative, initial=0.0)) for c in curves), default=1.0)
            for ax, curve in zip(axes[row], curves, strict=True):
                _correlogram(ax, curve, factor, raw=data.proposes)
                ax.set_ylim(0.0, _ABOVE * max(highest, 1.0))
                ax.set_xlim(0.0, factor * float(curve.lag_s[-1] + curve.width_s / 2.0))
            axes[row, 0].set_ylabel("spike pairs\n(times chance)")
            for ax in axes[row]:
                ax.set_xlabel("lag (ms)" if scale == "fine" else "lag (s)")
                ax.xaxis.set_major_locator(MaxNLocator(3))
                ax.yaxis.set_major_locator(MaxNLocator(4))
        if data.proposes:
            axes[0, -1].legend(loc="upper right")
        for ax, band in zip(axes[0], data.bands, strict=True):
            ax.axvline(1e3 * data.bin_width_s, color=INK, linewidth=0.6, linestyle="-.")
            pairs = f"{count_text(band.n_pairs)} pair{'s' * (band.n_pairs != 1)}"
            ax.set_title(f"{band.label}\n{pairs}", fontweight="normal", fontsize=7.5)
        title_over_all(figure, data.title, WIDE_TITLE)
        return figure


def _correlogram(ax: Axes, curve: BandCurve, factor: float, *, raw: bool) -> None:
    edges = factor * np.append(curve.lag_s - curve.width_s / 2.0, curve.lag_s[-1] + curve.width_s / 2.0)
    uniform = np.allclose(np.diff(curve.lag_s), curve.width_s)
    values = np.nan_to_num(curve.relative)
    if uniform:
        ax.stairs(values, edges, fill=True, color=DATA, alpha=0.6)
        ax.stairs(values, edges, color=INK, linewidth=0.6)
    else:
        ax.fill_between(factor * curve.lag_s, 0.0, values, color=DATA, alpha=0.6, linewidth=0)
        ax.plot(factor * curve.lag_s, values, color=INK, linewidth=0.8)
    if raw:
        ax.plot(factor * curve.lag_s, curve.raw, color=LOWERING, linewidth=0.8, linestyle=":", label="raw")
    ax.axhline(1.0, color=NULL, linestyle="--", linewidth=0.8)
