"""What is fitted: kernel, link, bins and terms, as one immutable description."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal, cast

from kernelfit._validation import given_as, is_number, positive
from kernelfit.errors import ArgumentError
from kernelfit.kernels import Kernel, kernel_from
from kernelfit.model.links import Link, link_from
from kernelfit.model.terms import (
    AfterSpikeTerm,
    NoRateCourse,
    SameSiteTreatment,
    after_spike_from,
    rate_course_from,
)

if TYPE_CHECKING:
    from kernelfit.fitting.progress import ProgressCallback
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording

CovarianceKind = Literal["robust", "jackknife", "model"]


@dataclass(frozen=True, init=False)
class CouplingModel:
    """A coupling model: what `fit` estimates from a recording. Holds choices, no data.

    Parameters
    ----------
    kernel : name of a distance law or an object such as ``kf.kernels.Spline(n_basis=8)``
    link : rate link; "exp"
    bin_width : seconds
    leak_rate : 1/s fixes the leak; None estimates it
    max_distance : pairs farther apart (µm) are left out of the kernel; None: no limit
    same_site : "exclude" leaves pairs on one site out, "own" gives them one coefficient, "kernel" keeps them in
    after_spike : "basis" (the default), "none" or ``kf.terms.AfterSpike(...)``
    rate_course : "none"
    warm_up_s : seconds after every window start and exclusion that feed the state but are not explained

    Raises
    ------
    ArgumentError : a value out of range or a name not known; the message lists what is
    """

    kernel: Kernel
    link: Link
    bin_width: float
    leak_rate: float | None
    max_distance: float | None
    same_site: SameSiteTreatment
    after_spike: AfterSpikeTerm
    rate_course: NoRateCourse
    warm_up_s: float

    def __init__(
        self,
        kernel: str | Kernel = "gaussian",
        link: str | Link = "exp",
        bin_width: float = 0.001,
        leak_rate: float | None = None,
        max_distance: float | None = None,
        same_site: str = "exclude",
        after_spike: str | AfterSpikeTerm = "basis",
        rate_course: str | NoRateCourse = "none",
        warm_up_s: float = 0.0,
    ) -> None:
        if not isinstance(same_site, str) or same_site not in ("exclude", "own", "kernel"):
            raise ArgumentError(f"{given_as('same_site', same_site)} is not known. Say 'exclude', 'own' or 'kernel'.")
        put = object.__setattr__  # the one place where the frozen fields are filled
        put(self, "kernel", kernel_from(kernel))
        put(self, "link", link_from(link))
        put(self, "bin_width", positive(bin_width, "bin_width", "seconds, such as 0.001"))
        put(self, "leak_rate", None if leak_rate is None else positive(leak_rate, "leak_rate", "1/s, such as 50"))
        put(
            self,
            "max_distance",
            None if max_distance is None else positive(max_distance, "max_distance", "µm, such as 500"),
        )
        put(self, "same_site", cast(SameSiteTreatment, same_site))
        put(self, "after_spike", after_spike_from(after_spike))
        put(self, "rate_course", rate_course_from(rate_course))
        if not (is_number(warm_up_s) and warm_up_s >= 0):
            raise ArgumentError(f"{given_as('warm_up_s', warm_up_s)} must be a number of seconds, 0 or more.")
        put(self, "warm_up_s", float(warm_up_s))

    def settled(self, *, smoothing: float | None = None, ridge: float | None = None) -> CouplingModel:
        """The same model with these numbers for the smoothing of the kernel and the ridge of the after-spike term.

        Parameters
        ----------
        smoothing, ridge : weights of the penalties; None leaves what is there

        Raises
        ------
        ArgumentError : a number below 0, or a term that has no such penalty
        """
        kernel = self.kernel if smoothing is None else self.kernel.with_smoothing(smoothing)
        after_spike = self.after_spike if ridge is None else self.after_spike.with_ridge(ridge)
        return replace(self, kernel=kernel, after_spike=after_spike)

    def fit(
        self,
        recording: Recording,
        covariance: CovarianceKind = "robust",
        *,
        threads: int | None = None,
        seed: int = 0,
        progress: ProgressCallback | None = None,
    ) -> CouplingFit:
        """Estimate the model from a recording by penalised maximum likelihood.

        Parameters
        ----------
        recording : what was recorded
        covariance : "robust", scores clustered by blocks of time (the default of every headline interval), or "model",
            the inverse expected information; both are computed and ``fit.with_covariance`` switches
        threads : at most this many, 1 or more; None: all. The result is the same to the bit
        seed : for the sign flips of the coupling test
        progress : called with a `Progress` now and then

        Returns
        -------
        CouplingFit

        Raises
        ------
        ArgumentError : not a recording, or an argument out of range
        ModelError : nothing to estimate (one unit, no spikes, no pair within reach)
        NotIdentifiedError : the recording says nothing about some parameter
        GridError : the bin width does not fit the recording
        """
        from kernelfit.fitting.fit import fit_model  # fitting builds on this module

        return fit_model(self, recording, covariance, threads=threads, seed=seed, progress=progress)
