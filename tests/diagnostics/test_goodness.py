"""Goodness of fit: the table, its reasons, the size of its tests, and the gain figures."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from dense import compensator_from_dense
from scipy.stats import poisson

from kernelfit.diagnostics import goodness_of_fit, ks
from kernelfit.diagnostics.goodness import adjusted_p_values, bits_per_spike, deviance_explained
from kernelfit.diagnostics.goodness import saturated_log_likelihood as saturated
from kernelfit.diagnostics.independence import SerialIndependence, serial_independence
from kernelfit.errors import ArgumentError, RecordingError, Unavailable


def goodness_of(expected, counts, *, seed=0, level=0.95, compensator=None):
    """Goodness of dense expected counts (n_bins, n_units), units named u0, u1, ..."""
    null = np.broadcast_to(counts.mean(axis=0), counts.shape)
    return goodness_of_fit(
        compensator or compensator_from_dense(expected, counts),
        [f"u{k}" for k in range(counts.shape[1])],
        log_likelihood=float(poisson.logpmf(counts, expected).sum()),
        null_log_likelihood=float(poisson.logpmf(counts, null).sum()),
        saturated_log_likelihood=saturated(counts),
        n_spikes=int(counts.sum()),
        seed=seed,
        level=level,
    )


@pytest.fixture(scope="module")
def mixed():
    """Six units: two well described, one silent, one with 1 spike, one with 5, one whose rate is badly wrong."""
    rng = np.random.default_rng(8)
    truth = 0.2 + 0.3 * rng.random((3000, 6))
    counts = rng.poisson(truth)
    counts[:, 2] = 0
    counts[:, 3] = 0
    counts[17, 3] = 1
    counts[:, 4] = 0
    counts[[1, 20, 21], 4] = [2, 1, 2]
    counts[:, 5] = rng.poisson(np.where(np.arange(3000) % 600 < 300, 0.02, 0.6))
    expected = truth * counts.sum(axis=0) / truth.sum(axis=0)
    return expected, counts


def test_table_has_every_unit_in_order(mixed):
    goodness = goodness_of(*mixed)
    units = goodness.units
    assert list(units.columns) == ["n_spikes", "ks_statistic", "p_value", "p_adjusted", "p_value_plain", "note"]
    assert list(units.index) == ["u0", "u1", "u2", "u3", "u4", "u5"]
    assert units.index.name == "unit"
    assert units["n_spikes"].tolist() == mixed[1].sum(axis=0).tolist()
    assert list(goodness.pooled.columns) == list(units.columns)
    assert len(goodness.pooled) == 1
    assert goodness.pooled["n_spikes"].iloc[0] == mixed[1].sum()
    assert goodness.pooled["p_adjusted"].iloc[0] == goodness.pooled["p_value"].iloc[0]


def test_what_cannot_be_tested_is_nan_with_the_reason(mixed):
    units = goodness_of(*mixed).units
    numbers = units.loc[["u2", "u3", "u4"], ["ks_statistic", "p_value", "p_adjusted", "p_value_plain"]]
    assert numbers.isna().all(axis=None)
    assert "no spike" in units.loc["u2", "note"]
    assert units.loc["u3", "note"].startswith("1 spike in")
    assert units.loc["u4", "note"].startswith("5 spikes in")
    assert (units.loc[["u0", "u1"], "note"] == "").all()
    assert units.loc[["u0", "u1", "u5"], "p_value"].notna().all()


def test_a_wrong_rate_is_seen_and_its_floor_is_said(mixed):
    goodness = goodness_of(*mixed)
    assert goodness.units.loc["u5", "p_value"] == ks.SMALLEST_P_VALUE
    assert "or less" in goodness.units.loc["u5", "note"]
    assert goodness.units.loc["u5", "p_value_plain"] < 1e-6
    assert goodness.n_tested == 3
    assert goodness.n_rejected == 1


def test_untested_units_do_not_count_in_the_adjustment(mixed):
    units = goodness_of(*mixed).units
    tested = units["p_value"].notna()
    np.testing.assert_array_equal(
        units.loc[tested, "p_adjusted"], adjusted_p_values(units.loc[tested, "p_value"].to_numpy())
    )
    assert (units.loc[tested, "p_adjusted"] >= units.loc[tested, "p_value"]).all()
    assert np.isnan(adjusted_p_values(np.array([np.nan, np.nan]))).all()


def test_statistic_belongs_to_the_p_value(mixed):
    goodness = goodness_of(*mixed)
    for unit in ("u0", "u1", "u5"):
        z, row = goodness.z(unit), goodness.units.loc[unit]
        assert (np.diff(z) >= 0).all()
        assert z.size == row["n_spikes"] - 1
        assert row["ks_statistic"] == ks.ks_distance(z)
        assert row["p_value"] == ks.estimated_mean_p_value(row["ks_statistic"], z.size)
    assert goodness.pooled["ks_statistic"].iloc[0] == ks.ks_distance(goodness.pooled_z)
    assert goodness.z("u2").size == goodness.z("u3").size == 0


def test_scale_of_the_rates_moves_only_the_plain_p_value(mixed):
    """Gaps are divided by their mean, so a wrong overall level is the plain test's to see."""
    expected, counts = mixed
    right, tripled = goodness_of(expected, counts), goodness_of(3 * expected, counts)
    np.testing.assert_allclose(right.units["p_value"], tripled.units["p_value"], rtol=1e-9)
    assert tripled.units.loc["u0", "p_value_plain"] < 1e-9 < right.units.loc["u0", "p_value_plain"]


