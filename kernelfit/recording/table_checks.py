"""Raw tables to checked values, and every fault in them.

Each function appends what it finds to a list of faults and goes on as far as it can, so that a user mends
a file once and not fault by fault.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.errors import MAX_FAULTS_SHOWN, Fault
from kernelfit.recording.cells import BadCell, closest_note, read_labels, written
from kernelfit.recording.columns import (
    Measures,
    add_bad,
    coordinates_of,
    find,
    find_length,
    find_time,
    labels_of,
    optional_labels_of,
    times_of,
)
from kernelfit.recording.raw_table import LENGTH_UNITS, RawTable

_YES, _NO = frozenset({"yes", "true", "1"}), frozenset({"", "no", "false", "0"})


@dataclass(frozen=True, slots=True, eq=False)
class Sites:
    """Checked sites table: ids in its order, positions (n_units, 1 to 3) in µm, labels, source-only ids."""

    ids: tuple[str, ...]
    positions: FloatArray
    groups: tuple[str, ...] | None
    source_only: frozenset[str]


@dataclass(frozen=True, slots=True, eq=False)
class Spikes:
    """Checked spikes table, in its order: index of the unit (n,), seconds (n,), name of the time column.

    A bad row has unit -1 or time NaN, and a fault.
    """

    unit: IntArray
    time_s: FloatArray
    time_column: str


@dataclass(frozen=True, slots=True, eq=False)
class Stretches:
    """Checked windows or exclusions, sorted: bounds (n, 2) in seconds and, for windows, labels."""

    bounds: FloatArray
    conditions: tuple[str, ...] | None = None
    trials: tuple[str, ...] | None = None


def check_sites(table: RawTable, measures: Measures, faults: list[Fault]) -> Sites | None:
    """Ids, positions and labels of the sites table, or None when no unit can be made out."""
    unit = find(table, "unit", faults)
    axes = _coordinate_columns(table, measures, faults)
    if table.n_rows == 0 and not table.faults:
        faults.append(table.fault("The table has no rows.", "Give one row for each unit."))
    positions = np.full((table.n_rows, max(len(axes), 1)), np.nan)
    for k, column in enumerate(axes):
        positions[:, k] = coordinates_of(table, column, measures, faults)
    groups = optional_labels_of(table, "group", faults)
    if unit is None or table.n_rows == 0:
        return None
    ids = labels_of(table, unit, faults, required=True)
    _find_repeated_units(table, ids, faults)
    source_only = _source_only(table, ids, faults)
    return Sites(tuple(ids), positions, None if groups is None else tuple(groups), source_only)


def _coordinate_columns(table: RawTable, measures: Measures, faults: list[Fault]) -> list[str]:
    """x, then y and z where they are there; all in one unit of measure."""
    columns: list[str] = []
    for axis in "xyz":
        present = any(f"{axis}_{u}" in table.names for u in LENGTH_UNITS)
        if axis == "z" and present and len(columns) == 1:
            name = next(n for n in table.names if n in ("z_um", "z_mm"))
            remedy = f"Add y, or rename {name} to y{name[1:]} if the array has two coordinates."
            faults.append(table.fault("There is a z coordinate without a y coordinate.", remedy, column=name))
            break
        if axis == "x" or present:
            found = find_length(table, axis, measures, faults)
            if found is None:
                break
            columns.append(found)
    endings = {c.partition("_")[2] for c in columns}
    if len(endings) > 1:
        remedy = "Convert them to one unit of measure and name them alike."
        faults.append(table.fault(f"The coordinates {', '.join(columns)} are named in different units.", remedy))
    return columns


def _find_repeated_units(table: RawTable, ids: list[str], faults: list[Fault]) -> None:
    first: dict[str, int] = {}
    for k, unit in enumerate(ids):
        if unit and first.setdefault(unit, k) != k:
            problem = f"The unit is listed already in {table.row_name(first[unit])}."
            faults.append(table.fault(problem, "List each unit once.", at=k, column="unit", value=unit))


def _source_only(table: RawTable, ids: list[str], faults: list[Fault]) -> frozenset[str]:
    """Ids marked yes; empty where there is no such column. A DataFrame may hold truth values."""
    column = "source_only"
    if column not in table.names or find(table, column, faults) is None:
        return frozenset()
    cells = [str(c) if isinstance(c, (bool, np.bool_)) else c for c in table.column(column)]
    marks, bad = read_labels(cells, required=False)
    remedy = "Write yes for units that drive others and are not explained, else no."
    bad += [
        BadCell(k, "Neither yes nor no.", remedy) for k, mark in enumerate(marks) if mark.casefold() not in _YES | _NO
    ]
    add_bad(table, column, bad, faults)
    return frozenset(u for u, mark in zip(ids, marks, strict=True) if mark.casefold() in _YES)


def check_spikes(
    table: RawTable, sites: Sites | None, sites_name: str, measures: Measures, faults: list[Fault]
) -> Spikes | None:
    """Unit and time of each spike; None where the units are unknown because a table is unusable."""
    unit = find(table, "unit", faults)
    time = find_time(table, "time", measures, faults)
    if table.n_rows == 0 and not table.faults:
        faults.append(table.fault("The table has no rows.", "Give one row for each spike."))
    time_s = None if time is None else times_of(table, time, measures, faults)
    ids = None if unit is None else labels_of(table, unit, faults, required=True)
    if ids is None or sites is None:
        return None
    place = {u: k for k, u in enumerate(sites.ids)}
    index = np.array([place.get(u, -1) for u in ids], dtype=np.int64)
    _find_unknown_units(table, ids, index < 0, sites.ids, sites_name, faults)
    return None if time is None or time_s is None else Spikes(index, time_s, time)


def _find_unknown_units(
    table: RawTable,
    ids: list[str],
    unknown: BoolArray,
    known: Sequence[str],
    sites_name: str,
    faults: list[Fault],
) -> None:
    """One fault for each unknown unit, at its first spike: a unit the sites lack may have thousands."""
    first: dict[str, int] = {}
    n_spikes: dict[str, int] = {}
    for k in np.flatnonzero(unknown).tolist():
        if ids[k]:
            first.setdefault(ids[k], k)
            n_spikes[ids[k]] = n_spikes.get(ids[k], 0) + 1
    for k, (unit, at) in enumerate(first.items()):
        n = n_spikes[unit]
        closest = closest_note(unit, known) if k < MAX_FAULTS_SHOWN else ""  # slow, and nobody would see it
        problem = f"The unit is not in {sites_name} ({n} spike{'s' * (n != 1)} of it).{closest}"
        remedy = "Add the unit there, or take its spikes out."
        faults.append(table.fault(problem, remedy, at=at, column="unit", value=unit))


def find_repeated_spikes(
    table: RawTable, spikes: Spikes, sites: Sites, order: IntArray, repeated: IntArray, faults: list[Fault]
) -> None:
    """A fault for each spike that says the same as the one before it in the order by unit and time.

    Parameters
    ----------
    order : (n,) rows sorted by unit, then time, ties in the order of the table
    repeated : places in `order` whose row repeats the row before
    """
    cells = table.column(spikes.time_column)
    for k in repeated.tolist():
        row, earlier = int(order[k]), int(order[k - 1])
        unit = sites.ids[int(spikes.unit[row])]
        problem = f"Unit {unit!r} has a spike at this time already in {table.row_name(earlier)}."
        remedy = "Delete one of them, or load with drop_duplicates=True."
        faults.append(table.fault(problem, remedy, at=row, column=spikes.time_column, value=written(cells, row)))


def check_stretches(table: RawTable, measures: Measures, faults: list[Fault]) -> Stretches | None:
    """Windows or exclusions, sorted by start; windows must not overlap, exclusions that do are merged."""
    start, stop = (find_time(table, end, measures, faults) for end in ("start", "stop"))
    is_windows = table.source.role == "windows"
    conditions = optional_labels_of(table, "condition", faults) if is_windows else None
    trials = optional_labels_of(table, "trial", faults) if is_windows else None
    if is_windows and table.n_rows == 0 and not table.faults:
        remedy = "Give one row for each stretch that was observed, or leave the table out."
        faults.append(table.fault("The table has no rows.", remedy))
    if start is None or stop is None:
        return None
    if start.partition("_")[2] != stop.partition("_")[2]:
        remedy = "Convert them to one unit of measure and name them alike."
        faults.append(table.fault(f"The columns {start} and {stop} are named in different units.", remedy))
        return None
    start_s, stop_s = times_of(table, start, measures, faults), times_of(table, stop, measures, faults)
    backward = stop_s <= start_s  # False where either is NaN, which is a fault already
    for k in np.flatnonzero(backward).tolist():
        problem = f"The stretch does not stop after its start at {written(table.column(start), k)}."
        remedy = "Put the later time in the column of stops."
        faults.append(table.fault(problem, remedy, at=k, column=stop, value=written(table.column(stop), k)))
    order = np.argsort(start_s, kind="stable")
    sound = order[(~backward & np.isfinite(start_s) & np.isfinite(stop_s))[order]]
    bounds = np.column_stack([start_s[sound], stop_s[sound]])
    if not is_windows:
        return Stretches(merged(bounds))
    _find_overlaps(table, start, bounds, sound, faults)
    return Stretches(bounds, _reordered(conditions, sound), _reordered(trials, sound))


def _reordered(labels: list[str] | None, order: IntArray) -> tuple[str, ...] | None:
    return None if labels is None else tuple(labels[k] for k in order.tolist())


def _find_overlaps(table: RawTable, start: str, bounds: FloatArray, order: IntArray, faults: list[Fault]) -> None:
    latest = 0  # the window that reaches furthest so far
    for k in range(1, len(bounds)):
        if bounds[k, 0] < bounds[latest, 1]:
            at, other = int(order[k]), int(order[latest])
            until = f"({float(bounds[latest, 1])!r} s)"
            problem = f"The window starts before the one in {table.row_name(other)} stops {until}."
            remedy = "Cut or join them: each moment belongs to one window."
            faults.append(table.fault(problem, remedy, at=at, column=start, value=written(table.column(start), at)))
        if bounds[k, 1] > bounds[latest, 1]:
            latest = k


def merged(bounds: FloatArray) -> FloatArray:
    """Stretches (n, 2) sorted by start, with those that overlap made one; those that only touch stay two."""
    if len(bounds) == 0:
        return np.empty((0, 2))
    reach = np.maximum.accumulate(bounds[:, 1])
    begins = np.concatenate([[True], bounds[1:, 0] >= reach[:-1]])
    ends = np.concatenate([begins[1:], [True]])
    return np.column_stack([bounds[begins, 0], reach[ends]])


def check_pairs(
    table: RawTable, sites: Sites | None, sites_name: str, faults: list[Fault]
) -> tuple[tuple[str, str], ...]:
    """Pairs of different known units, each once, in the order of the table."""
    columns = [find(table, name, faults) for name in ("unit_a", "unit_b")]
    ids = {c: labels_of(table, c, faults, required=True) for c in columns if c is not None}
    if sites is not None:
        known = set(sites.ids)
        for column, labels in ids.items():
            for k, unit in enumerate(labels):
                if unit and unit not in known:
                    closest = closest_note(unit, sites.ids) if len(faults) < MAX_FAULTS_SHOWN else ""
                    problem = f"The unit is not in {sites_name}.{closest}"
                    remedy = "Correct the id, or delete the row."
                    faults.append(table.fault(problem, remedy, at=k, column=column, value=unit))
    if len(ids) < 2:
        return ()
    pairs: dict[frozenset[str], tuple[str, str]] = {}
    for k, (a, b) in enumerate(zip(ids["unit_a"], ids["unit_b"], strict=True)):
        if a and a == b:
            problem = "Both ends of the pair are the same unit."
            remedy = "Name two different units; a unit is never coupled to itself."
            faults.append(table.fault(problem, remedy, at=k, column="unit_b", value=b))
        pairs.setdefault(frozenset((a, b)), (a, b))
    return tuple(pairs.values())


def check_same_naming(tables: Sequence[RawTable], measures: Measures, faults: list[Fault]) -> None:
    """Refuse ``time_ms`` in one table beside ``start_s`` in another: one time unit holds for all of them.

    With a unit other than seconds, tables may name it (``start_ms``) or keep the standard name
    (``start_s``), but a mixture leaves open whether some table is in seconds after all.
    """
    if measures.time_unit == "s":
        return
    unit = measures.time_unit
    named = [t for t in tables if any(n in t.names for n in (f"time_{unit}", f"start_{unit}"))]
    plain = [t for t in tables if t not in named and any(n in t.names for n in ("time_s", "start_s"))]
    if not named or not plain:
        return
    for table in plain:
        column = "time_s" if "time_s" in table.names else "start_s"
        problem = f"The name says seconds, while {named[0].source.name} names its times in {unit}."
        remedy = f"time_unit={unit!r} holds for every table: convert to {unit} and name the column after it."
        faults.append(table.fault(problem, remedy, column=column))
