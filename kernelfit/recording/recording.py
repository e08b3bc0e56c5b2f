"""What was recorded: units at positions, their spike times, and the stretches that were observed."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit._validation import described, is_number
from kernelfit.errors import ArgumentError, RecordingError

if TYPE_CHECKING:
    from kernelfit.recording.inspection import Inspection

COORDINATES = ("x_um", "y_um", "z_um")
SAME_SITE_UM = 1.0  # positions closer than this are one site (docs/model.md section 1)


@dataclass(frozen=True, slots=True)
class SourceFile:
    """One table a recording was read from: its role ("spikes", "sites", ...), name and SHA-256 of its bytes."""

    role: str
    name: str
    sha256: str


@dataclass(frozen=True, slots=True)
class Origin:
    """Where a recording came from, carried along so that errors, fits and reports can name it.

    Parameters
    ----------
    files : the tables read, in the order spikes, sites, windows, exclusions, exclude_pairs
    windows_stated : False where the window was derived from the first and last spike
    notes : what was changed on the way in ("3 exact duplicates dropped", "units selected: ..."), in order
    """

    files: tuple[SourceFile, ...] = ()
    windows_stated: bool = True
    notes: tuple[str, ...] = ()

    def name(self, role: str) -> str:
        """File name of the table in that role, or "<role> table" where it came from memory.

        A window that was derived from the spikes goes by the name of the spikes table.
        """
        if role == "windows" and not self.windows_stated:
            role = "spikes"
        return next((f.name for f in self.files if f.role == role), f"{role} table")

    def noted(self, note: str) -> Origin:
        """The same origin with one more note."""
        return replace(self, notes=(*self.notes, note))


def clock_text(time_s: float) -> str:
    """A time on the recording's clock as a user would write it, without its unit: "12.5", "1700000012.5"."""
    return f"{time_s:.6f}".rstrip("0").rstrip(".") if abs(time_s) >= 1.0 else f"{time_s:g}"


def stretch_text(start_s: float, stop_s: float) -> str:
    """A stretch of time on the recording's clock, to the millisecond: "12.5 to 20 s"."""
    return f"{clock_text(round(float(start_s), 3))} to {clock_text(round(float(stop_s), 3))} s"


def _between(start_s: float | None, stop_s: float | None) -> str:
    start = "" if start_s is None else f" from start_s={clock_text(start_s)} on"
    return start if stop_s is None else f"{start} up to stop_s={clock_text(stop_s)}"


def _frozen(values: object, name: str) -> FloatArray:
    try:
        array = np.ascontiguousarray(values, dtype=np.float64)
    except (ValueError, TypeError):
        raise RecordingError(f"{name}: {described(values)} cannot be made an array of numbers.") from None
    if array.flags.writeable:
        array = array.copy()
        array.setflags(write=False)
    return array


def _pairs(values: object, name: str) -> FloatArray:
    """(n, 2) starts and stops; a flat list holds them in turn."""
    bounds = _frozen(values, name)
    if bounds.size % 2:
        raise RecordingError(f"{name}: {bounds.size} numbers are no pairs of start and stop.")
    return bounds.reshape(-1, 2)


