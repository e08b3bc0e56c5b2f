"""What `fit` and `demo` share: fit with progress, write the results, print them in five lines."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from kernelfit.cli._console import ProgressLine, say, tell
from kernelfit.inference.sureness import how_sure
from kernelfit.model.coupling import CouplingModel, CovarianceKind
from kernelfit.recording.recording import Recording
from kernelfit.report.content import note_text
from kernelfit.report.fit_page import write_results
from kernelfit.report.readings import result_lines
from kernelfit.report.truth import Truth

DONE, NOT_CONVERGED = 0, 3


@dataclass(frozen=True, slots=True, kw_only=True)
class Job:
    """How a fit is made and where its results go.

    Parameters
    ----------
    out : the results folder
    overwrite : replace earlier results there
    covariance : "robust", "jackknife" or "model", of the headline intervals
    profiles : profile the likelihood of every shared parameter too
    threads : None: as many as there are cores
    seed : of the sign flips of the coupling test and the randomised goodness-of-fit test
    truth : what a simulated recording was made from
    """

    out: Path
    overwrite: bool = False
    covariance: CovarianceKind = "robust"
    profiles: bool = False
    threads: int | None = None
    seed: int = 0
    truth: Truth | None = None


def fit_and_write(recording: Recording, model: CouplingModel, job: Job) -> int:
    """Fit, write the results folder, print the result, and return the exit status."""
    with ProgressLine() as progress:
        fit = model.fit(recording, covariance=job.covariance, threads=job.threads, seed=job.seed, progress=progress)
        progress.stage("how sure the numbers are")
        sureness = how_sure(
            fit, recording, profiles=job.profiles, threads=job.threads, seed=job.seed, progress=progress
        )
        progress.stage("testing the fit, writing the report")
        goodness = fit.goodness(seed=job.seed)
        report = write_results(
            job.out,
            fit,
            recording,
            goodness=goodness,
            sureness=sureness,
            truth=job.truth,
            overwrite=job.overwrite,
        )
    if not fit.converged:
        tell(f"error: the fit did not converge: {fit.solver.message}")
    for note in fit.notes:
        tell(f"{note.severity}: {note_text(note)}")
    say(*result_lines(fit, goodness), "", f"Report: {report}", f"Tables, figures and the fit: {report.parent}")
    return DONE if fit.converged else NOT_CONVERGED
