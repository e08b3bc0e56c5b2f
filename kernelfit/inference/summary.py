"""A fit in plain text, and the same as a small table for notebooks."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit.inference.stated import NOT_IDENTIFIED
from kernelfit.recording.findings import number

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

CAUTION = (
    "Functional, not synaptic, coupling: common input and unrecorded cells leave a trace. For research; not for "
    "clinical decisions."
)

CONDITIONAL = (
    "What follows takes for granted that there is coupling of this form: intervals of amplitudes say how strong it "
    "could be, not that it is there."
)


def _row(name: str, row: pd.Series) -> str:
    if not np.isfinite(row["estimate"]):
        return f"  {name:<20} could not be estimated: {row['note'].removeprefix(f'{NOT_IDENTIFIED}: ')}"
    interval = f"{row['lower']:.4g} to {row['upper']:.4g}" if np.isfinite(row["lower"]) else row["note"]
    return f"  {name:<20} {row['estimate']:.4g} {row['unit']} ({interval})"


def summary_text(fit: CouplingFit) -> str:
    """The result in plain text: verdict, parameters with 95 % intervals, what they rest on, notes."""
    kind = f"{fit.covariance_kind} standard errors, 95 % intervals"
    stated = fit.verdict.found or fit.model.leak_rate is not None
    time_constant = f"time constant {1000 * fit.time_constant:.4g} ms; " if stated else ""
    table = fit.parameters
    conditional = not fit.verdict.found and bool(table["std_error"].notna().any())
    lines = [
        f"{fit.model.kernel.name} kernel, {fit.model.link.name} link, {1000 * fit.model.bin_width:g} ms bins",
        fit.verdict.sentence,
        *([CONDITIONAL] if conditional else []),
        *[_row(str(name), row) for name, row in table.iterrows()],
        f"  {time_constant}amplitudes at {fit.reference_distance_um:.4g} µm; {kind}",
        f"{len(fit.targets)} of {len(fit.unit_ids)} units explained, {fit.n_spikes:,} spikes, "
        f"{number(fit.duration_s)} s in {fit.n_blocks} blocks of {number(fit.block_length_s)} s",
        f"log-likelihood {fit.log_likelihood:.4f}, {fit.n_parameters} parameters, AIC {fit.aic:.2f}, BIC "
        f"{fit.bic:.2f}; "
        f"{'converged' if fit.converged else 'NOT CONVERGED'}: {fit.solver.message}",
        *([fit.second_optimum] if fit.second_optimum else []),
        *[f"{n.severity}: {n.what} ({n.where}) {n.remedy}" for n in fit.notes],
        CAUTION,
    ]
    return "\n".join(lines)


def summary_html(fit: CouplingFit) -> str:
    """The parameter table and the verdict, escaped, for a notebook."""
    table = fit.parameters.to_html(float_format=lambda x: f"{x:.4g}", escape=True)
    return f"<p>{escape(fit.verdict.sentence)}</p>{table}<p>{escape(CAUTION)}</p>"