@dataclass(frozen=True, eq=False)
class Recording:
    """Spike trains of units at known positions. Immutable; "changing" one returns another.

    Build one with `kernelfit.read_recording` or `Recording.from_arrays`, which check what they are given; this
    constructor checks only shapes.

    Parameters
    ----------
    unit_ids : ids as text, in the order of the sites table; every array over units follows it
    positions : (n_units, 1 to 3), micrometres
    trains : one array per unit, sorted spike times in seconds, spikes outside the windows included
    window_bounds : (n_windows, 2), start and stop in seconds, sorted, not overlapping; stop is outside
    exclusion_bounds : (n_exclusions, 2), stretches that are not data, seconds
    window_conditions, window_trials : a label per window, or None
    groups : a label per unit, or None
    excluded_pairs : pairs of unit ids left out of the kernel, both directions
    source_only : ids of units that drive others and are not themselves explained
    origin : files, hashes and notes
    """

    unit_ids: tuple[str, ...]
    positions: FloatArray
    trains: tuple[FloatArray, ...] = field(repr=False)
    window_bounds: FloatArray
    exclusion_bounds: FloatArray = field(default_factory=lambda: np.empty((0, 2)))
    window_conditions: tuple[str, ...] | None = None
    window_trials: tuple[str, ...] | None = None
    groups: tuple[str, ...] | None = None
    excluded_pairs: tuple[tuple[str, str], ...] = ()
    source_only: frozenset[str] = frozenset()
    origin: Origin = Origin()

    def __post_init__(self) -> None:
        n = len(self.unit_ids)
        if n == 0:
            raise RecordingError("The recording holds no units. A sites table needs at least one row.")
        if len(set(self.unit_ids)) != n:
            twice = next(u for u in self.unit_ids if self.unit_ids.count(u) > 1)
            raise RecordingError(f"Unit {twice!r} is listed twice. Unit ids must differ.")
        object.__setattr__(self, "positions", np.atleast_2d(_frozen(self.positions, "positions")))
        if self.positions.shape[0] != n or not 1 <= self.positions.shape[1] <= 3:
            raise RecordingError(
                f"positions has shape {self.positions.shape}; {n} units need ({n}, 1), ({n}, 2) or ({n}, 3)."
            )
        if len(self.trains) != n:
            raise RecordingError(f"{len(self.trains)} spike trains for {n} units. Give one per unit.")
        object.__setattr__(self, "trains", tuple(_frozen(t, "trains") for t in self.trains))
        for name in ("window_bounds", "exclusion_bounds"):
            object.__setattr__(self, name, _pairs(getattr(self, name), name))
        if self.window_bounds.shape[0] == 0:
            raise RecordingError("The recording has no window. Give at least one start and stop.")

    # --- construction ---------------------------------------------------------------------------------

    @classmethod
    def from_arrays(
        cls,
        spike_times_s: Mapping[str, Sequence[float] | FloatArray],
        positions_um: Sequence[Sequence[float]] | FloatArray,
        windows: pd.DataFrame | Sequence[tuple[float, float]] | None = None,
        *,
        exclusions: pd.DataFrame | Sequence[tuple[float, float]] | None = None,
        exclude_pairs: Iterable[tuple[str, str]] | None = None,
        groups: Sequence[str] | None = None,
        drop_duplicates: bool = False,
    ) -> Recording:
        """A recording from arrays in memory, with the same checks as `read_recording`.

        Parameters
        ----------
        spike_times_s : unit id -> spike times in seconds, any order; the mapping's order is the order of units
        positions_um : (n_units, 1 to 3) micrometres, in the same order; a flat sequence is one coordinate
        windows : observed stretches; None: from the floor of the first spike to the first whole second after the last
        exclusions : stretches that are not data
        exclude_pairs : pairs of unit ids left out of the kernel
        groups : a label per unit
        drop_duplicates : drop exact duplicate spikes of a unit instead of refusing them

        Raises
        ------
        TableError : non-finite times or positions, duplicates, overlapping windows; all faults together
        RecordingError : shapes that do not fit
        """
        from kernelfit.recording.tables import recording_from_arrays  # tables.py builds on this module

        return recording_from_arrays(
            spike_times_s,
            positions_um,
            windows,
            exclusions=exclusions,
            exclude_pairs=exclude_pairs,
            groups=groups,
            drop_duplicates=drop_duplicates,
        )

    # --- what it holds --------------------------------------------------------------------------------

    @property
    def n_units(self) -> int:
        """Number of units, silent ones included."""
        return len(self.unit_ids)

    @property
    def n_coordinates(self) -> int:
        """1, 2 or 3."""
        return int(self.positions.shape[1])

    @property
    def duration(self) -> float:
        """Observed time: the summed length of the windows, seconds (exclusions not subtracted)."""
        return float(np.sum(self.window_bounds[:, 1] - self.window_bounds[:, 0]))

    @cached_property
    def counts(self) -> IntArray:
        """(n_units,) spikes of each unit inside the windows, those in exclusions included."""
        edges = self.window_bounds
        return np.array(
            [int(np.sum(np.searchsorted(t, edges[:, 1]) - np.searchsorted(t, edges[:, 0]))) for t in self.trains],
            dtype=np.int64,
        )

    @property
    def n_spikes(self) -> int:
        """Spikes inside the windows, all units together."""
        return int(self.counts.sum())

    @property
    def windows(self) -> pd.DataFrame:
        """start_s, stop_s, and condition and trial where they were given. A fresh copy at each call."""
        table = pd.DataFrame(np.array(self.window_bounds), columns=["start_s", "stop_s"])
        if self.window_conditions is not None:
            table["condition"] = list(self.window_conditions)
        if self.window_trials is not None:
            table["trial"] = list(self.window_trials)
        return table

    @property
    def exclusions(self) -> pd.DataFrame:
        """start_s, stop_s of the stretches that are not data. A fresh copy at each call."""
        return pd.DataFrame(np.array(self.exclusion_bounds), columns=["start_s", "stop_s"])

    @property
    def units(self) -> pd.DataFrame:
        """By unit id, in site-table order: positions (µm), group where given, n_spikes and rate_hz in the windows."""
        table = pd.DataFrame(np.array(self.positions), columns=list(COORDINATES[: self.n_coordinates]))
        if self.groups is not None:
            table["group"] = list(self.groups)
        table["n_spikes"] = self.counts
        table["rate_hz"] = self.counts / self.duration
        table.index = pd.Index(self.unit_ids, name="unit", dtype=object)
        return table

    @property
    def spikes(self) -> pd.DataFrame:
        """unit, time_s: every spike, sorted by time, ties in the order of the units. A fresh copy at each call."""
        unit = np.repeat(np.arange(self.n_units), [t.size for t in self.trains])
        time_s = np.concatenate(self.trains) if self.trains else np.empty(0)
        order = np.lexsort((unit, time_s))
        ids = np.asarray(self.unit_ids, dtype=object)
        return pd.DataFrame({"unit": ids[unit[order]], "time_s": time_s[order]})

    @cached_property
    def source_only_mask(self) -> BoolArray:
        """(n_units,) True where a unit drives others and is not itself explained."""
        return np.array([u in self.source_only for u in self.unit_ids], dtype=bool)

    def index_of(self, unit: str) -> int:
        """Place of a unit in the order of the sites table.

        Raises
        ------
        RecordingError : no such unit; the message names the closest ids
        """
        try:
            return self._index[unit]
        except (KeyError, TypeError):  # a list, say, cannot be looked up
            raise RecordingError(self._unknown_unit(unit)) from None

    def spike_times(self, unit: str) -> FloatArray:
        """Spike times of one unit in seconds, sorted, spikes outside the windows included (read-only).

        Raises
        ------
        RecordingError : no such unit
        """
        return self.trains[self.index_of(unit)]

    @cached_property
    def _index(self) -> dict[str, int]:
        return {u: k for k, u in enumerate(self.unit_ids)}

    def _unknown_unit(self, unit: object) -> str:
        from difflib import get_close_matches

        close = get_close_matches(str(unit), self.unit_ids, n=3, cutoff=0.5) or list(self.unit_ids[:3])
        return (
            f"{self.origin.name('sites')}: no unit {unit!r} among its {self.n_units} units. "
            f"Ids are text and case matters; the closest are {', '.join(map(repr, close))}."
        )

    # --- another recording ----------------------------------------------------------------------------

    def select(
        self,
        *,
        units: Iterable[str] | None = None,
        groups: Iterable[str] | None = None,
        min_spikes: int | None = None,
        start_s: float | None = None,
        stop_s: float | None = None,
        conditions: Iterable[str] | None = None,
        source_only: Iterable[str] | None = None,
    ) -> Recording:
        """A recording of fewer units or less time. Spikes outside the new windows stay as history.

        Parameters
        ----------
        units : ids to keep; the order of the sites table is kept
        groups : labels to keep
        min_spikes : keep units with at least this many spikes in the (new) windows
        start_s, stop_s : cut the windows to this stretch, seconds on the recording's clock
        conditions : keep windows with these labels
        source_only : ids that shall drive others and not be explained (replaces the present set)

        Raises
        ------
        RecordingError : an unknown unit, group or condition, or nothing left
        ArgumentError : a time or a count that is none
        """
        for name, ids in (
            ("units", units),
            ("groups", groups),
            ("conditions", conditions),
            ("source_only", source_only),
        ):
            if ids is not None and not isinstance(ids, Iterable):
                raise ArgumentError(f"{name}: {described(ids)} is no list. Give a list of ids or labels.")
        for name, time_s in (("start_s", start_s), ("stop_s", stop_s)):
            if time_s is not None and not is_number(time_s):
                raise ArgumentError(f"{name}: {described(time_s)} is no time. Give seconds on the recording's clock.")
        if min_spikes is not None and not is_number(min_spikes):
            raise ArgumentError(f"min_spikes: {described(min_spikes)} is no count. Give a whole number, such as 50.")
        result = self._in_time(start_s, stop_s, conditions)
        keep = np.ones(self.n_units, dtype=bool)
        if units is not None:
            wanted = [units] if isinstance(units, str) else list(units)
            chosen = {result.index_of(u) for u in wanted}
            keep &= np.array([k in chosen for k in range(self.n_units)])
        if groups is not None:
            keep &= result._group_mask([groups] if isinstance(groups, str) else list(groups))
        if min_spikes is not None:
            keep &= result.counts >= min_spikes
        if source_only is not None:
            named = [source_only] if isinstance(source_only, str) else list(source_only)
            for u in named:
                result.index_of(u)
            result = replace(result, source_only=frozenset(named))
        if not keep.any():
            raise RecordingError(
                f"{self.origin.name('spikes')}: the selection leaves no unit of {self.n_units}. "
                "Widen it: check min_spikes, groups and the stretch of time."
            )
        return result if keep.all() else result._of_units(keep)

    def _in_time(self, start_s: float | None, stop_s: float | None, conditions: Iterable[str] | None) -> Recording:
        if start_s is None and stop_s is None and conditions is None:
            return self
        bounds = np.array(self.window_bounds)
        keep = np.ones(len(bounds), dtype=bool)
        if conditions is not None:
            wanted = {conditions} if isinstance(conditions, str) else set(conditions)
            have = self.window_conditions
            unknown = wanted - set(have or ())
            if have is None or unknown:
                known = f"Known: {', '.join(sorted(set(have)))}." if have else "The windows have no column 'condition'."
                raise RecordingError(
                    f"{self.origin.name('windows')}: no condition {', '.join(map(repr, sorted(unknown or wanted)))}. "
                    f"{known}"
                )
            keep &= np.array([c in wanted for c in have])
        if start_s is not None:
            bounds[:, 0] = np.maximum(bounds[:, 0], start_s)
        if stop_s is not None:
            bounds[:, 1] = np.minimum(bounds[:, 1], stop_s)
        keep &= bounds[:, 1] > bounds[:, 0]
        if not keep.any():
            first, last = self.window_bounds[0, 0], self.window_bounds[-1, 1]
            raise RecordingError(
                f"{self.origin.name('windows')}: nothing of the windows is left{_between(start_s, stop_s)}. "
                f"The recording runs from {clock_text(first)} s to {clock_text(last)} s. Give times within."
            )

        def kept(labels: tuple[str, ...] | None) -> tuple[str, ...] | None:
            return None if labels is None else tuple(c for c, k in zip(labels, keep, strict=True) if k)

        return replace(
            self,
            window_bounds=bounds[keep],
            window_conditions=kept(self.window_conditions),
            window_trials=kept(self.window_trials),
            origin=self.origin.noted(f"cut to {clock_text(bounds[keep][0, 0])}-{clock_text(bounds[keep][-1, 1])} s"),
        )

    def _group_mask(self, wanted: Sequence[str]) -> BoolArray:
        have = self.groups
        unknown = set(wanted) - set(have or ())
        if have is None or unknown:
            known = f"Known: {', '.join(sorted(set(have)))}." if have else "The sites have no column 'group'."
            raise RecordingError(
                f"{self.origin.name('sites')}: no group {', '.join(map(repr, sorted(unknown or set(wanted))))}. {known}"
            )
        return np.array([g in set(wanted) for g in have], dtype=bool)

    def _of_units(self, keep: BoolArray) -> Recording:
        index = np.flatnonzero(keep)
        ids = tuple(self.unit_ids[k] for k in index)
        left = set(ids)
        return replace(
            self,
            unit_ids=ids,
            positions=self.positions[index],
            trains=tuple(self.trains[k] for k in index),
            groups=None if self.groups is None else tuple(self.groups[k] for k in index),
            excluded_pairs=tuple(p for p in self.excluded_pairs if set(p) <= left),
            source_only=self.source_only & left,
            origin=self.origin.noted(f"{len(ids)} of {self.n_units} units selected"),
        )

    def with_exclusions(self, exclusions: pd.DataFrame | FloatArray) -> Recording:
        """The same recording with these stretches left out (replaces the present ones), seconds.

        Raises
        ------
        ArgumentError : a stretch that is not finite or does not end after it starts
        RecordingError : no pairs of numbers
        """
        if isinstance(exclusions, pd.DataFrame):
            absent = [c for c in ("start_s", "stop_s") if c not in exclusions.columns]
            if absent:
                raise RecordingError(f"exclusions: there is no column {' and no column '.join(map(repr, absent))}.")
            exclusions = exclusions[["start_s", "stop_s"]].to_numpy()
        bounds = _pairs(exclusions, "exclusions")
        bad = ~np.isfinite(bounds).all(axis=1) | (bounds[:, 1] <= bounds[:, 0])
        if bad.any():
            k = int(np.flatnonzero(bad)[0])
            raise ArgumentError(f"exclusions, row {k}: {bounds[k].tolist()} is not a stretch with stop after start.")
        return replace(self, exclusion_bounds=bounds[np.argsort(bounds[:, 0], kind="stable")])

    # --- looking at it --------------------------------------------------------------------------------

    def inspect(self) -> Inspection:
        """Quality findings, each with severity, what, where and remedy (see `kernelfit.recording.inspection`)."""
        from kernelfit.recording.inspection import inspect_recording  # builds on this module

        return inspect_recording(self)

    def __repr__(self) -> str:
        return (
            f"Recording({self.n_units} units, {self.n_coordinates} coordinates, {self.n_spikes} spikes in "
            f"{len(self.window_bounds)} window{'s' * (len(self.window_bounds) != 1)} of {clock_text(self.duration)} s)"
        )


def check_recording(given: object) -> None:
    """Refuse what is not a recording, such as the path of one.

    Raises
    ------
    ArgumentError : not a `Recording`
    """
    if not isinstance(given, Recording):
        raise ArgumentError(
            f"recording: {described(given)} is not a recording. Read one with kf.read_recording(spikes, sites), or "
            "build it with kf.Recording.from_arrays(...)."
        )
