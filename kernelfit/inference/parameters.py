"""The tables of a fit: shared parameters, baselines, kernel and after-spike curves, each with its interval and
its reason."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from scipy.spatial.distance import cdist

from kernelfit._typing import BoolArray, FloatArray
from kernelfit.fitting.covariance import REFUSED_BELOW
from kernelfit.inference.bands import standard_errors, sup_t_critical
from kernelfit.inference.edges import radius_notes
from kernelfit.inference.intervals import WaldIntervals, critical_value, wald_intervals
from kernelfit.inference.not_found import search_root, told_by_sites
from kernelfit.inference.stated import NOT_IDENTIFIED, bounded_table, loose_reason, state, state_band
from kernelfit.kernels.base import SAME_DISTANCE_UM

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.model.coupling import CovarianceKind

RADIUS_LEVEL = 0.95  # of the interval of a radius that a fit holds
FIXED = "fixed"


def _natural(fit: CouplingFit) -> tuple[FloatArray, FloatArray, list[str], list[str], BoolArray]:
    """Natural values (K,), their Jacobian by the working parameters (K, Q), names, units, and which are on the
    log scale."""
    kernel, n = fit.model.kernel, fit.n_kernel
    theta = fit.shared[:n]
    family = kernel.parameters(fit.span)
    values = [*kernel.natural(theta, fit.span)]
    jacobian = np.zeros((fit.shared.size, fit.shared.size))
    jacobian[:n, :n] = kernel.natural_jacobian(theta, fit.span)
    names, units = [p.name for p in family], [p.unit for p in family]
    on_log = [p.scale == "log" for p in family]
    if fit.has_same_site:
        values.append(fit.shared[n])
        jacobian[n, n] = 1.0
        names.append("same_site")
        units.append("per spike")
        on_log.append(False)
    if fit.model.leak_rate is None:
        values.append(fit.leak_rate)
        jacobian[-1, -1] = fit.leak_rate
        names.append("leak_rate")
        units.append("1/s")
        on_log.append(True)
    return np.array(values), jacobian, names, units, np.array(on_log, dtype=bool)


def _intervals(fit: CouplingFit, kind: CovarianceKind, level: float) -> WaldIntervals:
    values, jacobian, names, _, on_log = _natural(fit)
    critical = np.full(values.size, critical_value(level, fit.uncertainty.degrees_of_freedom(kind)))
    if not fit.verdict.found:  # chosen for its length and leak: the wider interval says so
        critical[~told_by_sites(fit, names)] = max(critical[0], search_root(fit, level)) if critical.size else np.nan
    known = np.where(fit.uncertainty.determines(jacobian.T)[:, None], jacobian, 0.0)
    return wald_intervals(values, known, fit.uncertainty.shared(kind), on_log, critical)


def parameter_table(fit: CouplingFit, kind: CovarianceKind, level: float) -> pd.DataFrame:
    """Shared parameters by name: estimate, std_error, lower, upper, unit, note.

    Intervals of lengths, exponents and the leak end at the bounds beyond which they cannot be told. Where no coupling
    was found these are NaN with the reason, and amplitudes keep an interval widened for the search over length and
    leak, which holds 0, as the test of any coupling does not exclude it. An amplitude that nothing holds on one side is
    NaN with an infinite end. A fixed leak has NaN and the note "fixed".
    """
    _, jacobian, names, units, _ = _natural(fit)
    whole = _intervals(fit, kind, level)
    notes = [_note(fit, kind, k, jacobian[k], names) for k in range(len(names))]
    table = bounded_table(fit, names, whole, units, notes)
    family = fit.model.kernel.parameters(fit.span)
    for k, parameter in enumerate(family):
        if parameter.discrete and fit.radius_interval is not None:
            table.loc[parameter.name, ["std_error", "lower", "upper"]] = [np.nan, *fit.radius_interval]
            profiled = "profiled over the distances of the array; the interval is a likelihood interval"
            if level != RADIUS_LEVEL:
                profiled += f" at {100 * RADIUS_LEVEL:g} % whatever the level; fit.profile has others"
            table.loc[parameter.name, "note"] = "; ".join([profiled, *radius_notes(fit, k, fit.radius_interval)])
    state(fit, table, jacobian)
    if fit.model.leak_rate is not None:
        table.loc["leak_rate", "estimate"] = fit.model.leak_rate
        table.loc["leak_rate", ["unit", "note"]] = ["1/s", FIXED]
    return table


def _note(fit: CouplingFit, kind: CovarianceKind, k: int, jacobian_row: FloatArray, names: list[str]) -> str:
    """Why parameter k has no standard error, where it has none."""
    used = np.flatnonzero(jacobian_row)
    if loose_reason(fit, jacobian_row):
        return loose_reason(fit, jacobian_row)
    stopped = [q for q in used if fit.at_bound[q] != 0]
    if stopped:
        own = [f"at its bound: {fit.bound_reasons[k]}"] if k in stopped else []
        others = [f"goes with {names[q]}, at its bound: {fit.bound_reasons[q]}" for q in stopped if q != k]
        return "; ".join(own + others)
    unknown = np.isnan(np.diag(fit.uncertainty.shared_model)[used]).any()
    if used.size and (unknown or not fit.uncertainty.determines(jacobian_row[:, None])[0]):
        family = fit.model.kernel.parameters(fit.span)
        if used[0] < len(family) and family[used[0]].discrete:
            return ""
        return f"{NOT_IDENTIFIED}: the recording says nothing about it (see notes)"
    return too_few_blocks(fit, kind)


def too_few_blocks(fit: CouplingFit, kind: CovarianceKind) -> str:
    """Why there is no standard error from blocks of time, where there is none."""
    if kind == "model" or fit.n_blocks >= REFUSED_BELOW:
        return ""
    blocks = f"{fit.n_blocks} block{'s' * (fit.n_blocks != 1)} of time"
    return f"no {kind} standard error: {blocks}, {REFUSED_BELOW} are needed; fit.with_covariance('model') has one"


def std_error_table(fit: CouplingFit) -> pd.DataFrame:
    """By parameter name: standard errors by both covariances on the natural scale, and robust / model."""
    _, _, names, _, _ = _natural(fit)
    model, robust = (_intervals(fit, kind, 0.95).std_error for kind in ("model", "robust"))
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = robust / model
    index = pd.Index(names, name="parameter", dtype=object)
    return pd.DataFrame({"model": model, "robust": robust, "ratio": ratio}, index=index)


def baseline_table(fit: CouplingFit, kind: CovarianceKind, level: float) -> pd.DataFrame:
    """By unit, all units in order: estimate (b_i), std_error, lower, upper, rate_hz = f(b_i), note."""
    n = len(fit.unit_ids)
    estimate, std_error = np.full(n, np.nan), np.full(n, np.nan)
    estimate[fit.targets] = fit.own[:, 0]
    std_error[fit.targets] = np.sqrt(fit.uncertainty.own(kind)[:, 0, 0])
    half = critical_value(level, fit.uncertainty.degrees_of_freedom(kind)) * std_error
    rate = np.full(n, np.nan)
    rate[fit.targets] = fit.model.link.rate(fit.own[:, 0])
    explained = np.zeros(n, dtype=bool)
    explained[fit.targets] = True
    notes = np.array([""] * n, dtype=object)
    notes[fit.targets] = too_few_blocks(fit, kind)
    silent = ~explained & (fit.counts == 0)
    rate[silent] = 0.0
    notes[silent] = "silent in the bins that count: baseline minus infinity, rate 0; still drives others"
    notes[~explained & (fit.counts > 0)] = "source only: drives others and is not explained"
    return pd.DataFrame(
        {
            "estimate": estimate,
            "std_error": std_error,
            "lower": estimate - half,
            "upper": estimate + half,
            "rate_hz": rate,
            "note": notes,
        },
        index=pd.Index(fit.unit_ids, name="unit", dtype=object),
    )


def kernel_band(fit: CouplingFit, d_um: FloatArray, level: float, simultaneous: bool) -> pd.DataFrame:
    """distance_um, estimate, lower, upper of the fitted kernel; see `CouplingFit.kernel_band`."""
    estimate, lower, upper = (np.full(d_um.size, np.nan) for _ in range(3))
    near, far = distances_with_pairs(fit)
    inside = (d_um >= near - SAME_DISTANCE_UM) & (d_um <= far + SAME_DISTANCE_UM)
    if inside.any():
        estimate[inside], lower[inside], upper[inside] = _band(fit, d_um[inside], level, simultaneous)
    return pd.DataFrame({"distance_um": d_um, "estimate": estimate, "lower": lower, "upper": upper})


def _band(
    fit: CouplingFit, d_um: FloatArray, level: float, simultaneous: bool
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Estimate and both ends of the band at distances where the array has pairs, each (m,)."""
    n = fit.n_kernel
    estimate = fit.kernel(d_um)
    gradient = fit.model.kernel.gradient(fit.shared[:n], d_um, fit.span)
    covariance = fit.uncertainty.shared(fit.covariance_kind)[:n, :n]
    freedom = fit.uncertainty.degrees_of_freedom(fit.covariance_kind)
    critical = critical_value(level, freedom)
    if simultaneous:
        critical = sup_t_critical(gradient, covariance, level, freedom)
    if not fit.verdict.found:
        critical = max(critical, search_root(fit, level))
    half = critical * standard_errors(gradient, covariance)
    lower, upper = estimate - half, estimate + half
    if fit.radius_interval is not None:  # between its ends a distance may lie within the radius or beyond it
        closest = np.array([fit.span.smallest_um])
        within = float(fit.kernel(closest)[0])
        slope = fit.model.kernel.gradient(fit.shared[:n], closest, fit.span)
        spread = float(critical * standard_errors(slope, covariance)[0])
        between = (d_um > fit.radius_interval[0]) & (d_um < fit.radius_interval[1])
        lower[between], upper[between] = min(within - spread, 0.0), max(within + spread, 0.0)
    lower[~fit.uncertainty.determines(gradient)] = upper[~fit.uncertainty.determines(gradient)] = np.nan
    state_band(fit, gradient, estimate, (lower, upper))
    return estimate, lower, upper


