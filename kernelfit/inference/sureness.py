"""What a report asks of a fit besides its own intervals: other kinds of them, and what the result rests on."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import pandas as pd

from kernelfit.errors import KernelfitError, Unavailable
from kernelfit.fitting.progress import ProgressCallback
from kernelfit.inference.bootstrap.result import Bootstrap
from kernelfit.inference.derived.registry import derived_figures
from kernelfit.inference.derived.setting import setting_of
from kernelfit.inference.influence import Influence
from kernelfit.inference.profile import Profile
from kernelfit.inference.scales import shared_names

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording

N_REPLICATES = 2000


@dataclass(frozen=True, eq=False)
class Sureness:
    """Everything on how sure the numbers of a fit are, for a report.

    Parameters
    ----------
    bootstrap : one-step, from the blocks of time, or why there is none
    influence : what carries the result, or why that cannot be said
    profiles : by parameter, where they were asked for
    derived : derived figures with intervals; see `CouplingFit.derived`
    reads : what each derived figure is, in words
    """

    bootstrap: Bootstrap | Unavailable
    influence: Influence | Unavailable
    profiles: dict[str, Profile | Unavailable]
    derived: pd.DataFrame
    reads: dict[str, str]


def how_sure(
    fit: CouplingFit,
    recording: Recording,
    *,
    profiles: bool = False,
    threads: int | None = None,
    seed: int = 0,
    progress: ProgressCallback | None = None,
) -> Sureness:
    """Bootstrap, influence and derived figures of a fit; with `profiles` the profile likelihood of every parameter.

    Parameters
    ----------
    fit, recording : the fit and what it was fitted to
    profiles : profile every shared parameter too, which takes about as long as the fit
    threads, seed, progress : as for `CouplingModel.fit`; the seed is that of the bootstrap
    """
    figures = derived_figures(setting_of(fit, recording).at(fit.shared))
    return Sureness(
        bootstrap=_bootstrap(fit, seed),
        influence=_influence(fit, recording, threads),
        profiles={
            name: fit.profile(name, recording=recording, threads=threads, progress=progress)
            for name in (shared_names(fit) if profiles and fit.converged else ())
        },
        derived=fit.derived(),
        reads={figure.name: figure.reads for figure in figures},
    )


def _bootstrap(fit: CouplingFit, seed: int) -> Bootstrap | Unavailable:
    try:
        return fit.bootstrap("one-step", n_replicates=N_REPLICATES, seed=seed)
    except KernelfitError as error:  # few blocks, no optimum: the message says which
        return Unavailable(str(error).rstrip("."))


def _influence(fit: CouplingFit, recording: Recording, threads: int | None) -> Influence | Unavailable:
    if not fit.converged:
        return Unavailable("the fit did not converge")
    if not fit.free.any():
        return Unavailable("no shared parameter was estimated")
    if not fit.verdict.found:
        return Unavailable("no coupling was found, so there is nothing that carries it")
    return fit.influence(recording, threads=threads)
