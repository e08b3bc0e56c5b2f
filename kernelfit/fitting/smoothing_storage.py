"""How the smoothing of a fit was chosen, as plain JSON values and back."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

import numpy as np

from kernelfit.fitting.plain_values import floats, plain
from kernelfit.fitting.smoothing import ChosenWeight, Smoothing
from kernelfit.fitting.validation import HeldOut


def describe_smoothing(smoothing: Smoothing) -> dict[str, Any]:
    """As plain values; NaN becomes null."""
    table = smoothing.held_out
    return {
        "weights": [asdict(w) for w in smoothing.weights],
        "settled": smoothing.settled,
        "n_rounds": smoothing.n_rounds,
        "n_sweeps": smoothing.n_sweeps,
        "log_marginal_likelihood": plain(np.array([smoothing.log_marginal_likelihood]))[0],
        "held_out": None
        if table is None
        else {
            "smoothing": plain(table.smoothing),
            "log_likelihood": plain(table.log_likelihood),
            "gap_s": table.gap_s,
        },
    }


def restore_smoothing(values: Mapping[str, Any]) -> Smoothing:
    """From what `describe_smoothing` made."""
    table = values["held_out"]
    return Smoothing(
        weights=tuple(_weight(w) for w in values["weights"]),
        settled=bool(values["settled"]),
        n_rounds=int(values["n_rounds"]),
        n_sweeps=int(values["n_sweeps"]),
        log_marginal_likelihood=float(floats([values["log_marginal_likelihood"]], 1)[0]),
        held_out=None
        if table is None
        else HeldOut(
            floats(table["smoothing"], -1),
            floats(table["log_likelihood"], -1, len(table["smoothing"])),
            float(table["gap_s"]),
        ),
    )


def _weight(values: Mapping[str, Any]) -> ChosenWeight:
    return ChosenWeight(
        term=values["term"],
        chosen_by=values["chosen_by"],
        value=float(values["value"]),
        lower=float(values["lower"]),
        upper=float(values["upper"]),
        at_bound=int(values["at_bound"]),
        likely_from=float(values["likely_from"]),
        likely_to=float(values["likely_to"]),
    )
