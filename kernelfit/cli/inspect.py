"""`kernelfit inspect`: what a recording is like and what is wrong with it, before any fit."""

from __future__ import annotations

import shutil
import sys
import textwrap
from pathlib import Path
from typing import Annotated

import typer

from kernelfit.cli._console import say
from kernelfit.cli._inputs import (
    CLOCK,
    DecimalOption,
    DropDuplicatesOption,
    ExcludePairsOption,
    ExclusionsOption,
    LeaveOutOption,
    LengthUnitOption,
    MinSpikesOption,
    OverwriteOption,
    SamplingRateOption,
    Selection,
    SitesArgument,
    SpikesArgument,
    StartOption,
    StopOption,
    TableOptions,
    TimeUnitOption,
    UnitsOption,
    WindowsOption,
    read_inputs,
)
from kernelfit.cli._parsing import number, whole
from kernelfit.errors import ArgumentError
from kernelfit.recording.inspection import Inspection, inspect_recording
from kernelfit.report.folder import check_folder
from kernelfit.report.inspection_page import write_inspection

DONE = 0
_NARROW, _WIDE = 40, 110  # columns of a terminal that text is wrapped to


def inspect_command(
    spikes: SpikesArgument,
    sites: SitesArgument,
    windows: WindowsOption = None,
    exclusions: ExclusionsOption = None,
    exclude_pairs: ExcludePairsOption = None,
    out: Annotated[
        Path | None,
        typer.Option(
            "--out",
            metavar="DIR",
            help="Folder for the page and the proposals; new or empty. Without it: text on the screen only.",
        ),
    ] = None,
    overwrite: OverwriteOption = False,
    raster_start_s: Annotated[
        float | None,
        typer.Option(
            "--raster-start-s",
            metavar="S",
            parser=number("--raster-start-s", CLOCK),
            help="With --out: where the raster picture starts, in seconds. Without it: at a typical stretch.",
        ),
    ] = None,
    units: UnitsOption = None,
    leave_out: LeaveOutOption = None,
    min_spikes: MinSpikesOption = None,
    start_s: StartOption = None,
    stop_s: StopOption = None,
    time_unit: TimeUnitOption = "s",
    sampling_rate_hz: SamplingRateOption = None,
    length_unit: LengthUnitOption = "um",
    decimal: DecimalOption = ".",
    drop_duplicates: DropDuplicatesOption = False,
    seed: Annotated[
        int,
        typer.Option(
            "--seed",
            metavar="N",
            parser=whole("--seed", 0),
            help="Seed of the random shifts that tell artefacts from chance; same seed, same numbers.",
        ),
    ] = 0,
) -> int:
    """Look at a recording before any fit: findings, and what could be left out.

    With --out the folder holds inspection.html, proposed_exclusions.csv (for --exclusions), proposed_pairs.csv (for
    --exclude-pairs), and the numbers and pictures behind the page.

    Example: kernelfit inspect spikes.csv sites.csv --out look

    Exit status 0: done, whatever was found. 2: the input or the call is wrong.
    """
    if out is None and raster_start_s is not None:
        raise ArgumentError("--raster-start-s: without --out there is no picture to start. Add --out DIR.")
    if out is None and overwrite:
        raise ArgumentError("--overwrite: without --out nothing is written. Add --out DIR, or leave it out.")
    if out is not None:
        check_folder(out, overwrite=overwrite)  # now, not after the long part
    recording = read_inputs(
        spikes,
        sites,
        TableOptions(
            windows=windows,
            exclusions=exclusions,
            exclude_pairs=exclude_pairs,
            time_unit=time_unit,
            sampling_rate_hz=sampling_rate_hz,
            length_unit=length_unit,
            decimal=decimal,
            drop_duplicates=drop_duplicates,
        ),
        Selection(min_spikes=min_spikes, start_s=start_s, stop_s=stop_s, units=units or (), leave_out=leave_out or ()),
    )
    inspection = inspect_recording(recording, seed=seed)
    page = (
        None if out is None else write_inspection(out, inspection, raster_start_s=raster_start_s, overwrite=overwrite)
    )
    say(*console_lines(inspection, _width()))
    if page is not None:
        say("", f"Page: {page}", f"Proposals and numbers: {page.parent}")
    return DONE


def _width() -> int | None:
    """Columns to wrap to on a terminal; None elsewhere, where a line is a line."""
    if not sys.stdout.isatty():
        return None
    return min(max(shutil.get_terminal_size().columns, _NARROW), _WIDE)


def console_lines(inspection: Inspection, width: int | None) -> list[str]:
    """The headline, then each finding: severity, what, where, remedy.

    Parameters
    ----------
    inspection : what was found
    width : columns to wrap to, or None for one line a sentence
    """
    lines = [part for line in inspection.headline() for part in _wrapped(line, "", width)]
    for finding in inspection.findings:
        lines.append("")
        lines += _wrapped(f"{finding.severity}: {finding.what}", "  ", width)
        lines += _wrapped(f"  where: {finding.where}", "    ", width)
        lines += _wrapped(f"  remedy: {finding.remedy}", "    ", width)
    return lines


def _wrapped(text: str, indent: str, width: int | None) -> list[str]:
    if width is None:
        return [text]
    return textwrap.wrap(text, width, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False)
