"""Figures on how sure the numbers are: interval kinds, the length of blocks, what carries the result."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from kernelfit.report.figures_kernel import WIDE_TITLE, title, title_over_all
from kernelfit.report.look import (
    DATA,
    FURTHER,
    INK,
    LOWERING,
    NULL,
    ONE_COLUMN_MM,
    RAISING,
    SIGNED,
    TWO_COLUMNS_MM,
    log_ticks,
    look,
    new_figure,
    number_text,
    thousands,
    zero_line,
)
from kernelfit.report.sureness_data import BlocksData, Compared, InfluenceData, KindsData

MOST_PANELS = 4  # parameters beside each other
_LINES = ((RAISING, "-", "o"), (LOWERING, "--", "s"), (FURTHER[0], "-.", "D"), (FURTHER[1], ":", "^"))


def draw_kinds(data: KindsData) -> Figure:
    """A panel for each parameter, a row for each kind of interval; the headline kind in colour."""
    with look():
        shown = data.parameters[:MOST_PANELS]
        n_kinds = max(len(p.intervals) for p in shown)
        figure = new_figure(TWO_COLUMNS_MM, 22.0 + 6.0 * n_kinds)
        axes = np.atleast_1d(figure.subplots(1, len(shown), sharey=True))
        for ax, parameter in zip(axes, shown, strict=True):
            _kinds(ax, parameter, data.headline)
        labels = [i.kind for i in shown[0].intervals]
        axes[0].set_yticks(range(len(labels)), labels)
        axes[0].set_ylim(len(labels) - 0.4, -0.6)
        axes[0].tick_params(axis="y", labelsize=7.5)
        title_over_all(figure, data.title, WIDE_TITLE)
        return figure


def _kinds(ax: Axes, parameter: Compared, headline: str) -> None:
    known = [i for i in parameter.intervals if i.known]
    ends = [e for i in known for e in (i.lower, i.upper) if math.isfinite(e)] + [parameter.estimate]
    low, high = min(ends), max(ends)
    pad = 0.12 * (high - low) or 0.1 * abs(high) or 1.0
    ax.set_xlim(low - pad, high + pad)
    ax.axvline(parameter.estimate, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
    for row, interval in enumerate(parameter.intervals):
        colour = RAISING if interval.kind == headline else INK
        if not interval.known:
            ax.annotate(
                "none", (parameter.estimate, row), ha="center", va="center", fontsize=7, color=DATA,
                bbox={"facecolor": "white", "pad": 1.0},
            )  # fmt: skip
            continue
        left = interval.lower if math.isfinite(interval.lower) else low - pad
        right = interval.upper if math.isfinite(interval.upper) else high + pad
        ax.plot([left, right], [row, row], color=colour, linewidth=2.0 if interval.kind == headline else 1.2)
        for end, marker in ((interval.lower, "|"), (interval.upper, "|")):
            if math.isfinite(end):
                ax.plot([end], [row], color=colour, marker=marker, markersize=6, linestyle="none")
        for end, at, marker in ((interval.lower, left, "<"), (interval.upper, right, ">")):
            if math.isinf(end):  # an open end runs off the frame
                ax.plot([at], [row], color=colour, marker=marker, markersize=4, linestyle="none", clip_on=False)
        ax.plot([parameter.estimate], [row], color=colour, marker="o", markersize=3.5)
    ax.set_xlabel(parameter.name)
    ax.xaxis.set_major_locator(MaxNLocator(nbins=4))
    thousands(ax.xaxis)
    ax.grid(axis="y", visible=False)
    ax.tick_params(axis="y", length=0)


def draw_blocks(data: BlocksData) -> Figure:
    """Standard errors against the length of the blocks, over those that are used; the length used is marked."""
    with look():
        figure = new_figure(ONE_COLUMN_MM, 66.0)
        ax = figure.subplots()
        for k, name in enumerate(data.names[: len(_LINES)]):
            colour, style, marker = _LINES[k]
            ax.plot(data.length_s, data.relative[:, k], color=colour, linestyle=style, marker=marker, label=name)
            ax.axhline(data.model_based[k], color=colour, linestyle=(0, (1, 2)), linewidth=0.8)
        ax.axvline(data.chosen_s, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
        ax.axhline(1.0, color=NULL, linestyle="--", linewidth=0.8, zorder=0)
        ax.set_xscale("log")
        ticks = data.length_s if data.length_s.size <= 6 else np.array(log_ticks(*data.length_s[[0, -1]]))
        ax.xaxis.set_major_locator(FixedLocator(list(ticks)))
        ax.xaxis.set_minor_locator(NullLocator())
        ax.xaxis.set_major_formatter(FuncFormatter(lambda x, _: number_text(x, 2)))
        ax.set_ylim(0.0, max(1.6, 1.1 * float(np.nanmax(data.relative))))
        ax.set_xlabel("length of a block of time (s)")
        ax.set_ylabel("standard error, over the one used")
        ax.plot([], [], color=INK, linestyle=(0, (1, 2)), linewidth=0.8, label="model-based")
        ax.legend(loc="upper left", ncols=2, frameon=True, facecolor="white", edgecolor="none", framealpha=1.0)
        title(ax, data.title)
        return figure


def draw_influence(data: InfluenceData) -> Figure:
    """A row for each parameter: its move on leaving out each stretch of time, and each unit on the array."""
    with look():
        n = min(len(data.names), MOST_PANELS)
        figure = new_figure(TWO_COLUMNS_MM, 16.0 + 34.0 * n)
        axes = figure.subplots(n, 2, width_ratios=[3.2, 1.0], squeeze=False)
        for k in range(n):
            _over_time(axes[k, 0], data, k)
            _over_array(figure, axes[k, 1], data, k)
            if k + 1 < n:
                axes[k, 0].tick_params(labelbottom=False)
        axes[n - 1, 0].set_xlabel("time (s)")
        axes[0, 0].set_title("without each stretch of time", fontweight="normal", fontsize=7.5)
        axes[0, 1].set_title("without each unit", fontweight="normal", fontsize=7.5)
        title_over_all(figure, data.title, WIDE_TITLE)
        return figure


def _over_time(ax: Axes, data: InfluenceData, k: int) -> None:
    move = data.by_stretch[:, k]
    ax.bar(data.middle_s, move, width=data.width_s, color=[LOWERING if m < 0 else RAISING for m in move])
    zero_line(ax)
    largest = max(0.5, 1.15 * float(np.nanmax(np.abs(move), initial=0.0)))
    ax.set_ylim(-largest, largest)
    ax.set_ylabel(f"{data.names[k]}\n(standard errors)")
    thousands(ax.xaxis)


def _over_array(figure: Figure, ax: Axes, data: InfluenceData, k: int) -> None:
    move = data.by_unit[:, k]
    largest = max(0.5, float(np.nanmax(np.abs(move), initial=0.0)))
    marks = ax.scatter(
        data.site_um[:, 0], data.site_um[:, 1], c=move, cmap=SIGNED.reversed(), norm=Normalize(-largest, largest),
        s=14.0, edgecolors=INK, linewidths=0.3,
    )  # fmt: skip
    ax.set_aspect("equal", adjustable="datalim")
    ax.margins(0.12)
    ax.set_xticks([])
    ax.set_yticks([])
    ax.grid(visible=False)
    for side in ("left", "bottom"):
        ax.spines[side].set_visible(False)
    bar = figure.colorbar(marks, ax=ax, shrink=0.8, aspect=12, pad=0.04)
    bar.outline.set_linewidth(0.3)
    bar.locator = MaxNLocator(nbins=3, symmetric=True)
    bar.update_ticks()