@pytest.mark.parametrize("level", [0.9, 0.95, 0.99])
def test_leaving_the_critical_band_is_a_small_p_value(level):
    rng = np.random.default_rng(2)
    expected = np.full((500, 300), 0.1)
    goodness = goodness_of(expected, rng.poisson(expected), level=level)
    rejected = 0
    for unit, row in goodness.units.iterrows():
        curve = goodness.ks_curve(unit)
        assert curve.share[-1] == 1.0
        leaves = ks.ks_distance(curve.z) > curve.critical_half_width
        assert leaves == (row["p_value"] < 1 - level)
        assert curve.dkw_half_width > curve.critical_half_width
        rejected += leaves
    assert 0 < rejected < 60


def test_curve_of_a_unit_without_gaps_is_empty(mixed):
    curve = goodness_of(*mixed).ks_curve("u2")
    assert curve.z.size == curve.share.size == 0
    assert np.isnan(curve.critical_half_width)
    assert np.isnan(curve.dkw_half_width)
    few = goodness_of(*mixed).ks_curve("u4")
    assert few.z.size == 4
    assert np.isnan(few.critical_half_width)
    assert few.dkw_half_width > 0


def test_same_seed_same_table(mixed):
    first, again, other = (goodness_of(*mixed, seed=s) for s in (4, 4, 5))
    assert first.units.equals(again.units)
    assert first.pooled.equals(again.pooled)
    assert not first.units.equals(other.units)
    assert first.seed == 4


def test_runaway_model_is_a_reason_not_a_crash(mixed):
    expected, counts = mixed
    compensator = compensator_from_dense(expected, counts)
    within = compensator.within.copy()
    within[compensator.rows_of(1)] = np.inf
    goodness = goodness_of(expected, counts, compensator=replace(compensator, within=within))
    assert "not finite" in goodness.units.loc["u1", "note"]
    assert np.isnan(goodness.units.loc["u1", "p_value"])
    assert goodness.z("u1").size == 0
    assert isinstance(goodness.serial_independence("u1"), Unavailable)
    nothing = replace(compensator, within=0 * compensator.within, before=0 * compensator.before)
    assert "zero" in goodness_of(expected, counts, compensator=nothing).units.loc["u0", "note"]


def test_nothing_recorded_is_a_table_of_reasons():
    goodness = goodness_of(np.full((10, 2), 0.1), np.zeros((10, 2), dtype=np.int64))
    assert goodness.units["p_value"].isna().all()
    assert goodness.pooled["note"].iloc[0].startswith("no spike")
    assert isinstance(goodness.deviance_explained, Unavailable)
    assert isinstance(goodness.bits_per_spike, Unavailable)
    assert goodness.n_tested == goodness.n_rejected == 0


def test_unknown_unit_is_named(mixed):
    with pytest.raises(RecordingError, match=r"'u9'.*'u0'"):
        goodness_of(*mixed).z("u9")


def test_wrong_arguments_are_refused(mixed):
    with pytest.raises(ArgumentError, match="level"):
        goodness_of(*mixed, level=95)
    expected, counts = mixed
    with pytest.raises(ArgumentError, match="5 unit ids for 6 units"):
        goodness_of(expected[:, :5], counts[:, :5], compensator=compensator_from_dense(expected, counts))


# --- the size of the tests --------------------------------------------------------------------------------


