"""Intervals of derived figures: the delta method against draws, open ends, and what has no number."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from worlds import LEAK, NOTHING, model, simulated

import kernelfit as kf
from kernelfit.errors import ArgumentError
from kernelfit.inference.derived import Lost, derived_figures, setting_of

quiet = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
NUMBERS = ["estimate", "std_error", "lower", "upper"]

HAT = kf.kernels.MexicanHat().at(amplitude=0.5, length_um=110.0, n_coordinates=2)
EXPONENTIAL = kf.kernels.Exponential().at(amplitude=0.15, length_um=90.0, reference_um=100.0)


def fitted(kernel, law, seed=3, n_side=4, **options):
    return model(kernel, **options).fit(simulated(seed, law, n_side=n_side), threads=2)


@pytest.fixture(scope="module")
def hat():
    return fitted("mexican-hat", HAT)


@pytest.fixture(scope="module")
def exponential():
    return fitted("exponential", EXPONENTIAL)


@pytest.fixture(scope="module")
def uncoupled():
    return fitted("exponential", NOTHING, seed=8, n_side=3)


pytestmark = quiet


def with_covariance_times(fit, factor):
    """The fit with every covariance multiplied."""
    u = fit.uncertainty
    jackknife = None if u.shared_jackknife is None else factor * u.shared_jackknife
    spread = replace(
        u, shared_model=factor * u.shared_model, shared_robust=factor * u.shared_robust, shared_jackknife=jackknife
    )
    return replace(fit, uncertainty=spread)


def reason(fit, name):
    row = fit.derived().loc[name]
    assert row[NUMBERS].isna().all(), row
    return row["note"]


# --- the table ----------------------------------------------------------------------------------------------


def test_the_table_by_name(hat):
    table = hat.derived()
    assert list(table.columns) == ["estimate", "std_error", "lower", "upper", "unit", "note"]
    assert table.index.is_unique
    for name in ("reach_um", "half_distance_um", "sign_change_um", "trough_um", "trough_depth", "mass", "mass_ratio"):
        row = table.loc[name]
        assert row["lower"] < row["estimate"] < row["upper"], name
    assert table.loc["spectral_radius", "estimate"] == pytest.approx(hat.spectral_radius, rel=1e-9)
    assert "stays below 1" in table.loc["spectral_radius", "note"]
    pd.testing.assert_frame_equal(table, hat.derived())  # the draws have their seed
    assert hat.derived() is not table


def test_lengths_are_those_of_the_parameters(exponential):
    """The reach of an exponential is the reference distance and its length, interval and all."""
    reach, length = exponential.derived().loc["reach_um"], exponential.parameters.loc["length_um"]
    beyond = reach[["estimate", "lower", "upper"]].astype(float) - exponential.reference_distance_um
    np.testing.assert_allclose(beyond, length[["estimate", "lower", "upper"]].astype(float), rtol=1e-6)
    assert reach["std_error"] == pytest.approx(length["std_error"], rel=1e-6)
    tau, leak = exponential.derived().loc["time_constant_s"], exponential.parameters.loc["leak_rate"]
    np.testing.assert_allclose([tau["lower"], tau["upper"]], [1 / leak["upper"], 1 / leak["lower"]], rtol=1e-6)


@pytest.mark.parametrize("kind", ["robust", "model", "jackknife"])
def test_changes_of_the_rate_are_the_band_transformed(exponential, kind):
    fit = exponential.with_covariance(kind)
    d = np.array([100.0, 150.0, 250.0])
    told = fit.derived(0.9, d).filter(like="percent", axis=0)
    band = fit.kernel_band(d, level=0.9)
    for column in ("estimate", "lower", "upper"):  # ends by differences of the figure, good to five digits
        np.testing.assert_allclose(told[column], 100 * np.expm1(band[column]), rtol=1e-5)


def test_a_higher_level_is_wider(hat):
    narrow, wide = hat.derived(0.8), hat.derived(0.99)
    both = narrow["lower"].notna()
    assert both.sum() >= 12
    assert (wide["lower"] < narrow["lower"])[both].all()
    assert (wide["upper"] > narrow["upper"])[both].all()


def test_calls_that_cannot_be(hat, exponential):
    for level in (0.0, 1.0, 95.0):
        with pytest.raises(ArgumentError, match="strictly between 0 and 1"):
            hat.derived(level)
    for distances in ([-1.0], [np.nan], [[100.0, 200.0]]):
        with pytest.raises(ArgumentError, match="distances_um"):
            hat.derived(distances_um=np.array(distances))
    with pytest.raises(ArgumentError, match="another fit"):
        hat.derived(bootstrap=exponential.bootstrap(n_replicates=39))


def test_a_loaded_fit_has_the_same_table(hat, tmp_path):
    hat.save(tmp_path / "fit.json")
    pd.testing.assert_frame_equal(kf.load_fit(tmp_path / "fit.json").derived(), hat.derived())


# --- the delta method ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("family", ["exponential", "hat", "difference", "spline"])
def test_standard_errors_are_those_of_draws(family, request):
    """The standard deviation over draws from the estimates' law, whose own error is 1 / sqrt(2 n) of it.

    Standard errors are made a thousand times smaller, so that what is tested is the derivative and not the curvature.
    """
    n = 300 if family == "spline" else 800
    if family == "difference":
        law = kf.kernels.DifferenceOfGaussians().at(
            narrow_amplitude=0.7, narrow_length_um=80.0, wide_amplitude=0.4, wide_length_um=170.0, reference_um=100.0
        )
        fit = fitted("difference-of-gaussians", law, leak_rate=LEAK)
    elif family == "spline":
        fit = fitted(kf.kernels.Spline(n_basis=5), HAT)
    else:
        fit = request.getfixturevalue(family)
    fit = with_covariance_times(fit.with_covariance("model"), 1e-6)
    table, free = fit.derived(), fit.free
    law = setting_of(fit).at(fit.shared)
    figures = derived_figures(law)
    rng = np.random.default_rng(0)
    shared = np.tile(fit.shared, (n, 1))
    covariance = fit.uncertainty.shared_model[np.ix_(free, free)]
    shared[:, free] += rng.multivariate_normal(np.zeros(int(free.sum())), covariance, n, method="eigh")
    laws = [law.setting.at(row) for row in shared]
    checked = 0
    for figure in figures:
        if not np.isfinite(table.loc[figure.name, "std_error"]):
            continue
        spread = np.std([figure.number(one) for one in laws], ddof=1)
        assert table.loc[figure.name, "std_error"] == pytest.approx(spread, rel=4 / np.sqrt(2 * n)), figure.name
        checked += 1
    assert checked >= 9


def test_intervals_respect_what_a_figure_can_be(hat):
    """However uncertain: a reach beyond the reference distance, lengths and ratios above 0, changes above -100 %."""
    table = with_covariance_times(hat, 400.0).derived()
    assert table.loc["reach_um", "lower"] >= hat.reference_distance_um
    for name in ("sign_change_um", "trough_um", "mass_ratio", "spectral_radius", "time_constant_s"):
        assert 0.0 <= table.loc[name, "lower"] < table.loc[name, "estimate"]
    assert table.loc["trough_depth", "upper"] <= 0.0
    assert (table.filter(like="percent", axis=0)["lower"] >= -100.0).all()


# --- ends that are open -------------------------------------------------------------------------------------


def test_a_figure_that_plausible_parameters_do_not_have_is_open(hat):
    """Nine times the spread: a change of sign that some draws have beyond the array, or not at all."""
    assert not hat.derived()["note"].drop("spectral_radius").any()
    wide = with_covariance_times(hat, 400.0)
    row = wide.derived().loc["sign_change_um"]
    assert row["upper"] == np.inf
    assert "upper end open" in row["note"]
    assert wide.derived().loc["trough_depth", "upper"] == 0.0


def test_an_interval_does_not_end_where_the_array_has_no_pairs():
    """A reach close to the largest distance: what its interval cannot show is left open."""
    fit = fitted("exponential", kf.kernels.Exponential().at(amplitude=0.1, length_um=240.0, reference_um=100.0))
    row = fit.derived().loc["reach_um"]
    assert row["estimate"] < fit.span.largest_um
    assert row["upper"] == np.inf
    assert "largest distance with pairs" in row["note"] or "beyond the distances with pairs" in row["note"]


# --- what has no number -------------------------------------------------------------------------------------


def test_without_coupling_shapes_and_times_have_no_number(uncoupled):
    assert not uncoupled.verdict.found
    for name in ("reach_um", "half_distance_um", "sign_change_um", "mass_extrapolated", "mass_ratio", "log_log_slope"):
        assert reason(uncoupled, name) == "not identified: no coupling to describe"
    for name in ("extra_spikes", "spectral_radius", "time_constant_s"):  # the leak means nothing either
        assert reason(uncoupled, name) == "not identified: no coupling to describe"


def test_without_coupling_changes_of_the_rate_keep_a_wider_interval(uncoupled):
    table = uncoupled.derived()
    d = np.array([uncoupled.span.smallest_um])
    row = table.filter(like="percent", axis=0).iloc[0]
    assert row["upper"] == pytest.approx(float(100 * np.expm1(uncoupled.kernel_band(d)["upper"][0])), rel=1e-6)
    assert "widened for the search" in row["note"]
    mass = table.loc["mass"]
    assert mass["lower"] < 0 < mass["upper"]
    assert mass["upper"] - mass["estimate"] == pytest.approx(uncoupled.verdict.critical_z * mass["std_error"], rel=1e-6)


def test_without_coupling_a_fixed_leak_leaves_the_network_a_number():
    fit = fitted("flat", NOTHING, seed=8, n_side=3, leak_rate=LEAK)
    assert not fit.verdict.found
    table = fit.derived()
    assert np.isfinite(table.loc["extra_spikes", NUMBERS].astype(float)).all()
    assert "no coupling found" in table.loc["extra_spikes", "note"]
    assert "widened" not in table.loc["extra_spikes", "note"]  # neither a length nor a leak was searched for
    tau = table.loc["time_constant_s"]
    assert tau["estimate"] == 1 / LEAK
    assert tau["note"] == "fixed"
    assert np.isnan(tau["lower"])


def with_length_held(fit, length_um):
    """As if the second parameter had run into a bound at this length: no variance, and a reason."""
    shared, at_bound, held = fit.shared.copy(), fit.at_bound.copy(), fit.uncertainty.shared_robust.copy()
    shared[1], at_bound[1] = np.log(length_um), 1.0
    held[1, :] = held[:, 1] = np.nan
    reasons = tuple("longer than the array can show" if q == 1 else "" for q in range(shared.size))
    spread = replace(fit.uncertainty, shared_robust=held)
    return replace(fit, shared=shared, at_bound=at_bound, bound_reasons=reasons, uncertainty=spread)


def test_a_parameter_at_its_bound_is_said(exponential):
    """Length at its bound: no reach and no slope, and changes of the rate with the length taken as known."""
    fit = with_length_held(exponential, exponential.span.length_limits[1])
    for name in ("reach_um", "half_distance_um", "mass_extrapolated", "log_log_slope"):
        assert reason(fit, name) == "a parameter is at its bound: longer than the array can show"
    table = fit.derived()
    far = table.filter(like="percent", axis=0).iloc[-1]
    assert np.isfinite(far["upper"])
    assert far["note"] == "length_um taken as known, at a bound"
    assert table.loc["time_constant_s", "note"] == ""


def test_a_bound_within_the_range_of_lengths_leaves_the_shape(exponential):
    """As the bound of a wide Gaussian next to the narrow one does: J is known there, and so is where it falls."""
    row = with_length_held(exponential, 120.0).derived().loc["reach_um"]
    assert row["estimate"] == pytest.approx(exponential.reference_distance_um + 120.0)
    assert row["note"] == "length_um taken as known, at a bound"


@quiet
def test_a_difference_of_gaussians_that_is_a_mexican_hat_has_its_turn():
    """The hat is the limit of equal lengths, where the amplitudes grow without limit and J does not."""
    fit = fitted("difference-of-gaussians", HAT, leak_rate=LEAK)
    assert fit.at_bound[3] == -1
    row = fit.derived().loc["sign_change_um"]
    assert row["lower"] < 110.0 * np.sqrt(2) < row["upper"]
    assert "wide_length_um taken as known" in row["note"]


def test_a_leak_at_its_bound_leaves_no_time_and_no_network(exponential):
    at_bound = exponential.at_bound.copy()
    at_bound[2] = 1.0
    fit = replace(exponential, at_bound=at_bound, bound_reasons=("", "", "faster than a bin"))
    for name in ("time_constant_s", "extra_spikes", "spectral_radius"):
        assert reason(fit, name) == "a parameter is at its bound: faster than a bin"
    assert np.isfinite(fit.derived().loc["reach_um", "estimate"])


def test_too_few_blocks_leave_the_estimate_alone(exponential):
    u = exponential.uncertainty
    nothing = np.full_like(u.shared_robust, np.nan)
    fit = replace(exponential, uncertainty=replace(u, shared_robust=nothing, n_blocks=3))
    table = fit.derived().dropna(subset="estimate")
    assert len(table) >= 9
    assert table[["std_error", "lower", "upper"]].isna().all(axis=None)
    assert table["note"].str.contains("3 blocks of time").all()


# --- an edge ------------------------------------------------------------------------------------------------


def test_figures_of_a_disc_carry_the_interval_of_its_radius():
    law = kf.kernels.Disc().at(amplitude=0.35, length_um=160.0)
    fit = fitted("disc", law, n_side=3)
    low, high = fit.radius_interval
    table = fit.derived()
    for name in ("reach_um", "half_distance_um"):
        row = table.loc[name]
        np.testing.assert_allclose([row["lower"], row["upper"]], [low, high], rtol=1e-8)
        assert np.isnan(row["std_error"])
        assert "likelihood interval of the radius" in row["note"]
    amplitude = fit.parameters.loc["amplitude"]
    mass = table.loc["mass"]
    assert mass["upper"] == pytest.approx(amplitude["upper"] * np.pi * (high**2 - fit.span.smallest_um**2), rel=1e-6)
    assert mass["lower"] == pytest.approx(amplitude["lower"] * np.pi * (low**2 - fit.span.smallest_um**2), rel=1e-6)
    between = 0.5 * (low + high)
    d = np.array([fit.span.smallest_um, between, high])
    told, band = fit.derived(distances_um=d).filter(like="percent", axis=0), fit.kernel_band(d)
    for column in ("lower", "upper"):
        np.testing.assert_allclose(told[column], 100 * np.expm1(band[column]), rtol=1e-6, atol=1e-9)


# --- from replicates ----------------------------------------------------------------------------------------


def test_percentiles_of_replicates_agree_with_the_delta_method(exponential):
    """One-step replicates have nearly the robust covariance (Kline and Santos 2012); curvature adds to their spread.

    The extrapolated mass of an exponential is far from linear in its length, and is left out.
    """
    boot = exponential.bootstrap(n_replicates=999)
    by_replicates, by_delta = exponential.derived(bootstrap=boot), exponential.derived()
    pd.testing.assert_series_equal(by_replicates["estimate"], by_delta["estimate"])
    both = by_delta["std_error"].notna() & (by_delta.index != "mass_extrapolated")
    np.testing.assert_allclose(by_replicates["std_error"][both], by_delta["std_error"][both], rtol=0.25)
    leak, length = boot.intervals().loc["leak_rate"], boot.intervals().loc["length_um"]
    tau, reach = by_replicates.loc["time_constant_s"], by_replicates.loc["reach_um"]
    np.testing.assert_allclose([tau["lower"], tau["upper"]], [1 / leak["upper"], 1 / leak["lower"]], rtol=1e-9)
    ends = exponential.reference_distance_um + np.array([length["lower"], length["upper"]])
    np.testing.assert_allclose([reach["lower"], reach["upper"]], ends, rtol=1e-9)


def test_replicates_that_lost_a_figure_leave_its_end_open(hat):
    boot = hat.bootstrap(n_replicates=199)
    spread = replace(boot, replicates=boot.fit.shared + 20.0 * (boot.replicates - boot.fit.shared))
    row = hat.derived(bootstrap=spread).loc["sign_change_um"]
    assert row["upper"] == np.inf
    assert "of replicates J has one sign" in row["note"]
    assert "of 199 replicates" in row["note"]


def test_too_few_replicates_have_no_interval(hat):
    row = hat.derived(bootstrap=hat.bootstrap(n_replicates=19)).loc["reach_um"]
    assert np.isnan(row["lower"])
    assert "it takes at least 39" in row["note"]


def test_figures_by_hand(hat):
    """What a figure is can be asked at any parameters, and a lost one says on which side it went."""
    law = setting_of(hat).at(hat.shared)
    by_name = {f.name: f for f in derived_figures(law)}
    assert by_name["sign_change_um"].value(law) == pytest.approx(
        np.sqrt(2) * hat.parameters.loc["length_um", "estimate"]
    )
    longer = hat.shared.copy()
    longer[1] += 2.0
    out = by_name["sign_change_um"].value(law.setting.at(longer))
    assert isinstance(out, Lost)
    assert out.side == "above"
    assert by_name["sign_change_um"].number(law.setting.at(longer)) == np.inf
