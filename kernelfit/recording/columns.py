"""Columns of a raw table as numbers or labels, and the units of measure they are written in."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.errors import ArgumentError, Fault
from kernelfit.recording.cells import BadCell, read_labels, read_numbers, written
from kernelfit.recording.raw_table import LENGTH_UNITS, TIME_UNITS, RawTable

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
