"""`kernelfit fit`: from tables to a results folder."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from kernelfit.cli._fitting import Job, fit_and_write
from kernelfit.cli._inputs import (
    DecimalOption,
    DropDuplicatesOption,
    ExcludePairsOption,
    ExclusionsOption,
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
    at_least_zero,
    one_of,
    positive,
    read_inputs,
)
from kernelfit.errors import ArgumentError
from kernelfit.kernels.base import Kernel
from kernelfit.kernels.registry import KERNELS
from kernelfit.kernels.spline import Spline
from kernelfit.model.coupling import CouplingModel
from kernelfit.report.folder import check_folder

DEFAULT_OUT = Path("kernelfit-results")
LINKS = ("exp",)
SAME_SITE = ("exclude", "own", "kernel")
AFTER_SPIKE = ("basis", "none")
COVARIANCES = ("robust", "model")
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
        str, typer.Option("--kernel", metavar="NAME", help=f"Distance law: {', '.join(KERNELS)}.")
    ] = "gaussian",
    spline_basis: Annotated[
        int | None, typer.Option("--spline-basis", metavar="N", help="Number of coefficients of the spline.")
    ] = None,
    smoothing: Annotated[
        float | None,
        typer.Option("--smoothing", metavar="X", help="Weight of the spline's difference penalty; 0: none."),
    ] = None,
    bin_ms: Annotated[
        float, typer.Option("--bin-ms", metavar="MS", help="Bin width; `kernelfit inspect` suggests one.")
    ] = 1.0,
    link: Annotated[
        str, typer.Option("--link", metavar="NAME", help=f"From drive to rate: {', '.join(LINKS)}.")
    ] = "exp",
    leak_rate: Annotated[
        float | None, typer.Option("--leak-rate", metavar="PER_S", help="Fix the leak rate instead of fitting it.")
    ] = None,
    max_distance_um: Annotated[
        float | None, typer.Option("--max-distance-um", metavar="UM", help="Leave out pairs further apart.")
    ] = None,
    same_site: Annotated[
        str,
        typer.Option(
            "--same-site",
            metavar="HOW",
            help="Pairs on one site: exclude, own (a coefficient of their own) or kernel (like any pair).",
        ),
    ] = "exclude",
    after_spike: Annotated[
        str,
        typer.Option("--after-spike", metavar="HOW", help="A unit's effect on itself: basis (fitted) or none."),
    ] = "basis",
    warm_up_s: Annotated[
        float,
        typer.Option("--warm-up-s", metavar="S", help="Leave out this long after each start; it still drives."),
    ] = 0.0,
    covariance: Annotated[
        str,
        typer.Option("--covariance", metavar="KIND", help="Headline intervals: robust (blocks of time) or model."),
    ] = "robust",
    units: UnitsOption = None,
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
        int | None, typer.Option("--threads", metavar="N", help="Threads; all cores unless stated.")
    ] = None,
    seed: Annotated[int, typer.Option("--seed", metavar="N", help="Of the randomised test of the fit.")] = 0,
) -> int:
    """Fit coupling against distance, leak rate and baselines, and write a folder with report and tables.

    Exit status 0: done. 2: the input or the call is wrong. 3: the fit did not converge; all is written, and marked.
    """
    model = CouplingModel(
        kernel=_kernel(kernel, spline_basis, smoothing),
        link=one_of("--link", link, LINKS),
        bin_width=positive("--bin-ms", bin_ms, "milliseconds, such as 1") / MS_PER_S,
        leak_rate=_optional("--leak-rate", leak_rate, "per second, such as 50 for a time constant of 20 ms"),
        max_distance=_optional("--max-distance-um", max_distance_um, "micrometres, such as 800"),
        same_site=one_of("--same-site", same_site, SAME_SITE),
        after_spike=one_of("--after-spike", after_spike, AFTER_SPIKE),
        warm_up_s=at_least_zero("--warm-up-s", warm_up_s, "seconds, such as 1"),
    )
    job = Job(
        out=out,
        overwrite=overwrite,
        covariance=one_of("--covariance", covariance, COVARIANCES),
        threads=_at_least("--threads", threads, 1),
        seed=_at_least("--seed", seed, 0) or 0,
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
            source_only=source_only or (),
        ),
    )
    return fit_and_write(recording, model, job)


def _kernel(name: str, spline_basis: int | None, smoothing: float | None) -> Kernel:
    """The kernel object of the options; those of the spline need the spline."""
    family = KERNELS[one_of("--kernel", name, KERNELS)]
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


def _optional(option: str, value: float | None, what: str) -> float | None:
    return None if value is None else positive(option, value, what)


def _at_least(option: str, value: int | None, smallest: int) -> int | None:
    if value is not None and value < smallest:
        raise ArgumentError(f"{option}: {value} is out of range. Give a whole number, {smallest} or more.")
    return value
