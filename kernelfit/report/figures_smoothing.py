"""How much of a kernel's shape is the data's: the kernel over a grid of smoothings, and what the criteria say of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, LogLocator, MaxNLocator, NullLocator

from kernelfit._typing import FloatArray
from kernelfit.fitting.smoothing_path import SmoothingPath
from kernelfit.report.content_figures import GAP_IN_SPACINGS, curve_grid
from kernelfit.report.figures_kernel import TITLE_CHARACTERS, title_over_all
from kernelfit.report.look import (
    AMOUNTS,
    FURTHER,
    INK,
    NULL,
    ONE_COLUMN_MM,
    RAISING,
    look,
    new_figure,
    number_text,
    thousands,
    zero_line,
)

DEEPEST_SHOWN = 12.0  # nats under the best smoothing: deeper differences are all alike, and would flatten the rest
PALEST = 0.25  # of the ramp: the lightest shade that is seen on white
EFFECTIVE_TICKS = 5

_BY = {
    "likelihood": "the marginal likelihood",
    "validation": "stretches of time left out",
    "stated": "the model",
}


@dataclass(frozen=True, eq=False)
class SmoothingData:
    """Kernels of a smoothing path over the distances that have pairs, and the criteria below their best."""

    title: str
    distance_um: FloatArray  # (m,) NaN where the array has no pairs
    jump: FloatArray  # (L, m) J under each smoothing
    smoothing: FloatArray  # (L,) ascending
    effective: FloatArray  # (L,) effective parameters of the kernel
    marginal: FloatArray  # (L,) log marginal likelihood less its highest, nats
    held_out: FloatArray | None  # (L,) the same for stretches left out
    held_out_error: FloatArray | None  # (L,) standard error of that difference
    chosen: int | None
    caption: str

    def numbers(self) -> pd.DataFrame:
        """A row for each smoothing: effective parameters and criteria."""
        missing = np.full(self.smoothing.size, np.nan)
        return pd.DataFrame(
            {
                "smoothing": self.smoothing,
                "effective": self.effective,
                "log_marginal_likelihood_below_best": self.marginal,
                "held_out_below_best": missing if self.held_out is None else self.held_out,
                "held_out_std_error": missing if self.held_out_error is None else self.held_out_error,
            }
        )


def smoothing_data(path: SmoothingPath) -> SmoothingData:
    """What the figure shows, from `CouplingFit.smoothing_path`."""
    grid = curve_grid(path.distinct_um, GAP_IN_SPACINGS * path.span.reference_um)
    known = np.isfinite(grid)
    jump = np.full((path.smoothing.size, grid.size), np.nan)
    jump[:, known] = path.kernels(grid[known])
    table = path.held_out
    return SmoothingData(
        title=_title(path),
        distance_um=grid,
        jump=jump,
        smoothing=path.smoothing,
        effective=path.effective,
        marginal=path.log_marginal_likelihood - np.nanmax(path.log_marginal_likelihood),
        held_out=None if table is None else table.total - table.total.max(),
        held_out_error=None if table is None else table.loss_std_error,
        chosen=path.chosen,
        caption=_caption(path),
    )


def _title(path: SmoothingPath) -> str:
    n = path.theta.shape[1]
    if path.chosen is None:
        return f"Without smoothing the kernel has {n} parameters; smoothing leaves fewer"
    effective = number_text(float(path.effective[path.chosen]), 2, max_decimals=1)
    return f"{effective} effective parameters out of {n} are left by the smoothing of this fit"


def _caption(path: SmoothingPath) -> str:
    parts = [
        "Above: the kernel refitted at each smoothing of a grid, coloured by its effective parameters (dark: rough, "
        "pale: smooth)",
        "" if path.chosen is None else f"; thick: the smoothing of the fit, chosen by {_BY[path.chosen_by]}",
        ". Below: by how much the log marginal likelihood of each smoothing stays under its highest (line)",
        ""
        if path.held_out is None
        else ", and the log-likelihood of stretches of time left out (dashed; bars: one "
        "standard error of the difference from its highest)",
        ". Differences of less than 2 hardly tell two smoothings apart.",
    ]
    return "".join(parts)


def draw_smoothing(data: SmoothingData) -> Figure:
    """The family of kernels over the criteria that choose among them."""
    with look():
        figure = new_figure(ONE_COLUMN_MM, 112.0)
        top, under = figure.subplots(2, 1, height_ratios=[1.5, 1.0])
        shades = Normalize(*_shade_range(data.effective))
        for k in np.argsort(data.effective, kind="stable"):  # the roughest last: pale lines do not hide dark ones
            if k != data.chosen:
                top.plot(data.distance_um, data.jump[k], color=AMOUNTS(shades(data.effective[k])), linewidth=0.8)
        if data.chosen is not None:
            top.plot(data.distance_um, data.jump[data.chosen], color="white", linewidth=3.4)
            top.plot(data.distance_um, data.jump[data.chosen], color=INK, linewidth=1.9, label="this fit")
            top.legend(loc="best")
        zero_line(top)
        thousands(top.xaxis)
        top.set_xlabel("distance (µm)")
        top.set_ylabel("J, effect of one spike on the drive")
        title_over_all(figure, data.title, TITLE_CHARACTERS)
        _shade_bar(figure, top, data, shades)
        _criteria(under, data)
        return figure


def _shade_range(effective: FloatArray) -> tuple[float, float]:
    """Ends of the colour scale: its palest part is left out."""
    low, high = float(effective.min()), float(effective.max())
    high = max(high, low + 0.1)
    return low - PALEST / (1.0 - PALEST) * (high - low), high


def _shade_bar(figure: Figure, ax: Axes, data: SmoothingData, shades: Normalize) -> None:
    bar = figure.colorbar(ScalarMappable(shades, AMOUNTS), ax=ax, pad=0.02, aspect=28)
    bar.ax.set_ylim(float(data.effective.min()), float(shades.vmax or 1.0))
    bar.ax.yaxis.set_major_locator(MaxNLocator(nbins=5, integer=True))
    bar.outline.set_visible(False)
    bar.set_label("effective parameters")


def _criteria(ax: Axes, data: SmoothingData) -> None:
    ax.plot(data.smoothing, data.marginal, color=RAISING, marker="o", label="marginal likelihood")
    lowest = float(np.nanmin(data.marginal))
    if data.held_out is not None:
        ax.errorbar(
            data.smoothing,
            data.held_out,
            yerr=data.held_out_error,
            color=FURTHER[0],
            linestyle=(0, (4, 1.5)),
            marker="s",
            linewidth=1.0,
            elinewidth=0.7,
            capsize=1.5,
            label="stretches left out",
        )
        lowest = min(lowest, float(np.nanmin(data.held_out)))
        ax.legend(loc="best")
    if data.chosen is not None:
        ax.axvline(data.smoothing[data.chosen], color=NULL, linestyle="--", linewidth=0.8, zorder=0)
    ax.set_xscale("log")
    depth = min(-lowest, DEEPEST_SHOWN)
    ax.set_ylim(-1.1 * max(depth, 1.0), 0.12 * max(depth, 1.0))
    ax.set_xlabel("smoothing")
    ax.set_ylabel("below the highest (nats)")
    ax.xaxis.set_minor_locator(NullLocator())
    ax.xaxis.set_major_locator(LogLocator(numticks=7))
    ax.xaxis.set_major_formatter(FuncFormatter(lambda x, _: number_text(x, max_decimals=9)))
    ax.yaxis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 5, 10]))
    places = np.unique(np.linspace(0, data.smoothing.size - 1, EFFECTIVE_TICKS).round().astype(int))
    above = ax.secondary_xaxis("top")
    above.xaxis.set_major_locator(FixedLocator(data.smoothing[places].tolist()))
    above.xaxis.set_minor_locator(NullLocator())
    named = {float(data.smoothing[k]): number_text(float(data.effective[k]), 2, max_decimals=1) for k in places}
    above.xaxis.set_major_formatter(FuncFormatter(lambda x, _: named[min(named, key=lambda s: abs(s - x))]))
    above.set_xlabel("effective parameters")
