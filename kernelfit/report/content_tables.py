"""From a fit and its recording to the tables of the page."""

from __future__ import annotations

import math
import re
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit.errors import Unavailable
from kernelfit.kernels.base import Kernel
from kernelfit.model.terms import AfterSpikeTerm
from kernelfit.recording.recording import COORDINATES, Recording
from kernelfit.report.numbers import (
    COULD_NOT,
    count_text,
    distance_label,
    duration_text,
    fixed_text,
    interval_text,
    number_text,
    p_text,
    powers_text,
    spaced_unit,
    time_text,
)
from kernelfit.report.page import Cell, Column, Definition, Table, without_empty_notes
from kernelfit.report.readings import (
    LEAK,
    LEVEL,
    TEST_LEVEL,
    kind_word,
    length_word,
    link_name,
    parameter_of,
    time_constant_of,
)
from kernelfit.report.truth import Truth
from kernelfit.report.words import Estimate, level_text

if TYPE_CHECKING:
    from kernelfit.diagnostics.goodness import Goodness
    from kernelfit.fitting.result import CouplingFit

TABLE_DECIMALS = 6
HASH_SHOWN = 12

_MEANINGS = {
    "amplitude": "effect J of one spike at {reference}",
    "exponent": "exponent of the power law",
    "narrow_amplitude": "narrow part, J at {reference}",
    "narrow_length_um": "narrow part, length",
    "wide_amplitude": "wide part, J at {reference}",
    "wide_length_um": "wide part, length",
    "same_site": "effect J of one spike on the same site",
    LEAK: "leak rate",
}


def meaning(name: str, fit: CouplingFit) -> str:
    """A parameter of a fit in words; its own name where there are none."""
    if name == "length_um":
        return f"{length_word(fit)} of the kernel"
    if name.startswith("coefficient_"):
        return f"coefficient {name.removeprefix('coefficient_')} of the spline"
    return _MEANINGS.get(name, name).format(reference=distance_label(fit.reference_distance_um))


def value_cell(value: float, digits: int = 3, *, unit: str = "") -> Cell:
    """A number in a table, with more decimals than prose has; words where it is missing."""
    if not math.isfinite(value):
        return Cell("not estimable")
    return Cell(f"{number_text(value, digits, max_decimals=TABLE_DECIMALS, keep_zeros=True)}{spaced_unit(unit)}", value)


def parameter_table(fit: CouplingFit) -> Table:
    """Every shared parameter with its interval in words that fit a table."""
    rows = []
    for name, row in fit.parameters.iterrows():
        estimate, lower, upper = (float(row[c]) for c in ("estimate", "lower", "upper"))
        shown = interval_text(estimate, lower, upper, max_decimals=TABLE_DECIMALS)
        rows.append(
            (
                Cell(str(name)),
                Cell(f"{meaning(str(name), fit)}{_unit_shown(str(row['unit']))}"),
                Cell(shown, estimate if math.isfinite(estimate) else None),
                Cell(_note(row["note"])),
            )
        )
    tau = time_constant_of(fit)
    rows.append(
        (
            Cell("time constant"),
            Cell("how long the effect of a spike lasts, 1 / leak rate"),
            Cell(time_text(tau.value, tau.lower, tau.upper), tau.value) if tau.known else Cell(COULD_NOT),
            Cell("" if tau.known else tau.reason),
        )
    )
    table = Table(
        caption=f"Parameters with {level_text(LEVEL)} intervals ({_kind(fit)})",
        columns=(
            Column("name", numeric=False),
            Column("what it is", numeric=False, wraps=True),
            Column("estimate (interval)"),
            Column("note", numeric=False, wraps=True),
        ),
        rows=tuple(rows),
        file="parameters.csv",
    )
    return without_empty_notes(table)


def _unit_shown(unit: str) -> str:
    return "" if unit in {"", "1", "nan"} else f" ({unit})"


def _kind(fit: CouplingFit) -> str:
    return kind_word(fit.covariance_kind)


