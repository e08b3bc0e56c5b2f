"""Arrays in memory to a `Recording`, with the checks that tables get."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Collection, Iterable, Mapping, Sequence
from typing import TypeAlias

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit._validation import check_truth_value, described
from kernelfit.errors import ArgumentError, Fault, RecordingError, TableError
from kernelfit.recording.assembling import Parts, assembled
from kernelfit.recording.cells import read_labels
from kernelfit.recording.columns import MAX_COORDINATE_UM, MAX_TIME_S, Measures
from kernelfit.recording.raw_table import ROWS_FROM_0, RawTable, table_from_frame
from kernelfit.recording.recording import COORDINATES, Origin, Recording, SourceFile
from kernelfit.recording.table_checks import Sites, check_pairs, check_stretches

_KINDS = {
    "U": "text",
    "S": "text",
    "b": "truth values",
    "c": "complex numbers",
    "M": "dates",
    "m": "lengths of time",
}  # by numpy's letter for the kind of an array

StretchSource: TypeAlias = "pd.DataFrame | Sequence[tuple[float, float]] | FloatArray"


def recording_from_arrays(
    spike_times_s: Mapping[str, Sequence[float] | FloatArray],
    positions_um: Sequence[Sequence[float]] | FloatArray,
    windows: StretchSource | None = None,
    *,
    exclusions: StretchSource | None = None,
    exclude_pairs: Iterable[tuple[str, str]] | None = None,
    groups: Sequence[str] | None = None,
    drop_duplicates: bool = False,
) -> Recording:
    """A recording from arrays in memory: what `Recording.from_arrays` does, documented there.

    The hashes in ``origin.files`` are over the ids and the little-endian bytes of the arrays.
    """
    check_truth_value(drop_duplicates, "drop_duplicates")
    if not isinstance(spike_times_s, Mapping):
        raise RecordingError(
            f"spike_times_s is {described(spike_times_s)}. Give a dictionary from unit id to spike times in seconds, "
            "such as {'u01': [0.12, 0.57], 'u02': [0.3]}."
        )
    faults: list[Fault] = []
    ids = _array_ids(list(spike_times_s), faults)
    positions = _array_positions(positions_um, len(ids), faults)
    sites = Sites(tuple(ids), positions, _array_groups(groups, len(ids), faults), frozenset())
    trains, n_dropped = [], 0
    for unit, times in zip(ids, spike_times_s.values(), strict=True):
        train, n_repeats = _array_train(unit, times, drop_duplicates, faults)
        trains.append(train)
        n_dropped += n_repeats
    stretches = [_stretch_table(windows, "windows"), _stretch_table(exclusions, "exclusions")]
    observed, left_out = (None if t is None else check_stretches(t, Measures(), faults) for t in stretches)
    pair_table = _pair_table(exclude_pairs)
    pairs = () if pair_table is None else check_pairs(pair_table, sites, "spike_times_s", faults)
    if faults:
        raise TableError(faults)
    files = (
        SourceFile("spikes", "spikes table", _array_hash(ids, trains)),
        SourceFile("sites", "sites table", _array_hash((*ids, *(sites.groups or ())), [positions.ravel()])),
        *(t.source for t in (*stretches, pair_table) if t is not None),
    )
    return assembled(Parts(sites, tuple(trains), observed, left_out, pairs, n_dropped), Origin(files))


def _array_ids(keys: list[object], faults: list[Fault]) -> list[str]:
    ids, bad = read_labels(keys)
    faults.extend(Fault("spike_times_s", b.problem, b.remedy, column="unit", value=str(keys[b.at])) for b in bad)
    seen: set[str] = set()
    for unit in ids:
        if unit in seen and unit:
            problem = "Two units have this id (blanks around ids do not count)."
            faults.append(Fault("spike_times_s", problem, "Unit ids must differ.", column="unit", value=unit))
        seen.add(unit)
    if not ids:
        raise RecordingError("spike_times_s holds no units. Give at least one unit with its spike times.")
    return ids


def _float_array(values: object, name: str) -> FloatArray:
    """Numbers as a float array; text, truth values and ragged lists are refused."""
    remedy = "Give plain numbers, all rows of one length."
    if values is None or isinstance(values, (str, bytes, os.PathLike)):
        raise RecordingError(
            f"{name} is {described(values)}. Give plain numbers; tables are read by kf.read_recording."
        )
    try:
        array = np.asarray(values)
    except (ValueError, TypeError):
        raise RecordingError(f"{name} cannot be made an array of numbers. {remedy}") from None
    if array.size == 0:
        return np.empty(array.shape)
    holds_text = array.dtype == object and any(isinstance(v, (str, bytes)) for v in array.flat)
    if array.dtype.kind not in "iufO" or holds_text:
        kind = "text" if holds_text else _KINDS.get(array.dtype.kind, "other things")
        raise RecordingError(f"{name} holds {kind}, not numbers. Give plain numbers.")
    try:
        return array.astype(np.float64)
    except (ValueError, TypeError, OverflowError):
        raise RecordingError(f"{name} cannot be made an array of numbers. {remedy}") from None


def _array_positions(positions_um: object, n_units: int, faults: list[Fault]) -> FloatArray:
    given = _float_array(positions_um, "positions_um")
    positions = given[:, np.newaxis] if given.ndim == 1 else given
    if positions.ndim != 2 or positions.shape[0] != n_units or not 1 <= positions.shape[1] <= 3:
        raise RecordingError(
            f"positions_um has shape {given.shape}, and spike_times_s holds {n_units} units. Give one row "
            f"for each unit, in the same order: shape ({n_units},) or ({n_units}, 1 to 3)."
        )
    for k, axis in np.argwhere(~(np.abs(positions) <= MAX_COORDINATE_UM)).tolist():
        problem = f"Not a finite position within {MAX_COORDINATE_UM:.0e} µm."
        value = repr(float(positions[k, axis]))
        place = "positions_um" + ROWS_FROM_0
        faults.append(Fault(place, problem, "Correct it.", k, COORDINATES[axis], value))
    return positions


def _array_groups(groups: Sequence[str] | None, n_units: int, faults: list[Fault]) -> tuple[str, ...] | None:
    if groups is None:
        return None
    if isinstance(groups, str) or not isinstance(groups, Collection):
        raise RecordingError(
            f"groups is {described(groups)}. Give a list with a label for each of the {n_units} units."
        )
    if len(groups) != n_units:
        raise RecordingError(
            f"groups holds {len(groups)} label{'s' * (len(groups) != 1)} for {n_units} units. Give one for each."
        )
    labels, bad = read_labels(list(groups), required=False)
    faults.extend(Fault("groups", b.problem, b.remedy, row=b.at, value=str(groups[b.at])) for b in bad)
    return tuple(labels)


def _array_train(unit: str, times: object, drop_duplicates: bool, faults: list[Fault]) -> tuple[FloatArray, int]:
    name = f"spike_times_s[{unit!r}]"
    time_s = _float_array(times, name)
    if time_s.ndim != 1:
        what = "is a single number" if time_s.ndim == 0 else f"has shape {time_s.shape}"
        raise RecordingError(f"{name} {what}. Give a flat list of times in seconds.")
    place = name + ROWS_FROM_0
    bad = ~(np.abs(time_s) <= MAX_TIME_S)
    for k in np.flatnonzero(bad).tolist():
        problem = f"Not a finite time within {MAX_TIME_S:.0e} s."
        faults.append(Fault(place, problem, "Correct it, or take it out.", row=k, value=repr(float(time_s[k]))))
    order = np.argsort(time_s, kind="stable")
    order = order[~bad[order]]
    train = time_s[order]
    repeats = np.zeros(len(train), dtype=bool)
    repeats[1:] = np.diff(train) == 0
    if not drop_duplicates:
        for k in np.flatnonzero(repeats).tolist():
            problem = f"The unit has a spike at this time already in row {order[k - 1]}."
            remedy = "Take one out, or pass drop_duplicates=True."
            faults.append(Fault(place, problem, remedy, row=int(order[k]), value=repr(float(train[k]))))
    return train[~repeats], int(repeats.sum())


def _stretch_table(given: StretchSource | None, role: str) -> RawTable | None:
    if given is None:
        return None
    if not isinstance(given, pd.DataFrame):
        bounds = _float_array(given, role)
        if bounds.size == 0:
            bounds = np.empty((0, 2))
        if bounds.ndim != 2 or bounds.shape[1] != 2:
            what = "is a single number" if bounds.ndim == 0 else f"has shape {bounds.shape}"
            raise RecordingError(
                f"{role} {what}. Give pairs of start and stop in seconds, such as [(0.0, 60.0), (90.0, 300.0)]."
            )
        given = pd.DataFrame(bounds, columns=["start_s", "stop_s"])
    return table_from_frame(given, role)


def _pair_table(given: Iterable[tuple[str, str]] | None) -> RawTable | None:
    if given is None:
        return None
    if isinstance(given, pd.DataFrame):
        return table_from_frame(given, "exclude_pairs")
    remedy = "Give pairs of unit ids, such as [('u01', 'u02')]."
    if isinstance(given, str) or not isinstance(given, Iterable):
        raise ArgumentError(f"exclude_pairs is {described(given)}. {remedy}")
    pairs = list(given)
    for pair in pairs:
        if isinstance(pair, str) or not isinstance(pair, Sequence) or len(pair) != 2:
            raise ArgumentError(f"exclude_pairs holds {described(pair)}. {remedy}")
    if not pairs:
        return None
    columns = {"unit_a": [a for a, _ in pairs], "unit_b": [b for _, b in pairs]}
    return table_from_frame(pd.DataFrame(columns, dtype=object), "exclude_pairs")


def _array_hash(ids: Sequence[str], arrays: Sequence[FloatArray]) -> str:
    digest = hashlib.sha256()
    for text in ids:
        digest.update(text.encode("utf-8", errors="surrogatepass") + b"\n")
    for array in arrays:
        digest.update(str(array.size).encode() + b"\n" + array.astype("<f8").tobytes())
    return digest.hexdigest()
