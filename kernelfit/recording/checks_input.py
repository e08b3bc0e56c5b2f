"""Is the recording what its reader thinks it is: units of measure, windows, positions, copied trains."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterator

import numpy as np

from kernelfit.recording.evidence import Evidence
from kernelfit.recording.findings import LEAVE_OUT, Finding, counted, names, number, percent, seconds
from kernelfit.recording.recording import Recording

MAX_RATE_HZ = 500.0
MIN_EXTENT_UM, MAX_EXTENT_UM = 10.0, 50_000.0
WEEK_S = 7 * 86_400.0
DAY_S = 86_400.0
SLOW_RATE_HZ = 0.1  # fastest unit of a recording of more than a day that was perhaps in ms
LONG_S, DOUBTFUL_RATE_HZ, NO_RATE_HZ = 3600.0, 0.02, 0.001  # fastest unit of a recording of more than an hour
NO_DEAD_TIME_S = 1.0  # no cell leaves out intervals this long; read as ms it is a dead time of 1 ms
COARSE_S, VERY_COARSE_S = 0.0005, 0.005


def check_input(e: Evidence) -> Iterator[Finding]:
    """Findings about units of measure, windows, positions and copies."""
    yield from _times(e)
    yield from _windows(e)
    yield from _positions(e)
    yield from _copies(e)


def _times(e: Evidence) -> Iterator[Finding]:
    spikes = e.recording.origin.name("spikes")
    if e.train.n_spikes == 0:
        yield Finding(
            "no_spikes",
            "error",
            "No spike lies in the windows and outside the exclusions.",
            spikes,
            "Check the units of time of the spikes and of the windows, and the exclusions.",
        )
        return
    fast = e.rate_hz > MAX_RATE_HZ
    if fast.any():
        yield Finding(
            "rates_too_high",
            "error",
            f"{counted(int(fast.sum()), 'unit')} above {MAX_RATE_HZ:g} Hz, the fastest at "
            f"{number(e.rate_hz.max())} Hz: no cell fires like that, so that times are probably not in "
            "seconds.",
            f"{spikes}: {names(e.units_where(fast))}",
            "State the unit of time when reading (time_unit, --time-unit), or check the windows.",
        )
    if e.step_s == 1.0:
        yield Finding(
            "times_are_integers",
            "error",
            "All spike times are whole numbers of seconds: they look like samples or milliseconds.",
            spikes,
            "Read them with time_unit='samples' and the sampling rate, or with time_unit='ms' "
            "(--time-unit, --sampling-rate-hz).",
        )
    elif e.step_s is not None and e.step_s > COARSE_S * (1 + 1e-9):
        yield Finding(
            "coarse_times",
            "warning" if e.step_s > VERY_COARSE_S * (1 + 1e-9) else "info",
            f"Spike times lie on steps of {seconds(e.step_s)}: coincidences and intervals shorter than that "
            "cannot be told apart.",
            spikes,
            f"Use bins of at least {seconds(2 * e.step_s)}, a whole number of steps; read finer times if "
            "there are any.",
        )
    duration = e.recording.duration
    if duration > WEEK_S:
        yield Finding(
            "longer_than_a_week",
            "error",
            f"The windows add up to {number(duration / 86_400)} days: times look like milliseconds or samples.",
            spikes,
            "State the unit of time when reading (time_unit, --time-unit).",
        )
    elif e.step_s != 1.0 and (doubt := doubt_about_times(e.recording)) is not None:
        yield doubt
    elif e.step_s != 1.0 and _looks_like_ms(e):
        yield Finding(
            "times_look_like_ms",
            "warning",
            f"The fastest unit fires {number(1000 * e.rate_hz.max())} times in 1000 s over "
            f"{seconds(duration)}, and short intervals are missing as if a dead time were a thousand times "
            "too long: times look like milliseconds.",
            spikes,
            "If they are, read them with time_unit='ms' (--time-unit ms).",
        )


def doubt_about_times(recording: Recording) -> Finding | None:
    """What counts and length alone say against times in seconds; it costs nothing, so a long fit may ask first."""
    duration = recording.duration
    fastest_hz = float(recording.counts.max()) / duration
    if duration < LONG_S or fastest_hz >= DOUBTFUL_RATE_HZ:
        return None
    none_fires = fastest_hz < NO_RATE_HZ
    in_what = "milliseconds, microseconds or samples" if none_fires else "milliseconds"
    return Finding(
        "times_look_like_ms",
        "error" if none_fires else "warning",
        f"The fastest unit fires {counted(int(recording.counts.max()), 'time')} in {seconds(duration)}: times look "
        f"like {in_what} read as seconds.",
        recording.origin.name("spikes"),
        "State their unit when reading (time_unit, --time-unit).",
    )


def _looks_like_ms(e: Evidence) -> bool:
    if e.rate_hz.max() < SLOW_RATE_HZ and e.recording.duration > DAY_S:
        return True
    n = e.intervals.n_per_unit
    expected = float(np.sum(n * -np.expm1(-e.rate_hz * NO_DEAD_TIME_S)))
    observed = int(np.sum(e.intervals.length_s < NO_DEAD_TIME_S))
    return expected >= 10.0 and observed < 0.1 * expected and float(e.rate_hz.max()) < 1.0


def _windows(e: Evidence) -> Iterator[Finding]:
    recording = e.recording
    bounds = recording.window_bounds
    if not recording.origin.windows_stated:
        yield Finding(
            "windows_not_stated",
            "info",
            f"No windows were given; the recording is taken to run from {number(bounds[0, 0])} s to "
            f"{number(bounds[-1, 1])} s, the floor of the first spike to the first whole second after the "
            "last.",
            recording.origin.name("spikes"),
            "If acquisition started earlier, stopped later or paused, give a windows table: silence is data too.",
        )
    if e.n_outside:
        total = sum(t.size for t in recording.trains)
        yield Finding(
            "spikes_outside_windows",
            "warning" if e.n_outside > 0.5 * total else "info",
            f"{counted(e.n_outside, 'spike')} of {total:,} ({percent(e.n_outside / total)}) lie outside the windows.",
            recording.origin.name("windows"),
            "They count only as history before a window. If that is not meant, check windows and units of time.",
        )
    excluded = 1.0 - e.train.duration_s / recording.duration
    if excluded > 0.2:
        yield Finding(
            "much_excluded",
            "warning",
            f"The exclusions take {percent(excluded)} of the time in the windows.",
            recording.origin.name("exclusions"),
            "Check that the stretches are the ones to leave out, not the ones to keep.",
        )


def _positions(e: Evidence) -> Iterator[Finding]:
    sites = e.recording.origin.name("sites")
    doubt = doubt_about_positions(e.recording)
    if doubt is None and e.layout.reference_um is None:
        what = "There is one unit only" if e.recording.n_units == 1 else "All units lie on one site"
        yield Finding(
            "no_distances",
            "error",
            f"{what}: nothing can be said about distance.",
            sites,
            "A kernel needs units on at least two sites; check the coordinates and their unit of length.",
        )
    if doubt is not None:
        yield doubt


def doubt_about_positions(recording: Recording) -> Finding | None:
    """What the size of the array alone says against positions in micrometres."""
    sites = recording.origin.name("sites")
    extent = float(np.linalg.norm(np.ptp(recording.positions, axis=0)))
    if 0.0 < extent < MIN_EXTENT_UM:
        return Finding(
            "array_too_small",
            "error",
            f"The whole array measures {number(extent)} µm: positions look like millimetres or electrode numbers.",
            sites,
            "State the unit of length when reading (length_unit='mm', --length-unit mm), or give positions in µm.",
        )
    if extent > MAX_EXTENT_UM:
        return Finding(
            "array_too_large",
            "error",
            f"The array measures {number(extent / 1000)} mm: positions are probably not in micrometres.",
            sites,
            "State the unit of length when reading (length_unit, --length-unit), or give positions in µm.",
        )
    return None


def _copies(e: Evidence) -> Iterator[Finding]:
    same: dict[bytes, list[str]] = defaultdict(list)
    for unit, train in zip(e.recording.unit_ids, e.recording.trains, strict=True):
        if train.size:
            same[train.tobytes()].append(unit)
    copies = [group for group in same.values() if len(group) > 1]
    if copies:
        yield Finding(
            "identical_trains",
            "error",
            f"{counted(sum(map(len, copies)), 'unit')} have exactly the same spike times as another unit.",
            f"{e.recording.origin.name('spikes')}: {names([' = '.join(g) for g in copies])}",
            f"Keep one of each ({LEAVE_OUT}): the same train twice looks like perfect coupling.",
        )
