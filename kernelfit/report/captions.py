"""Captions: what a point, a line and a band are, the level, the kind of interval, units, spikes, seconds."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from kernelfit.errors import Unavailable
from kernelfit.recording.recording import Recording
from kernelfit.report.figure_data import ArrayData, KernelData, KsData, RasterData
from kernelfit.report.numbers import count_text, distance_label, number_text, time_text
from kernelfit.report.readings import LEVEL, kernel_name, kind_word
from kernelfit.report.words import level_text, mostly_rejected

if TYPE_CHECKING:
    from kernelfit.diagnostics.goodness import Goodness
    from kernelfit.fitting.result import CouplingFit


NUMBERED_SAID = " A unit whose id the font cannot draw is named by its row in the table of units."


@dataclass(frozen=True, slots=True)
class Captions:
    """One caption per figure."""

    kernel: str
    course: str
    after_spike: str
    array: str
    ks: str
    raster: str


def captions(
    fit: CouplingFit,
    recording: Recording,
    goodness: Goodness,
    kernel: KernelData | Unavailable,
    array: ArrayData,
    ks: KsData | Unavailable,
    raster: RasterData | Unavailable,
) -> Captions:
    """The captions of a fit's figures. `goodness` warns under the kernel where most units are rejected."""
    units = f"{count_text(recording.n_units)} units"
    based_on = f"{units}, {count_text(fit.n_spikes)} spikes, {count_text(fit.duration_s)} s."
    kind = kind_word(fit.covariance_kind)
    level = level_text(LEVEL)
    return Captions(
        kernel=_kernel(fit, kernel, kind, level, f"{_rejected(goodness)}{based_on}"),
        course=_course(fit, level, kind, based_on),
        after_spike=(
            "Factor by which a spike of a unit multiplies its own rate, against the time since that spike. "
            "Line: median over units; band: the middle half of the units (not an interval); thin lines: single "
            f"units; dashed: no effect. Both axes logarithmic. {based_on}"
        ),
        array=_array(array),
        ks=(
            "Top: share of rescaled intervals against the share the fitted model expects; a right model "
            f"stays on the diagonal. Grey band: {level_text(0.95)} of right models stay inside when the "
            "mean is estimated, as here (the test used); thin lines: the same for a model known "
            "beforehand. Bottom: every unit's KS statistic divided by its critical value at "
            "5 %; above the dashed line the single test rejects; the marks say what holds "
            f"after the correction for many tests.{NUMBERED_SAID * _numbered(ks)} {based_on}"
        ),
        raster=_raster(recording, raster),
    )


def _rejected(goodness: Goodness) -> str:
    if not mostly_rejected(goodness.n_tested, goodness.n_rejected):
        return ""
    return (
        f"The model does not describe the spike times of {count_text(goodness.n_rejected)} of the "
        f"{count_text(goodness.n_tested)} units tested. "
    )


def _numbered(ks: KsData | Unavailable) -> bool:
    return not isinstance(ks, Unavailable) and ks.numbered


def _kernel(fit: CouplingFit, kernel: KernelData | Unavailable, kind: str, level: str, based_on: str) -> str:
    if isinstance(kernel, Unavailable):
        return ""
    bars = (
        f"pairs of units in stretches of {distance_label(kernel.pairs.width_um)}"
        if kernel.pairs.grouped
        else "pairs of units at each distance"
    )
    readings = ", left as jump J of the drive, right as change of the rate" if kernel.in_percent else ""
    curve = kernel.found and kernel.distance_um.size > 1
    shape, span = ("Line", "band") if curve else ("Point", "bar")
    why = (
        ""
        if kernel.found
        else " No curve is drawn: without coupling its shape means nothing; the interval is widened for the search "
        "over lengths and leak rates."
    )
    return (
        f"Effect of one spike on another unit against the distance between them{readings}, at the moment of "
        f"the spike. {shape}: estimate ({kernel_name(fit)} kernel); {span}: pointwise {level} interval, "
        f"{kind}. Dashed: reference distance. Nothing is drawn where the array has no pairs.{why} Below: {bars}. "
        f"{based_on}"
    )


def _course(fit: CouplingFit, level: str, kind: str, based_on: str) -> str:
    band = (
        "The leak rate was given, so the lines have no band."
        if fit.model.leak_rate is not None
        else f"Band of the solid line: {level} interval of the leak rate ({kind}), with the size of the effect "
        "held at its estimate."
    )
    return f"Effect of one spike against the time since it, at the distances named. {band} {based_on}"


def _array(array: ArrayData) -> str:
    scale = " Logarithmic colours." if array.on_log_scale else ""
    silent = " Open marks: units without spikes, not estimable." if not np.isfinite(array.value).all() else ""
    return (
        "Baseline rate of each unit, the rate it would have without any coupling and own spikes, at its site."
        f"{scale}{places_said(array)}{silent}"
    )


def places_said(array: ArrayData) -> str:
    """What a map does with units in one place, and which coordinate it leaves out; "" where there is neither."""
    shared = ""
    if array.n_shared:
        above = f" or lie above one another in {array.seen_along}" if array.seen_along else ""
        shared = f" {count_text(array.n_shared)} units share a site{above}; they stand around it (cross)."
    along = f" Seen along {array.seen_along}." if array.seen_along else ""
    return f"{along}{shared}"


def _raster(recording: Recording, raster: RasterData | Unavailable) -> str:
    if isinstance(raster, Unavailable):
        return ""
    return (
        f"Top: spikes of all {count_text(recording.n_units)} units, one row each, in the order of their "
        "positions. Bottom: mean rate over units, observed (grey) and fitted (line), averaged over "
        f"{time_text(raster.averaged_s)}. The fitted rate at each moment rests on all spikes before it, those of the "
        "same burst included: it follows the observed rate and does not forecast it. The observed rate also swings by "
        "chance, the more so the fewer spikes a stretch holds. The "
        f"stretch from {number_text(raster.start_s)} to {number_text(raster.stop_s)} s was chosen because "
        "its spike count is nearest to the mean."
    )
