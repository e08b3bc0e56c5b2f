"""Expected counts accumulated along the observed time, at the bins that hold spikes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kernelfit._typing import FloatArray, IntArray


@dataclass(frozen=True, eq=False, slots=True)
class Compensator:
    """What a fitted model expected, as far as goodness of fit needs it: O(spikes) numbers, nothing per bin.

    Only bins that count in the likelihood appear. Windows, trials and the stretches around exclusions are
    joined end to end: `before` runs on from one into the next.

    Parameters
    ----------
    unit : (n_events,) int32, index of the unit; one row per unit and bin that holds spikes of it, sorted by
        unit, then by time
    before : (n_events,) expected count of that unit over the sum's bins up to the start of the bin
    within : (n_events,) expected count of that unit in the bin
    count : (n_events,) int64, spikes of that unit in the bin, at least 1
    total : (n_units,) expected count of each unit over the whole sum
    pooled_before, pooled_within, pooled_count : (n_bins_with_spikes,) the same for all units taken
        together, one row per bin that holds any spike
    pooled_total : expected count of all units over the whole sum
    """

    unit: NDArray[np.int32]
    before: FloatArray
    within: FloatArray
    count: IntArray
    total: FloatArray
    pooled_before: FloatArray
    pooled_within: FloatArray
    pooled_count: IntArray
    pooled_total: float

    @property
    def n_units(self) -> int:
        """Units of the model, those without a spike included."""
        return int(self.total.size)

    def rows_of(self, unit: int) -> slice:
        """Rows of one unit, by its index."""
        start, stop = np.searchsorted(self.unit, [unit, unit + 1])
        return slice(int(start), int(stop))
