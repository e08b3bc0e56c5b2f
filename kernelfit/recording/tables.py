"""Tables to a `Recording`: files and DataFrames, loaded, checked together and assembled."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit._validation import check_truth_value
from kernelfit.errors import Fault, TableError
from kernelfit.recording.array_tables import recording_from_arrays
from kernelfit.recording.assembling import Parts, assembled
from kernelfit.recording.columns import Measures
from kernelfit.recording.raw_table import ROWS_FROM_0, RawTable, TableSource, load_table
from kernelfit.recording.recording import Origin, Recording
from kernelfit.recording.table_checks import (
    Sites,
    Spikes,
    check_pairs,
    check_same_naming,
    check_sites,
    check_spikes,
    check_stretches,
    find_repeated_spikes,
)

__all__ = ["read_recording", "recording_from_arrays"]


def read_recording(
    spikes: TableSource,
    sites: TableSource,
    windows: TableSource | None = None,
    *,
    exclusions: TableSource | None = None,
    exclude_pairs: TableSource | None = None,
    time_unit: str = "s",
    sampling_rate_hz: float | None = None,
    length_unit: str = "um",
    decimal: str = ".",
    drop_duplicates: bool = False,
) -> Recording:
    """A recording from tables: delimited text (also gzipped), Parquet, or DataFrames, in any mixture.

    Text tables are UTF-8 (or UTF-16 with its mark), with a header; the delimiter (comma, semicolon, tab,
    vertical bar) is found from the header. Blank lines and lines that start with ``#`` are skipped; an id
    that starts with ``#`` must be quoted. Ids are text and stay what they are (``NA``, ``007``), but for
    surrounding blanks. Columns that are not named below are ignored.

    Parameters
    ----------
    spikes : columns ``unit``, ``time_s``; one row a spike, in any order. Negative times are welcome
    sites : columns ``unit``, ``x_um`` and optionally ``y_um``, ``z_um``, ``group`` (a label) and
        ``source_only`` (yes or no: a unit that drives others and is not itself explained). Its order is the
        order of units; a unit without spikes is a silent unit
    windows : columns ``start_s``, ``stop_s`` and optionally ``condition``, ``trial`` (labels); the observed
        stretches, stop not included. None: from the floor of the first spike to the first whole second after
        the last, which ``origin.windows_stated`` and a note record. Spikes outside the windows are kept as
        history
    exclusions : columns ``start_s``, ``stop_s``; stretches that are not data. Those that overlap are merged
    exclude_pairs : columns ``unit_a``, ``unit_b``; pairs left out of the kernel in both directions
    time_unit : "s", "ms", "us" or "samples", of every time in every table. The columns are then called
        ``time_ms``, ``start_ms``, ``stop_ms``, or keep their standard names, alike in all tables. A name
        never decides the unit of measure; a name at odds with `time_unit` is a fault
    sampling_rate_hz : samples per second; with "samples" only
    length_unit : "um" or "mm"; columns ``x_mm`` ... or standard names
    decimal : "." or ",", in text cells
    drop_duplicates : drop exact repeats of a spike (same unit, same time) instead of refusing them; noted in
        ``origin.notes``

    Returns
    -------
    Recording : times in seconds, positions in micrometres. ``origin.files`` holds the SHA-256 of each file's
        bytes; for a DataFrame, of the columns named above written as CSV

    Raises
    ------
    TableError : anything wrong in the tables; every fault of every table, with file, row, column, value,
        remedy. Rows count lines as an editor does; rows of DataFrames and Parquet count from 0
    RecordingError : windows that hold no spike
    ArgumentError : an unknown unit of measure, a sampling rate that is missing or out of place, no path
    """
    check_truth_value(drop_duplicates, "drop_duplicates")
    measures = Measures(time_unit, sampling_rate_hz, length_unit, decimal)
    given: dict[str, TableSource] = {"spikes": spikes, "sites": sites}
    for role, source in (("windows", windows), ("exclusions", exclusions), ("exclude_pairs", exclude_pairs)):
        if source is not None:
            given[role] = source
    names = _table_names(given)
    tables: dict[str, RawTable] = {}
    faults: list[Fault] = []
    for role, source in given.items():
        try:
            tables[role] = load_table(source, role, names[role])
        except TableError as error:
            faults.extend(error.faults)
    parts = _checked(tables, names["sites"], measures, drop_duplicates, faults)
    if parts is None or faults:
        raise TableError(_sorted(faults, list(names.values())))
    notes = [f"{t.source.name}: {note}" for t in tables.values() for note in t.notes]
    files = tuple(t.source for t in tables.values())
    return assembled(parts, Origin(files, notes=(*notes, *measures.notes)))


def _table_names(given: Mapping[str, TableSource]) -> dict[str, str]:
    """What messages call each table: the file name, or the path where two files share a name."""
    names = {
        role: Path(source).name or str(source) if isinstance(source, (str, os.PathLike)) else f"{role} table"
        for role, source in given.items()
    }
    twice = {n for n in names.values() if list(names.values()).count(n) > 1}
    # The same file given twice (a slip) still needs two names, so that each fault finds its table.
    paths = {role: str(given[role]) for role, name in names.items() if name in twice}
    for role, path in paths.items():
        names[role] = f"{path} (as {role})" if list(paths.values()).count(path) > 1 else path
    return names


def _sorted(faults: list[Fault], names: list[str]) -> list[Fault]:
    """By table, in the order given; then faults of the whole table, then by row."""

    def place(fault: Fault) -> tuple[int, int]:
        name = fault.table if fault.table in names else fault.table.removesuffix(ROWS_FROM_0)
        return names.index(name), -1 if fault.row is None else fault.row

    return sorted(faults, key=place)


def _checked(
    tables: Mapping[str, RawTable],
    sites_name: str,
    measures: Measures,
    drop_duplicates: bool,
    faults: list[Fault],
) -> Parts | None:
    """Every table checked as far as it goes; None where sites or spikes are unusable, which left a fault."""
    spike_table, site_table, window_table = (tables.get(role) for role in ("spikes", "sites", "windows"))
    exclusion_table, pair_table = tables.get("exclusions"), tables.get("exclude_pairs")
    timed = [t for t in (spike_table, window_table, exclusion_table) if t is not None]
    check_same_naming(timed, measures, faults)
    sites = None if site_table is None else check_sites(site_table, measures, faults)
    spikes = None if spike_table is None else check_spikes(spike_table, sites, sites_name, measures, faults)
    windows = None if window_table is None else check_stretches(window_table, measures, faults)
    exclusions = None if exclusion_table is None else check_stretches(exclusion_table, measures, faults)
    pairs = () if pair_table is None else check_pairs(pair_table, sites, sites_name, faults)
    if sites is None or spikes is None or spike_table is None:
        return None
    trains, n_dropped = _trains(spike_table, spikes, sites, drop_duplicates, faults)
    return Parts(sites, trains, windows, exclusions, pairs, n_dropped)


def _trains(
    table: RawTable, spikes: Spikes, sites: Sites, drop_duplicates: bool, faults: list[Fault]
) -> tuple[tuple[FloatArray, ...], int]:
    """Sorted spike times for each unit, and how many exact repeats were dropped."""
    sound = np.flatnonzero((spikes.unit >= 0) & np.isfinite(spikes.time_s))
    order = sound[np.lexsort((spikes.time_s[sound], spikes.unit[sound]))]
    unit, time_s = spikes.unit[order], spikes.time_s[order]
    repeats = np.zeros(len(order), dtype=bool)
    repeats[1:] = (np.diff(unit) == 0) & (np.diff(time_s) == 0)
    if repeats.any() and not drop_duplicates:
        find_repeated_spikes(table, spikes, sites, order, np.flatnonzero(repeats), faults)
    edges = np.searchsorted(unit[~repeats], np.arange(1, len(sites.ids)))
    return tuple(np.split(time_s[~repeats], edges)), int(repeats.sum())
