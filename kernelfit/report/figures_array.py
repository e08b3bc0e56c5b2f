"""Figures of the recording: amounts at the sites of the array, and a stretch of spikes with the rate."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import LogNorm, Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, NullFormatter

from kernelfit.report.figure_data import ArrayData, RasterData
from kernelfit.report.figures_kernel import WIDE_TITLE, title, title_over_all
from kernelfit.report.look import (
    AMOUNTS,
    DATA,
    INK,
    ONE_COLUMN_MM,
    RAISING,
    TWO_COLUMNS_MM,
    count_text,
    distance_label,
    log_ticks,
    look,
    new_figure,
    number_text,
    thousands,
)

_POINTS_PER_MM = 72.0 / 25.4
_MAP_MM = 62.0  # of one column, left for the map beside the colour bar
_TALLEST_MM, _LOWEST_MM = 100.0, 24.0  # of the map; a line of sites still needs room for the colour bar
_BAR_MM = 2.8  # the colour bar's width
_BAR_ROOM = 0.08  # of the map's longer side, below it, for the label of the scale bar
_ROOM_FOR_LEGEND = 1.2
_RASTERISE_FROM = 20_000  # spikes; beyond, a drawing of single strokes is too large to open


def draw_array(data: ArrayData) -> Figure:
    """The array in equal aspect, marks coloured by amount, a scale bar instead of axes."""
    with look():
        low, high = data.site_um.min(axis=0), data.site_um.max(axis=0)
        pad = max(data.spacing_um, 0.04 * float((high - low).max()))
        wide, tall = (float(v) + 2.0 * pad for v in high - low)
        tall += _BAR_ROOM * max(wide, tall)
        points_per_um = _POINTS_PER_MM * min(_MAP_MM / wide, _TALLEST_MM / tall)
        map_mm = max(tall * points_per_um / _POINTS_PER_MM, _LOWEST_MM)
        figure = new_figure(ONE_COLUMN_MM, map_mm + 12.0)
        ax = figure.subplots()
        ax.plot(
            data.shared_um[:, 0],
            data.shared_um[:, 1],
            linestyle="none",
            marker="+",
            color=DATA,
            markersize=2.5,
            markeredgewidth=0.5,
        )
        diameter = float(np.clip(0.42 * data.spacing_um * points_per_um, 3.0, 11.0))
        outline = min(0.4, 0.06 * diameter)  # small marks would be nothing but outline
        known = np.isfinite(data.value)
        norm = _norm(data)
        if known.any():
            marks = ax.scatter(
                data.place_um[known, 0],
                data.place_um[known, 1],
                c=data.value[known],
                s=diameter**2,
                cmap=AMOUNTS,
                norm=norm,
                edgecolors=INK,
                linewidths=outline,
                zorder=3,
            )
            bar = figure.colorbar(marks, ax=ax, shrink=0.75, aspect=0.75 * map_mm / _BAR_MM, pad=0.02)
            bar.set_label(data.quantity)
            bar.outline.set_linewidth(0.4)
            if data.on_log_scale:
                bar.ax.yaxis.set_major_locator(FixedLocator(log_ticks(*bar.ax.get_ylim())))
                bar.ax.yaxis.set_major_formatter(FuncFormatter(lambda v, _: number_text(v)))
                bar.ax.yaxis.set_minor_formatter(NullFormatter())
        ax.scatter(
            data.place_um[~known, 0],
            data.place_um[~known, 1],
            s=diameter**2,
            facecolors="none",
            edgecolors=INK,
            linewidths=0.6,
            zorder=3,
        )
        ax.set_aspect("equal")
        ax.grid(False)
        ax.set_axis_off()
        # Limits that fill the room: a map shrunk to its aspect would drift to the colour bar.
        spare = np.array([_MAP_MM, map_mm]) * _POINTS_PER_MM / points_per_um - np.array([wide, tall])
        ax.set_xlim(low[0] - pad - spare[0] / 2.0, high[0] + pad + spare[0] / 2.0)
        ax.set_ylim(high[1] + pad - tall - spare[1] / 2.0, high[1] + pad + spare[1] / 2.0)
        _scale_bar(ax, data, float(low[0]), float(low[1]) - pad)
        title_over_all(figure, data.title)
        return figure


def _norm(data: ArrayData) -> Normalize:
    known = data.value[np.isfinite(data.value)]
    if known.size == 0:
        return Normalize(0.0, 1.0)
    low, high = float(known.min()), float(known.max())
    if data.on_log_scale:
        return LogNorm(low, high if high > low else low * 1.01)
    return Normalize(0.0, high if high > 0.0 else 1.0)


def _scale_bar(ax: Axes, data: ArrayData, left_um: float, y_um: float) -> None:
    ax.plot([left_um, left_um + data.scale_bar_um], [y_um, y_um], color=INK, linewidth=1.6, solid_capstyle="butt")
    ax.annotate(
        distance_label(data.scale_bar_um),
        xy=(left_um + data.scale_bar_um / 2.0, y_um),
        xytext=(0, -3),
        textcoords="offset points",
        ha="center",
        va="top",
        fontsize=7,
    )


def draw_raster(data: RasterData) -> Figure:
    """Spikes of a stretch on top, observed and fitted rate, mean over units, under it."""
    with look():
        n_rows = len(data.rows)
        raster_mm = float(np.clip(1.4 * n_rows, 26.0, 95.0))
        figure = new_figure(TWO_COLUMNS_MM, raster_mm + 44.0)
        top, under = figure.subplots(2, 1, sharex=True, height_ratios=[raster_mm, 32.0])
        stroke_mm = 0.8 * raster_mm / n_rows
        times = np.concatenate(data.rows) if n_rows else np.empty(0)
        place = np.repeat(np.arange(n_rows), [row.size for row in data.rows])
        top.plot(
            times,
            place,
            linestyle="none",
            marker="|",
            color=INK,
            markersize=max(stroke_mm * _POINTS_PER_MM, 0.6),
            markeredgewidth=0.5,
            rasterized=times.size > _RASTERISE_FROM,
        )
        top.set_ylim(-0.8, n_rows - 0.2)
        top.set_yticks([])
        top.grid(False)
        top.spines["bottom"].set_visible(False)
        top.tick_params(bottom=False)
        top.set_ylabel(f"{count_text(n_rows)} units" if n_rows != 1 else "1 unit")
        title(top, data.title, characters=WIDE_TITLE)
        under.fill_between(
            data.time_s,
            0.0,
            data.observed_hz,
            color=DATA,
            alpha=0.45,
            linewidth=0,
            step="mid",
            label="observed",
        )
        under.plot(data.time_s, data.fitted_hz, color=RAISING, label="fitted")
        under.set_xlim(data.start_s, data.stop_s)
        under.set_ylim(0.0, under.get_ylim()[1] * _ROOM_FOR_LEGEND)
        thousands(under.xaxis)
        under.set_xlabel("time on the recording's clock (s)")
        under.set_ylabel("rate per unit (Hz)")
        under.legend(loc="upper right", ncols=2)
        return figure
