"""`kernelfit demo`: the main job on the invented recording that comes with the package."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from kernelfit.cli._console import say
from kernelfit.cli._fitting import Job, fit_and_write
from kernelfit.cli._inputs import OverwriteOption
from kernelfit.demo import DemoTruth, load_demo, load_demo_truth
from kernelfit.model.coupling import CouplingModel
from kernelfit.report.folder import check_folder
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
    say(f"The demo recording is invented. {truth.scenario}")
    model = CouplingModel(kernel="gaussian", bin_width=truth.bin_width)
    return fit_and_write(recording, model, Job(out=out, overwrite=overwrite, truth=_shown(truth)))


def _shown(truth: DemoTruth) -> Truth:
    """The truth in the words of a report, under the names that the parameters of a fit have."""
    table = truth.parameters
    values = tuple(TruthValue(str(n), float(v), str(u)) for n, v, u in table.itertuples())
    return Truth(values=values, sentence=truth.scenario)