@pytest.mark.parametrize(("n_spikes", "n_bins"), [(20, 200), (100, 300), (1000, 500)])
def test_right_models_with_fitted_rates_are_rejected_as_often_as_said(n_spikes, n_bins):
    """2000 Poisson units of known course and fitted level: 5 % and, plain, 0.5 %; 4 standard errors each.

    0.483 % at n = 20 and 0.550 % at n = 100 are the exact size of the plain test with fitted mean (simulated there
    with 2e6 to 4e6 samples); rates of up to 2 spikes a bin, and up to several spikes in one.
    """
    rng = np.random.default_rng(n_spikes)
    n_units = 2000
    course = n_spikes / n_bins * (1 + 0.8 * np.sin(np.arange(n_bins) / 20))[:, np.newaxis] * np.ones(n_units)
    counts = rng.poisson(course)
    assert counts.max() >= 3
    expected = course * counts.sum(axis=0) / course.sum(axis=0)
    units = goodness_of(expected, counts).units
    for share, size in (
        (np.mean(units["p_value"] < 0.05), 0.05),
        (np.mean(units["p_value"] < 0.5), 0.5),
        (np.mean(units["p_value_plain"] < 0.05), 0.0053),
    ):
        assert share == pytest.approx(size, abs=4 * np.sqrt(size * (1 - size) / n_units))


def test_pooled_test_keeps_its_size():
    """300 recordings of 4 units; 4 standard errors around 5 %."""
    rng = np.random.default_rng(6)
    p_values = []
    for _ in range(300):
        counts = rng.poisson(np.full((150, 4), [0.05, 0.2, 0.4, 0.8]))
        expected = np.broadcast_to(counts.mean(axis=0), counts.shape)
        p_values.append(goodness_of(expected, counts).pooled["p_value"].iloc[0])
    assert np.mean(np.array(p_values) < 0.05) == pytest.approx(0.05, abs=4 * np.sqrt(0.05 * 0.95 / 300))


def test_independence_test_keeps_its_size_and_sees_dependence():
    rng = np.random.default_rng(9)
    expected = np.full((400, 500), 0.3)
    goodness = goodness_of(expected, rng.poisson(expected))
    tests = [goodness.serial_independence(unit, n_lags=3) for unit in goodness.units.index]
    assert all(isinstance(t, SerialIndependence) for t in tests)
    # 0.01 beside 4 standard errors: the chi-square law of the statistic is asymptotic.
    share = np.mean([t.p_value < 0.05 for t in tests])
    assert share == pytest.approx(0.05, abs=0.01 + 4 * np.sqrt(0.05 * 0.95 / 500))
    wavy = np.exp(np.sin(np.arange(4000) / 100))[:, np.newaxis] * 0.3
    seen = goodness_of(np.full_like(wavy, 0.3), rng.poisson(wavy)).serial_independence("u0")
    assert isinstance(seen, SerialIndependence)
    assert seen.p_value < 1e-6
    assert isinstance(goodness.serial_independence(n_lags=10), SerialIndependence)


def test_independence_of_too_little_is_a_reason():
    assert "too few" in str(serial_independence(np.arange(9.0), n_lags=10))
    assert "equal" in str(serial_independence(np.ones(50), n_lags=10))
    with pytest.raises(ArgumentError):
        serial_independence(np.arange(90.0), n_lags=0)


# --- gain over constant rates -----------------------------------------------------------------------------


def test_gain_by_hand():
    # Counts 2, 0 with expected 1.5, 0.5 against the constant 1: log-likelihoods differ by 2 log 1.5; the saturated
    # model gains 2 log 2. Deviance explained log 1.5 / log 2 = 0.58496..., the same number in bits per spike.
    counts, expected = np.array([[2], [0]]), np.array([[1.5], [0.5]])
    goodness = goodness_of(expected, counts)
    assert goodness.deviance_explained == pytest.approx(np.log2(1.5), rel=1e-12)
    assert goodness.bits_per_spike == pytest.approx(np.log2(1.5), rel=1e-12)


def test_saturated_log_likelihood_is_that_of_rates_equal_to_the_counts():
    counts = np.array([[0, 1, 5], [3, 0, 2]])
    assert saturated(counts) == pytest.approx(float(poisson.logpmf(counts, counts).sum()), rel=1e-12)
    assert saturated(counts[counts > 0]) == pytest.approx(saturated(counts), rel=1e-12)


def test_gain_at_its_ends():
    assert deviance_explained(-10.0, -10.0, -4.0) == 0.0
    assert deviance_explained(-4.0, -10.0, -4.0) == 1.0
    assert deviance_explained(-13.0, -10.0, -4.0) == -0.5
    assert bits_per_spike(-10.0, -10.0, 3) == 0.0
    assert isinstance(deviance_explained(-4.0, -4.0, -4.0), Unavailable)
