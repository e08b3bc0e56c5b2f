"""A finished bootstrap: replicates of the shared parameters, and what follows from them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray
from kernelfit._validation import distances, given_as
from kernelfit.errors import ArgumentError
from kernelfit.inference.bootstrap.band import replicated_band
from kernelfit.inference.bootstrap.interval_scale import IntervalScale
from kernelfit.inference.bootstrap.kind import BootstrapKind
from kernelfit.inference.bootstrap.replicated import STEP, Replicated, SharedFunction
from kernelfit.inference.scales import natural_values, shared_names, shared_units
from kernelfit.kernels import KernelCurve

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit


@dataclass(frozen=True, eq=False)
class Bootstrap:
    """Replicates of a fit. B replicates, Q shared parameters, working scale unless said.

    Replicates that failed keep their row; nothing below rests on them, and everything says on how many it does.

    Parameters
    ----------
    fit, kind, seed : what was replicated, how, from which random numbers
    replicates : (B, Q) estimates; rows that did not converge hold where the optimiser stopped, or NaN
    converged : (B,) whether a row is an estimate
    at_bound : (B, Q) -1 or 1 where a parameter sits at its lower or upper bound, else 0
    own_covariances : (B, Q, Q) of each replicate's own estimates, by `kind.covariance_kind`; NaN where not to be had
    messages : (B,) the optimiser's words, or what went wrong
    """

    fit: CouplingFit = field(repr=False)
    kind: BootstrapKind
    seed: int
    replicates: FloatArray = field(repr=False)
    converged: BoolArray = field(repr=False)
    at_bound: FloatArray = field(repr=False)
    own_covariances: FloatArray = field(repr=False)
    messages: tuple[str, ...] = field(repr=False)

    # --- how many ---------------------------------------------------------------------------------------

    @property
    def n_replicates(self) -> int:
        """Replicates asked for."""
        return len(self.converged)

    @property
    def n_failed(self) -> int:
        """Replicates that gave no estimate."""
        return int(np.sum(~self.converged))

    @property
    def failures(self) -> pd.DataFrame:
        """replicate, message: those that gave no estimate, and why."""
        failed = np.flatnonzero(~self.converged)
        return pd.DataFrame({"replicate": failed, "message": [self.messages[b] for b in failed]})

    @property
    def sentence(self) -> str:
        """What was done and how it went, for a caption or a log."""
        failed = f"; {self.n_failed} gave no estimate and are left out" if self.n_failed else ""
        return f"{self.n_replicates} replicates, {self.kind.words(self.fit)}, seed {self.seed}{failed}."

    # --- replicates -------------------------------------------------------------------------------------

    @property
    def table(self) -> pd.DataFrame:
        """By replicate: every shared parameter on its natural scale, then converged and message. A fresh copy."""
        natural = natural_values(self.fit, self.replicates)
        table = pd.DataFrame(natural, columns=list(shared_names(self.fit)))
        table.index.name = "replicate"
        table["converged"] = self.converged
        table["message"] = list(self.messages)
        return table

    @property
    def covariance(self) -> FloatArray:
        """(Q, Q) of the replicates that converged; NaN rows for parameters that do not move, or from fewer than two."""
        used = self.replicates[self.converged]
        full = np.full((self.fit.shared.size, self.fit.shared.size), np.nan)
        if len(used) < 2:
            return full
        moves = np.ptp(used, axis=0) > 0
        full[np.ix_(moves, moves)] = np.cov(used[:, moves], rowvar=False)
        return full

    # --- intervals --------------------------------------------------------------------------------------

    def intervals(self, level: float = 0.95, method: str = "percentile") -> pd.DataFrame:
        """Shared parameters by name: estimate, std_error, lower, upper, unit, n_used, note, on the natural scale.

        Lengths, exponents and the leak rate have their basic, studentised and BCa intervals made on the log scale, so
        that no end is negative; percentile intervals are the same on any scale. `std_error` is the standard deviation
        of the replicates, by the delta method as in `fit.parameters`.

        Parameters
        ----------
        level : coverage, strictly between 0 and 1
        method : "percentile"; "basic"; "studentised", by the replicates' own standard errors; "bca", bias-corrected and
            accelerated, for kinds by blocks of time

        Raises
        ------
        ArgumentError : a level or a method that cannot be had
        """
        from kernelfit.inference.bootstrap.table import interval_table

        return interval_table(self, level, method)

    def kernel_band(
        self, distances_um: FloatArray, level: float = 0.95, simultaneous: bool = False, method: str = "symmetric"
    ) -> pd.DataFrame:
        """The fitted kernel with a band from the replicates: distance_um, estimate, lower, upper.

        The band is the estimate and c standard errors to both sides; c is the `level` quantile over the replicates of
        |t|, or, where simultaneous, of the largest |t| over the distances asked for (sup-t: Montiel Olea and
        Plagborg-Moller 2019). t is J of the replicate less J of the fit, over the standard error.

        Parameters
        ----------
        distances_um : (m,) µm; NaN comes back for those beyond the distances at which the array has pairs
        level : coverage, strictly between 0 and 1
        simultaneous : True for a band that holds the whole curve at these distances at once
        method : "symmetric", standard errors are the standard deviations of the replicates; "studentised", those of the
            fit, and each replicate's own in its t

        Raises
        ------
        ArgumentError : a level or a method that cannot be had, or something that is no distance
        """
        return replicated_band(self, distances(distances_um), level, simultaneous, method)

    def of(self, function: SharedFunction, *, slope: SharedFunction | None = None) -> Replicated:
        """Any figure that follows from the shared parameters, at the fit and at every replicate.

        Parameters
        ----------
        function : takes (Q,) shared parameters on the working scale, as `fit.shared`; gives a number or (m,) numbers,
            NaN where it is not defined
        slope : (Q,) to (m, Q), its derivative; None: by differences. Only studentised and BCa intervals need it

        Returns
        -------
        Replicated : with `.estimate`, `.values` and `.intervals(level, method)`

        Raises
        ------
        ArgumentError : not a function
        """
        for name, given in (("function", function), ("slope", slope)):
            if not callable(given) and (given is not None or name == "function"):
                raise ArgumentError(f"{given_as(name, given)} cannot be called. Give a function of the parameters.")
        return Replicated.of(self, function, slope)

    def of_kernel(self, function: Callable[[KernelCurve], FloatArray]) -> Replicated:
        """The same for a figure that follows from the kernel alone: `function` takes a `KernelCurve`."""
        if not callable(function):
            raise ArgumentError(f"{given_as('function', function)} cannot be called. Give a function of a kernel.")
        kernel, span, n = self.fit.model.kernel, self.fit.span, self.fit.n_kernel
        return self.of(lambda shared: function(kernel.curve(shared[:n], span)))

    # --- what intervals are made with ---------------------------------------------------------------------

    @property
    def scale(self) -> IntervalScale:
        """The scale on which intervals of the parameters are made."""
        return IntervalScale.of(self.fit)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the shared parameters."""
        return shared_names(self.fit)

    @property
    def units(self) -> tuple[str, ...]:
        """Their units of measure."""
        return shared_units(self.fit)

    @property
    def fit_covariance(self) -> FloatArray:
        """(Q, Q) of the fit, of the kind that the replicates' own ones correspond to."""
        return self.fit.uncertainty.shared(self.kind.covariance_kind)

    @property
    def moving(self) -> BoolArray:
        """(Q,) parameters that have an influence by block of time."""
        return np.asarray(np.isfinite(self.fit.uncertainty.block_influence).all(axis=0))

    @property
    def block_influence(self) -> FloatArray:
        """(G, R) what each block of time moves those parameters by."""
        return self.fit.uncertainty.block_influence[:, self.moving]

    @property
    def steps(self) -> FloatArray:
        """(Q,) steps for slopes by differences: a small part of a standard error; 0 where nothing moves."""
        spread = np.sqrt(np.diag(self.covariance))
        return np.where(np.isfinite(spread), STEP * spread, 0.0)
