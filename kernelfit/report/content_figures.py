"""From a fit and its recording to the data of each figure. All computing for figures happens here."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import Unavailable
from kernelfit.recording.recording import Recording
from kernelfit.report.content_array import array_data
from kernelfit.report.figure_data import (
    AfterSpikeData,
    ArrayData,
    CourseData,
    CourseLine,
    KernelData,
    KsData,
    KsGlanceData,
    KsPanel,
    PairCounts,
    RasterData,
)
from kernelfit.report.look import NUMBERED, unit_label
from kernelfit.report.numbers import (
    count_text,
    distance_label,
    duration_text,
    number_text,
    p_sentence,
    range_text,
    time_text,
)
from kernelfit.report.readings import (
    LEVEL,
    change_text,
    coupling_at,
    is_exp,
    is_nothing,
    time_constant_of,
    told_distances,
)
from kernelfit.report.words import described_text, listed, percent_of_rate

if TYPE_CHECKING:
    from kernelfit.diagnostics.goodness import Goodness, KsCurve
    from kernelfit.fitting.result import CouplingFit

CURVE_POINTS = 240
LARGEST_DRAWN_JUMP = 20.0  # a rate multiplied by e to that power has no second reading on an axis
GAP_IN_SPACINGS = 1.5  # a stretch of distances without pairs, this many reference distances long, breaks the curve
MAX_BARS = 70  # more distinct distances than this are collected in stretches
COURSE_IN_TIME_CONSTANTS = 5.0
FAINT_UNITS = 6
KS_POINTS = 400
RASTER_SPIKES = 6000  # a stretch of about so many spikes can still be read
RASTER_SHORTEST_S, RASTER_LONGEST_S = 20.0, 60.0
RASTER_CELLS = 4_000_000  # bins times units of the fitted rate held at once
RATE_POINTS = 150


# --- coupling -------------------------------------------------------------------------------------------


def kernel_data(fit: CouplingFit) -> KernelData | Unavailable:
    """The kernel over the distances at which the array has pairs, broken where it has none."""
    pairs = fit.pairs_by_distance
    distances = pairs["distance_um"].to_numpy(dtype=np.float64)
    if distances.size == 0:
        return Unavailable("no pair of units is covered by the kernel")
    grid = curve_grid(distances, GAP_IN_SPACINGS * fit.reference_distance_um)
    known = np.isfinite(grid)
    band = fit.kernel_band(grid[known], level=LEVEL)
    curve = np.full((3, grid.size), np.nan)
    curve[:, known] = band[["estimate", "lower", "upper"]].to_numpy(dtype=np.float64).T
    if not np.isfinite(curve[0]).any():
        return Unavailable("the kernel has no finite value at any distance")
    near = coupling_at(fit, fit.reference_distance_um)
    if not fit.verdict.found and not max(abs(near.lower), abs(near.upper)) < LARGEST_DRAWN_JUMP:
        return Unavailable("the recording does not bound the effect of a spike")
    return KernelData(
        title=kernel_title(fit),
        distance_um=grid,
        jump=curve[0],
        lower=curve[1],
        upper=curve[2],
        in_percent=is_exp(fit),
        reference_um=fit.reference_distance_um,
        level=LEVEL,
        pairs=pair_counts(pairs),
        reach_um=1.04 * float(distances[-1]),
        found=fit.verdict.found,
        at_reference=(near.value, near.lower, near.upper),
    )


def curve_grid(distances_um: FloatArray, widest_gap_um: float) -> FloatArray:
    """Distances to draw a curve at, all within the sorted `distances_um`; NaN where a gap is too wide."""
    low, high = float(distances_um[0]), float(distances_um[-1])
    if high <= low:
        return np.array([low])
    grid = np.unique(np.concatenate([np.linspace(low, high, CURVE_POINTS), distances_um]))
    starts = np.flatnonzero(np.diff(distances_um) > max(widest_gap_um, 0.05 * (high - low)))
    for k in starts:
        left, right = distances_um[k], distances_um[k + 1]
        grid = np.where((grid > left) & (grid < right), np.nan, grid)
    # One NaN per gap is enough to lift the pen.
    missing = np.isnan(grid)
    return np.asarray(grid[~(missing & np.roll(missing, 1))])


def pair_counts(pairs: pd.DataFrame) -> PairCounts:
    """Bars for the number of pairs; distances are collected in stretches where they are many."""
    distance = pairs["distance_um"].to_numpy(dtype=np.float64)
    count = pairs["n_pairs"].to_numpy(dtype=np.float64)
    span = float(distance[-1]) if distance[-1] > 0.0 else 1.0
    if distance.size <= MAX_BARS:
        closest = float(np.min(np.diff(distance))) if distance.size > 1 else span
        return PairCounts(distance, count, float(np.clip(0.8 * closest, 0.008 * span, 0.03 * span)), False)
    edges = np.linspace(float(distance[0]), float(distance[-1]), MAX_BARS + 1)
    collected, _ = np.histogram(distance, bins=edges, weights=count)
    middle = 0.5 * (edges[1:] + edges[:-1])
    return PairCounts(middle, collected.astype(np.float64), float(edges[1] - edges[0]), True)


def kernel_title(fit: CouplingFit) -> str:
    """The finding of the kernel figure."""
    if not fit.verdict.found:
        return "No coupling to describe"
    told = [(float(d), coupling_at(fit, float(d))) for d in told_distances(fit)]
    decided = [(d, jump) for d, jump in told if jump.known and not jump.undecided]
    if not decided:
        return "The direction of the effect is open at all distances"
    near_um, near = decided[0]
    # The farthest effect worth a number: the first two told distances often say the same.
    far_um, far = next((d, jump) for d, jump in reversed(decided) if not is_nothing(jump, fit) or d == near_um)
    first = f"One spike {change_text(near.value, fit)} at {distance_label(near_um)}"
    if far_um == near_um:
        return first
    if (far.value < 0.0) != (near.value < 0.0):
        return f"{first} and {change_text(far.value, fit)} at {distance_label(far_um)}"
    size = change_text(far.value, fit, verb=False)
    if first.endswith(f" by {size} at {distance_label(near_um)}"):
        return f"{first} as at {distance_label(far_um)}"
    return f"{first} and by {size} at {distance_label(far_um)}"


def course_data(fit: CouplingFit) -> CourseData | Unavailable:
    """Effect of one spike against time at the reference distance (with a band) and at two further distances.

    The band carries the interval of the leak rate alone; the size of the effect is held at its estimate.
    """
    tau = time_constant_of(fit)
    if not tau.known or tau.value <= 0.0:
        return Unavailable(f"the time constant is not known ({tau.reason})")
    lag = np.linspace(0.0, COURSE_IN_TIME_CONSTANTS * tau.value, 200)
    reference = fit.reference_distance_um
    others = [float(d) for d in told_distances(fit) if abs(d - reference) > 0.2 * reference]
    jumps = fit.kernel(np.array([reference, *others]))
    if not np.isfinite(jumps[0]):
        return Unavailable("the kernel has no finite value at the reference distance")

    def effect(jump: float, time_constant_s: float) -> FloatArray:
        if not math.isfinite(time_constant_s) or time_constant_s <= 0.0:
            return np.full(lag.size, np.nan)
        drive = jump * np.exp(-lag / time_constant_s)
        return percent_of_rate(drive) if is_exp(fit) else drive

    lines = [
        CourseLine(
            reference,
            effect(jumps[0], tau.value),
            effect(jumps[0], tau.lower),
            effect(jumps[0], tau.upper),
            main=True,
        )
    ]
    blank = np.full(lag.size, np.nan)
    lines += [
        CourseLine(d, effect(j, tau.value), blank, blank, main=False) for d, j in zip(others, jumps[1:], strict=True)
    ]
    shown = time_text(tau.value, tau.lower, tau.upper)
    fixed = " (given)" if fit.model.leak_rate is not None else ""
    return CourseData(
        title=f"One spike's effect fades with a time constant of {shown}{fixed}",
        lag_s=lag,
        lines=tuple(lines),
        in_percent=is_exp(fit),
        time_constant_s=tau.value,
        level=LEVEL,
    )


# --- after-spike ----------------------------------------------------------------------------------------


def after_spike_data(fit: CouplingFit, shown: float) -> AfterSpikeData | Unavailable:
    """After-spike curves over the units that have one, up to `shown` times the longest time constant."""
    constants = fit.model.after_spike.constants(fit.model.bin_width)
    if constants.size == 0:
        return Unavailable("the model has no after-spike term")
    longest = max(shown * float(constants[-1]), 10.0 * fit.model.bin_width)
    lag = np.geomspace(fit.model.bin_width, longest, 140)
    curves = fit.after_spike_curves(lag)
    if isinstance(curves, Unavailable):
        return curves
    curves = curves[np.isfinite(curves).all(axis=1)]
    if curves.shape[0] == 0:
        return Unavailable("no unit has an after-spike curve")
    low, middle, high = np.quantile(curves, [0.25, 0.5, 0.75], axis=0)
    chosen = np.unique(np.linspace(0, curves.shape[0] - 1, min(FAINT_UNITS, curves.shape[0])).astype(np.int64))
    return AfterSpikeData(
        title=after_spike_title(lag, middle),
        lag_s=lag,
        median=middle,
        lower_quartile=low,
        upper_quartile=high,
        few=curves[chosen],
        n_units=int(curves.shape[0]),
    )


def after_spike_title(lag_s: FloatArray, median: FloatArray) -> str:
    """The finding of the after-spike figure: the multiplier at the first lag, and its largest change."""
    size = np.abs(np.log(np.maximum(median, 1e-12)))
    largest = int(np.argmax(size))
    places = [0] if largest == 0 or size[largest] < 1.2 * size[0] else [0, largest]
    parts = [
        f"{number_text(float(median[k]), 2, keep_zeros=True)} after {number_text(1e3 * float(lag_s[k]), 2)} ms"
        for k in places
    ]
    return f"In the median unit an own spike multiplies the rate by {listed(parts)}"


# --- quality of the fit -----------------------------------------------------------------------------------


def ks_data(goodness: Goodness) -> KsData | Unavailable:
    """KS plots of the best, middle and worst unit and of all together; all units' statistics at a glance."""
    table = goodness.units
    tested = table["p_value"].notna().to_numpy()
    if not tested.any():
        return Unavailable("no unit has enough spikes for a test")
    units = table[tested]
    curves = {str(u): goodness.ks_curve(str(u)) for u in units.index}
    critical = np.array([curve.critical_half_width for curve in curves.values()])
    ratio = units["ks_statistic"].to_numpy(dtype=np.float64) / critical
    rejected = units["p_adjusted"].to_numpy(dtype=np.float64) < 1.0 - goodness.level
    order = np.argsort(ratio, kind="stable")
    places = {int(order[order.size // 2]): "median", int(order[-1]): "worst", int(order[0]): "best"}
    if order.size == 1:
        places = {int(order[0]): "tested"}
    panels = []
    for k, word in sorted(places.items(), key=lambda item: ratio[item[0]]):
        unit = str(units.index[k])
        label = f"{word}: {unit_label(unit, int(np.flatnonzero(tested)[k]))}"
        panels.append(ks_panel(label, curves[unit], float(units["p_adjusted"].iloc[k]), corrected=True))
    pooled_p = float(goodness.pooled["p_value"].iloc[0])
    if math.isfinite(pooled_p):
        panels.append(ks_panel("all units together", goodness.ks_curve(), pooled_p))
    return KsData(
        title=described_text(int(rejected.size), int(rejected.sum())),
        panels=tuple(panels),
        numbered=any(NUMBERED in panel.title for panel in panels),
        glance=KsGlanceData(ratio=ratio[order], rejected=rejected[order], level=1.0 - goodness.level),
    )


def ks_panel(label: str, curve: KsCurve, p_value: float, *, corrected: bool = False) -> KsPanel:
    """One KS plot, thinned to the points a plot can show; `corrected`: the p-value is, for many tests."""
    n = curve.z.size
    keep = np.unique(np.linspace(0, n - 1, min(n, KS_POINTS)).astype(np.int64))
    return KsPanel(
        title=f"{label}\n{count_text(n)} intervals\n{p_sentence(p_value)}{', corrected' * corrected}",
        expected=curve.z[keep],
        observed=curve.share[keep],
        test_band=curve.critical_half_width,
        free_band=curve.dkw_half_width,
        n_intervals=n,
        rejected=p_value < 1.0 - curve.level,
    )


# --- the recording ----------------------------------------------------------------------------------------


def round_up(value: float) -> float:
    """The smallest of ... 0.1, 0.2, 0.5, 1, 2, 5 ... that is not smaller."""
    decade = 10.0 ** math.floor(math.log10(value))
    return float(min(m * decade for m in (1.0, 2.0, 5.0, 10.0) if m * decade >= value * (1 - 1e-9)))


def baseline_data(fit: CouplingFit) -> ArrayData:
    """The array map of baseline rates."""
    rate = fit.baselines["rate_hz"].to_numpy(dtype=np.float64)
    known = rate[np.isfinite(rate) & (rate > 0.0)]
    if known.size == 0:
        title = "No baseline rate could be estimated"
    else:
        title = f"Baseline rates run from {range_text(float(known.min()), float(known.max()))} Hz"
    return array_data(fit.positions, rate, title, "baseline rate (Hz)")


def raster_data(fit: CouplingFit, recording: Recording) -> RasterData | Unavailable:
    """A stretch with about the mean number of spikes, and the observed and fitted rate in it."""
    longest = RASTER_CELLS * fit.model.bin_width / recording.n_units
    wanted = RASTER_SPIKES * recording.duration / max(recording.n_spikes, 1)
    length = min(float(np.clip(round(wanted), RASTER_SHORTEST_S, RASTER_LONGEST_S)), max(longest, 2.0))
    stretch = representative_stretch(recording, length)
    if stretch is None:
        return Unavailable("the recording holds no stretch of a second without exclusions")
    start, stop = stretch
    rates = fit.fitted_rates(start, stop, recording)
    per_point = max(1, round(round_up((stop - start) / RATE_POINTS) / fit.model.bin_width))
    n_points = rates.time_s.size // per_point
    if n_points == 0:
        return Unavailable("the stretch holds no bin that counts")

    explained = rates.rate_hz.sum(axis=0) > 0.0

    def averaged(values: FloatArray) -> FloatArray:
        used = values[: n_points * per_point]
        return np.asarray(used.reshape(n_points, per_point).mean(axis=1))

    observed = averaged(mean_over(rates.counts, explained) / fit.model.bin_width)
    fitted = averaged(mean_over(rates.rate_hz, explained))
    order = np.lexsort(tuple(recording.positions.T))
    rows = tuple(_between(recording.trains[k], start, stop) for k in order)
    return RasterData(
        title=raster_title(observed, fitted, stop - start),
        rows=rows,
        start_s=start,
        stop_s=stop,
        time_s=averaged(rates.time_s) + 0.5 * fit.model.bin_width,  # bins are named by their start
        observed_hz=observed,
        fitted_hz=fitted,
        averaged_s=per_point * fit.model.bin_width,
    )


def mean_over(values: FloatArray, units: BoolArray) -> FloatArray:
    """(n_bins,) mean over the chosen units, zeros where none is chosen."""
    if not units.any():
        return np.zeros(values.shape[0])
    return np.asarray(values[:, units].mean(axis=1), dtype=np.float64)


def raster_title(observed_hz: FloatArray, fitted_hz: FloatArray, length_s: float) -> str:
    """The finding of the raster: how far and how closely the fitted rate follows."""
    stretch = duration_text(length_s)
    if np.ptp(observed_hz) == 0.0 or np.ptp(fitted_hz) == 0.0:
        return f"{stretch} of the recording with the fitted rate"
    r = float(np.corrcoef(observed_hz, fitted_hz)[0, 1])
    swing = float(np.std(fitted_hz) / np.std(observed_hz))
    return (
        f"Over {stretch} the fitted rate swings {number_text(swing, 2, keep_zeros=True)} times as far as the observed "
        f"one (correlation {number_text(r, 2, keep_zeros=True)})"
    )


def _between(times_s: FloatArray, start_s: float, stop_s: float) -> FloatArray:
    return times_s[np.searchsorted(times_s, start_s) : np.searchsorted(times_s, stop_s)]


def representative_stretch(recording: Recording, length_s: float) -> tuple[float, float] | None:
    """The stretch of that length, inside a window and clear of exclusions, nearest the mean spike count.

    Where no window is that long the longest clear piece is taken; None where no piece lasts a second.
    """
    pieces = clear_pieces(recording)
    if pieces.shape[0] == 0:
        return None
    lengths = pieces[:, 1] - pieces[:, 0]
    longest = float(lengths.max())
    if longest < length_s:
        k = int(np.argmax(lengths))
        return (float(pieces[k, 0]), float(pieces[k, 1])) if longest >= 1.0 else None
    starts = np.concatenate([a + length_s * np.arange(int((b - a) / length_s + 1e-9)) for a, b in pieces])
    times = np.sort(np.concatenate(recording.trains))
    counts = np.searchsorted(times, starts + length_s) - np.searchsorted(times, starts)
    k = int(np.argmin(np.abs(counts - counts.mean())))
    return float(starts[k]), float(starts[k] + length_s)


def clear_pieces(recording: Recording) -> FloatArray:
    """(n, 2) what is left of the windows without the exclusions, seconds."""
    pieces = []
    for start, stop in recording.window_bounds:
        left = float(start)
        for a, b in recording.exclusion_bounds:
            if b <= left or a >= stop:
                continue
            if a > left:
                pieces.append((left, float(a)))
            left = max(left, float(b))
        if left < stop:
            pieces.append((left, float(stop)))
    return np.reshape(np.array(pieces, dtype=np.float64), (-1, 2))
