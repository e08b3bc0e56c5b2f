"""`kernelfit demo`: the main job on the invented recording that comes with the package."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Annotated

import typer

from kernelfit.cli._console import tell
from kernelfit.cli._fitting import Job, fit_and_write
from kernelfit.cli._inputs import OverwriteOption
from kernelfit.demo import DemoTruth, load_demo, load_demo_truth
from kernelfit.model.coupling import CouplingModel
from kernelfit.report.folder import check_folder
from kernelfit.report.numbers import number_text, time_text
from kernelfit.report.truth import Truth, TruthValue

DEFAULT_OUT = Path("kernelfit-demo")


def demo_command(
    out: Annotated[
        Path, typer.Option("--out", metavar="DIR", help="Folder for the results; new or empty.")
    ] = DEFAULT_OUT,
    overwrite: OverwriteOption = False,
) -> int:
    """Fit an invented recording whose truth is known.

    The report in the results folder says how the estimates compare with the truth.
    """
    check_folder(out, overwrite=overwrite)
    recording, truth = load_demo(), load_demo_truth()
    tell(
        "An invented recording. It was made from this truth: one spike at "
        f"{number_text(truth.reference_um, 2)} µm raises the rate by "
        f"{number_text(100 * math.expm1(truth.amplitude), 2)} %, fading with a time constant of "
        f"{time_text(1 / truth.leak_rate)}; the gaussian kernel has a length of "
        f"{number_text(truth.length_um)} µm."
    )
    model = CouplingModel(kernel="gaussian", bin_width=truth.bin_width)
    return fit_and_write(recording, model, Job(out=out, overwrite=overwrite, truth=_shown(truth)))


def _shown(truth: DemoTruth) -> Truth:
    """The truth in the words of a report, under the names that the parameters of a fit have."""
    table = truth.parameters
    values = tuple(TruthValue(str(n), float(v), str(u)) for n, v, u in table.itertuples())
    return Truth(values=values, sentence=f"This recording is invented: it was simulated. {truth.scenario}")
