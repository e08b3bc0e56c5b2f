"""The arguments and options that commands share, and the way from them to a recording."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, TypeAlias

import typer

from kernelfit.cli._parsing import above_zero, number, one_of, whole
from kernelfit.errors import ArgumentError
from kernelfit.recording.recording import Recording, clock_text
from kernelfit.recording.tables import read_recording

TIME_UNITS = ("s", "ms", "us", "samples")
LENGTH_UNITS = ("um", "mm")
DECIMALS = (".", ",")
CLOCK = "seconds on the recording's clock, such as 60"

SpikesArgument: TypeAlias = Annotated[
    Path,
    typer.Argument(metavar="SPIKES", show_default=False, help="Table of spikes, one row each: columns unit, time_s."),
]
SitesArgument: TypeAlias = Annotated[
    Path,
    typer.Argument(
        metavar="SITES",
        show_default=False,
        help="Table of sites, one row for each unit: columns unit, x_um, optional y_um, z_um, group, source_only.",
    ),
]
WindowsOption: TypeAlias = Annotated[
    Path | None,
    typer.Option(
        "--windows",
        metavar="FILE",
        help="Table of observed stretches: columns start_s, stop_s, optional condition, trial. Without it: one "
        "window over all spikes.",
    ),
]
ExclusionsOption: TypeAlias = Annotated[
    Path | None,
    typer.Option(
        "--exclusions",
        metavar="FILE",
        help="Table of stretches that are not data, such as artefacts: columns start_s, stop_s.",
    ),
]
ExcludePairsOption: TypeAlias = Annotated[
    Path | None,
    typer.Option(
        "--exclude-pairs",
        metavar="FILE",
        help="Table of pairs of units to leave out of the kernel: columns unit_a, unit_b.",
    ),
]
TimeUnitOption: TypeAlias = Annotated[
    str,
    typer.Option(
        "--time-unit",
        metavar="UNIT",
        parser=one_of("--time-unit", TIME_UNITS),
        help="Unit of all times in the tables: s, ms, us or samples.",
    ),
]
SamplingRateOption: TypeAlias = Annotated[
    float | None,
    typer.Option(
        "--sampling-rate-hz",
        metavar="HZ",
        parser=above_zero("--sampling-rate-hz", "samples per second, such as 20000"),
        help="Samples per second; needed with --time-unit samples.",
    ),
]
LengthUnitOption: TypeAlias = Annotated[
    str,
    typer.Option(
        "--length-unit",
        metavar="UNIT",
        parser=one_of("--length-unit", LENGTH_UNITS),
        help="Unit of all positions in the tables: um or mm.",
    ),
]
DecimalOption: TypeAlias = Annotated[
    str,
    typer.Option(
        "--decimal",
        metavar="MARK",
        parser=one_of("--decimal", DECIMALS),
        help="Decimal mark in the tables: point (.) or comma (,).",
    ),
]
DropDuplicatesOption: TypeAlias = Annotated[
    bool,
    typer.Option("--drop-duplicates", help="Drop exact repeats of a spike instead of refusing them."),
]
MinSpikesOption: TypeAlias = Annotated[
    int | None,
    typer.Option(
        "--min-spikes",
        metavar="N",
        parser=whole("--min-spikes", 0),
        help="Leave out units with fewer spikes than this in the windows.",
    ),
]
StartOption: TypeAlias = Annotated[
    float | None,
    typer.Option(
        "--start-s",
        metavar="S",
        parser=number("--start-s", CLOCK),
        help="Use the recording from this time on, in seconds on its own clock.",
    ),
]
StopOption: TypeAlias = Annotated[
    float | None,
    typer.Option(
        "--stop-s",
        metavar="S",
        parser=number("--stop-s", CLOCK),
        help="Use the recording up to this time, in seconds on its own clock.",
    ),
]
UnitsOption: TypeAlias = Annotated[
    list[str] | None,
    typer.Option("--units", metavar="IDS", help="Keep only these units: ids with commas between. May be repeated."),
]
SourceOnlyOption: TypeAlias = Annotated[
    list[str] | None,
    typer.Option(
        "--source-only",
        metavar="IDS",
        help="Let these units drive others without being explained themselves: ids with commas between. May be "
        "repeated.",
    ),
]
LeaveOutOption: TypeAlias = Annotated[
    list[str] | None,
    typer.Option("--leave-out", metavar="IDS", help="Leave out these units: ids with commas between. May be repeated."),
]
OverwriteOption: TypeAlias = Annotated[
    bool, typer.Option("--overwrite", help="Replace earlier results of kernelfit in that folder.")
]


@dataclass(frozen=True, slots=True, kw_only=True)
class TableOptions:
    """How the tables are to be read; the meaning is that of `kernelfit.read_recording`."""

    windows: Path | None = None
    exclusions: Path | None = None
    exclude_pairs: Path | None = None
    time_unit: str = "s"
    sampling_rate_hz: float | None = None
    length_unit: str = "um"
    decimal: str = "."
    drop_duplicates: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Selection:
    """Which part of the recording is used; the meaning is that of `Recording.select`.

    `units`, `leave_out` and `source_only` are as typed: each entry an id, or several with commas between. Those of
    `leave_out` are left out of `units`, or of all units where those are not named.
    """

    min_spikes: int | None = None
    start_s: float | None = None
    stop_s: float | None = None
    units: Sequence[str] = ()
    leave_out: Sequence[str] = ()
    source_only: Sequence[str] = ()


def read_inputs(
    spikes: Path, sites: Path, tables: TableOptions | None = None, selection: Selection | None = None
) -> Recording:
    """The recording that the arguments and options of a command describe.

    Raises
    ------
    ArgumentError : options that do not go together; the message names them as typed
    TableError, RecordingError : the tables cannot be used, or the selection leaves nothing
    """
    tables = TableOptions() if tables is None else tables
    selection = Selection() if selection is None else selection
    _check(tables, selection)
    recording = read_recording(
        spikes,
        sites,
        tables.windows,
        exclusions=tables.exclusions,
        exclude_pairs=tables.exclude_pairs,
        time_unit=tables.time_unit,
        sampling_rate_hz=tables.sampling_rate_hz,
        length_unit=tables.length_unit,
        decimal=tables.decimal,
        drop_duplicates=tables.drop_duplicates,
    )
    chosen = recording.select(
        units=_kept(selection, recording),
        min_spikes=selection.min_spikes,
        start_s=selection.start_s,
        stop_s=selection.stop_s,
        source_only=_ids(selection.source_only, recording) or None,
    )
    if chosen.source_only_mask.all():
        raise ArgumentError("--source-only: no unit is left to be explained. Name fewer units.")
    return chosen


def _check(tables: TableOptions, selection: Selection) -> None:
    """Options that do not go together; each alone has been checked where it was parsed."""
    if tables.time_unit == "samples" and tables.sampling_rate_hz is None:
        raise ArgumentError(
            "--time-unit samples: without the sampling rate samples are no times. Add --sampling-rate-hz, "
            "such as --sampling-rate-hz 20000."
        )
    if tables.time_unit != "samples" and tables.sampling_rate_hz is not None:
        raise ArgumentError(
            f"--sampling-rate-hz: has no effect on times in {tables.time_unit}. Add --time-unit samples, "
            "or leave the rate out."
        )
    start, stop = selection.start_s, selection.stop_s
    if start is not None and stop is not None and stop <= start:
        raise ArgumentError(
            f"--stop-s: {clock_text(stop)} is not after --start-s {clock_text(start)}. Give a later stop."
        )


def _kept(selection: Selection, recording: Recording) -> list[str] | None:
    """Ids of the units to keep; None: all."""
    named = _ids(selection.units, recording)
    left_out = _ids(selection.leave_out, recording)
    if not left_out:
        return named or None
    for unit in left_out:
        recording.index_of(unit)
    kept = [unit for unit in named or recording.unit_ids if unit not in set(left_out)]
    if not kept:
        raise ArgumentError("--leave-out: no unit is left. Name fewer units.")
    return kept


def _ids(typed: Iterable[str], recording: Recording) -> list[str]:
    """Unit ids from entries with commas between. An entry that is an id as it stands is that id."""
    known = set(recording.unit_ids)
    found: list[str] = []
    for entry in typed:
        found += [entry] if entry in known else [part.strip() for part in entry.split(",") if part.strip()]
    return found
