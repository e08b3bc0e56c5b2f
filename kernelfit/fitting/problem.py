"""One recording and one model, ready to be evaluated: tables from kernels, penalties, the scale of the parameters.

Shared parameters stand in the order kernel (working scale), same-site coefficient, log leak rate. Own parameters of
a unit
are its baseline, then its after-spike coefficients.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field, replace

import numpy as np

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.engine.evaluate import Evaluation, Point, SweepData, TimeBlocks, evaluate
from kernelfit.engine.links import is_canonical
from kernelfit.errors import ArgumentError, ModelError, NotIdentifiedError
from kernelfit.fitting.progress import Progress, ProgressCallback, peak_memory_bytes
from kernelfit.kernels import DistanceRange, Kernel, PairGeometry, pair_geometry
from kernelfit.model.coupling import CouplingModel
from kernelfit.model.terms import FIRST_RIDGE
from kernelfit.recording.findings import number
from kernelfit.recording.grid import Grid, make_grid
from kernelfit.recording.recording import Recording

FASTEST_LEAK_BINS = 3.0  # alpha D above this leaves 5 % of a jump after one bin: nothing to see of the decay
SLOWEST_LEAK_SHARE = 20.0  # a time constant above a twentieth of the recording looks like a drifting rate
GONE_AFTER_BINS = 20.0  # time constants that pass in one bin: exp(-20) of an effect is left, nothing to estimate from
EXPECTED_SWEEPS = 60
FIRST_SMOOTHING = 1.0


@dataclass(frozen=True, eq=False)
class Estimate:
    """A point in parameter space: own (n_targets, 1 + M), shared (Q,)."""

    own: FloatArray
    shared: FloatArray


@dataclass(eq=False)
class Clock:
    """Counts sweeps and reports progress; the one thing here that changes while a fit runs."""

    callback: ProgressCallback | None = None
    stage: str = ""
    sweeps: int = 0
    expected_sweeps: int = EXPECTED_SWEEPS
    started: float = field(default_factory=time.monotonic)

    def tick(self) -> None:
        """One more sweep is done."""
        self.sweeps += 1
        if self.callback is None:
            return
        self.expected_sweeps = max(self.expected_sweeps, self.sweeps + 5)
        left = (time.monotonic() - self.started) / self.sweeps * (self.expected_sweeps - self.sweeps)
        self.callback(Progress(self.stage, self.sweeps, self.expected_sweeps, left, peak_memory_bytes()))


@dataclass(frozen=True, eq=False)
class Problem:
    """A model on a recording.

    Parameters
    ----------
    model : what is fitted
    kernel : its distance law (other problems on the same data may use another)
    data, grid : counts
    geometry : distances and the pairs kept
    trace_decay : (M,) decay per bin of the after-spike traces
    threads : at most this many, or None
    clock : counts the sweeps
    """

    model: CouplingModel
    kernel: Kernel
    data: SweepData
    grid: Grid
    geometry: PairGeometry
    trace_decay: FloatArray
    threads: int | None
    clock: Clock

    @property
    def span(self) -> DistanceRange:
        """The distances the kernel is asked about."""
        return self.geometry.distance_range

    @property
    def n_kernel(self) -> int:
        """Parameters of the kernel."""
        return len(self.kernel.parameters(self.span))

    @property
    def has_same_site(self) -> bool:
        """Whether pairs on one site have a coefficient of their own, and one of them a source that fires."""
        return bool((self.geometry.own_site & self.drives[None, :]).any())

    @property
    def drives(self) -> BoolArray:
        """(n_units,) True for units that fire where it can drive a bin of the sum."""
        mask = np.zeros(self.data.n_units, dtype=bool)
        mask[self.data.event_unit] = True
        return mask

    @property
    def driven_um(self) -> FloatArray:
        """Distinct distances of the kernel's pairs whose source fires, µm: the others say nothing about J(d)."""
        driven = self.geometry.kept & self.drives[None, :]
        return self.geometry.distinct_um[np.unique(self.geometry.distance_index[driven])]

    @property
    def fits_leak(self) -> bool:
        """Whether the leak rate is estimated."""
        return self.model.leak_rate is None

    @property
    def concave(self) -> bool:
        """Whether the objective has one top and the expected information is its Hessian.

        It is with a canonical link, a stated leak and a kernel linear in its parameters.
        """
        linear = not any(p.shape for p in self.kernel.parameters(self.span))
        return bool(is_canonical(self.model.link.code)) and linear and not self.fits_leak

    @property
    def n_shared(self) -> int:
        """Shared parameters, held ones included."""
        return self.n_kernel + int(self.has_same_site) + int(self.fits_leak)

    @property
    def leak_limits(self) -> tuple[float, float]:
        """Slowest and fastest leak rate that can be told, 1/s."""
        return leak_limits(self.data.n_bins, self.data.bin_width)

    @property
    def bounds(self) -> FloatArray:
        """(Q, 2) bounds on the working scale."""
        rows = [*self.kernel.bounds(self.span)]
        if self.has_same_site:
            rows.append(np.array([-np.inf, np.inf]))
        if self.fits_leak:
            rows.append(np.log(self.leak_limits))
        return np.array(rows).reshape(-1, 2)

    @property
    def penalty(self) -> FloatArray:
        """(Q, Q) quadratic penalty on the shared parameters."""
        s = np.zeros((self.n_shared, self.n_shared))
        own = self.kernel.penalty(self.span)
        if own is not None:
            s[: self.n_kernel, : self.n_kernel] = own
        return s

    @property
    def own_penalty(self) -> FloatArray:
        """(P,) weights of the quadratic penalty on the own parameters of every unit."""
        ridge = np.full(1 + self.trace_decay.size, self.model.after_spike.ridge, dtype=np.float64)
        ridge[0] = 0.0
        return ridge

    def leak(self, shared: FloatArray) -> float:
        """alpha, 1/s."""
        return float(np.exp(shared[-1])) if self.fits_leak else float(self.model.leak_rate or 0.0)

    def tables(self, shared: FloatArray) -> FloatArray:
        """(1 + K, n_units, n_targets): J of each pair, then its derivatives, by source and target."""
        theta = shared[: self.n_kernel]
        d = self.geometry.distinct_um
        by_distance = np.zeros((1 + self.n_kernel, d.size + 1))  # a last zero for pairs not kept
        by_distance[0, :-1] = self.kernel.value(theta, d, self.span)
        by_distance[1:, :-1] = self.kernel.gradient(theta, d, self.span)
        tables = by_distance[:, self.geometry.distance_index[self.data.targets].T]
        if not self.has_same_site:
            return tables
        own = self.geometry.own_site[self.data.targets].T.astype(np.float64)
        tables[0] += shared[self.n_kernel] * own
        return np.concatenate([tables, own[None]])

    def point(self, estimate: Estimate) -> Point:
        """The engine's view of an estimate."""
        return Point(
            link=self.model.link.code,
            leak=self.leak(estimate.shared),
            fit_leak=self.fits_leak,
            tables=self.tables(estimate.shared),
            baseline=np.ascontiguousarray(estimate.own[:, 0]),
            trace_decay=self.trace_decay,
            coefficient=np.ascontiguousarray(estimate.own[:, 1:].T),
        )

    def evaluate(
        self,
        estimate: Estimate,
        *,
        blocks: TimeBlocks | None = None,
        block_weight: FloatArray | None = None,
        information_slot: IntArray | None = None,
    ) -> Evaluation:
        """Sums at an estimate, derivatives by log alpha instead of alpha; penalties not included."""
        sums = evaluate(
            self.data,
            self.point(estimate),
            blocks=blocks,
            block_weight=block_weight,
            information_slot=information_slot,
            threads=self.threads,
        )
        self.clock.tick()
        if not self.fits_leak:
            return sums
        alpha = self.leak(estimate.shared)
        score, own_shared, shared = sums.score.copy(), sums.own_shared.copy(), sums.shared_shared.copy()
        score[..., -1] *= alpha
        own_shared[..., -1] *= alpha
        shared[..., -1, :] *= alpha
        shared[..., -1] *= alpha
        return replace(sums, score=score, own_shared=own_shared, shared_shared=shared)

    def with_kernel(self, kernel: Kernel) -> Problem:
        """The same data with another distance law."""
        return replace(self, kernel=kernel)


