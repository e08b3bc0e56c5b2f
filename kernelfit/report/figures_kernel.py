"""Figures of the coupling: the kernel against distance, and the time course of one spike's effect."""

from __future__ import annotations

import textwrap

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import ArrayLike

from kernelfit._typing import FloatArray
from kernelfit.report.figure_data import CourseData, KernelData, PairCounts
from kernelfit.report.look import (
    BAND_ALPHA,
    DATA,
    INK,
    LOWERING,
    NULL,
    ONE_COLUMN_MM,
    RAISING,
    distance_label,
    look,
    new_figure,
    thousands,
    zero_line,
)
from kernelfit.report.numbers import tied

TITLE_CHARACTERS = 48
WIDE_TITLE = 112  # characters that fit over axes two columns wide
_OFF_FRAME, _LABEL_ROOM = 0.04, 0.07  # of the height of the axes
_LINE_STYLES = ("-", (0, (4, 1.5)), (0, (1.5, 1.2)))


def title(ax: Axes, text: str, characters: int = TITLE_CHARACTERS) -> None:
    """A finding as the title, broken into lines that fit one column."""
    ax.set_title("\n".join(textwrap.wrap(tied(text), characters)))


def title_over_all(figure: Figure, text: str, characters: int = TITLE_CHARACTERS) -> None:
    """A finding as the title over all panels of a figure."""
    shown = "\n".join(textwrap.wrap(tied(text), characters))
    figure.suptitle(shown, x=0.01, ha="left", fontsize=8.5, fontweight="bold")


def hue(values: FloatArray) -> str:
    """Teal where the effect raises the rate on the whole, rust where it lowers it."""
    known = values[np.isfinite(values)]
    largest = known[np.argmax(np.abs(known))] if known.size else 0.0
    return LOWERING if largest < 0.0 else RAISING


def draw_kernel(data: KernelData) -> Figure:
    """The kernel with its band in two readings, and the number of pairs per distance on the same axis."""
    with look():
        figure = new_figure(ONE_COLUMN_MM, 88.0)
        top, under = figure.subplots(2, 1, sharex=True, height_ratios=[3.2, 1.0])
        colour = hue(data.jump) if data.found else INK
        curve = data.found and np.isfinite(data.jump).sum() > 1
        if curve:
            top.fill_between(data.distance_um, data.lower, data.upper, color=colour, alpha=BAND_ALPHA, linewidth=0)
            top.plot(data.distance_um, data.jump, color=colour)
        else:  # all pairs at one distance, or no shape to draw: a point with its interval, not a curve
            value, lower, upper = data.at_reference
            ends = np.nan_to_num([[value - lower], [upper - value]])
            top.errorbar([data.reference_um], [value], yerr=ends, color=colour, fmt="o", capsize=2.5)
        zero_line(top)
        low = colour == LOWERING
        room(top, low=low)
        reference_mark(
            top,
            data.reference_um,
            on_left=data.reference_um > 0.6 * data.reach_um,
            low=low,
            gap=3.0 if curve else 7.0,  # beside the cap of the bar
        )
        top.set_ylabel("J, effect of one spike on the drive")
        if data.in_percent:
            percent_axis(top)
        title(top, data.title)
        pair_bars(under, data.pairs)
        under.axvline(data.reference_um, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
        under.set_xlim(0.0, data.reach_um)
        thousands(under.xaxis, under.yaxis)
        under.set_xlabel("distance (µm)")
        return figure


def room(ax: Axes, *, low: bool) -> None:
    """Room for the label of the reference distance, and for the zero line off the frame."""
    bottom, top = ax.get_ylim()
    span = top - bottom
    bottom, top = min(bottom, -_OFF_FRAME * span), max(top, _OFF_FRAME * span)
    ax.set_ylim(bottom - _LABEL_ROOM * span * low, top + _LABEL_ROOM * span * (not low))


def percent_axis(ax: Axes) -> None:
    """The second reading of J, on the right: change of the rate in per cent."""
    percent = ax.secondary_yaxis("right", functions=(_to_percent, _from_percent))
    percent.set_ylabel("effect of one spike (% of rate)")
    percent.spines["right"].set_visible(True)


def reference_mark(ax: Axes, reference_um: float, *, on_left: bool, low: bool, gap: float) -> None:
    """The reference distance, dashed and named; `low`: at the bottom, where the curve lies below zero."""
    ax.axvline(reference_um, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
    ax.annotate(
        f"reference {distance_label(reference_um)}",
        xy=(reference_um, 0.0 if low else 1.0),
        xycoords=("data", "axes fraction"),
        xytext=(-gap if on_left else gap, 2 if low else -2),
        textcoords="offset points",
        ha="right" if on_left else "left",
        va="bottom" if low else "top",
        fontsize=7,
        color=INK,
    )


def pair_bars(ax: Axes, pairs: PairCounts) -> None:
    """Number of pairs against distance."""
    ax.bar(pairs.distance_um, pairs.n_pairs, width=pairs.width_um, color=DATA)
    ax.set_ylabel("pairs")
    ax.yaxis.set_major_locator(MaxNLocator(nbins=3, integer=True))
    ax.set_ylim(bottom=0.0)


def _to_percent(jump: ArrayLike) -> ArrayLike:
    # The axis must invert over whatever limits it is given; far beyond any kernel its reading is moot.
    return np.asarray(100.0 * np.expm1(np.clip(np.asarray(jump, dtype=np.float64), -50.0, 50.0)))


def _from_percent(percent: ArrayLike) -> ArrayLike:
    return np.asarray(np.log1p(np.maximum(np.asarray(percent, dtype=np.float64), -100.0 + 1e-9) / 100.0))


def draw_time_course(data: CourseData) -> Figure:
    """The effect of one spike against the time since it, at the reference distance and two others."""
    with look():
        figure = new_figure(ONE_COLUMN_MM, 58.0)
        ax = figure.subplots()
        scale, unit = (1e3, "ms") if data.lag_s[-1] < 2.0 else (1.0, "s")
        lag = data.lag_s * scale
        colour = hue(np.concatenate([line.effect for line in data.lines]))
        styles = iter(_LINE_STYLES[1:])
        for line in data.lines:
            if line.main:
                ax.fill_between(lag, line.lower, line.upper, color=colour, alpha=BAND_ALPHA, linewidth=0)
            ax.plot(
                lag,
                line.effect,
                color=colour,
                linestyle=_LINE_STYLES[0] if line.main else next(styles),
                linewidth=1.3 if line.main else 1.0,
                label=f"at {distance_label(line.distance_um)}",
            )
        zero_line(ax)
        ax.axvline(data.time_constant_s * scale, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
        lowest, highest = ax.get_ylim()
        at_top = abs(highest) >= abs(lowest)
        ax.annotate(
            "time constant",
            xy=(data.time_constant_s * scale, 1.0 if at_top else 0.0),
            xycoords=("data", "axes fraction"),
            xytext=(3, -2 if at_top else 2),
            textcoords="offset points",
            va="top" if at_top else "bottom",
            fontsize=7,
        )
        ax.set_xlim(0.0, lag[-1])
        thousands(ax.xaxis)
        ax.set_xlabel(f"time since the spike ({unit})")
        ax.set_ylabel("effect of one spike (% of rate)" if data.in_percent else "effect of one spike on the drive")
        ax.legend(loc="center right")
        title(ax, data.title)
        return figure
