"""The engine's expected counts, held against dense arrays; right and wrong models of simulated networks."""

from __future__ import annotations

import numpy as np
import pytest
from dense import compensator_from_dense
from scipy.special import gammaln

from kernelfit.diagnostics import goodness_of_fit, saturated_log_likelihood
from kernelfit.engine.evaluate import Point, SweepData, compensate, evaluate
from kernelfit.engine.twin import dense_gradients
from kernelfit.model.links import EXP

BIN_S = 0.005
LEAK = 50.0


def sweep_data(counts, first_bin, stretches, targets):
    """Engine data of dense counts (n_bins, n_units) whose first row is timeline bin `first_bin`."""
    bins, units = np.nonzero(counts)
    active, first = np.unique(bins, return_index=True)
    stretches = np.array(stretches, dtype=np.int64)
    in_sum = np.zeros(counts.shape[0], dtype=bool)
    for start, stop in stretches:
        in_sum[start - first_bin : stop - first_bin] = True
    summed = counts[in_sum][:, targets]
    return SweepData(
        bin_width=BIN_S,
        n_units=counts.shape[1],
        targets=np.asarray(targets, dtype=np.int64),
        active_bin=active + first_bin,
        active_first=np.append(first, bins.size).astype(np.int64),
        event_unit=units.astype(np.int32),
        event_count=counts[bins, units].astype(np.float64),
        stretches=stretches,
        log_factorials=float(gammaln(summed + 1.0).sum()),
        counts=summed.sum(axis=0),
    ), summed


@pytest.mark.parametrize("n_units", [4, 70])
def test_engine_agrees_with_dense_arrays(n_units):
    """Spikes before, between and after two stretches, several in a bin, a unit that is only a source."""
    rng = np.random.default_rng(n_units)
    counts = rng.poisson(0.08, size=(420, n_units))
    targets = np.delete(np.arange(n_units), 2)
    data, summed = sweep_data(counts, -20, [(0, 150), (170, 380)], targets)
    point = Point(
        link=EXP,
        leak=LEAK,
        fit_leak=False,
        tables=rng.normal(0, 0.2 / np.sqrt(n_units), size=(1, n_units, targets.size)),
        baseline=np.log(rng.uniform(5, 20, targets.size)),
        trace_decay=np.exp(-BIN_S / np.array([0.004, 0.05])),
        coefficient=rng.normal(0, 0.1, size=(2, targets.size)),
    )
    got = compensate(data, point)
    expected = compensator_from_dense(BIN_S * np.exp(dense_gradients(data, point)[2]), summed)
    np.testing.assert_array_equal(got.unit, targets[expected.unit])
    np.testing.assert_array_equal(got.count, expected.count)
    np.testing.assert_array_equal(got.pooled_count, expected.pooled_count)
    for name in ("before", "within", "pooled_before", "pooled_within"):
        np.testing.assert_allclose(getattr(got, name), getattr(expected, name), rtol=1e-10, atol=1e-12, err_msg=name)
    np.testing.assert_allclose(got.total[targets], expected.total, rtol=1e-10)
    assert got.total[2] == 0.0
    assert got.pooled_total == pytest.approx(expected.pooled_total, rel=1e-10)


# --- networks of known coupling ---------------------------------------------------------------------------


def simulated(rng, n_units, n_bins, jump):
    """Counts of a network in which every unit drives every other by the same jump, and its parameters."""
    W = jump * (1.0 - np.eye(n_units))
    baseline = np.log(rng.uniform(3.0, 6.0, n_units))
    counts = np.zeros((n_bins, n_units), dtype=np.int64)
    U, gamma = np.zeros(n_units), np.exp(-LEAK * BIN_S)
    for t in range(n_bins):
        if t > 0:
            U = gamma * (U + counts[t - 1] @ W)
        counts[t] = rng.poisson(BIN_S * np.exp(baseline + U))
    return counts, baseline, W


def goodness_of_network(counts, jump_table, baseline):
    """Goodness of a model with these jumps whose baselines are fitted: shifted until expected equal observed counts."""
    n_bins, n_units = counts.shape
    data, summed = sweep_data(counts, 0, [(0, n_bins)], np.arange(n_units))

    def at(b):
        return Point(
            link=EXP, leak=LEAK, fit_leak=False, tables=jump_table[np.newaxis], baseline=b, trace_decay=np.empty(0),
            coefficient=np.empty((0, n_units)),
        )  # fmt: skip

    fitted = baseline + np.log(summed.sum(axis=0) / compensate(data, at(baseline)).total)
    mean = summed.mean(axis=0)
    return goodness_of_fit(
        compensate(data, at(fitted)),
        [f"u{k}" for k in range(n_units)],
        log_likelihood=float(evaluate(data, at(fitted), derivatives=False).log_likelihood.sum()) - data.log_factorials,
        null_log_likelihood=float(np.sum(summed * np.log(mean) - mean)) - data.log_factorials,
        saturated_log_likelihood=saturated_log_likelihood(summed),
        n_spikes=data.n_spikes,
        seed=1,
    )


@pytest.fixture(scope="module")
def networks():
    """12 recordings of 8 units, 80 s each: goodness with the coupling and without it."""
    rng = np.random.default_rng(77)
    right, without = [], []
    for _ in range(12):
        counts, baseline, W = simulated(rng, 8, 16_000, 0.3)
        right.append(goodness_of_network(counts, W, baseline))
        without.append(goodness_of_network(counts, 0.0 * W, baseline))
    return right, without


def test_right_coupling_is_rejected_as_often_as_said(networks):
    right, _ = networks
    p_values = np.concatenate([g.units["p_value"] for g in right])
    # 96 units at 5 %: four standard errors; the pooled p-values of 12 recordings are not all small either.
    assert np.mean(p_values < 0.05) == pytest.approx(0.05, abs=4 * np.sqrt(0.05 * 0.95 / p_values.size))
    assert np.median([g.pooled["p_value"].iloc[0] for g in right]) > 0.05


def test_coupling_left_out_is_seen_by_the_pooled_test(networks):
    right, without = networks
    assert np.mean([g.pooled["p_value"].iloc[0] < 0.05 for g in without]) >= 0.9
    for with_it, without_it in zip(right, without, strict=True):
        assert with_it.bits_per_spike > 0.0
        assert without_it.bits_per_spike == pytest.approx(0.0, abs=1e-9)
        assert without_it.deviance_explained == pytest.approx(0.0, abs=1e-9)
        assert 0.0 < with_it.deviance_explained < 1.0
