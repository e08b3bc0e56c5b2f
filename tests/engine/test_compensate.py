"""Expected counts at spikes and over stretches, against rates computed bin by bin in plain numpy."""

from __future__ import annotations

import numpy as np
import pytest
from sweep_cases import make_case

from kernelfit.engine.evaluate import compensate, expected_counts


def dense_means(data, point, n_bins):
    """(n_bins, n_targets) expected counts from timeline bin 0 on, from docs/model.md section 3 alone."""
    low = min(0, int(data.active_bin.min(initial=0)))
    counts = np.zeros((n_bins - low, data.n_units))
    for k, b in enumerate(data.active_bin):
        for e in range(data.active_first[k], data.active_first[k + 1]):
            if b < n_bins:
                counts[b - low, data.event_unit[e]] += data.event_count[e]
    gamma = np.exp(-point.leak * data.bin_width)
    U, S = np.zeros(data.n_targets), np.zeros((point.trace_decay.size, data.n_targets))
    means = []
    for t in range(len(counts)):
        if t > 0:
            U = gamma * (U + point.tables[0].T @ counts[t - 1])
            S = point.trace_decay[:, None] * (S + counts[t - 1][data.targets])
        means.append(data.bin_width * np.exp(point.baseline + U + np.einsum("mn,mn->n", point.coefficient, S)))
    return np.array(means)[-low:], counts[-low:].astype(int)


CASES = {
    "three windows": {"n_units": 6},
    "exclusions and warm-up": {"n_units": 20, "exclusions": ((0.5, 0.7), (5.2, 5.4)), "warm_up_s": 0.1},
    "a silent and some source-only units": {"n_units": 9, "targets": (0, 2, 5, 8), "silent": (1,)},
    "several spikes a bin": {"n_units": 4, "rate_hz": 120.0},
    "two blocks of targets": {"n_units": 60},
}


@pytest.fixture(scope="module", params=CASES.values(), ids=CASES)
def case(request):
    return make_case(9, n_coupling=0, n_traces=2, fit_leak=False, **request.param)


@pytest.fixture(scope="module")
def dense(case):
    return dense_means(case.data, case.point, int(case.grid.stretches[-1, 1]))


def test_rows_are_the_spikes_of_the_targets_in_the_sum(case, dense):
    _, counts = dense
    got = compensate(case.data, case.point, threads=2)
    in_sum = np.concatenate([np.arange(a, b) for a, b in case.grid.stretches])
    want_unit, want_count = [], []
    for unit in case.data.targets:
        at = in_sum[counts[in_sum, unit] > 0]
        want_unit += [unit] * at.size
        want_count += counts[at, unit].tolist()
    np.testing.assert_array_equal(got.unit, want_unit)
    np.testing.assert_array_equal(got.count, want_count)
    pooled = counts[np.ix_(in_sum, case.data.targets)].sum(axis=1)
    np.testing.assert_array_equal(got.pooled_count, pooled[pooled > 0])


def test_expected_counts_up_to_and_in_each_spikes_bin(case, dense):
    means, counts = dense
    got = compensate(case.data, case.point, threads=2)
    in_sum = np.concatenate([np.arange(a, b) for a, b in case.grid.stretches])
    means, counts = means[in_sum], counts[in_sum][:, case.data.targets]
    start = np.vstack([np.zeros(case.data.n_targets), np.cumsum(means, axis=0)[:-1]])
    for place, unit in enumerate(case.data.targets):
        rows, at = got.rows_of(int(unit)), counts[:, place] > 0
        np.testing.assert_allclose(got.before[rows], start[at, place], rtol=1e-12)
        np.testing.assert_allclose(got.within[rows], means[at, place], rtol=1e-12)
    any_spike = counts.sum(axis=1) > 0
    np.testing.assert_allclose(got.pooled_before, start.sum(axis=1)[any_spike], rtol=1e-12)
    np.testing.assert_allclose(got.pooled_within, means.sum(axis=1)[any_spike], rtol=1e-12)
    np.testing.assert_allclose(got.total[case.data.targets], means.sum(axis=0), rtol=1e-12)
    not_explained = np.setdiff1d(np.arange(case.data.n_units), case.data.targets)
    np.testing.assert_array_equal(got.total[not_explained], 0.0)
    assert got.pooled_total == pytest.approx(means.sum(), rel=1e-12)


def test_rates_of_any_stretch_whether_in_the_sum_or_not(case, dense):
    means, _ = dense
    for first, n in ((0, 40), (45, 60), (190, 30), (len(means) - 5, 5)):
        got = expected_counts(case.data, case.point, first, n, threads=2)
        np.testing.assert_allclose(got, means[first : first + n], rtol=1e-12)
