"""A compensator from dense arrays, written as plainly as possible: what the engine's sweep must agree with."""

from __future__ import annotations

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.engine.compensator import Compensator


def compensator_from_dense(expected: FloatArray, counts: IntArray) -> Compensator:
    """Compensator of expected counts and counts, both (n_bins, n_units)."""
    rows = []
    for k in range(counts.shape[1]):
        before = 0.0
        for mean, count in zip(expected[:, k].tolist(), counts[:, k].tolist(), strict=True):
            if count > 0:
                rows.append((k, before, mean, count))
            before += mean
    unit, before_, within, count_ = (np.array(c) for c in zip(*rows, strict=True)) if rows else (np.empty(0),) * 4
    mean_of_bin, count_of_bin = expected.sum(axis=1), counts.sum(axis=1)
    start_of_bin = np.concatenate([[0.0], np.cumsum(mean_of_bin)[:-1]])
    holds = count_of_bin > 0
    return Compensator(
        unit=unit.astype(np.int32),
        before=before_.astype(np.float64),
        within=within.astype(np.float64),
        count=count_.astype(np.int64),
        total=expected.sum(axis=0),
        pooled_before=start_of_bin[holds],
        pooled_within=mean_of_bin[holds],
        pooled_count=count_of_bin[holds].astype(np.int64),
        pooled_total=float(expected.sum()),
    )
