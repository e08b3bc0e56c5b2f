"""How much recording an estimate is worth: spikes, time and independent stretches beside those that were counted."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from kernelfit.inference.scales import shared_names

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit

NORMAL_KURTOSIS = 3.0


def worth_table(fit: CouplingFit) -> pd.DataFrame:
    """See `CouplingFit.worth`."""
    ratio = np.sqrt(np.diag(fit.uncertainty.shared("robust")) / np.diag(fit.uncertainty.shared("model")))
    share = 1.0 / np.maximum(ratio, 1.0) ** 2
    pull = fit.uncertainty.block_influence - fit.uncertainty.block_influence.mean(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        taking_part = NORMAL_KURTOSIS * np.sum(pull**2, axis=0) ** 2 / np.sum(pull**4, axis=0)
    return pd.DataFrame(
        {
            "ratio": ratio,
            "spikes": share * fit.n_spikes,
            "seconds": share * fit.duration_s,
            "stretches": np.minimum(taking_part, fit.n_blocks),
        },
        index=pd.Index(shared_names(fit), name="parameter", dtype=object),
    )