def std_error_table(fit: CouplingFit) -> Table:
    """Both kinds of standard errors and intervals side by side, with the ratio."""
    both = (fit.with_covariance("model"), fit.with_covariance("robust"))
    rows = []
    for name, row in fit.std_errors.iterrows():
        intervals = [_interval_cell(parameter_of(kind, str(name))) for kind in both]
        rows.append(
            (
                Cell(str(name)),
                *intervals,
                value_cell(float(row["model"]), 2),
                value_cell(float(row["robust"]), 2),
                value_cell(float(row["ratio"]), 2),
            )
        )
    return Table(
        caption="Intervals and standard errors of both kinds",
        columns=(
            Column("name", numeric=False),
            Column("model-based interval"),
            Column("robust interval"),
            Column("std. error, model-based"),
            Column("std. error, robust"),
            Column("ratio"),
        ),
        rows=tuple(rows),
        file="std_errors.csv",
    )


def _interval_cell(estimate: Estimate | None) -> Cell:
    if estimate is None or not estimate.bounded:
        return Cell((estimate.reason if estimate else "") or "not estimable")
    text = interval_text(estimate.value, estimate.lower, estimate.upper, max_decimals=TABLE_DECIMALS)
    return Cell(text, estimate.value)


def goodness_table(goodness: Goodness) -> Table:
    """KS test of every unit and of all together."""
    rows = [_goodness_row("all units together", goodness.pooled.iloc[0])]
    rows += [_goodness_row(str(unit), row) for unit, row in goodness.units.iterrows()]
    table = Table(
        caption=(
            "Test of the model per unit (p: the mean of the rescaled intervals was estimated, as it was; p, plain: as "
            "if it were known)"
        ),
        columns=(
            Column("unit", numeric=False),
            Column("spikes"),
            Column("KS statistic"),
            Column("p"),
            Column("p, corrected"),
            Column("p, plain"),
            Column("verdict", numeric=False),
            Column("note", numeric=False, wraps=True),
        ),
        rows=tuple(rows),
        file="goodness.csv",
    )
    return without_empty_notes(table)


def _goodness_row(name: str, row: pd.Series) -> tuple[Cell, ...]:
    def p_cell(column: str) -> Cell:
        p = float(row[column])
        return Cell(p_text(p), p) if math.isfinite(p) else Cell("")

    decided = float(row["p_adjusted"])
    if not math.isfinite(decided):
        decided = float(row["p_value"])
    verdict = "" if not math.isfinite(decided) else ("not described" if decided < TEST_LEVEL else "described")
    statistic = float(row["ks_statistic"])
    return (
        Cell(name),
        Cell(count_text(float(row["n_spikes"])), float(row["n_spikes"])),
        Cell(f"{statistic:.3f}", statistic) if math.isfinite(statistic) else Cell(""),
        p_cell("p_value"),
        p_cell("p_adjusted"),
        p_cell("p_value_plain"),
        Cell(verdict),
        Cell("" if math.isfinite(statistic) else _note(row["note"])),
    )


def _note(value: object) -> str:
    return "" if value is None or value != value else str(value)


def unit_table(fit: CouplingFit, recording: Recording) -> Table:
    """Every unit: place, spikes, observed rate, baseline."""
    units = recording.units
    axes = [c for c in COORDINATES if c in units.columns]
    places = units[axes].to_numpy(dtype=np.float64)
    decimals = 0 if np.array_equal(places, np.round(places)) else 1
    rate_of = fit.model.link.rate
    rows = []
    for (unit, row), (_, known) in zip(fit.baselines.iterrows(), units.iterrows(), strict=True):
        estimate, error = float(row["estimate"]), float(row["std_error"])
        estimable = math.isfinite(estimate)
        ends = rate_of(np.array([float(row["lower"]), float(row["upper"])]))
        rate = float(row["rate_hz"])
        shown = interval_text(rate, float(ends[0]), float(ends[1]), max_decimals=TABLE_DECIMALS)
        rows.append(
            (
                Cell(str(unit)),
                *(Cell(fixed_text(float(known[c]), decimals), float(known[c])) for c in axes),
                Cell(count_text(float(known["n_spikes"])), float(known["n_spikes"])),
                value_cell(float(known["rate_hz"])),
                Cell(shown, rate) if estimable else Cell(""),
                value_cell(estimate) if estimable else Cell(""),
                value_cell(error, 2) if math.isfinite(error) else Cell(""),
                Cell(_note(row["note"])),
            )
        )
    table = Table(
        caption="Units: what was observed, and the baseline without coupling",
        columns=(
            Column("unit", numeric=False),
            *(Column(f"{axis[0]} (µm)") for axis in axes),
            Column("spikes"),
            Column("observed rate (Hz)"),
            Column(f"baseline rate (Hz, {level_text(LEVEL)} interval)"),
            Column("baseline b"),
            Column("std. error of b"),
            Column("note", numeric=False, wraps=True),
        ),
        rows=tuple(rows),
        file="baselines.csv",
    )
    return without_empty_notes(table)


