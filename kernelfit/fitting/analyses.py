"""What else can be asked of a fit, as methods of it; inference does the work."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, cast

import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.recording.recording import Recording

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.fitting.smoothing_path import SmoothingPath
    from kernelfit.inference.bootstrap import Bootstrap, BootstrapKind, BootstrapProgressCallback
    from kernelfit.inference.influence import Influence

LEVEL = 0.95


class Analysed:
    """Mixed into `CouplingFit`: derived figures, worth, influence, bootstrap, the kernel over its smoothing."""

    def derived(
        self,
        level: float = LEVEL,
        distances_um: FloatArray | None = None,
        bootstrap: Bootstrap | None = None,
        recording: Recording | None = None,
    ) -> pd.DataFrame:
        """Figures that follow from the fit, by name: estimate, std_error, lower, upper, unit, note.

        Parameters
        ----------
        level, distances_um : coverage, in (0, 1); µm where the change of the rate is told, None: at the usual ones
        bootstrap : replicates of this fit, for percentile intervals; None: delta method, by `covariance_kind`
        recording : for a loaded fit of a recording with excluded pairs, which a fit does not hold

        Raises
        ------
        ArgumentError, StorageError : a level or distance out of range, a bootstrap or a recording of another fit
        """
        from kernelfit.inference.derived import derived_table

        return derived_table(cast("CouplingFit", self), level, distances_um, bootstrap, recording)

    @property
    def worth(self) -> pd.DataFrame:
        """What the recording is worth for each shared parameter, by name.

        ratio : robust over model-based standard error, on the working scale
        spikes, seconds : of an ideal recording, one in which every bin is independent given the model, that would leave
            the estimate as uncertain: those counted, over the square of the ratio, never more than were counted
        independent_stretches : blocks of time, fewer where neighbours go together
        carrying_stretches : how many of them carry the estimate, (sum d^2)^2 / sum d^4 of the blocks' influences d: few
            where a few blocks pull much harder than the others
        """
        from kernelfit.inference.worth import worth_table

        return worth_table(cast("CouplingFit", self))

    def influence(self, recording: Recording | None = None, *, threads: int | None = None) -> Influence:
        """Which stretch of time, event and unit each parameter rests on: its change on leaving that out.

        Parameters
        ----------
        recording : the one that was fitted; None where the fit was made in this process
        threads : at most this many; None: as many as the machine has

        Raises
        ------
        StorageError : no recording at hand, or another one
        """
        from kernelfit.inference.influence import influence

        return influence(cast("CouplingFit", self), recording, threads)

    def bootstrap(
        self,
        kind: str | BootstrapKind = "one-step",
        *,
        n_replicates: int = 2000,
        seed: int = 0,
        recording: Recording | None = None,
        jobs: int | None = None,
        folder: str | Path | None = None,
        progress: BootstrapProgressCallback | None = None,
    ) -> Bootstrap:
        """Replicates of the fit, for intervals and bands that no normal law has to be assumed for.

        Parameters
        ----------
        kind : "one-step", random weights on the scores of the blocks of time, thousands at once, no recording needed;
            "block-weights", refits with such weights; "parametric", refits of recordings simulated from the fit; or an
            object of ``kf.bootstrap`` with other options
        n_replicates, seed : how many, and what they are drawn from; more of the same seed begin with the same ones
        recording : needed by the refitting kinds for a loaded fit; must be the one that was fitted
        jobs : processes at once for the refitting kinds; None: as many as the machine has. Nothing depends on it
        folder : keeps every replicate as it is finished; the same call goes on from what is there
        progress : called with a `BootstrapProgress` after every replicate

        Raises
        ------
        ArgumentError, NotConvergedError, ModelError : a call that cannot be, no optimum, too few blocks of time
        StorageError, OutputError : no recording or another one; a folder of other replicates, or not to be written
        """
        from kernelfit.inference.bootstrap.run import bootstrap

        return bootstrap(
            cast("CouplingFit", self),
            kind,
            n_replicates=n_replicates,
            seed=seed,
            recording=recording,
            jobs=jobs,
            folder=folder,
            progress=progress,
        )

    def smoothing_path(
        self,
        smoothing: Sequence[float] | FloatArray | None = None,
        *,
        validate: bool = False,
        recording: Recording | None = None,
        threads: int | None = None,
    ) -> SmoothingPath:
        """The kernel refitted at each smoothing of a grid, with what the criteria say of it.

        Parameters
        ----------
        smoothing : above 0; None: thirteen from hardly any to as good as endless. The fit's own joins them
        validate : True to fit each smoothing to the recording without stretches of time too, and judge it there
        recording, threads : as for `problem`

        Raises
        ------
        ArgumentError : a kernel without smoothing, or values that are none
        StorageError : no recording at hand, or another one
        """
        from kernelfit.fitting.smoothing_path import smoothing_path  # it builds on this module

        return smoothing_path(
            cast("CouplingFit", self), smoothing, validate=validate, recording=recording, threads=threads
        )