def leak_limits(n_bins: int, bin_width: float) -> tuple[float, float]:
    """Slowest and fastest leak rate, 1/s, that so many bins of a width (s) can tell."""
    fastest = FASTEST_LEAK_BINS / bin_width
    return min(SLOWEST_LEAK_SHARE / (n_bins * bin_width), fastest / 10.0), fastest


def leak_reason(bin_width: float, *, upper: bool) -> str:
    """Why a leak rate beyond the fastest (`upper`) or slowest cannot be told."""
    if upper:
        fastest_ms = 1000.0 * bin_width / FASTEST_LEAK_BINS
        return f"a time constant below {fastest_ms:.3g} ms is faster than a bin: use narrower bins"
    return f"a time constant above 1/{SLOWEST_LEAK_SHARE:g} of the recording cannot be told from a drifting rate"


def excluded_pair_mask(recording: Recording) -> BoolArray:
    """(n, n) True for pairs the user left out, both directions."""
    mask = np.zeros((recording.n_units, recording.n_units), dtype=bool)
    for a, b in recording.excluded_pairs:
        i, j = recording.index_of(a), recording.index_of(b)
        mask[i, j] = mask[j, i] = True
    return mask


def target_units(recording: Recording, grid: Grid) -> IntArray:
    """Units that are explained: not source-only, and with a spike in the sum."""
    return np.flatnonzero(~recording.source_only_mask & (grid.counts_in_sum > 0))