def truth_table(fit: CouplingFit, truth: Truth) -> Table:
    """Estimates beside the truth an invented recording was made from."""
    rows = []
    for value in truth.values:
        estimate = parameter_of(fit, value.name)
        if estimate is None:
            shown, inside = "not a parameter of this model", ""
        else:
            shown = interval_text(estimate.value, estimate.lower, estimate.upper, max_decimals=TABLE_DECIMALS)
            holds = estimate.lower <= value.value <= estimate.upper
            inside = ("yes" if holds else "no") if estimate.bounded else "no interval"
        rows.append(
            (
                Cell(f"{meaning(value.name, fit)}{_unit_shown(value.unit)}"),
                Cell(number_text(value.value, 4, max_decimals=TABLE_DECIMALS), value.value),
                Cell(shown),
                Cell(inside),
            )
        )
    return Table(
        caption="How the estimates compare with the truth the recording was made from",
        columns=(
            Column("what", numeric=False),
            Column("truth"),
            Column(f"estimate ({level_text(LEVEL)} interval)"),
            Column("truth inside the interval", numeric=False),
        ),
        rows=tuple(rows),
    )


# --- facts and settings -----------------------------------------------------------------------------------


def recording_facts(fit: CouplingFit, recording: Recording) -> Definition:
    """What was recorded and what of it entered the fit."""
    origin = fit.origin
    bounds = recording.window_bounds
    rows = [(f"file, {f.role}", f"{f.name} (SHA-256 {f.sha256[:HASH_SHOWN]}...)") for f in origin.files]
    rows.append(("units", count_text(recording.n_units)))
    silent = int((recording.counts == 0).sum())
    if silent:
        rows.append(("silent units", f"{count_text(silent)}; not explained, kept as sources"))
    if recording.source_only:
        rows.append(("source-only units", count_text(len(recording.source_only))))
    outside = int(sum(t.size for t in recording.trains)) - recording.n_spikes
    rows.append(("spikes in the windows", count_text(recording.n_spikes)))
    if outside:
        rows.append(("spikes outside the windows", f"{count_text(outside)}; kept as history"))
    first, last = float(bounds[0, 0]), float(bounds[-1, 1])
    span = f"{number_text(first)} to {number_text(last)} s on the recording's clock"
    count = "1 window" if bounds.shape[0] == 1 else f"{count_text(bounds.shape[0])} windows"
    rows.append(("windows", f"{count}, {duration_text(recording.duration)} in all, {span}"))
    if not origin.windows_stated:
        rows.append(
            (
                "where the window comes from",
                "no windows were given: from the floor of the first spike to the first whole second after the last",
            )
        )
    excluded = recording.exclusion_bounds
    if excluded.shape[0]:
        seconds = float(np.sum(excluded[:, 1] - excluded[:, 0]))
        rows.append(("exclusions", f"{count_text(excluded.shape[0])} stretches, {number_text(seconds)} s in all"))
    if recording.excluded_pairs:
        rows.append(("pairs left out", count_text(len(recording.excluded_pairs))))
    rows.append(("time in the likelihood", f"{duration_text(fit.duration_s)} ({count_text(fit.n_bins)} bins)"))
    rows.append(("spikes in the likelihood", count_text(fit.n_spikes)))
    rows += changes_on_reading(origin.notes)
    return Definition(rows=tuple(rows), caption="The recording")


