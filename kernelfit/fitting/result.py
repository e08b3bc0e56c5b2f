"""A finished fit: numbers, tables and curves, and nothing that refits, draws or prints."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, cast, get_args

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit._validation import (
    DISTANCES,
    check_level,
    check_seed,
    check_threads,
    check_truth_value,
    distances,
    flat_numbers,
    given_as,
    is_number,
    numbers,
)
from kernelfit.engine.evaluate import Point, SweepData, compensate, evaluate, expected_counts
from kernelfit.errors import ArgumentError, StorageError, Unavailable
from kernelfit.fitting.analyses import LEVEL, Analysed
from kernelfit.fitting.covariance import Uncertainty
from kernelfit.fitting.detection import CouplingVerdict
from kernelfit.fitting.effective import TermSize
from kernelfit.fitting.outcome import FittedRates, Note, ScoreTest, SolverReport
from kernelfit.fitting.problem import Estimate, Problem, geometry_of, make_problem
from kernelfit.fitting.profiles import Profiled
from kernelfit.fitting.smoothing import Smoothing
from kernelfit.kernels import DistanceRange, KernelCurve
from kernelfit.model.coupling import CouplingModel, CovarianceKind
from kernelfit.recording.grid import Grid, bins_between, make_grid
from kernelfit.recording.recording import Origin, Recording, clock_text

if TYPE_CHECKING:
    from kernelfit.diagnostics.goodness import Goodness

SAME_LIKELIHOOD = 1e-9  # relative: sums in another order differ by less, another recording by more


@dataclass(frozen=True, eq=False)
class CouplingFit(Profiled, Analysed):
    """A fitted coupling model. Everything an analysis or a report needs; a change is a copy.

    Parameters
    ----------
    model : what was fitted
    unit_ids, positions, origin, window_bounds : of the recording; µm, seconds
    targets : (n_targets,) indices of the units that were explained
    counts : (n_units,) spikes in the bins that count
    n_bins : bins that count
    own : (n_targets, 1 + M) baseline and after-spike coefficients
    shared : (Q,) kernel parameters (working scale), same-site coefficient, log leak rate
    at_bound : (Q,) -1 or 1 where a parameter sits at its lower or upper bound, or where nothing holds it on that side;
        else 0
    free : (Q,) True for parameters that were estimated and sit at no bound, whether or not they have a variance
    bound_reasons : what each bound that was reached means, or why nothing holds a parameter
    span, distinct_um, n_pairs : distances the kernel covers, and unordered pairs at each
    radius_interval : 95 % likelihood interval of a discrete length, or None
    uncertainty, covariance_kind : both covariances, and which one the tables use
    log_likelihood : nats, sum of y log mean - mean - log y!, penalties excluded
    null_log_likelihood, saturated_log_likelihood, uncoupled_log_likelihood : constant rates; a rate for every bin; the
        same model without coupling
    spectral_radius : of the matrix E[f'] J / alpha; 1 and more cannot be stationary
    verdict, notes, solver, second_optimum, after_spike_test : records
    term_sizes : coefficients and effective parameters of every term
    smoothing : how weights of penalties that were left to the data were chosen (`model` holds the numbers), or None
    seed, seconds, version, created : provenance
    recording : the recording, where the fit was made in this process
    """

    model: CouplingModel
    unit_ids: tuple[str, ...]
    positions: FloatArray
    origin: Origin
    window_bounds: FloatArray
    targets: IntArray
    counts: IntArray
    n_bins: int
    own: FloatArray
    shared: FloatArray
    at_bound: FloatArray
    free: BoolArray
    bound_reasons: tuple[str, ...]
    span: DistanceRange
    distinct_um: FloatArray
    n_pairs: IntArray
    has_same_site: bool
    radius_interval: tuple[float, float] | None
    uncertainty: Uncertainty
    covariance_kind: CovarianceKind
    log_likelihood: float
    null_log_likelihood: float
    saturated_log_likelihood: float
    uncoupled_log_likelihood: float
    spectral_radius: float
    verdict: CouplingVerdict
    notes: tuple[Note, ...]
    solver: SolverReport
    second_optimum: str | None
    after_spike_test: ScoreTest | Unavailable | None
    term_sizes: tuple[TermSize, ...]
    smoothing: Smoothing | None
    seed: int
    seconds: float
    version: str
    created: str
    recording: Recording | None = field(default=None, repr=False)

    # --- one number -----------------------------------------------------------------------------------

    @property
    def converged(self) -> bool:
        """Whether the optimiser reached a top."""
        return self.solver.converged

    @property
    def leak_rate(self) -> float:
        """alpha, 1/s: how fast the effect of a spike fades."""
        return float(self.model.leak_rate) if self.model.leak_rate is not None else float(np.exp(self.shared[-1]))

    @property
    def time_constant(self) -> float:
        """1 / alpha, seconds."""
        return 1.0 / self.leak_rate

    @property
    def reference_distance_um(self) -> float:
        """Distance at which amplitudes are stated, µm: the median distance to the nearest other site."""
        return self.span.reference_um

    @property
    def duration_s(self) -> float:
        """Time in the likelihood, seconds."""
        return self.n_bins * self.model.bin_width

    @property
    def n_spikes(self) -> int:
        """Spikes in the likelihood: those of explained units in bins that count."""
        return int(self.counts[self.targets].sum())

    @property
    def n_parameters(self) -> int:
        """Parameters estimated: own ones of explained units, and shared ones that were not fixed by the model."""
        return int(self.own.size + self.shared.size)

    @property
    def effective_parameters(self) -> float:
        """tr((I + S)^-1 I), I the information and S the penalties; without penalties `n_parameters`."""
        return float(sum(size.effective for size in self.term_sizes))

    @property
    def effective_by_term(self) -> pd.DataFrame:
        """By term of the model: coefficients and effective, how many of them the penalties leave to the data."""
        index = pd.Index([size.term for size in self.term_sizes], name="term", dtype=object)
        rows = [(size.coefficients, size.effective) for size in self.term_sizes]
        return pd.DataFrame(rows, index=index, columns=["coefficients", "effective"])

    @property
    def aic(self) -> float:
        """-2 log L + 2 k, k the effective number of parameters."""
        return -2.0 * self.log_likelihood + 2.0 * self.effective_parameters

    @property
    def bic(self) -> float:
        """-2 log L + k log n, k the effective number of parameters, n the number of spikes in the likelihood."""
        return -2.0 * self.log_likelihood + self.effective_parameters * float(np.log(max(self.n_spikes, 1)))

    @property
    def block_length_s(self) -> float:
        """Mean length of the blocks of time of the robust covariance, seconds."""
        return self.uncertainty.block_length_s

    @property
    def n_blocks(self) -> int:
        """Blocks of time of the robust covariance."""
        return self.uncertainty.n_blocks

    # --- tables ---------------------------------------------------------------------------------------

    @property
    def parameters(self) -> pd.DataFrame:
        """Shared parameters by name: estimate, std_error, lower, upper (95 %), unit, note. A fresh copy each time."""
        from kernelfit.inference.parameters import parameter_table  # inference stands above; the contract wants it here

        return parameter_table(self, self.covariance_kind, LEVEL)

    @property
    def std_errors(self) -> pd.DataFrame:
        """By parameter name: model, robust and their ratio robust / model. A fresh copy at each call."""
        from kernelfit.inference.parameters import std_error_table

        return std_error_table(self)

    @property
    def baselines(self) -> pd.DataFrame:
        """By unit, all units in order: estimate (b_i), std_error, lower, upper, rate_hz = f(b_i), note."""
        from kernelfit.inference.parameters import baseline_table

        return baseline_table(self, self.covariance_kind, LEVEL)

    @property
    def pairs_by_distance(self) -> pd.DataFrame:
        """distance_um, n_pairs: unordered pairs the kernel covers at each distinct distance."""
        return pd.DataFrame({"distance_um": self.distinct_um.copy(), "n_pairs": self.n_pairs.copy()})

    # --- curves ---------------------------------------------------------------------------------------

    @property
    def n_kernel(self) -> int:
        """Parameters of the kernel among the shared ones."""
        return len(self.model.kernel.parameters(self.span))

    @property
    def kernel_curve(self) -> KernelCurve:
        """The fitted kernel as a function of distance."""
        return self.model.kernel.curve(self.shared[: self.n_kernel], self.span)

    def kernel(self, distances_um: FloatArray) -> FloatArray:
        """J, the effect of one spike on the predictor, at each distance (µm); same shape as the input.

        Raises
        ------
        ArgumentError : something that is no distance
        """
        return self.kernel_curve(numbers(distances_um, "distances_um", DISTANCES, least=0.0))

    def kernel_band(self, distances_um: FloatArray, level: float = LEVEL, simultaneous: bool = False) -> pd.DataFrame:
        """The fitted kernel with a band.

        Parameters
        ----------
        distances_um : (m,) µm
        level : coverage, strictly between 0 and 1
        simultaneous : False: at each distance by itself the interval covers J with probability `level`. True: a sup-t
            band that covers J at all the distances asked for at once. It covers these and no others: for the whole
            curve ask for a grid that is fine beside the kernel's length, over the range of `pairs_by_distance`; the
            band of a single distance is its pointwise interval

        Returns
        -------
        DataFrame : distance_um, estimate, lower, upper, a row for each distance asked for. NaN below the smallest and
            above the largest distance at which a firing unit has a partner: nothing was recorded there
            (`fit.kernel` extrapolates). Gaps between those two are bridged by the kernel's formula. Where no coupling
            was found the band is widened for the search over length and leak, and holds zero; a parameter at its bound
            is taken as known; between the ends of a radius' interval (95 % at any level) it holds J and 0; NaN where
            nothing has a standard error, or where nothing holds an amplitude. Under a penalty the model-based band is
            the Bayesian one, which covers the curve on average over its distances; where the data chose the smoothing
            every kind of band allows for not knowing it

        Raises
        ------
        ArgumentError : a level outside (0, 1), or something that is no distance
        """
        from kernelfit.inference.parameters import kernel_band

        check_level(level)
        check_truth_value(simultaneous, "simultaneous")
        return kernel_band(self, distances(distances_um), level, simultaneous)

    @property
    def after_spike_constants_s(self) -> FloatArray:
        """(M,) time constants of the after-spike traces, seconds."""
        return self.model.after_spike.constants(self.model.bin_width)

    def after_spike_curves(self, lags_s: FloatArray) -> FloatArray | Unavailable:
        """(n_units, n_lags) factor by which a unit's own spike multiplies its rate; NaN for units not explained.

        Parameters
        ----------
        lags_s : (n_lags,) seconds after the spike; the first bin after a spike is the shortest lag that means anything

        Raises
        ------
        ArgumentError : something that is no lag
        """
        lags = _lags(lags_s)
        if self.own.shape[1] == 1:
            return Unavailable("the model has no after-spike term")
        traces = np.exp(-lags[None, :] / self.after_spike_constants_s[:, None])
        curves = np.full((len(self.unit_ids), traces.shape[1]), np.nan)
        curves[self.targets] = np.exp(self.own[:, 1:] @ traces)
        return curves

    def after_spike_band(
        self, unit: str, lags_s: FloatArray, level: float = LEVEL, simultaneous: bool = False
    ) -> pd.DataFrame | Unavailable:
        """One unit's after-spike curve with a band: lag_s, estimate, lower, upper (rate multipliers).

        `simultaneous` as in `kernel_band`: True covers the lags asked for all at once.

        Raises
        ------
        ArgumentError : no such unit, a level outside (0, 1), or something that is no lag
        """
        from kernelfit.inference.parameters import after_spike_band

        lags = _lags(lags_s)
        check_level(level)
        check_truth_value(simultaneous, "simultaneous")
        if self.own.shape[1] == 1:
            return Unavailable("the model has no after-spike term")
        return after_spike_band(self, self._target_of(unit), lags, level, simultaneous)

    def _target_of(self, unit: str) -> int:
        if not isinstance(unit, str) or unit not in self.unit_ids:
            known = ", ".join(self.unit_ids[:5]) + (", ..." if len(self.unit_ids) > 5 else "")
            raise ArgumentError(f"{given_as('unit', unit)} is not in this fit. Its units: {known}.")
        place = np.flatnonzero(self.targets == self.unit_ids.index(unit))
        if place.size == 0:
            raise ArgumentError(f"unit {unit!r} was not explained: silent in the bins that count, or source-only.")
        return int(place[0])

    # --- looking at the recording again -----------------------------------------------------------------

    def point(self, data: SweepData, distance_index: IntArray, own_site: BoolArray) -> Point:
        """The engine's view of the fit, without derivatives."""
        by_distance = np.append(self.kernel(self.distinct_um), 0.0)
        table = by_distance[distance_index[data.targets].T]
        if self.has_same_site:
            table = table + self.shared[self.n_kernel] * own_site[data.targets].T
        return Point(
            link=self.model.link.code,
            leak=self.leak_rate,
            fit_leak=False,
            tables=table[None],
            baseline=np.ascontiguousarray(self.own[:, 0]),
            trace_decay=np.exp(-self.model.bin_width / self.after_spike_constants_s),
            coefficient=np.ascontiguousarray(self.own[:, 1:].T),
        )

    def _with_recording(self, recording: Recording | None) -> tuple[Grid, SweepData, Point]:
        """Grid, data and point for a recording, checked to be the one that was fitted."""
        recording = self.recording if recording is None else recording
        if recording is None:
            raise StorageError(
                "A loaded fit does not hold the spikes. Pass recording=kf.read_recording(...) with the same tables."
            )
        grid = make_grid(recording, self.model.bin_width, warm_up_s=self.model.warm_up_s)
        if recording.unit_ids != self.unit_ids or not np.array_equal(grid.counts_in_sum, self.counts):
            raise StorageError(
                f"{recording.origin.name('spikes')} and {self.origin.name('spikes')}: this recording is "
                "not the one that "
                f"was fitted ({recording.n_units} units and {int(grid.counts_in_sum.sum())} spikes against "
                f"{len(self.unit_ids)} and {int(self.counts.sum())}). Give the same tables, windows, "
                "exclusions and selection."
            )
        data = SweepData.from_grid(grid, self.targets)
        geometry = geometry_of(self.model, recording, self.targets)
        same = geometry.distinct_um.shape == self.distinct_um.shape
        if same:
            point = self.point(data, geometry.distance_index, geometry.own_site)
            same = recording is self.recording or self._likelihood_is(data, point)
        if not same:
            raise StorageError(
                f"{recording.origin.name('spikes')} and {self.origin.name('spikes')}: this recording is not the one "
                "that was fitted: units and numbers of spikes agree, but spike times, positions, windows or excluded "
                "pairs do not. Give the same tables."
            )
        return grid, data, point

    def problem(self, recording: Recording | None = None, *, threads: int | None = None) -> Problem:
        """The model on the recording again, ready to be evaluated or refitted.

        Parameters
        ----------
        recording : the one that was fitted; None where the fit was made in this process
        threads : at most this many; None: as many as the machine has

        Raises
        ------
        StorageError : no recording at hand, or another one
        """
        check_threads(threads)
        self._with_recording(recording)  # refuses another recording
        return make_problem(self.model, cast(Recording, recording or self.recording), threads=threads)

    @property
    def estimate(self) -> Estimate:
        """Own and shared parameters on the working scale, as `problem` takes them."""
        return Estimate(self.own, self.shared)

    def _likelihood_is(self, data: SweepData, point: Point) -> bool:
        """Whether the log-likelihood on these data is the fit's: it is not on another recording."""
        here = float(evaluate(data, point, derivatives=False).log_likelihood.sum()) - data.log_factorials
        return bool(abs(here - self.log_likelihood) <= SAME_LIKELIHOOD * abs(self.log_likelihood))

    def goodness(self, recording: Recording | None = None, seed: int = 0) -> Goodness:
        """Does the model describe the recording? Time rescaling with the discrete-time correction.

        Parameters
        ----------
        recording : needed for a loaded fit; must be the one that was fitted
        seed : of the random placing of spikes inside their bins

        Raises
        ------
        ArgumentError : a seed that is none
        StorageError : no recording, or another one
        """
        from kernelfit.diagnostics.goodness import (
            goodness_of_fit,
        )  # diagnostics stand above; the contract wants it here

        check_seed(seed)
        _, data, point = self._with_recording(recording)
        return goodness_of_fit(
            compensate(data, point),
            self.unit_ids,
            log_likelihood=self.log_likelihood,
            null_log_likelihood=self.null_log_likelihood,
            saturated_log_likelihood=self.saturated_log_likelihood,
            n_spikes=self.n_spikes,
            seed=seed,
        )

    def fitted_rates(self, start_s: float, stop_s: float, recording: Recording | None = None) -> FittedRates:
        """Fitted rates and observed counts in the bins between two times of one window.

        Parameters
        ----------
        start_s, stop_s : on the recording's clock: every bin that this stretch touches, of the window that holds
            `start_s`

        Raises
        ------
        ArgumentError : no window holds `start_s`, or the stretch is empty or not finite
        StorageError : no recording, or another one
        """
        if not (is_number(start_s) and is_number(stop_s)):
            raise ArgumentError(
                f"{given_as('start_s', start_s)}, {given_as('stop_s', stop_s)}: both must be finite times in seconds, "
                "on the recording's clock."
            )
        grid, data, point = self._with_recording(recording)
        width = grid.bin_width
        w, first, n = bins_between(recording or cast(Recording, self.recording), grid, float(start_s), float(stop_s))
        if n <= 0:
            begin, end = self.window_bounds[0, 0], self.window_bounds[-1, 1]
            raise ArgumentError(
                f"start_s={clock_text(start_s)}, stop_s={clock_text(stop_s)}: no window holds this stretch. Give one "
                f"that starts in a window and ends later; the windows lie between {clock_text(begin)} and "
                f"{clock_text(end)} s."
            )
        at = int(grid.window_first_bin[w]) + first
        rate = np.full((n, len(self.unit_ids)), np.nan)
        rate[:, self.targets] = expected_counts(data, point, at, n) / width
        counts = np.zeros((n, len(self.unit_ids)))
        here = (grid.event_bin >= at) & (grid.event_bin < at + n)
        counts[grid.event_bin[here] - at, grid.event_unit[here]] = grid.event_count[here]
        return FittedRates(grid.window_start_s[w] + (first + np.arange(n)) * width, rate, counts)

    # --- copies, words, files -------------------------------------------------------------------------

    def with_covariance(self, kind: CovarianceKind) -> CouplingFit:
        """The same fit with its tables by another covariance; nothing is refitted.

        Parameters
        ----------
        kind : "robust" (clustered by blocks of time), "jackknife" (each block left out in turn, one step: for few
            blocks) or "model" (inverse expected information)

        Raises
        ------
        ArgumentError : none of these, or a jackknife that cannot be had
        """
        kind = covariance_kind(kind)
        self.uncertainty.shared(kind)  # says so where it was not made
        return replace(self, covariance_kind=kind)

    def summary(self) -> str:
        """The result in plain text."""
        from kernelfit.inference.summary import summary_text

        return summary_text(self)

    def __repr__(self) -> str:
        return f"CouplingFit({self.model.kernel.name} kernel, {len(self.targets)} units, {self.n_spikes} spikes)"

    def _repr_html_(self) -> str:
        from kernelfit.inference.summary import summary_html

        return summary_html(self)

    def save(self, path: str | Path) -> None:
        """Write the fit as JSON, whole or not at all. It holds no spikes.

        Raises
        ------
        ArgumentError : no path
        OutputError : the file cannot be written
        """
        from kernelfit.fitting.storage import save_fit  # storage builds on this module

        save_fit(self, path)


def _lags(lags_s: object) -> FloatArray:
    return flat_numbers(lags_s, "lags_s", "Give seconds after the spike, such as [0.002, 0.01, 0.1].", least=0.0)


def covariance_kind(kind: str) -> CovarianceKind:
    """Check the name of a covariance.

    Raises
    ------
    ArgumentError : neither "robust" nor "jackknife" nor "model"
    """
    if isinstance(kind, str) and kind in get_args(CovarianceKind):
        return cast(CovarianceKind, kind)
    raise ArgumentError(f"{given_as('covariance', kind)} is not known. Say 'robust', 'jackknife' or 'model'.")


__all__ = ["CouplingFit", "Uncertainty", "covariance_kind"]
