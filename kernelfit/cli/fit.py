"""`kernelfit fit`: from tables to a results folder."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, get_args

import typer

from kernelfit.cli._console import tell
from kernelfit.cli._fitting import Job, fit_and_write
from kernelfit.cli._inputs import (
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
    SourceOnlyOption,
    SpikesArgument,
    StartOption,
    StopOption,
    TableOptions,
    TimeUnitOption,
    UnitsOption,
    WindowsOption,
    read_inputs,
)
from kernelfit.cli._parsing import above_zero, from_zero, one_of, whole
from kernelfit.errors import ArgumentError, RecordingError
from kernelfit.fitting.result import covariance_kind
from kernelfit.kernels.base import Kernel
from kernelfit.kernels.registry import KERNELS
from kernelfit.kernels.spline import Spline
from kernelfit.model.coupling import CouplingModel, CovarianceKind
from kernelfit.model.links import LINKS
from kernelfit.recording.checks_input import doubt_about_positions, doubt_about_times
from kernelfit.recording.recording import Recording
from kernelfit.report.folder import check_folder

DEFAULT_OUT = Path("kernelfit-results")
SAME_SITE = ("exclude", "own", "kernel")
AFTER_SPIKE = ("basis", "none")
PROFILE = "profile"
INTERVALS = (*get_args(CovarianceKind), PROFILE)
MS_PER_S = 1000.0


def fit_command(
    spikes: SpikesArgument,
    sites: SitesArgument,
    windows: WindowsOption = None,
    exclusions: ExclusionsOption = None,
    exclude_pairs: ExcludePairsOption = None,
    out: Annotated[
        Path, typer.Option("--out", metavar="DIR", help="Folder for the results; new or empty.")
    ] = DEFAULT_OUT,
    overwrite: OverwriteOption = False,
    kernel: Annotated[
        str,
        typer.Option(
            "--kernel",
            metavar="NAME",
            parser=one_of("--kernel", KERNELS),
            help=f"Distance law: {', '.join(KERNELS)}.",
        ),
    ] = "gaussian",
    spline_basis: Annotated[
        int | None,
        typer.Option(
            "--spline-basis",
            metavar="N",
            parser=whole("--spline-basis", 4),
            help=f"With --kernel spline: number of coefficients, 4 or more.  [default: {Spline().n_basis}]",
        ),
    ] = None,
    smoothing: Annotated[
        float | None,
        typer.Option(
            "--smoothing",
            metavar="X",
            parser=from_zero("--smoothing", "the weight of the penalty, such as 10"),
            help="With --kernel spline: weight of the penalty on differences between neighbouring coefficients."
            f"  [default: {Spline().smoothing:g}]",
        ),
    ] = None,
    bin_ms: Annotated[
        float,
        typer.Option(
            "--bin-ms",
            metavar="MS",
            parser=above_zero("--bin-ms", "milliseconds, such as 1"),
            help="Bin width in milliseconds; `kernelfit inspect` suggests one.",
        ),
    ] = 1.0,
    link: Annotated[
        str,
        typer.Option(
            "--link",
            metavar="NAME",
            parser=one_of("--link", LINKS),
            help=f"How the drive becomes a rate: {', '.join(LINKS)}.",
        ),
    ] = "exp",
    leak_rate: Annotated[
        float | None,
        typer.Option(
            "--leak-rate",
            metavar="PER_S",
            parser=above_zero("--leak-rate", "1/s, such as 50 for a time constant of 20 ms"),
            help="Fix the leak rate, in 1/s, instead of fitting it; 50 is a time constant of 20 ms.",
        ),
    ] = None,
    max_distance_um: Annotated[
        float | None,
        typer.Option(
            "--max-distance-um",
            metavar="UM",
            parser=above_zero("--max-distance-um", "micrometres, such as 800"),
            help="Leave out pairs further apart than this, in µm. Without it: all pairs.",
        ),
    ] = None,
    same_site: Annotated[
        str,
        typer.Option(
            "--same-site",
            metavar="HOW",
            parser=one_of("--same-site", SAME_SITE),
            help="Pairs of units on one site: exclude, own (one coefficient of their own) or kernel (like any pair).",
        ),
    ] = "exclude",
    after_spike: Annotated[
        str,
        typer.Option(
            "--after-spike",
            metavar="HOW",
            parser=one_of("--after-spike", AFTER_SPIKE),
            help="What a spike does to its own unit: basis (fitted) or none.",
        ),
    ] = "basis",
    warm_up_s: Annotated[
        float,
        typer.Option(
            "--warm-up-s",
            metavar="S",
            parser=from_zero("--warm-up-s", "seconds, such as 1"),
            help="Seconds after the start of each window and the end of each exclusion that drive and are not "
            "themselves explained.",
        ),
    ] = 0.0,
    intervals: Annotated[
        str,
        typer.Option(
            "--intervals",
            metavar="KIND",
            parser=one_of("--intervals", INTERVALS),
            help="Intervals in the results: robust (from blocks of time), jackknife (each block left out in turn), "
            "model (right if the model is) or profile (robust, and the profile likelihood beside it: takes as long "
            "again).",
        ),
    ] = "robust",
    units: UnitsOption = None,
    leave_out: LeaveOutOption = None,
    source_only: SourceOnlyOption = None,
    min_spikes: MinSpikesOption = None,
    start_s: StartOption = None,
    stop_s: StopOption = None,
    time_unit: TimeUnitOption = "s",
    sampling_rate_hz: SamplingRateOption = None,
    length_unit: LengthUnitOption = "um",
    decimal: DecimalOption = ".",
    drop_duplicates: DropDuplicatesOption = False,
    threads: Annotated[
        int | None,
        typer.Option(
            "--threads",
            metavar="N",
            parser=whole("--threads", 1),
            help="Number of threads. Without it: as many as there are cores.",
        ),
    ] = None,
    seed: Annotated[
        int,
        typer.Option(
            "--seed",
            metavar="N",
            parser=whole("--seed", 0),
            help="Seed of the random draws in the tests of coupling and of the fit; same seed, same numbers.",
        ),
    ] = 0,
) -> int:
    """Fit coupling against distance; write a report and tables.

    Finds the coupling kernel, the leak rate, and the baseline and after-spike effects of every unit. The folder of
    the results holds report.html, fit.json, parameters.csv, baselines.csv, kernel.csv, goodness.csv and the figures.

    Example: kernelfit fit spikes.csv sites.csv --bin-ms 5 --out results

    Exit status 0: done. 2: the input or the call is wrong. 3: not converged; all is written, and marked.
    """
    model = CouplingModel(
        kernel=_kernel(kernel, spline_basis, smoothing),
        link=link,
        bin_width=bin_ms / MS_PER_S,
        leak_rate=leak_rate,
        max_distance=max_distance_um,
        same_site=same_site,
        after_spike=after_spike,
        warm_up_s=warm_up_s,
    )
    job = Job(
        out=out,
        overwrite=overwrite,
        covariance=covariance_kind("robust" if intervals == PROFILE else intervals),
        profiles=intervals == PROFILE,
        threads=threads,
        seed=seed,
    )
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
        Selection(
            min_spikes=min_spikes,
            start_s=start_s,
            stop_s=stop_s,
            units=units or (),
            leave_out=leave_out or (),
            source_only=source_only or (),
        ),
    )
    _question_units_of_measure(recording)
    return fit_and_write(recording, model, job)


def _question_units_of_measure(recording: Recording) -> None:
    """Say before a long fit what looks wrong; microseconds read as seconds, a fit of days, are refused."""
    doubt = doubt_about_times(recording)
    if doubt is not None and doubt.severity == "error":
        raise RecordingError(f"{doubt.where}: {doubt.what} {doubt.remedy}")
    for found in (doubt, doubt_about_positions(recording)):
        if found is not None:
            tell(f"warning: {found.where}: {found.what} {found.remedy}")


def _kernel(name: str, spline_basis: int | None, smoothing: float | None) -> Kernel:
    """The kernel object of the options; those of the spline need the spline."""
    family = KERNELS[name]
    if family is not Spline:
        for option, value in (("--spline-basis", spline_basis), ("--smoothing", smoothing)):
            if value is not None:
                raise ArgumentError(f"{option}: the kernel {name!r} has no such thing. Add --kernel spline.")
        return family()
    usual = Spline()
    return Spline(
        n_basis=usual.n_basis if spline_basis is None else spline_basis,
        smoothing=usual.smoothing if smoothing is None else smoothing,
    )