def changes_on_reading(notes: tuple[str, ...]) -> list[tuple[str, str]]:
    """Rows for what reading changed, without what rows of their own say: windows not stated, spikes outside them."""
    told = ("windows not stated", "spikes lie outside the windows")
    return [("changed on reading", note) for note in notes if not any(said in note for said in told)]


def kernel_setting(kernel: Kernel) -> str:
    """The family with its options: "spline (n_basis 10, smoothing 0)"."""
    options = ", ".join(f"{name} {value}" for name, value in kernel.describe().items())
    return f"{kernel.name} ({options})" if options else kernel.name


def _after_spike_setting(term: AfterSpikeTerm, bin_width: float) -> str:
    constants = term.constants(bin_width)
    if constants.size == 0:
        return term.name
    listing = ", ".join(time_text(float(c)) for c in constants)
    ridge = number_text(term.ridge) if isinstance(term.ridge, float) else term.ridge
    return f"{term.name}: exponential traces per unit, time constants {listing}; ridge {ridge}"


def settings_facts(fit: CouplingFit, goodness: Goodness) -> Definition:
    """Every setting a rerun needs."""
    model = fit.model
    leak = "estimated" if model.leak_rate is None else f"held at {number_text(model.leak_rate)} per second"
    kernel = model.kernel
    reach = "no limit" if model.max_distance is None else distance_label(model.max_distance)
    blocks = f"{count_text(fit.n_blocks)} blocks of {time_text(fit.block_length_s)}"
    rows = (
        ("kernel", kernel_setting(kernel)),
        ("link", link_name(fit)),
        ("bin width", time_text(model.bin_width)),
        ("leak rate", leak),
        ("largest distance", reach),
        (
            "pairs on one site",
            {"exclude": "left out", "own": "one coefficient of their own"}.get(model.same_site, "in the kernel"),
        ),
        ("after-spike term", _after_spike_setting(model.after_spike, model.bin_width)),
        ("course of the rate", model.rate_course.name),
        ("warm-up", time_text(model.warm_up_s) if model.warm_up_s else "none"),
        ("reference distance", distance_label(fit.reference_distance_um)),
        (
            "intervals",
            f"{level_text(LEVEL)}, {_kind(fit)}" + (f", {blocks}" if fit.covariance_kind != "model" else ""),
        ),
        ("seed of the coupling test", str(fit.seed)),
        ("seed of the goodness test", str(goodness.seed)),
        ("kernelfit", f"version {fit.version}, run at {_moment(fit.created)}"),
    )
    return Definition(rows=rows, caption="Settings", headings=("setting", "value"))


def _moment(created: str) -> str:
    """A time stamp as people write it: "2026-03-01 14:05 UTC"."""
    return re.sub(r"^(\d{4}-\d\d-\d\d)T(\d\d:\d\d):\d\d(?:\.\d+)?\+00:00$", r"\1 \2 UTC", created)


def _or_reason(value: float | Unavailable, factor: float, unit: str) -> str:
    return str(value) if isinstance(value, Unavailable) else f"{number_text(factor * value)}{spaced_unit(unit)}"


def fit_facts(fit: CouplingFit, goodness: Goodness) -> Definition:
    """The fit in numbers."""
    solver = fit.solver
    ended = "converged" if fit.converged else "did not converge"
    rows = (
        ("log-likelihood", f"{number_text(fit.log_likelihood, 3)} nats"),
        ("with constant rates", f"{number_text(fit.null_log_likelihood, 3)} nats"),
        ("deviance explained", _or_reason(goodness.deviance_explained, 100.0, "%")),
        ("bits per spike", _or_reason(goodness.bits_per_spike, 1.0, "")),
        ("parameters", count_text(fit.n_parameters)),
        ("AIC, BIC", f"{number_text(fit.aic, 3)}, {number_text(fit.bic, 3)}"),
        ("optimiser", f"{ended} after {count_text(solver.n_iterations)} steps: {powers_text(solver.message)}"),
        ("computing time", duration_text(fit.seconds)),
    )
    return Definition(rows=rows, caption="The fit in numbers")
