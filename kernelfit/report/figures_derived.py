"""The kernel with the distances that are read off it, each with its interval."""

from __future__ import annotations

import math
from typing import Literal

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from kernelfit.report.derived_data import Mark, MarkedKernel
from kernelfit.report.figures_kernel import hue, pair_bars, percent_axis, reference_mark, room, title
from kernelfit.report.look import (
    BAND_ALPHA,
    INK,
    LOWERING,
    NULL,
    ONE_COLUMN_MM,
    interval_text,
    look,
    new_figure,
    thousands,
    zero_line,
)

_SHAPES = ("o", "s", "D", "^")
_ROW_MM = 5.8
_LABEL_SHARE = 0.48  # of the axis, that a label needs beside an interval
_FIRST_ROOM = 0.75  # rows, above the first and below the last


def draw_marked_kernel(data: MarkedKernel) -> Figure:
    """The kernel with a mark at each distance read off it; under it a row for each, with its interval; then pairs."""
    with look():
        strip_mm = _ROW_MM * (len(data.marks) + 2 * _FIRST_ROOM - 1)
        figure = new_figure(ONE_COLUMN_MM, 82.0 + strip_mm)
        top, strip, under = figure.subplots(3, 1, sharex=True, height_ratios=[48.0, strip_mm, 15.0])
        _curve(top, data)
        for row, (mark, shape) in enumerate(zip(data.marks, _SHAPES, strict=False)):
            _row(strip, row, mark, shape, data)
        strip.set_ylim(len(data.marks) - 1 + _FIRST_ROOM, -_FIRST_ROOM)
        strip.set_yticks(range(len(data.marks)), [mark.name for mark in data.marks])
        strip.tick_params(axis="y", length=0)
        strip.grid(visible=False)
        strip.spines[["left", "bottom"]].set_visible(False)
        strip.tick_params(axis="x", length=0)
        pair_bars(under, data.kernel.pairs)
        under.axvline(data.kernel.reference_um, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
        under.set_xlim(0.0, data.kernel.reach_um)
        thousands(under.xaxis, under.yaxis)
        under.set_xlabel("distance (µm)")
        figure.align_ylabels([top, under])
        return figure


def _curve(ax: Axes, data: MarkedKernel) -> None:
    kernel = data.kernel
    colour = hue(kernel.jump)
    ax.fill_between(kernel.distance_um, kernel.lower, kernel.upper, color=colour, alpha=BAND_ALPHA, linewidth=0)
    ax.plot(kernel.distance_um, kernel.jump, color=colour)
    for mark, shape in zip(data.marks, _SHAPES, strict=False):
        ends = [mark.jump_lower, mark.jump_upper]
        if all(math.isfinite(end) for end in ends):
            ax.plot([mark.distance_um] * 2, ends, color=INK, linewidth=1.0, zorder=3)
        ax.plot([mark.distance_um], [mark.jump], shape, color=INK, markersize=3.6, zorder=4)
    zero_line(ax)
    low = colour == LOWERING
    room(ax, low=low)
    for mark in data.marks:  # down to its row
        _dotted(ax, mark.distance_um, ax.get_ylim()[0], mark.jump)
    on_left = kernel.reference_um > 0.6 * kernel.reach_um
    reference_mark(ax, kernel.reference_um, on_left=on_left, low=low, gap=3.0)
    ax.set_ylabel("J, effect of one spike on the drive")
    if kernel.in_percent:
        percent_axis(ax)
    title(ax, data.title)


def _row(ax: Axes, row: int, mark: Mark, shape: str, data: MarkedKernel) -> None:
    """One distance with its interval; an open end runs to where the array has no more pairs, with an arrow."""
    _dotted(ax, mark.distance_um, -_FIRST_ROOM, row)
    left, right = max(mark.lower, data.near_um), min(mark.upper, data.far_um)
    if not math.isnan(mark.lower):
        ax.plot([left, right], [row, row], color=INK, linewidth=1.2)
        for end, at, closed, opened in ((mark.lower, left, "|", "<"), (mark.upper, right, "|", ">")):
            size, mark_at_end = (7.0, closed) if end == at else (4.0, opened)
            ax.plot([at], [row], mark_at_end, color=INK, markersize=size, clip_on=False)
    ax.plot([mark.distance_um], [row], shape, color=INK, markersize=3.2)
    ends = (left if mark.lower == left else math.nan, right if mark.upper == right else math.nan)
    label = interval_text(mark.distance_um, *ends, "µm")
    if max(right, mark.distance_um) < (1.0 - _LABEL_SHARE) * data.kernel.reach_um:
        _label(ax, label, (right, row), (6, 0), "left", "center")
    elif min(left, mark.distance_um) > _LABEL_SHARE * data.kernel.reach_um:
        _label(ax, label, (left, row), (-6, 0), "right", "center")
    else:  # no room on either side
        _label(ax, label, (0.5 * (left + right), row), (0, 2), "center", "bottom")


def _label(
    ax: Axes,
    text: str,
    at: tuple[float, float],
    off: tuple[float, float],
    across: Literal["left", "center", "right"],
    along: Literal["center", "bottom"],
) -> None:
    """A number beside its interval; `off` in points."""
    box = {"facecolor": "white", "pad": 0.6, "edgecolor": "none"} if along == "center" else None
    ax.annotate(text, at, xytext=off, textcoords="offset points", ha=across, va=along, fontsize=7, bbox=box)


def _dotted(ax: Axes, distance_um: float, low: float, high: float) -> None:
    ax.plot([distance_um] * 2, [low, high], color=NULL, linestyle=":", linewidth=0.7, zorder=0.5, scaley=False)