def geometry_of(model: CouplingModel, recording: Recording, targets: IntArray) -> PairGeometry:
    """Distances of a recording and the pairs its model keeps; `targets` are unit indices.

    Raises
    ------
    ModelError : no two sites, or no pair left for the kernel; the message names the sites table
    """
    is_target = np.zeros(recording.n_units, dtype=bool)
    is_target[targets] = True
    try:
        return pair_geometry(
            recording.positions,
            max_distance_um=model.max_distance,
            same_site=model.same_site,
            excluded_pairs=excluded_pair_mask(recording),
            targets=is_target,
        )
    except ModelError as error:
        said = str(error)
        raise ModelError(f"{recording.origin.name('sites')}: {said[0].lower()}{said[1:]}") from None


def make_problem(
    model: CouplingModel, recording: Recording, *, threads: int | None = None, progress: ProgressCallback | None = None
) -> Problem:
    """Check that there is something to estimate and set the problem up. Weights of penalties that are left to the data
    are first guesses in it.

    Raises
    ------
    ArgumentError, ModelError, GridError, NotIdentifiedError : see `CouplingModel.fit`
    """
    model = _with_first_guesses(model)
    _check_time_scales(model)
    grid = make_grid(recording, model.bin_width, warm_up_s=model.warm_up_s)
    spikes = recording.origin.name("spikes")
    if recording.n_units < 2:
        raise ModelError(
            f"{recording.origin.name('sites')}: one unit ({recording.unit_ids[0]!r}) has no one to be coupled to. "
            "A kernel needs at least two units at different sites."
        )
    targets = target_units(recording, grid)
    if targets.size == 0 and grid.counts_in_sum.any():
        raise ModelError(
            f"{spikes}: every unit that fires in the bins that count is source-only, so there is nothing to explain. "
            "Take units back with recording.select(source_only=[...])."
        )
    if targets.size == 0:
        raise ModelError(
            f"{spikes}: no unit has a spike in the bins that are explained ({number(grid.duration_s)} s in windows, "
            "exclusions and warm-up left out). Check the unit of time (time_unit), the windows and the exclusions."
        )
    geometry = geometry_of(model, recording, targets)
    problem = Problem(
        model=model,
        kernel=model.kernel,
        data=SweepData.from_grid(grid, targets),
        grid=grid,
        geometry=geometry,
        trace_decay=np.exp(-model.bin_width / model.after_spike.constants(model.bin_width)),
        threads=threads,
        clock=Clock(progress),
    )
    if problem.driven_um.size == 0:
        raise ModelError(
            f"{spikes}: no unit that fires has a partner within the kernel that fires too, so no spike can drive "
            "anything. Record longer, or widen the selection of units."
        )
    _check_identified(problem)
    return problem


def _with_first_guesses(model: CouplingModel) -> CouplingModel:
    """Numbers in place of what the data are to choose: a fit begins with them."""
    ridge = FIRST_RIDGE if model.after_spike.ridge == "likelihood" else None
    return model.settled(smoothing=None if model.kernel.smoothing_choice is None else FIRST_SMOOTHING, ridge=ridge)


def _check_time_scales(model: CouplingModel) -> None:
    """Refuse a stated leak or after-spike time constant of which nothing is left after one bin."""
    shortest_s = model.bin_width / GONE_AFTER_BINS
    if model.leak_rate is not None and model.leak_rate * model.bin_width > GONE_AFTER_BINS:
        raise ArgumentError(
            f"leak_rate={model.leak_rate:g}: of a spike's effect nothing is left after one bin of "
            f"{1000 * model.bin_width:g} ms. Give a leak rate (1/s) of at most {1 / shortest_s:.3g}, or use narrower "
            "bins. Is it a time constant? leak_rate is one over it."
        )
    constants = model.after_spike.constants(model.bin_width)
    if constants.size and constants[0] < shortest_s:
        raise ArgumentError(
            f"after_spike: of a trace with a time constant of {constants[0]:g} s nothing is left after one bin of "
            f"{1000 * model.bin_width:g} ms. Leave it out, or use narrower bins."
        )


def _check_identified(problem: Problem) -> None:
    try:
        problem.kernel.check_identified(problem.driven_um, problem.span)
    except NotIdentifiedError as error:
        if problem.driven_um.size == problem.geometry.distinct_um.size:
            raise
        raise NotIdentifiedError(f"{error} Pairs whose source never fires do not count.") from None
