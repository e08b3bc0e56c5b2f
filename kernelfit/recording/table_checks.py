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
from kernelfit.recording.columns import Measures, add_bad, coordinates_of, labels_of, times_of
from kernelfit.recording.header import Header
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
    """Ids, positions and labels of the sites table, or None when the units cannot be made out."""
    header = Header(table)
    unit = header.find("unit")
    axes = _coordinate_columns(header, measures)
    group, source_only = header.optional("group"), header.optional("source_only")
    if not header.is_sound(faults) or unit is None:
        return None
    if table.n_rows == 0:
        if not table.faults:
            faults.append(table.fault("The table has no rows.", "Give one row for each unit."))
        return None
    positions = np.column_stack([coordinates_of(table, column, measures, faults) for column in axes])
    groups = None if group is None else tuple(labels_of(table, group, faults, required=False))
    ids = labels_of(table, unit, faults, required=True)
    _find_repeated_units(table, ids, faults)
    drives_only = frozenset[str]() if source_only is None else _source_only(table, source_only, ids, faults)
    # A row that could not be taken apart may hold the unit that others would seem to lack.
    return None if table.faults else Sites(tuple(ids), positions, groups, drives_only)


def _coordinate_columns(header: Header, measures: Measures) -> list[str]:
    """x, then y and z where they are there; all in one unit of measure."""
    names = header.table.names
    columns: list[str] = []
    for axis in "xyz":
        present = any(f"{axis}_{u}" in names for u in LENGTH_UNITS)
        if axis == "z" and present and len(columns) == 1:
            name = next(n for n in names if n in ("z_um", "z_mm"))
            remedy = f"Add y, or rename {name} to y{name[1:]} if the array has two coordinates."
            header.refuse("There is a z coordinate without a y coordinate.", remedy, column=name)
            break
        if axis == "x" or present:
            found = header.find_length(axis, measures)
            if found is None:
                break
            columns.append(found)
    endings = {c.partition("_")[2] for c in columns}
    if len(endings) > 1:
        remedy = "Convert them to one unit of measure and name them alike."
        header.refuse(f"The coordinates {', '.join(columns)} are named in different units.", remedy)
    return columns


def _find_repeated_units(table: RawTable, ids: list[str], faults: list[Fault]) -> None:
    first: dict[str, int] = {}
    for k, unit in enumerate(ids):
        if unit and first.setdefault(unit, k) != k:
            problem = f"The unit is listed already in {table.row_name(first[unit])}."
            faults.append(table.fault(problem, "List each unit once.", at=k, column="unit", value=unit))


def _source_only(table: RawTable, column: str, ids: list[str], faults: list[Fault]) -> frozenset[str]:
    """Ids marked yes. A DataFrame may hold truth values."""
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
    """Unit and time of each spike; None where a table is unusable."""
    header = Header(table)
    unit, time = header.find("unit"), header.find_time("time", measures)
    if not header.is_sound(faults) or unit is None or time is None:
        return None
    if table.n_rows == 0 and not table.faults:
        faults.append(table.fault("The table has no rows.", "Give one row for each spike."))
    time_s = times_of(table, time, measures, faults)
    ids = labels_of(table, unit, faults, required=True)
    if sites is None:
        return None
    place = {u: k for k, u in enumerate(sites.ids)}
    index = np.array([place.get(u, -1) for u in ids], dtype=np.int64)
    _find_unknown_units(table, ids, index < 0, sites.ids, sites_name, faults)
    return Spikes(index, time_s, time)


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
    header = Header(table)
    start, stop = (header.find_time(end, measures) for end in ("start", "stop"))
    is_windows = table.source.role == "windows"
    condition, trial = (header.optional(name) if is_windows else None for name in ("condition", "trial"))
    if start is not None and stop is not None and start.partition("_")[2] != stop.partition("_")[2]:
        remedy = "Convert them to one unit of measure and name them alike."
        header.refuse(f"The columns {start} and {stop} are named in different units.", remedy)
    if not header.is_sound(faults) or start is None or stop is None:
        return None
    if is_windows and table.n_rows == 0 and not table.faults:
        remedy = "Give one row for each stretch that was observed, or leave the table out."
        faults.append(table.fault("The table has no rows.", remedy))
    conditions, trials = (
        None if column is None else labels_of(table, column, faults, required=False) for column in (condition, trial)
    )
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
    header = Header(table)
    columns = [c for c in map(header.find, ("unit_a", "unit_b")) if c is not None]
    if not header.is_sound(faults):
        return ()
    ids = {c: labels_of(table, c, faults, required=True) for c in columns}
    if sites is not None:
        known = set(sites.ids)
        for column, labels in ids.items():
            for k, unit in enumerate(labels):
                if unit and unit not in known:
                    closest = closest_note(unit, sites.ids) if len(faults) < MAX_FAULTS_SHOWN else ""
                    problem = f"The unit is not in {sites_name}.{closest}"
                    remedy = "Correct the id, or delete the row."
                    faults.append(table.fault(problem, remedy, at=k, column=column, value=unit))
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
