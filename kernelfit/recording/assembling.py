"""Checked parts of tables to one `Recording`: the windows settled, and noted what a reader must know."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.errors import RecordingError
from kernelfit.recording.recording import Origin, Recording, clock_text
from kernelfit.recording.table_checks import Sites, Stretches


@dataclass(frozen=True, slots=True, eq=False)
class Parts:
    """Checked parts of a recording.

    Parameters
    ----------
    sites : units, positions and labels
    trains : sorted spike times of each unit, seconds
    windows : None: not stated
    exclusions : None: none given
    pairs : pairs of unit ids left out of the kernel
    n_dropped : exact duplicate spikes dropped on the way
    """

    sites: Sites
    trains: tuple[FloatArray, ...]
    windows: Stretches | None = None
    exclusions: Stretches | None = None
    pairs: tuple[tuple[str, str], ...] = ()
    n_dropped: int = 0


def assembled(parts: Parts, origin: Origin) -> Recording:
    """The recording from checked parts, with its notes added to those of `origin`.

    Raises
    ------
    RecordingError : no spikes at all, or windows that hold none
    """
    sites, trains, windows, exclusions = parts.sites, parts.trains, parts.windows, parts.exclusions
    notes = list(origin.notes)
    if parts.n_dropped:
        notes.append(f"{parts.n_dropped} exact duplicate spike{'s' * (parts.n_dropped != 1)} dropped")
    n_spikes = sum(t.size for t in trains)
    if n_spikes == 0:
        raise RecordingError(f"{origin.name('spikes')}: the recording holds no spikes. Give at least one.")
    first = min(float(t[0]) for t in trains if t.size)
    last = max(float(t[-1]) for t in trains if t.size)
    if windows is None:
        bounds = np.array([[math.floor(first), math.floor(last) + 1]], dtype=np.float64)
        notes.append(
            "windows not stated: one window from the floor of the first spike to the first whole second "
            f"after the last ({bounds[0, 0]:.0f} to {bounds[0, 1]:.0f} s)"
        )
    else:
        bounds = windows.bounds
    recording = Recording(
        unit_ids=sites.ids,
        positions=sites.positions,
        trains=trains,
        window_bounds=bounds,
        exclusion_bounds=np.empty((0, 2)) if exclusions is None else exclusions.bounds,
        window_conditions=None if windows is None else windows.conditions,
        window_trials=None if windows is None else windows.trials,
        groups=sites.groups,
        excluded_pairs=parts.pairs,
        source_only=sites.source_only,
    )
    if recording.n_spikes == 0:
        raise RecordingError(
            f"{origin.name('windows')}: none of the {n_spikes} spikes of {origin.name('spikes')} "
            f"({clock_text(first)} to {clock_text(last)} s) lies in the windows "
            f"({clock_text(bounds[0, 0])} to {clock_text(bounds[-1, 1])} s). "
            "Check that both tables use the same unit of time and the same clock (time_unit holds for both)."
        )
    n_outside = n_spikes - recording.n_spikes
    if n_outside:
        notes.append(f"{n_outside} of {n_spikes} spikes lie outside the windows and are kept as history")
    if exclusions is not None and len(exclusions.bounds) and not _any_touches(exclusions.bounds, bounds):
        notes.append(f"none of the {len(exclusions.bounds)} exclusions touches a window: check their unit of time")
    return replace(recording, origin=Origin(origin.files, windows_stated=windows is not None, notes=tuple(notes)))


def _any_touches(stretches: FloatArray, windows: FloatArray) -> bool:
    return any(bool(((stretches[:, 0] < b) & (stretches[:, 1] > a)).any()) for a, b in windows)