def distances_with_pairs(fit: CouplingFit) -> tuple[float, float]:
    """Smallest and largest distance (µm) of the kernel's pairs whose source fires: beyond, nothing was recorded."""
    near, far = fit.span.smallest_um, fit.span.largest_um
    if (fit.counts > 0).all():
        return near, far
    firing = np.flatnonzero(fit.counts > 0)
    distance = cdist(fit.positions[fit.targets], fit.positions[firing])
    in_range = (distance >= near - SAME_DISTANCE_UM) & (distance <= far + SAME_DISTANCE_UM)
    kept = in_range & (fit.targets[:, None] != firing)
    if not kept.any():  # the sources fired outside the bins that count, and are heard only from there
        return near, far
    return float(distance[kept].min()), float(distance[kept].max())


def after_spike_band(
    fit: CouplingFit, target: int, lags_s: FloatArray, level: float, simultaneous: bool
) -> pd.DataFrame:
    """lag_s, estimate, lower, upper of one unit's after-spike rate multiplier."""
    traces = np.exp(-lags_s[None, :] / fit.after_spike_constants_s[:, None])
    covariance = fit.uncertainty.own(fit.covariance_kind)[target, 1:, 1:]
    freedom = fit.uncertainty.degrees_of_freedom(fit.covariance_kind)
    h = fit.own[target, 1:] @ traces
    critical = critical_value(level, freedom)
    if simultaneous:
        critical = sup_t_critical(traces, covariance, level, freedom)
    half = critical * standard_errors(traces, covariance)
    return pd.DataFrame({"lag_s": lags_s, "estimate": np.exp(h), "lower": np.exp(h - half), "upper": np.exp(h + half)})
