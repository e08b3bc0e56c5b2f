"""The profile likelihoods of a fit, as methods of it; inference does the work."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Literal, cast

from kernelfit._typing import FloatArray
from kernelfit.errors import Unavailable
from kernelfit.fitting.progress import ProgressCallback
from kernelfit.recording.recording import Recording

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.inference.profile import Profile
    from kernelfit.inference.profile_amplitudes import CompatibleAmplitudes
    from kernelfit.inference.profile_contour import ProfileContour


class Profiled:
    """Mixed into `CouplingFit`: everything here evaluates the likelihood again, and needs the recording."""

    def profile(
        self,
        name: str,
        level: float = 0.95,
        recording: Recording | None = None,
        *,
        n_points: int = 8,
        threads: int | None = None,
        progress: ProgressCallback | None = None,
    ) -> Profile | Unavailable:
        """Profile likelihood of one shared parameter: every value that a likelihood-ratio test keeps.

        Parameters
        ----------
        name : of a row of `parameters`, such as "length_um"
        level : coverage of the intervals, strictly between 0 and 1
        recording : the one that was fitted; None where the fit was made in this process
        n_points : of the curve, aimed at on each side; each takes one to three sweeps
        threads : at most this many; None: as many as the machine has
        progress : called with a `Progress` after every sweep

        Returns
        -------
        Profile, with the interval by the likelihood as it is (`interval`) and the one scaled by the robust variance
        (`scaled`); or Unavailable with the reason: a parameter that was fixed or about which the recording says nothing

        Raises
        ------
        ArgumentError : no such parameter, or an argument out of range
        NotConvergedError : there is no optimum to fall from
        StorageError : no recording at hand, or another one
        """
        from kernelfit.inference.profile import profile_parameter

        return profile_parameter(cast("CouplingFit", self), name, level, recording, n_points, threads, progress)

    def profile_contour(
        self,
        first: str,
        second: str,
        recording: Recording | None = None,
        *,
        n_points: int = 11,
        threads: int | None = None,
        progress: ProgressCallback | None = None,
    ) -> ProfileContour | Unavailable:
        """Profile likelihood of two shared parameters on a grid of `n_points` each way, with 50, 90 and 95 % contours.

        Parameters and errors as for `profile`. About 1.2 sweeps for each point of the grid.
        """
        from kernelfit.inference.profile_contour import profile_contour

        return profile_contour(cast("CouplingFit", self), (first, second), recording, n_points, threads, progress)

    def compatible_amplitudes(
        self,
        lengths_um: Sequence[float] | FloatArray | None = None,
        level: float = 0.95,
        leak: float | Literal["re-estimated", "held"] | None = None,
        recording: Recording | None = None,
        *,
        threads: int | None = None,
        progress: ProgressCallback | None = None,
    ) -> CompatibleAmplitudes | Unavailable:
        """The amplitudes that a likelihood-ratio test keeps at each length, the length held.

        Parameters
        ----------
        lengths_um : to hold, µm; None: nine, from half the reference distance to twice the largest one
        level : coverage at each length
        leak : "re-estimated" for every length and amplitude, "held" at the fit's, or a rate (1/s) to hold it at; None:
            re-estimated where coupling was found, else held, as without coupling any leak will do and the amplitude
            is only limited by the fastest. The sentence says which. A leak fixed by the model stays
        recording, threads, progress : as for `profile`

        Returns
        -------
        CompatibleAmplitudes, whose `sentence` states what can be said whatever the length; Unavailable with the reason
        for a kernel of other parameters than one amplitude and one length

        Raises
        ------
        ArgumentError : a length that the array cannot tell, or another argument out of range
        NotConvergedError, StorageError : as for `profile`
        """
        from kernelfit.inference.profile_amplitudes import compatible_amplitudes

        return compatible_amplitudes(cast("CouplingFit", self), lengths_um, level, leak, recording, threads, progress)
