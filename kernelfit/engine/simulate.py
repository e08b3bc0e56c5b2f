"""Simulate the binned process: the model run forward, seeded, and stopped when it explodes."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterable, Mapping, Sequence

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit._validation import check_seed, described, flat_numbers, given_as, numbers, positive
from kernelfit.engine.compiled import compiled
from kernelfit.engine.links import fill_cells
from kernelfit.errors import ArgumentError, SimulationError
from kernelfit.kernels import KernelCurve
from kernelfit.kernels.geometry import same_site_labels
from kernelfit.model.links import Link, link_from
from kernelfit.recording.recording import Recording

MOST_PER_BIN = 5.0  # expected spikes of one unit in one bin: no cell fires so, the network has exploded
CHUNK_BINS = 4096
FIRST_ROOM = 1024


@compiled
def step_bins(
    link: int,
    bin_width: float,
    leak: float,
    baseline: FloatArray,
    table: FloatArray,
    trace_decay: FloatArray,
    coefficient: FloatArray,
    state: FloatArray,
    traces: FloatArray,
    course: FloatArray,
    uniform: FloatArray,
    limit: float,
    event_bin: IntArray,
    event_unit: IntArray,
    event_count: IntArray,
    n_events: int,
) -> tuple[int, int]:
    """Run the bins of `uniform` (n_bins, n_units), one uniform number a cell; `course` (n_bins,) is common to all.

    Counts follow from the uniforms by inversion, so they do not depend on how the bins are chunked. Events are written
    from `n_events` on. Returns bins done and events so far; fewer bins than asked: the event arrays are full, or the
    expected count of a unit passed `limit` (then the number of bins done is negative, less one).
    """
    n_units = baseline.size
    gamma = math.exp(-leak * bin_width)
    eta, mean, scratch = np.zeros(n_units), np.zeros(n_units), np.zeros(n_units)
    slope, weight = np.zeros(n_units), np.zeros(n_units)
    for t in range(uniform.shape[0]):
        if n_events + n_units > event_bin.size:
            return t, n_events
        for i in range(n_units):
            state[i] *= gamma
            eta[i] = baseline[i] + course[t] + state[i]
        for m in range(trace_decay.size):
            for i in range(n_units):
                traces[m, i] *= trace_decay[m]
                eta[i] += coefficient[m, i] * traces[m, i]
        fill_cells(link, eta, bin_width, mean, slope, weight, scratch)
        first = n_events
        for i in range(n_units):
            if not mean[i] <= limit:
                return -t - 1, n_events
            left = uniform[t, i]
            term = math.exp(-mean[i])
            count = 0
            while left >= term and count < 1000:
                left -= term
                count += 1
                term *= mean[i] / count
            if count > 0:
                event_bin[n_events] = t
                event_unit[n_events] = i
                event_count[n_events] = count
                n_events += 1
        for e in range(first, n_events):
            unit, count = event_unit[e], event_count[e]
            row = table[unit]
            for i in range(n_units):
                state[i] += count * row[i]
            for m in range(trace_decay.size):
                traces[m, unit] += count
    return uniform.shape[0], n_events


def simulate_counts(
    link: Link,
    bin_width: float,
    leak: float,
    baseline: FloatArray,
    table: FloatArray,
    n_bins: int,
    rng: np.random.Generator,
    *,
    trace_decay: FloatArray | None = None,
    coefficient: FloatArray | None = None,
    course: FloatArray | None = None,
) -> tuple[IntArray, IntArray, IntArray]:
    """Counts of the binned process from rest (U = 0, no history).

    Parameters
    ----------
    link, bin_width (s), leak (1/s) : of the model
    baseline : (n,) b_i
    table : (n, n) jump by source (row) and target (column)
    n_bins : bins to run
    rng : draws one uniform number a cell, bin by bin
    trace_decay, coefficient : (M,) decay per bin and (M, n) after-spike coefficients; None: none
    course : (n_bins,) added to every unit's predictor; None: none

    Returns
    -------
    event_bin, event_unit, event_count : (n_events,) non-empty (bin, unit), in order

    Raises
    ------
    SimulationError : a unit's expected count in a bin passes 5: the network has exploded
    """
    n = baseline.size
    decay = np.empty(0) if trace_decay is None else np.ascontiguousarray(trace_decay)
    weights = np.empty((0, n)) if coefficient is None else np.ascontiguousarray(coefficient)
    common = np.zeros(n_bins) if course is None else np.ascontiguousarray(course, dtype=np.float64)
    state, traces = np.zeros(n), np.zeros((decay.size, n))
    parts: list[tuple[IntArray, IntArray, IntArray]] = []
    for start in range(0, n_bins, CHUNK_BINS):
        uniform = rng.random((min(CHUNK_BINS, n_bins - start), n))
        at = 0
        while at < len(uniform):
            room = max(FIRST_ROOM, 4 * n)
            bins, units, counts = (np.empty(room, dtype=np.int64) for _ in range(3))
            done, filled = step_bins(
                link.code, bin_width, leak, baseline, table, decay, weights, state, traces, common[start + at :],
                uniform[at:], MOST_PER_BIN, bins, units, counts, 0,
            )  # fmt: skip
            if done < 0:
                time_s = (start + at - done - 1) * bin_width
                raise SimulationError(_exploded(bin_width, leak, baseline, table, weights, link, time_s))
            parts.append((bins[:filled] + start + at, units[:filled].copy(), counts[:filled].copy()))
            at += done
    if not parts:
        empty = np.empty(0, dtype=np.int64)
        return empty, empty, empty
    event_bin, event_unit, event_count = (np.concatenate(column) for column in zip(*parts, strict=True))
    return event_bin, event_unit, event_count


def _exploded(
    bin_width: float,
    leak: float,
    baseline: FloatArray,
    table: FloatArray,
    weights: FloatArray,
    link: Link,
    time_s: float,
) -> str:
    slope = link.slope(baseline)
    radius = float(np.max(np.abs(np.linalg.eigvals(slope[:, None] * table.T / leak))))
    why = (
        f"already at the baselines each spike causes {radius:.2g} others (spectral radius of E[f'] J / alpha, "
        "supercritical from 1 on)"
        if radius >= 1
        else f"a burst carried it out of its stable range (spectral radius {radius:.2g} at the baselines; the "
        "exponential link has no ceiling)"
    )
    own = " Or make the after-spike effects weaker: a unit may excite itself." if (weights > 0).any() else ""
    return (
        f"The simulated network exploded at {time_s:.3g} s: a unit was about to fire more than {MOST_PER_BIN:g} times "
        f"in a bin of {1000 * bin_width:g} ms; {why}. Lower the amplitude or the baselines, or raise the leak rate."
        f"{own}"
    )


def simulate_recording(
    positions_um: FloatArray,
    kernel: KernelCurve,
    baseline_hz: float | FloatArray,
    leak_rate: float,
    duration: float,
    seed: int | np.random.Generator,
    *,
    link: str | Link = "exp",
    bin_width: float = 0.001,
    after_spike_constants_s: FloatArray | None = None,
    after_spike_coefficients: FloatArray | None = None,
    rate_course: Callable[[FloatArray], FloatArray] | None = None,
    unit_ids: Sequence[str] | None = None,
) -> Recording:
    """A recording of a network with a known kernel, run in bins from rest; pairs on one site are not coupled.

    Parameters
    ----------
    positions_um : (n, 1 to 3) µm
    kernel : any callable from distances (µm) to J per spike, such as ``fit.kernel`` or
        ``kf.kernels.Gaussian().at(...)``
    baseline_hz : rate without any spike, f(b_i), Hz, one for all or (n,); 0 is a silent unit
    leak_rate : alpha, 1/s
    duration : seconds; the window is [0, duration)
    seed : or a generator; the same seed gives the same bits
    link, bin_width : of the model, seconds
    after_spike_constants_s, after_spike_coefficients : (M,) seconds and (M,) or (M, n); None: no after-spike effect
    rate_course : from times (s) to what is added to every unit's predictor then (a factor e^c of all rates under the
        exponential link): a slow state common to all; None: none
    unit_ids : names; None: u01, u02, ...

    Returns
    -------
    Recording : spikes lie at random inside their bins

    Raises
    ------
    ArgumentError : an argument out of range or of the wrong shape
    SimulationError : the network explodes; the message says why and what to do
    """
    positions = _positions(positions_um)
    n = len(positions)
    the_link = link_from(link)
    rates = _rates(baseline_hz, n)
    leak_rate = positive(leak_rate, "leak_rate", "1/s, such as 50")
    duration = positive(duration, "duration", "seconds, such as 60")
    bin_width = positive(bin_width, "bin_width", "seconds, such as 0.001")
    if not isinstance(seed, np.random.Generator):
        check_seed(seed)
    ids = _ids(unit_ids, n)
    table = _table(kernel, positions)
    decay, coefficients = _after_spike(after_spike_constants_s, after_spike_coefficients, bin_width, n)
    rng = np.random.default_rng(seed)
    n_bins = math.floor(duration / bin_width + 1e-6)
    course = _course(rate_course, n_bins, bin_width)
    event_bin, event_unit, event_count = simulate_counts(
        the_link, bin_width, leak_rate, the_link.predictor(rates), table, n_bins, rng,
        trace_decay=decay, coefficient=coefficients, course=course,
    )  # fmt: skip
    bins, units = np.repeat(event_bin, event_count), np.repeat(event_unit, event_count)
    # strictly inside the bin, so that no rounding moves a spike over its edge
    times = (bins + 0.001 + 0.998 * rng.random(bins.size)) * bin_width
    order = np.lexsort((times, units))
    edges = np.searchsorted(units[order], np.arange(n + 1))
    trains = tuple(times[order[a:b]] for a, b in itertools.pairwise(edges))
    return Recording(ids, positions, trains, np.array([[0.0, duration]]))


def _positions(positions_um: object) -> FloatArray:
    """(n, 1 to 3) µm."""
    remedy = "Give a row for each unit with 1 to 3 coordinates in µm, such as [[0, 0], [100, 0]]."
    given = numbers(positions_um, "positions_um", remedy)
    positions = given[:, None] if given.ndim == 1 else given
    if positions.ndim != 2 or not len(positions) or positions.shape[1] not in (1, 2, 3):
        raise ArgumentError(f"positions_um has shape {given.shape}. {remedy}")
    return positions


def _rates(baseline_hz: object, n: int) -> FloatArray:
    """(n,) Hz."""
    remedy = f"Give one rate of 0 Hz or more, or {n} of them, one a unit."
    rates = flat_numbers(baseline_hz, "baseline_hz", remedy, least=0.0)
    if rates.size not in (1, n):
        raise ArgumentError(f"baseline_hz holds {rates.size} rates. {remedy}")
    return np.broadcast_to(rates, (n,))


def _ids(unit_ids: object, n: int) -> tuple[str, ...]:
    """Names of the units: those given, or u01, u02, ..."""
    if unit_ids is None:
        return tuple(f"u{k + 1:0{max(2, len(str(n)))}d}" for k in range(n))
    remedy = f"Give {n} different names, such as ['a', 'b', ...], or None."
    if isinstance(unit_ids, (str, Mapping)) or not isinstance(unit_ids, Iterable):
        raise ArgumentError(f"{given_as('unit_ids', unit_ids)} is no list of names. {remedy}")
    ids = tuple(unit_ids)
    for unit in ids:
        if not (isinstance(unit, str) and unit.strip()):
            raise ArgumentError(f"unit_ids holds {described(unit)}, which is no name. {remedy}")
    if len(ids) != n or len(set(ids)) != n:
        twice = "" if len(ids) != n else ", not all of them different"
        raise ArgumentError(f"{len(ids)} unit_ids for {n} positions{twice}. {remedy}")
    return ids


def _table(kernel: object, positions: FloatArray) -> FloatArray:
    """(n, n) jump by source and target."""
    remedy = "Give a function of distances, such as kf.kernels.Gaussian().at(...) or fit.kernel."
    if not callable(kernel):
        raise ArgumentError(f"{given_as('kernel', kernel)} cannot be called. {remedy}")
    site = same_site_labels(positions)
    distance = np.sqrt(np.sum((positions[:, None] - positions[None]) ** 2, axis=-1))
    coupled = site[:, None] != site[None]
    jumps = numbers(kernel(distance[coupled]), "kernel(distances_um)", remedy)
    if jumps.shape not in ((), (int(coupled.sum()),)):
        raise ArgumentError(f"kernel gave values of shape {jumps.shape} for {int(coupled.sum())} distances. {remedy}")
    table = np.zeros(coupled.shape)
    table[coupled] = jumps
    return table


def _course(rate_course: Callable[[FloatArray], FloatArray] | None, n_bins: int, bin_width: float) -> FloatArray | None:
    if rate_course is None:
        return None
    remedy = "Give a function from times in seconds to one finite number for each time."
    if not callable(rate_course):
        raise ArgumentError(f"{given_as('rate_course', rate_course)} cannot be called. {remedy}")
    start_s = np.asarray(bin_width * np.arange(n_bins), dtype=np.float64)
    course = numbers(rate_course(start_s), "rate_course(time_s)", remedy)
    if course.shape != (n_bins,):
        raise ArgumentError(f"rate_course gave values of shape {course.shape} for {n_bins} times. {remedy}")
    return course


def _after_spike(
    constants_s: FloatArray | None, coefficients: FloatArray | None, bin_width: float, n: int
) -> tuple[FloatArray, FloatArray]:
    if constants_s is None or coefficients is None:
        if constants_s is not coefficients:
            given = "after_spike_coefficients" if constants_s is None else "after_spike_constants_s"
            raise ArgumentError(
                f"{given} alone: after_spike_constants_s and after_spike_coefficients go together. Give both or none."
            )
        return np.empty(0), np.empty((0, n))
    remedy = "Give time constants of positive seconds, and a coefficient a time constant, for all units or for each."
    constants = flat_numbers(constants_s, "after_spike_constants_s", remedy)
    weights = numbers(coefficients, "after_spike_coefficients", remedy)
    shape = weights.shape
    weights = np.atleast_1d(weights)
    weights = weights[:, None] if weights.ndim == 1 else weights
    if weights.ndim != 2 or weights.shape[0] != constants.size or weights.shape[1] not in (1, n):
        many = f"{constants.size} time constant{'s' * (constants.size != 1)} and {n} units"
        raise ArgumentError(f"after_spike_coefficients of shape {shape} for {many}. {remedy}")
    if not (constants > 0).all():
        raise ArgumentError(f"after_spike_constants_s holds {constants.min():g}, which is not above 0. {remedy}")
    return np.exp(-bin_width / constants), np.ascontiguousarray(np.broadcast_to(weights, (constants.size, n)))
