"""A `Recording` back to tables, from which `read_recording` reads the same recording to the last bit."""

from __future__ import annotations

import os
import re
import shutil
import uuid
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit._validation import described
from kernelfit.errors import ArgumentError, OutputError, RecordingError
from kernelfit.recording.cells import read_labels
from kernelfit.recording.recording import COORDINATES, Recording, check_recording

TABLE_FILES = ("spikes.csv", "sites.csv", "windows.csv", "exclusions.csv", "exclude_pairs.csv")

_NEEDS_NO_QUOTES = re.compile(r"[\w.:/+-][\w.:/+ -]*")  # # at the start would read as a comment


def write_recording(recording: Recording, folder: str | os.PathLike[str], *, overwrite: bool = False) -> Path:
    """Write spikes.csv, sites.csv, windows.csv, exclusions.csv and exclude_pairs.csv into one folder.

    Nothing is lost: numbers are the shortest decimals that read back as the same doubles, spikes outside
    the windows are written too, and source-only units are marked in a column ``source_only`` of the sites
    table. The last two tables hold only their header where there is nothing to exclude. The window is
    written also where it was derived from the spikes; read back, it counts as stated. Names and hashes of
    the files the recording came from are not kept.

    Parameters
    ----------
    recording : what to write
    folder : made with its parents where it is not there; written whole or not at all
    overwrite : replace the tables of a recording that are already in the folder; a folder that holds anything
        else is refused all the same

    Returns
    -------
    Path : the folder

    Raises
    ------
    OutputError : the folder is not empty, or cannot be written
    ArgumentError : no recording, or no path
    RecordingError : an id or label that a table cannot hold (empty, line breaks, blanks at its ends)

    Examples
    --------
    >>> import tempfile
    >>> from kernelfit import Recording, read_recording, write_recording
    >>> rec = Recording.from_arrays({"u01": [0.1, 0.3], "u02": [0.2]}, [[0.0, 0.0], [100.0, 0.0]])
    >>> folder = write_recording(rec, tempfile.mkdtemp())
    >>> read_recording(folder / "spikes.csv", folder / "sites.csv", folder / "windows.csv").n_spikes
    3
    """
    check_recording(recording)
    if not isinstance(folder, (str, os.PathLike)):
        raise ArgumentError(f"folder: {described(folder)} is no path. Name a folder for the tables.")
    tables = dict(zip(TABLE_FILES, _table_lines(recording), strict=True))
    target = Path(folder).resolve()
    _check_target(target, overwrite)
    tag = uuid.uuid4().hex[:12]
    fresh, old = target.with_name(f".{target.name}.{tag}.part"), target.with_name(f".{target.name}.{tag}.old")
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        fresh.mkdir()
        for name, lines in tables.items():
            (fresh / name).write_text("\n".join(lines) + "\n", encoding="utf-8", newline="\n")
        if target.exists():
            target.rename(old)
            try:
                fresh.rename(target)
            except OSError:
                old.rename(target)
                raise
            shutil.rmtree(old)
        else:
            fresh.rename(target)
    except OSError as error:
        raise OutputError(f"{target}: the tables cannot be written: {error.strerror or error}.") from None
    finally:
        shutil.rmtree(fresh, ignore_errors=True)
    return target


def _check_target(target: Path, overwrite: bool) -> None:
    if not target.exists():
        return
    if not target.is_dir():
        raise OutputError(f"{target} is a file. Name a folder for the tables.")
    try:
        there = sorted(p.name for p in target.iterdir())
    except OSError as error:
        raise OutputError(f"{target}: the folder cannot be read: {error.strerror or error}.") from None
    foreign = [n for n in there if n not in TABLE_FILES]
    if foreign:
        raise OutputError(
            f"{target} holds other things than tables of a recording ({foreign[0]}). Name another folder."
        )
    if there and not overwrite:
        raise OutputError(f"{target} is not empty. Name another folder, or pass overwrite=True.")


def _table_lines(recording: Recording) -> Iterable[list[str]]:
    """Lines of the five tables, in the order of `TABLE_FILES`."""
    ids = _cells(recording.unit_ids, "unit ids", required=True)
    return (
        _spike_lines(recording, ids),
        _site_lines(recording, ids),
        _window_lines(recording),
        ["start_s,stop_s", *_number_rows(recording.exclusion_bounds)],
        [
            "unit_a,unit_b",
            *(f"{ids[recording.index_of(a)]},{ids[recording.index_of(b)]}" for a, b in recording.excluded_pairs),
        ],
    )


def _spike_lines(recording: Recording, ids: Sequence[str]) -> list[str]:
    unit = np.repeat(np.arange(recording.n_units), [t.size for t in recording.trains])
    time_s = np.concatenate(recording.trains)
    order = np.lexsort((unit, time_s))
    rows = zip(unit[order].tolist(), time_s[order].tolist(), strict=True)
    return ["unit,time_s", *(f"{ids[u]},{t!r}" for u, t in rows)]


def _site_lines(recording: Recording, ids: Sequence[str]) -> list[str]:
    header = ["unit", *COORDINATES[: recording.n_coordinates]]
    columns = [list(ids), *(list(map(repr, axis.tolist())) for axis in recording.positions.T)]
    if recording.groups is not None:
        header.append("group")
        columns.append(_cells(recording.groups, "groups", required=False))
    if recording.source_only:
        header.append("source_only")
        columns.append(["yes" if marked else "no" for marked in recording.source_only_mask])
    return [",".join(header), *map(",".join, zip(*columns, strict=True))]


def _window_lines(recording: Recording) -> list[str]:
    header, rows = "start_s,stop_s", _number_rows(recording.window_bounds)
    for name, labels in (("condition", recording.window_conditions), ("trial", recording.window_trials)):
        if labels is not None:
            header += f",{name}"
            cells = _cells(labels, f"{name}s of windows", required=False)
            rows = [f"{row},{cell}" for row, cell in zip(rows, cells, strict=True)]
    return [header, *rows]


def _number_rows(bounds: FloatArray) -> list[str]:
    return [f"{start!r},{stop!r}" for start, stop in bounds.tolist()]


def _cells(labels: Sequence[str], what: str, *, required: bool) -> list[str]:
    """Labels as cells, quoted where needed; refuse those that would not read back as they are."""
    for label in labels:
        read, bad = read_labels([label], required=required)
        if bad or read != [label]:
            raise RecordingError(
                f"{what}: {label!r} cannot be written to a table: it is empty, has blanks at its ends or "
                "holds signs that do not print. Rename it."
            )
    return [c if _NEEDS_NO_QUOTES.fullmatch(c) or not c else '"' + c.replace('"', '""') + '"' for c in labels]
