"""Figures of profile likelihoods: curves with their cuts, regions of two parameters, amplitudes at each length."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from kernelfit._typing import FloatArray
from kernelfit.report.figures_kernel import WIDE_TITLE, hue, title, title_over_all
from kernelfit.report.look import (
    AMOUNTS,
    BAND_ALPHA,
    DATA,
    INK,
    NULL,
    ONE_COLUMN_MM,
    RAISING,
    TWO_COLUMNS_MM,
    log_ticks,
    look,
    new_figure,
    number_text,
    thousands,
    zero_line,
)
from kernelfit.report.profile_data import AmplitudesData, ContourData, ProfiledParameter, ProfilesData
from kernelfit.report.words import level_text

MOST_PANELS = 4  # in a row
_CURVE_MM, _ROW_MM, _AROUND_MM = 34.0, 4.6, 16.0
_BELOW_CUT, _ABOVE_TOP = 1.12, 0.1  # of the cut, how much of the curve is shown beyond it and over its top
_MARGIN = 0.06  # of the width, beyond the outermost end
_FEW_TIMES = 3.0  # a log axis that spans less shows the steps of a linear one


def draw_profiles(data: ProfilesData) -> Figure:
    """A column for each parameter: the curve with its cut, and under it the intervals it gives beside the usual one."""
    with look():
        n = len(data.parameters)
        down = math.ceil(n / MOST_PANELS)
        across = math.ceil(n / down)
        n_rows = max(len(p.intervals) for p in data.parameters)
        under_mm = _ROW_MM * (n_rows + 0.5)
        figure = new_figure(TWO_COLUMNS_MM, 8.0 + down * (_AROUND_MM + _CURVE_MM + under_mm))
        axes = figure.subplots(2 * down, across, squeeze=False, height_ratios=[_CURVE_MM, under_mm] * down)
        for k in range(down * across):
            top, under = axes[2 * (k // across), k % across], axes[2 * (k // across) + 1, k % across]
            if k >= n:
                top.set_visible(False)
                under.set_visible(False)
                continue
            parameter, first = data.parameters[k], k % across == 0
            limits = _limits(parameter)
            _curve(top, parameter)
            _rows(under, parameter, limits, labelled=first)
            for ax in (top, under):
                if _on_log_axis(parameter.on_log, limits):
                    ax.set_xscale("log")
                ax.set_xlim(*limits)
                _ticks(ax.xaxis, parameter.on_log, limits)
            top.tick_params(labelbottom=False)
            if first:
                top.set_ylabel("fall of the log-likelihood")
            under.set_xlabel(_label(parameter.name, parameter.unit))
        title_over_all(figure, data.title, WIDE_TITLE)
        return figure


def _limits(parameter: ProfiledParameter) -> tuple[float, float]:
    """Where the intervals lie, and the curve where no interval ends."""
    shown = parameter.value[parameter.fall >= -_BELOW_CUT * parameter.cut]
    ends = [e for i in parameter.intervals for e in (i.lower, i.upper) if i.known and math.isfinite(e)]
    low, high = min([shown[0], *ends]), max([shown[-1], *ends])
    if _on_log_axis(parameter.on_log, (low, high)):
        margin = (high / low) ** _MARGIN
        return low / margin, high * margin
    return low - _MARGIN * (high - low), high + _MARGIN * (high - low)


def _on_log_axis(on_log: bool, limits: tuple[float, float]) -> bool:
    return on_log and limits[0] > 0.0 and limits[1] > _FEW_TIMES * limits[0]


def _curve(ax: Axes, parameter: ProfiledParameter) -> None:
    scaled = not np.array_equal(parameter.fall, parameter.model_fall)
    style = {"marker": "o", "markersize": 2.5, "linewidth": 0.6} if parameter.jumps else {"linewidth": 1.6}
    if scaled:
        ax.plot(parameter.value, parameter.model_fall, color=DATA, linewidth=0.8)
    ax.plot(parameter.value, parameter.fall, color=RAISING, **style)
    ax.axhline(-parameter.cut, color=NULL, linestyle="--", linewidth=0.8)
    ax.axvline(parameter.estimate, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
    headline = parameter.intervals[0]
    for end in (headline.lower, headline.upper):
        if math.isfinite(end):
            ax.plot([end, end], [-parameter.cut, -_BELOW_CUT * parameter.cut], color=RAISING, linewidth=0.8)
    ax.set_ylim(-_BELOW_CUT * parameter.cut, _ABOVE_TOP * parameter.cut)
    ax.yaxis.set_major_locator(MaxNLocator(nbins=3, steps=[1, 2, 5, 10]))


def _rows(ax: Axes, parameter: ProfiledParameter, limits: tuple[float, float], *, labelled: bool) -> None:
    ax.axvline(parameter.estimate, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
    for row, interval in enumerate(parameter.intervals):
        colour = RAISING if row == 0 else INK if row == 1 else DATA
        if not interval.known:
            ax.annotate(
                "none", (parameter.estimate, row), ha="center", va="center", fontsize=7, color=DATA,
                bbox={"facecolor": "white", "pad": 1.0, "linewidth": 0.0},
            )  # fmt: skip
            continue
        open_below = math.isinf(interval.lower) or interval.lower < limits[0]
        open_above = math.isinf(interval.upper) or interval.upper > limits[1]
        left, right = limits[0] if open_below else interval.lower, limits[1] if open_above else interval.upper
        ax.plot([left, right], [row, row], color=colour, linewidth=2.0 if row == 0 else 1.2)
        for x, is_open, arrow in ((left, open_below, "<"), (right, open_above, ">")):
            ax.plot([x], [row], color=colour, marker=arrow if is_open else "|", markersize=4 if is_open else 6,
                    linestyle="none", clip_on=False)  # fmt: skip
    ax.set_ylim(len(parameter.intervals) - 0.4, -0.6)
    words = [i.kind for i in parameter.intervals] if labelled else []
    ax.set_yticks(range(len(parameter.intervals)) if labelled else [], words)
    ax.tick_params(axis="y", length=0)
    ax.grid(axis="y", visible=False)


def draw_contour(data: ContourData) -> Figure:
    """Regions of two parameters that hold both at three levels, the estimate among them."""
    with look():
        figure = new_figure(ONE_COLUMN_MM, 74.0)
        ax = figure.subplots()
        shades = [AMOUNTS(s) for s in (0.42, 0.26, 0.1)]
        ax.contourf(data.x, data.y, data.drop.T, levels=[-1.0, *data.cuts], colors=shades)
        lines = ax.contour(data.x, data.y, data.drop.T, levels=data.cuts, colors=[RAISING], linewidths=[0.6, 0.9, 1.3])
        names = {cut: level_text(float(level)) for cut, level in zip(lines.levels, data.levels, strict=True)}
        ax.clabel(lines, fmt=names, fontsize=7.0, inline=True, colors=[INK])
        if data.model_drop is not None:
            ax.contour(data.x, data.y, data.model_drop.T, levels=[data.model_cut], colors=[INK], linewidths=[0.7])
        ax.plot(*data.estimate, marker="o", markersize=4.0, color=INK)
        for axis, on_log, limits in (
            (ax.xaxis, data.on_log[0], (float(data.x[0]), float(data.x[-1]))),
            (ax.yaxis, data.on_log[1], (float(data.y[0]), float(data.y[-1]))),
        ):
            if _on_log_axis(on_log, limits):
                (ax.set_xscale if axis is ax.xaxis else ax.set_yscale)("log")
            _ticks(axis, on_log, limits)
        ax.set_xlim(data.x[0], data.x[-1])
        ax.set_ylim(data.y[0], data.y[-1])
        ax.set_xlabel(_label(data.names[0], data.units[0]))
        ax.set_ylabel(_label(data.names[1], data.units[1]))
        ax.grid(visible=False)
        title(ax, data.title)
        return figure


def draw_amplitudes(data: AmplitudesData) -> Figure:
    """Amplitudes kept at each length, and under them how good the best of each length is."""
    with look():
        figure = new_figure(ONE_COLUMN_MM, 84.0)
        top, under = figure.subplots(2, 1, sharex=True, height_ratios=[3.0, 1.0])
        colour = INK if data.estimate is None else hue(data.best)  # no sign to speak of where no coupling was found
        low, high = _visible(data)
        top.fill_between(
            data.length_um, np.maximum(data.lower, low), np.minimum(data.upper, high), color=colour, alpha=BAND_ALPHA,
            linewidth=0,
        )  # fmt: skip
        if data.model_lower is not None and data.model_upper is not None:
            for line in (data.model_lower, data.model_upper):
                top.plot(data.length_um, np.clip(line, low, high), color=DATA, linewidth=0.7)
        top.plot(data.length_um, data.best, color=colour)
        zero_line(top)
        if data.estimate is not None:
            top.plot(*data.estimate, marker="o", markersize=4.0, color=INK)
        top.set_ylim(low, high)
        top.set_ylabel(f"J {data.stated_at} (per spike)")
        title(top, data.title)
        under.plot(data.length_um, -data.drop, color=colour)
        under.set_ylabel("fall of the\nlog-likelihood")
        under.yaxis.set_major_locator(MaxNLocator(nbins=3))
        thousands(under.yaxis)
        foot = under.get_xaxis_transform()
        under.plot(data.held_um, np.zeros(data.held_um.size), transform=foot, color=DATA, marker="|", markersize=5,
                   linestyle="none", clip_on=False)  # fmt: skip
        limits = (float(data.length_um[0]), float(data.length_um[-1]))
        if data.length_um.size > 1:
            under.set_xscale("log")
            under.set_xlim(*limits)
            under.xaxis.set_major_locator(FixedLocator(log_ticks(*limits)))
            under.xaxis.set_minor_locator(NullLocator())
            under.xaxis.set_major_formatter(FuncFormatter(lambda x, _: number_text(x, 2)))
        under.set_xlabel(f"{data.word} held (µm)")
        return figure


def _visible(data: AmplitudesData) -> tuple[float, float]:
    """Range of amplitudes to show: what is kept, open ends cut at twice the widest finite one."""
    ends = np.concatenate([data.lower, data.upper, data.best, [0.0]])
    finite: FloatArray = ends[np.isfinite(ends)]
    low, high = float(finite.min()), float(finite.max())
    reach = high - low or 1.0
    low = low - reach if np.isneginf(data.lower).any() else low - 0.05 * reach
    high = high + reach if np.isposinf(data.upper).any() else high + 0.05 * reach
    return low, high


def _label(name: str, unit: str) -> str:
    return f"{name} ({unit})" if unit else name


def _ticks(axis: Axis, on_log: bool, limits: tuple[float, float]) -> None:
    if _on_log_axis(on_log, limits):
        axis.set_major_locator(FixedLocator(log_ticks(*limits)))
        axis.set_minor_locator(NullLocator())
        axis.set_major_formatter(FuncFormatter(lambda x, _: number_text(x, 2)))
        return
    axis.set_major_locator(MaxNLocator(nbins=4, steps=[1, 2, 5, 10]))
    thousands(axis)
