"""From an inspection to the data of each of its figures. All computing for these figures happens here."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.errors import ArgumentError, Unavailable
from kernelfit.recording.activity import intervals
from kernelfit.recording.inspection import Inspection
from kernelfit.recording.layout import SAME_SITE
from kernelfit.recording.merged import MergedTrain, merge_trains, time_step
from kernelfit.recording.recording import Recording, clock_text
from kernelfit.report.content_array import array_data
from kernelfit.report.content_figures import representative_stretch
from kernelfit.report.figure_data import ArrayData
from kernelfit.report.look import unit_label
from kernelfit.report.numbers import count_text, duration_text, number_text, range_text

RASTER_S = 60.0
RASTER_SPIKES = 12_000  # more make a raster black: the stretch is cut
RASTER_SHORTEST_S = 5.0
RASTER_RATE_BINS = 240
COURSE_POINTS = 900
SHORTEST_COURSE_BIN_S = 1.0
WORST_UNITS = 3
BINS_PER_DECADE = 12
MIN_INTERVALS = 200  # fewer make a histogram of single strokes


@dataclass(frozen=True, eq=False)
class StretchData:
    """A stretch of the recording as spikes, and the mean rate under it."""

    title: str
    rows: tuple[FloatArray, ...]  # spike times of each unit, seconds, bottom row first
    start_s: float
    stop_s: float
    time_s: FloatArray  # (n,) middle of each rate bin
    rate_hz: FloatArray  # (n,) mean over units
    bin_s: float
    marked: FloatArray  # (m, 2) proposed exclusions that lie in it, seconds
    excluded: FloatArray  # (m, 2) the recording's own exclusions that lie in it, seconds

    def numbers(self) -> pd.DataFrame:
        """time_s, rate_hz"""
        return pd.DataFrame({"time_s": self.time_s, "rate_hz": self.rate_hz})


@dataclass(frozen=True, eq=False)
class RateCourseData:
    """Mean rate over the whole recording, and over its blocks."""

    title: str
    time_s: FloatArray  # (n,) middle of each bin; NaN between windows
    rate_hz: FloatArray  # (n,) mean over units
    bin_s: float
    block_edges_s: FloatArray  # (n_blocks, 2)
    block_hz: FloatArray  # (n_blocks,)
    marked_s: FloatArray  # (m,) where exclusions are proposed

    def numbers(self) -> pd.DataFrame:
        """time_s, rate_hz; no row between windows"""
        table = pd.DataFrame({"time_s": self.time_s, "rate_hz": self.rate_hz})
        return table[table["time_s"].notna()].reset_index(drop=True)


@dataclass(frozen=True, eq=False)
class IntervalPanel:
    """Histogram of the intervals of one unit, or of all, on a log axis."""

    label: str  # "all units", "unit x"
    edges_s: FloatArray  # (n_bins + 1,)
    per_decade: FloatArray  # (n_bins,) share of the intervals per factor of ten of interval
    n_intervals: int
    share_short: float  # below 1 ms


@dataclass(frozen=True, eq=False)
class IntervalData:
    """Interval histograms: all units pooled, and the units with the largest share of short intervals."""

    title: str
    panels: tuple[IntervalPanel, ...]

    def numbers(self) -> pd.DataFrame:
        """label, from_s, to_s, share_per_decade: one block of rows per panel"""
        parts = [
            pd.DataFrame(
                {
                    "label": panel.label,
                    "from_s": panel.edges_s[:-1],
                    "to_s": panel.edges_s[1:],
                    "share_per_decade": panel.per_decade,
                }
            )
            for panel in self.panels
        ]
        return pd.concat(parts, ignore_index=True)


@dataclass(frozen=True, eq=False)
class BandCurve:
    """Correlogram of one band of distance at one scale."""

    lag_s: FloatArray  # (n,)
    width_s: float
    relative: FloatArray  # (n,) spike pairs over those by chance; proposed exclusions left out
    raw: FloatArray  # (n,) the same with them; equal where nothing is proposed


@dataclass(frozen=True, eq=False)
class BandPanels:
    """One band of distance: short lags and long lags."""

    label: str
    n_pairs: int
    fine: BandCurve
    slow: BandCurve


@dataclass(frozen=True, eq=False)
class CorrelogramData:
    """Cross-correlograms pooled by distance."""

    title: str
    bands: tuple[BandPanels, ...]
    proposes: bool  # raw and masked differ
    bin_width_s: float  # the suggestion


@dataclass(frozen=True, eq=False)
class InspectionFigures:
    """Data of every figure, or the reason why there is none."""

    array: ArrayData
    raster: StretchData | Unavailable
    course: RateCourseData | Unavailable
    intervals: IntervalData | Unavailable
    correlograms: CorrelogramData | Unavailable


def figures_data(inspection: Inspection, *, raster_start_s: float | None = None) -> InspectionFigures:
    """Data of the figures of an inspection.

    Parameters
    ----------
    inspection : what was found
    raster_start_s : where the raster starts, seconds on the recording's clock; None: a stretch of about the mean
        spike count

    Raises
    ------
    ArgumentError : `raster_start_s` lies in no window
    """
    recording = inspection.recording
    train = merge_trains(recording)
    return InspectionFigures(
        array=_array(inspection),
        raster=_raster(inspection, train, raster_start_s),
        course=_course(inspection, train),
        intervals=_intervals(inspection, train),
        correlograms=_correlograms(inspection),
    )


def _array(inspection: Inspection) -> ArrayData:
    rate = inspection.units["rate_hz"].to_numpy(dtype=np.float64)
    known = rate[rate > 0.0]
    if known.size == 0:
        title = "No unit fires"
    elif known.size == 1:
        title = f"One unit fires, at {number_text(float(known[0]), 2)} Hz"
    else:
        title = f"Rates run from {range_text(float(known.min()), float(known.max()))} Hz"
    return array_data(np.array(inspection.recording.positions), rate, title, "rate (Hz)")


# --- a stretch --------------------------------------------------------------------------------------------


def _raster(inspection: Inspection, train: MergedTrain, start_s: float | None) -> StretchData | Unavailable:
    recording = inspection.recording
    if train.n_spikes == 0:
        return Unavailable("no spike lies in the windows and outside the exclusions")
    wanted = RASTER_SPIKES * train.duration_s / train.n_spikes
    length = float(np.clip(wanted, RASTER_SHORTEST_S, RASTER_S))
    proposed = inspection.proposed_exclusions[["start_s", "stop_s"]].to_numpy(dtype=np.float64)
    if start_s is not None:
        stretch: tuple[float, float] | None = _asked(recording, start_s, length)
    else:
        around = _around_a_proposal(train, proposed, length)
        stretch = representative_stretch(recording, length) if around is None else around
    if stretch is None:
        return Unavailable("the recording holds no stretch of a second without exclusions")
    start, stop = stretch
    order = np.lexsort(tuple(np.array(recording.positions).T))
    rows = tuple(_between(recording.trains[k], start, stop) for k in order)
    edges = np.linspace(start, stop, RASTER_RATE_BINS + 1)
    counts, _ = np.histogram(np.concatenate(rows), bins=edges)
    bin_s = (stop - start) / RASTER_RATE_BINS
    rate = counts / bin_s / recording.n_units
    marked = _overlapping(proposed, start, stop)
    return StretchData(
        title=_stretch_title(rate, stop - start, len(marked)),
        rows=rows,
        start_s=start,
        stop_s=stop,
        time_s=np.asarray((edges[1:] + edges[:-1]) / 2.0),
        rate_hz=rate,
        bin_s=bin_s,
        marked=marked,
        excluded=_overlapping(np.array(recording.exclusion_bounds), start, stop),
    )


def _around_a_proposal(train: MergedTrain, proposed: FloatArray, length_s: float) -> tuple[float, float] | None:
    """A stretch with a proposed exclusion in its middle, inside a window, nearest the mean spike count; or None."""
    starts = np.floor(proposed[:, 0] - length_s / 2.0)
    k = np.clip(np.searchsorted(train.windows[:, 0], starts, side="right") - 1, 0, None)
    whole = (starts >= train.windows[k, 0]) & (starts + length_s <= train.windows[k, 1])
    starts = starts[whole]
    if starts.size == 0:
        return None
    counts = np.searchsorted(train.time_s, starts + length_s) - np.searchsorted(train.time_s, starts)
    mean = train.n_spikes * length_s / train.duration_s
    start = float(starts[np.argmin(np.abs(counts - mean))])
    return start, start + length_s


def _asked(recording: Recording, start_s: float, length_s: float) -> tuple[float, float]:
    bounds = recording.window_bounds
    k = np.flatnonzero((bounds[:, 0] <= start_s) & (start_s < bounds[:, 1]))
    if k.size == 0:
        first, last = bounds[0, 0], bounds[-1, 1]
        raise ArgumentError(
            f"The raster cannot start at {clock_text(start_s)} s: no window holds that time. Give a time in one of the "
            f"windows, which run from {clock_text(first)} s to {clock_text(last)} s."
        )
    return start_s, min(start_s + length_s, float(bounds[k[0], 1]))


def _overlapping(bounds: FloatArray, start: float, stop: float) -> FloatArray:
    inside = bounds[(bounds[:, 1] > start) & (bounds[:, 0] < stop)]
    return np.clip(inside, start, stop)


def _between(times_s: FloatArray, start_s: float, stop_s: float) -> FloatArray:
    return times_s[np.searchsorted(times_s, start_s) : np.searchsorted(times_s, stop_s)]


def _stretch_title(rate_hz: FloatArray, length_s: float, n_marked: int) -> str:
    peak, mean = float(rate_hz.max()), float(rate_hz.mean())
    text = f"{duration_text(length_s)}: mean rate {number_text(mean, 2)} Hz, peak {number_text(peak, 2)} Hz per unit"
    if n_marked:
        text += f"; {n_marked} proposed exclusion{'s' * (n_marked != 1)}"
    return text


# --- the whole recording ------------------------------------------------------------------------------------


def _course(inspection: Inspection, train: MergedTrain) -> RateCourseData | Unavailable:
    if train.n_spikes == 0:
        return Unavailable("no spike lies in the windows and outside the exclusions")
    recording = inspection.recording
    bin_s = max(SHORTEST_COURSE_BIN_S, np.ceil(recording.duration / COURSE_POINTS))
    bin_s = min(float(bin_s), max(recording.duration / 20.0, 1e-3))
    times, rates = [], []
    for start, stop in recording.window_bounds:
        n = max(round(float(stop - start) / bin_s), 1)
        edges = np.linspace(start, stop, n + 1)
        counts, _ = np.histogram(train.time_s, bins=edges)
        times += [(edges[1:] + edges[:-1]) / 2.0, np.array([np.nan])]
        rates += [counts / ((stop - start) / n) / recording.n_units, np.array([np.nan])]
    blocks = inspection.block_rates
    return RateCourseData(
        title=_course_title(inspection),
        time_s=np.concatenate(times)[:-1],
        rate_hz=np.concatenate(rates)[:-1],
        bin_s=bin_s,
        block_edges_s=blocks[["start_s", "stop_s"]].to_numpy(dtype=np.float64),
        block_hz=blocks["rate_hz"].to_numpy(dtype=np.float64),
        marked_s=inspection.proposed_exclusions["start_s"].to_numpy(dtype=np.float64),
    )


def _course_title(inspection: Inspection) -> str:
    rates = inspection.block_rates["rate_hz"].to_numpy(dtype=np.float64)
    length = float((inspection.block_rates["stop_s"] - inspection.block_rates["start_s"]).median())
    low, high = float(rates.min()), float(rates.max())
    shown = f"{number_text(low, 2)} and {number_text(high, 2)} Hz"
    text = f"Over blocks of {duration_text(round(length, 3))} the mean rate is between {shown}"
    burst = inspection.burstiness
    if burst is not None and inspection.find("few_events") is not None:
        text += f"; spikes come in {count_text(burst.n_events)} population events"
    return text


# --- intervals ------------------------------------------------------------------------------------------------


def _intervals(inspection: Inspection, train: MergedTrain) -> IntervalData | Unavailable:
    held = intervals(train)
    if held.length_s.size < 2:
        return Unavailable("no unit has two spikes in one window")
    edges = interval_edges(held.length_s, time_step(train))
    enough = held.n_per_unit >= MIN_INTERVALS
    rank = np.lexsort((np.nan_to_num(-held.share_medium), np.nan_to_num(-held.share_short)))
    worst = [int(k) for k in rank if enough[k] and held.n_medium[k] > 0][:WORST_UNITS]
    unit_ids = inspection.recording.unit_ids
    panels = [_panel("all units", held.length_s, edges)]
    panels += [_panel(unit_label(unit_ids[k], k), held.length_s[held.unit == k], edges) for k in worst]
    short = panels[0].share_short
    n_marked = int(np.sum((np.nan_to_num(held.share_short) > 0.01) & (held.n_short >= 3)))
    return IntervalData(
        title=(
            f"{number_text(100.0 * short, 2)} % of all intervals are below 1 ms; {count_text(n_marked)} of "
            f"{count_text(len(unit_ids))} units {'is' if n_marked == 1 else 'are'} above the usual mark of 1 %"
        ),
        panels=tuple(panels),
    )


def interval_edges(length_s: FloatArray, step_s: float | None) -> FloatArray:
    """Edges of log-spaced bins for intervals; whole steps of the time grid, so that bins do not beat with it."""
    low = max(float(length_s.min()), 1e-5)
    high = max(float(length_s.max()), 10.0 * low)
    n = int(np.ceil(np.log10(high / low) * BINS_PER_DECADE))
    edges = np.geomspace(0.999 * low, 1.001 * high, n + 1)
    if step_s is not None:
        edges = np.unique(np.round(edges / step_s)) - 0.5
        edges = np.maximum(edges, 0.5) * step_s
    return np.unique(edges)


def _panel(label: str, length_s: FloatArray, edges: FloatArray) -> IntervalPanel:
    counts, _ = np.histogram(np.clip(length_s, edges[0], edges[-1]), bins=edges)  # the ends take what lies beyond
    return IntervalPanel(
        label=label,
        edges_s=edges,
        per_decade=counts / max(length_s.size, 1) / np.log10(edges[1:] / edges[:-1]),
        n_intervals=int(length_s.size),
        share_short=float(np.mean(length_s < 0.001 - 1e-7)) if length_s.size else float("nan"),
    )


# --- correlograms -----------------------------------------------------------------------------------------------


def _correlograms(inspection: Inspection) -> CorrelogramData | Unavailable:
    raw, masked = inspection.correlograms, inspection.correlograms_masked
    if raw.empty or not raw["relative"].notna().any():
        return Unavailable("no pair of units has spikes enough")
    bands = []
    for label in raw["band"].unique():
        mine = (raw["band"] == label).to_numpy()
        curves = {}
        for scale in ("fine", "slow"):
            chosen: BoolArray = mine & (raw["scale"] == scale).to_numpy()
            curves[scale] = BandCurve(
                lag_s=raw.loc[chosen, "lag_s"].to_numpy(dtype=np.float64),
                width_s=float(raw.loc[chosen, "width_s"].iloc[0]),
                relative=masked.loc[chosen, "relative"].to_numpy(dtype=np.float64),
                raw=raw.loc[chosen, "relative"].to_numpy(dtype=np.float64),
            )
        n_pairs = int(raw.loc[mine, "n_pairs"].iloc[0])
        bands.append(BandPanels(label=str(label), n_pairs=n_pairs, fine=curves["fine"], slow=curves["slow"]))
    return CorrelogramData(
        title=_correlogram_title(bands),
        bands=tuple(bands),
        proposes=len(inspection.proposed_exclusions) > 0,
        bin_width_s=inspection.suggested_bin_width_s,
    )


def _correlogram_title(bands: list[BandPanels]) -> str:
    """How many times chance neighbours and the farthest pairs fire together, at lags of 10 to 50 ms."""
    apart = [b for b in bands if b.label != SAME_SITE]
    if not apart:
        return "All pairs are on one site"

    def level(band: BandPanels) -> float:
        late = band.fine.lag_s > 0.010
        known = band.fine.relative[late]
        known = known[np.isfinite(known)]
        return float(known.mean()) if known.size else float("nan")

    near, far = level(apart[0]), level(apart[-1])
    if len(apart) == 1 or not np.isfinite(far):
        return f"Units fire together {number_text(near, 2)} times as often as by chance"
    return (
        f"Neighbours fire together {number_text(near, 2)} times as often as by chance, the farthest pairs "
        f"{number_text(far, 2)} times"
    )
