"""Windows and bins: from spike times to sparse sorted counts on one timeline (docs/model.md sections 1 and 3).

All windows of a recording lie on one timeline of bins. Bin 0 starts with the first window; each further window starts
on a whole bin, the gap before it rounded up. A spike in a window falls into bin floor((t - start)/width + 1e-6) of
that window; a spike between windows is history, counted back from the start of the next one. Where the clock counts
from long ago (seconds since 1970), doubles are coarser than the 1e-6: then twice the step between two of them is
allowed for, so that the same recording on another clock has the same counts.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.errors import GridError
from kernelfit.recording.recording import Recording, check_recording, clock_text

EDGE_TOLERANCE = 1e-6  # of a bin; times that lie on bin edges fall the same way on every machine
STEPS_ALLOWED = 2  # a time and the start it is taken from are each half a step of doubles off, at most
MAX_TOLERANCE = 0.1  # of a bin; beyond it the clock is too coarse to tell bins apart
FINEST_BIN_S = 1e-6  # no acquisition times spikes better


@dataclass(frozen=True, eq=False)
class Grid:
    """Sparse counts of a recording at one bin width.

    Parameters
    ----------
    bin_width : seconds
    n_units : units of the recording, all of them
    event_bin : (n_events,) timeline bin of each non-empty (bin, unit); negative before the first window
    event_unit : (n_events,) unit index; events are sorted by bin, then unit
    event_count : (n_events,) spikes in it
    stretches : (n_stretches, 2) timeline bins [start, stop) that count in the likelihood
    window_of_stretch : (n_stretches,) index of the window each stretch lies in
    window_first_bin, window_n_bins : (n_windows,) where each window lies on the timeline
    window_start_s : (n_windows,) start of each window, seconds
    counts_in_sum : (n_units,) spikes in bins that count
    n_outside : spikes of the recording outside all windows (kept as history where they come before one)
    n_excluded : spikes inside exclusions, which drive nothing
    """

    bin_width: float
    n_units: int
    event_bin: IntArray = field(repr=False)
    event_unit: IntArray = field(repr=False)
    event_count: IntArray = field(repr=False)
    stretches: IntArray = field(repr=False)
    window_of_stretch: IntArray = field(repr=False)
    window_first_bin: IntArray = field(repr=False)
    window_n_bins: IntArray = field(repr=False)
    window_start_s: FloatArray = field(repr=False)
    counts_in_sum: IntArray = field(repr=False)
    n_outside: int
    n_excluded: int

    @property
    def n_bins(self) -> int:
        """Bins that count in the likelihood."""
        return int(np.sum(self.stretches[:, 1] - self.stretches[:, 0]))

    @property
    def duration_s(self) -> float:
        """Time that counts in the likelihood, seconds."""
        return self.n_bins * self.bin_width

    def bins_in_sum(self, bins: IntArray) -> BoolArray:
        """(n,) True where a timeline bin counts in the likelihood."""
        k = np.searchsorted(self.stretches[:, 0], bins, side="right") - 1
        return np.asarray((k >= 0) & (bins < self.stretches[np.maximum(k, 0), 1]), dtype=bool)


def make_grid(recording: Recording, bin_width: float, *, warm_up_s: float = 0.0) -> Grid:
    """Counts of `recording` in bins of `bin_width` seconds.

    Parameters
    ----------
    recording : what was recorded
    bin_width : seconds; an incomplete last bin of a window is left out
    warm_up_s : seconds after every window start and every exclusion that feed the state but leave the sum

    Raises
    ------
    ArgumentError : `recording` is none
    GridError : the width is not a positive number, is finer than any clock, is wider than a window, or leaves no bin
        to sum over
    """
    check_recording(recording)
    _check_width(recording, bin_width, warm_up_s)
    bounds = recording.window_bounds
    ruler = _Ruler(bin_width, _tolerance(recording, bin_width))
    n_bins = ruler.floor(bounds[:, 1] - bounds[:, 0])
    _check_windows(recording, bin_width, n_bins)
    first_bin = np.concatenate([[0], np.cumsum(ruler.ceil(np.diff(bounds[:, 0])))]).astype(np.int64)

    stretches, window_of = _stretches(recording, ruler, warm_up_s, first_bin, n_bins)
    if len(stretches) == 0:
        raise GridError(_nothing_left(recording, bin_width, warm_up_s))
    event_bin, event_unit, event_count, n_outside, n_excluded = _events(recording, ruler, first_bin, n_bins)
    grid = Grid(
        bin_width=float(bin_width),
        n_units=recording.n_units,
        event_bin=event_bin,
        event_unit=event_unit,
        event_count=event_count,
        stretches=stretches,
        window_of_stretch=window_of,
        window_first_bin=first_bin,
        window_n_bins=n_bins,
        window_start_s=np.array(bounds[:, 0]),
        counts_in_sum=np.zeros(recording.n_units, dtype=np.int64),
        n_outside=n_outside,
        n_excluded=n_excluded,
    )
    inside = grid.bins_in_sum(event_bin)
    np.add.at(grid.counts_in_sum, event_unit[inside], event_count[inside])
    return grid


def bins_between(recording: Recording, grid: Grid, start_s: float, stop_s: float) -> tuple[int, int, int]:
    """Which bins of one window a stretch of time touches, by the rounding that counts spikes.

    Parameters
    ----------
    recording, grid : a grid and what it was made from
    start_s, stop_s : on the recording's clock; the window is the one that holds `start_s`

    Returns
    -------
    window, first bin counted from its start, number of bins (0 where no window holds `start_s`, or nothing follows it)
    """
    ruler = _Ruler(grid.bin_width, _tolerance(recording, grid.bin_width))
    on_edge = start_s + ruler.tolerance * grid.bin_width
    window = int(np.searchsorted(grid.window_start_s, on_edge, side="right")) - 1
    if window < 0:
        return 0, 0, 0
    n_bins = int(grid.window_n_bins[window])
    spans = np.array([start_s, stop_s]) - grid.window_start_s[window]
    spans = np.clip(spans, 0.0, (n_bins + 1) * grid.bin_width)
    first, last = int(ruler.floor(spans)[0]), min(int(ruler.ceil(spans)[1]), n_bins)
    return window, first, max(last - first, 0)


@dataclass(frozen=True, slots=True)
class _Ruler:
    """Spans of time in whole bins; a span within `tolerance` (of a bin) of a whole number counts as that number.

    Spans are differences of times close to each other, which doubles hold exactly: never divide times of the clock.
    """

    bin_width: float
    tolerance: float

    def floor(self, span_s: FloatArray) -> IntArray:
        return np.floor(span_s / self.bin_width + self.tolerance).astype(np.int64)

    def ceil(self, span_s: FloatArray) -> IntArray:
        return np.ceil(span_s / self.bin_width - self.tolerance).astype(np.int64)


def _tolerance(recording: Recording, bin_width: float) -> float:
    """By how much of a bin a time may miss an edge and still lie on it."""
    furthest = float(np.abs(recording.window_bounds).max())
    step_s = float(np.spacing(furthest))
    tolerance = max(EDGE_TOLERANCE, STEPS_ALLOWED * step_s / bin_width)
    if tolerance > MAX_TOLERANCE:
        raise GridError(
            f"{recording.origin.name('windows')}: bin_width={bin_width:g} s is too fine for times near "
            f"{clock_text(furthest)} s, which the computer holds to {step_s:.1g} s. Subtract the start of the "
            f"recording from all times, or use bins of at least {STEPS_ALLOWED * step_s / MAX_TOLERANCE:.1g} s."
        )
    return tolerance


def _check_width(recording: Recording, bin_width: float, warm_up_s: float) -> None:
    if not (math.isfinite(bin_width) and bin_width > 0):
        raise GridError(f"bin_width={bin_width} is not a width. Give a positive number of seconds, such as 0.001.")
    if not (math.isfinite(warm_up_s) and warm_up_s >= 0):
        raise GridError(f"warm_up_s={warm_up_s} is not a time. Give seconds, 0 or more.")
    if bin_width < FINEST_BIN_S * (1 - EDGE_TOLERANCE):
        raise GridError(
            f"bin_width={bin_width:g} s is finer than spikes are timed. Use bins of at least {FINEST_BIN_S:g} s. "
            "Is the width in the right unit? 1 ms is bin_width=0.001, or --bin-ms 1."
        )


def _nothing_left(recording: Recording, bin_width: float, warm_up_s: float) -> str:
    """Words for windows of which exclusions and warm-up leave nothing."""
    causes, remedies = [], []
    if len(recording.exclusion_bounds):
        causes.append("the exclusions")
        remedies.append("fewer or shorter exclusions")
    if warm_up_s > 0:
        causes.append(f"a warm-up of {warm_up_s:g} s")
        remedies.append("a shorter warm-up")
    table = recording.origin.name("exclusions" if len(recording.exclusion_bounds) else "windows")
    leave = "leave" if len(causes) > 1 or len(recording.exclusion_bounds) else "leaves"
    return (
        f"{table}: {' and '.join(causes)} {leave} no bin of {bin_width:g} s in any window. "
        f"Use {' or '.join(remedies)}, or narrower bins."
    )


def _check_windows(recording: Recording, bin_width: float, n_bins: IntArray) -> None:
    if (n_bins > 0).all():
        return
    k = int(np.flatnonzero(n_bins == 0)[0])
    start, stop = recording.window_bounds[k]
    raise GridError(
        f"{recording.origin.name('windows')}: bin_width={bin_width:g} s is wider than window {k + 1} "
        f"({clock_text(start)} to {clock_text(stop)} s). Use bins of at most {stop - start:g} s, or take the "
        "window out. Is the width in the right unit? 10 ms is bin_width=0.01, or --bin-ms 10."
    )


def _stretches(
    recording: Recording, ruler: _Ruler, warm_up_s: float, first_bin: IntArray, n_bins: IntArray
) -> tuple[IntArray, IntArray]:
    """Windows less exclusions and warm-up: (n, 2) timeline bins and the window of each."""
    warm = math.ceil(warm_up_s / ruler.bin_width - EDGE_TOLERANCE)
    rows: list[tuple[int, int]] = []
    owner: list[int] = []
    for w, (start, stop) in enumerate(recording.window_bounds):
        at = warm
        cut = recording.exclusion_bounds
        cut = cut[(cut[:, 1] > start) & (cut[:, 0] < stop)]
        low, high = ruler.floor(cut[:, 0] - start), ruler.ceil(cut[:, 1] - start)
        for a, b in zip([*low, n_bins[w]], [*high, n_bins[w]], strict=True):
            end = min(int(a), int(n_bins[w]))
            if end > at:
                rows.append((int(first_bin[w]) + at, int(first_bin[w]) + end))
                owner.append(w)
            at = max(at, int(b) + warm)
    return np.array(rows, dtype=np.int64).reshape(-1, 2), np.array(owner, dtype=np.int64)


def _events(
    recording: Recording, ruler: _Ruler, first_bin: IntArray, n_bins: IntArray
) -> tuple[IntArray, IntArray, IntArray, int, int]:
    """Non-empty (bin, unit) with their counts, and how many spikes lay outside windows and inside exclusions."""
    unit = np.repeat(np.arange(recording.n_units, dtype=np.int64), [t.size for t in recording.trains])
    time_s = np.concatenate(recording.trains)
    outside = int(time_s.size) - recording.n_spikes

    cut = recording.exclusion_bounds
    k = np.searchsorted(cut[:, 0], time_s, side="right") - 1
    latest = np.maximum.accumulate(cut[:, 1])  # one exclusion may lie inside another
    excluded = (k >= 0) & (time_s < latest[np.maximum(k, 0)]) if len(cut) else np.zeros(time_s.size, dtype=bool)
    unit, time_s = unit[~excluded], time_s[~excluded]

    start = recording.window_bounds[:, 0]
    w = np.searchsorted(start, time_s, side="right") - 1
    within = ruler.floor(time_s - start[np.maximum(w, 0)])
    inside = (w >= 0) & (within < n_bins[np.maximum(w, 0)])
    following = np.minimum(w + 1, len(start) - 1)
    back = ruler.floor(time_s - start[following])
    bins = np.where(inside, first_bin[np.maximum(w, 0)] + within, first_bin[following] + np.minimum(back, -1))
    useful = inside | (w + 1 < len(start))  # after the last window nothing is left to drive
    bins, unit = bins[useful], unit[useful]
    if bins.size == 0:
        empty = np.empty(0, dtype=np.int64)
        return empty, empty, empty, outside, int(excluded.sum())
    low = bins.min()
    key, count = np.unique((bins - low) * recording.n_units + unit, return_counts=True)
    return (
        key // recording.n_units + low,
        key % recording.n_units,
        count.astype(np.int64),
        outside,
        int(excluded.sum()),
    )
