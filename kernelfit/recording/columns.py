"""Columns of a raw table: found by exact name, in the unit of measure asked for, as numbers or labels."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.errors import ArgumentError, Fault
from kernelfit.recording.cells import BadCell, read_labels, read_numbers, written
from kernelfit.recording.raw_table import KNOWN_COLUMNS, LENGTH_UNITS, TIME_UNITS, RawTable

# Beyond these a number is a slip or in another unit, and squares and bin numbers would overflow later.
MAX_TIME_S = 1e10
MAX_COORDINATE_UM = 1e9


@dataclass(frozen=True, slots=True)
class Measures:
    """How numbers in the tables are written: unit of time, unit of length, decimal mark."""

    time_unit: str = "s"
    sampling_rate_hz: float | None = None
    length_unit: str = "um"
    decimal: str = "."

    def __post_init__(self) -> None:
        for value, allowed, option in (
            (self.time_unit, TIME_UNITS, "time_unit"),
            (self.length_unit, LENGTH_UNITS, "length_unit"),
            (self.decimal, (".", ","), "decimal"),
        ):
            if not isinstance(value, str) or value not in allowed:
                raise ArgumentError(f"{option}={value!r} is not known. Use one of {', '.join(map(repr, allowed))}.")
        rate = self.sampling_rate_hz
        if self.time_unit == "samples":
            if rate is None:
                raise ArgumentError("time_unit='samples' needs sampling_rate_hz, the samples per second.")
            if isinstance(rate, bool) or not isinstance(rate, (int, float, np.integer, np.floating)):
                raise ArgumentError(f"sampling_rate_hz={rate!r} is not a number. Give the samples per second.")
            if not 0 < rate < np.inf:
                raise ArgumentError(
                    f"sampling_rate_hz={rate!r} must be above 0 and finite. Give the samples per second."
                )
        elif rate is not None:
            raise ArgumentError(
                f"sampling_rate_hz={rate!r} goes with time_unit='samples' only, and time_unit is "
                f"{self.time_unit!r}. Leave it out, or set time_unit='samples'."
            )

    @property
    def notes(self) -> tuple[str, ...]:
        """What was converted, for the origin of the recording."""
        notes = []
        if self.time_unit != "s":
            rate = f" at {self.sampling_rate_hz:g} Hz" if self.sampling_rate_hz is not None else ""
            notes.append(f"times converted from {self.time_unit}{rate} to s")
        if self.length_unit != "um":
            notes.append(f"positions converted from {self.length_unit} to um")
        return tuple(notes)

    def seconds(self, values: FloatArray) -> FloatArray:
        """Times of the tables in seconds: one division, so each is the nearest double to the quotient."""
        if self.time_unit == "samples":
            return values / float(self.sampling_rate_hz or np.nan)
        return values / {"s": 1.0, "ms": 1e3, "us": 1e6}[self.time_unit]

    def micrometres(self, values: FloatArray) -> FloatArray:
        """Positions of the tables in micrometres."""
        # Rounding to 1e-9 µm takes off the noise of the product: 1.001 mm is 1001 µm, not 1000.9999999999999.
        return values if self.length_unit == "um" else np.round(values * 1e3, 9)


def _missing(table: RawTable, wanted: str, remedy: str) -> Fault:
    found = ", ".join(n or "(no name)" for n in table.names)
    return table.fault(f"There is no column {wanted!r}; found: {found}.", table.hint or remedy)


def _closest_column(table: RawTable, wanted: str) -> str | None:
    """A column that may have been meant: not one that has a meaning of its own."""
    from difflib import get_close_matches

    free = [n for n in table.names if n not in KNOWN_COLUMNS[table.source.role]]
    lower = {n.casefold(): n for n in reversed(free)}
    close = get_close_matches(wanted.casefold(), lower, n=1, cutoff=0.5)
    if close:
        return lower[close[0]]
    stem = wanted.partition("_")[0]
    return next((n for n in free if stem in n.casefold().replace("_", " ").split()), None)


def find(table: RawTable, wanted: str, faults: list[Fault]) -> str | None:
    """A column by its exact name; faults say what is there instead."""
    if wanted not in table.names:
        close = _closest_column(table, wanted)
        rename = (
            f"Rename column {close!r} to {wanted!r} if that is it"
            if close
            else f"Call the column that holds it {wanted!r}"
        )
        faults.append(_missing(table, wanted, f"{rename}; names must match exactly."))
        return None
    if table.names.count(wanted) > 1:
        remedy = "Keep one of them, or rename the others."
        faults.append(
            table.fault(f"There are {table.names.count(wanted)} columns of this name.", remedy, column=wanted)
        )
        return None
    return wanted


def find_time(table: RawTable, stem: str, measures: Measures, faults: list[Fault]) -> str | None:
    """``time_ms`` or ``time_s`` for milliseconds: the name with the unit first, then the standard name."""
    return _find_measured(table, stem, (measures.time_unit, *TIME_UNITS), "time_unit", faults)


def find_length(table: RawTable, stem: str, measures: Measures, faults: list[Fault]) -> str | None:
    """``x_mm`` or ``x_um`` for millimetres: the name with the unit first, then the standard name."""
    return _find_measured(table, stem, (measures.length_unit, *LENGTH_UNITS), "length_unit", faults)


def _find_measured(table: RawTable, stem: str, units: Sequence[str], option: str, faults: list[Fault]) -> str | None:
    """`units`: the unit asked for, the standard unit, then all others."""
    plain = f"{stem}_{units[1]}"
    for name in (f"{stem}_{units[0]}", plain):
        if name in table.names:
            return find(table, name, faults)
    other = next((u for u in units if f"{stem}_{u}" in table.names), None)
    if other is None:
        return find(table, plain, faults)
    rate = " and sampling_rate_hz=..., the samples per second" if other == "samples" else ""
    remedy = f"Load with {option}={other!r}{rate}, or convert the column and call it {plain!r}."
    faults.append(_missing(table, plain, remedy))
    return None


def add_bad(table: RawTable, column: str, bad: Iterable[BadCell], faults: list[Fault]) -> None:
    """Bad cells of a column as faults of the table."""
    cells = table.column(column)
    faults.extend(table.fault(b.problem, b.remedy, at=b.at, column=column, value=written(cells, b.at)) for b in bad)


def times_of(table: RawTable, column: str, measures: Measures, faults: list[Fault]) -> FloatArray:
    """A column of times in seconds, (n_rows,); NaN, and a fault, where a cell is bad."""
    values, bad = read_numbers(table.column(column), measures.decimal)
    add_bad(table, column, bad, faults)
    return _limited(table, column, measures.seconds(values), MAX_TIME_S, "s", "time_unit", faults)


def coordinates_of(table: RawTable, column: str, measures: Measures, faults: list[Fault]) -> FloatArray:
    """A column of coordinates in micrometres, (n_rows,); NaN, and a fault, where a cell is bad."""
    values, bad = read_numbers(table.column(column), measures.decimal)
    add_bad(table, column, bad, faults)
    with np.errstate(over="ignore"):  # beyond the largest double: infinite, and refused as too far
        values = measures.micrometres(values)
    return _limited(table, column, values, MAX_COORDINATE_UM, "µm", "length_unit", faults)


def _limited(
    table: RawTable,
    column: str,
    values: FloatArray,
    limit: float,
    unit: str,
    option: str,
    faults: list[Fault],
) -> FloatArray:
    """NaN, and a fault, where a converted value is beyond any recording."""
    too_far = np.abs(values) > limit
    if not too_far.any():
        return values
    problem = f"Beyond {limit:.0e} {unit}, further than any recording goes."
    remedy = f"Correct the value, or check {option}."
    add_bad(table, column, (BadCell(int(k), problem, remedy) for k in np.flatnonzero(too_far)), faults)
    return np.where(too_far, np.nan, values)


def labels_of(table: RawTable, column: str, faults: list[Fault], *, required: bool) -> list[str]:
    """A column of ids or labels as text; "", and a fault, where a cell is bad (or empty and `required`)."""
    labels, bad = read_labels(table.column(column), required=required)
    add_bad(table, column, bad, faults)
    return labels


def optional_labels_of(table: RawTable, column: str, faults: list[Fault]) -> list[str] | None:
    """Labels of a column that may be absent: then None."""
    if column not in table.names or find(table, column, faults) is None:
        return None
    return labels_of(table, column, faults, required=False)
