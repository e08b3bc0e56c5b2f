"""Tables, bands and figures from replicates."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import norm
from worlds import NOTHING, model, simulated

import kernelfit as kf
from kernelfit.inference.bootstrap.interval_scale import IntervalScale
from kernelfit.inference.bootstrap.replicated import central_differences

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")

METHODS = ("percentile", "basic", "studentised", "bca")


@pytest.fixture(scope="module")
def fit():
    return model().fit(simulated(3, duration_s=60.0))


@pytest.fixture(scope="module")
def boot(fit):
    return fit.bootstrap("one-step", n_replicates=1999)


# --- intervals of parameters ----------------------------------------------------------------------------------


def test_table_is_like_that_of_the_fit(fit, boot):
    for method in METHODS:
        table, own = boot.intervals(method=method), fit.parameters
        assert table.index.equals(own.index)
        assert [c for c in table if c != "n_used"] == list(own)
        np.testing.assert_allclose(table["estimate"], own["estimate"], rtol=1e-12)
        assert (table["unit"] == own["unit"]).all()
        assert (table["note"] == "").all()
        assert (table["n_used"] == 1999).all()
        # the one-step replicates have the robust covariance: 1999 of them know a standard deviation to 2 %
        np.testing.assert_allclose(table["std_error"], own["std_error"], rtol=0.08)
        assert ((table["lower"] < table["estimate"]) & (table["estimate"] < table["upper"])).all()
        np.testing.assert_allclose(table["upper"] - table["lower"], own["upper"] - own["lower"], rtol=0.2)


def test_ends_by_hand(fit, boot):
    """Percentile on any scale; basic on the log scale for the length and the leak, as it is for the amplitude."""
    natural = boot.replicates.copy()
    natural[:, 1:] = np.exp(natural[:, 1:])
    ranked = np.sort(natural, axis=0)
    low, high = ranked[49], ranked[1949]  # (1999 + 1) 0.025 and 0.975
    estimate = fit.parameters["estimate"].to_numpy()
    table = boot.intervals(method="percentile")
    np.testing.assert_allclose(table[["lower", "upper"]].to_numpy().T, [low, high], rtol=1e-12)
    table = boot.intervals(method="basic")
    want_low = [2 * estimate[0] - high[0], *(estimate[1:] ** 2 / high[1:])]
    want_high = [2 * estimate[0] - low[0], *(estimate[1:] ** 2 / low[1:])]
    np.testing.assert_allclose(table[["lower", "upper"]].to_numpy().T, [want_low, want_high], rtol=1e-12)


def test_studentised_ends_by_hand(fit, boot):
    own = np.sqrt(boot.own_covariances[:, range(3), range(3)])
    t = np.sort((boot.replicates - fit.shared) / own, axis=0)
    error = np.sqrt(np.diag(fit.uncertainty.shared_robust))
    low, high = fit.shared - t[1949] * error, fit.shared - t[49] * error
    table = boot.intervals(method="studentised")
    want = np.array([low, high])
    want[:, 1:] = np.exp(want[:, 1:])
    np.testing.assert_allclose(table[["lower", "upper"]].to_numpy().T, want, rtol=1e-10)


def test_other_levels_are_nested(boot):
    for method in METHODS:
        narrow, wide = boot.intervals(0.8, method), boot.intervals(0.99, method)
        assert (wide["lower"] < narrow["lower"]).all()
        assert (narrow["upper"] < wide["upper"]).all()


def test_too_few_replicates_say_so(fit):
    table = fit.bootstrap("one-step", n_replicates=20).intervals()
    assert table[["lower", "upper"]].isna().all(axis=None)
    assert table["note"].str.contains("at least 39").all()
    assert np.isfinite(table["std_error"]).all()
    one = fit.bootstrap("one-step", n_replicates=1)
    assert np.isnan(one.covariance).all()
    assert one.intervals()["std_error"].isna().all()


@pytest.mark.parametrize("kernel", ["gaussian", "power-law", "difference-of-gaussians", "spline"])
def test_interval_scale_and_its_slope(kernel):
    """To the natural scale and back, and the Jacobian against differences; wide lengths hang on two parameters."""
    fit = model(kernel).fit(simulated(7, duration_s=60.0))
    scale = IntervalScale.of(fit)
    np.testing.assert_allclose(scale.to_natural(scale(fit.shared)), fit.parameters["estimate"], rtol=1e-12)
    steps = np.full(fit.shared.size, 1e-5)
    np.testing.assert_allclose(
        scale.jacobian(fit.shared), central_differences(scale, fit.shared, steps), rtol=1e-6, atol=1e-8
    )

    def natural(shared):
        return scale.to_natural(scale(shared))

    np.testing.assert_allclose(
        scale.natural_jacobian(fit.shared), central_differences(natural, fit.shared, steps), rtol=1e-5, atol=1e-6
    )


def test_disc_radius_is_held_and_said_so():
    fit = model("disc").fit(simulated(3, duration_s=60.0))
    for kind, options in (("one-step", {}), ("block-weights", {"jobs": 1})):
        boot = fit.bootstrap(kind, n_replicates=40, **options)
        table = boot.intervals()
        assert np.isnan(table.loc["length_um", "lower"])
        assert "held at the fit's value" in table.loc["length_um", "note"]
        assert np.isfinite(table.loc["amplitude", ["lower", "upper"]].astype(float)).all()
        # between the ends of the radius' interval the band holds zero, as that of the fit does
        d = np.array([fit.radius_interval[0] + 1.0, fit.span.smallest_um])
        band = boot.kernel_band(d)
        assert band["lower"][0] <= 0.0 <= band["upper"][0]
        assert band["lower"][1] > 0.0


def test_a_parameter_at_its_bound_stays_there_and_is_said_so(fit):
    at_bound = np.array([0.0, 1.0, 0.0])
    reasons = ("", "longer than 5 times the array", "")
    spread = fit.uncertainty
    influence = spread.block_influence.copy()
    influence[:, 1] = np.nan
    bounded = replace(
        fit, at_bound=at_bound, bound_reasons=reasons, uncertainty=replace(spread, block_influence=influence)
    )
    table = bounded.bootstrap("one-step", n_replicates=99).intervals(method="studentised")
    assert np.isnan(table.loc["length_um", "lower"])
    assert "at its bound in every replicate: longer than 5 times" in table.loc["length_um", "note"]
    assert np.isfinite(table.loc[["amplitude", "leak_rate"], "lower"]).all()


def test_where_no_coupling_was_found_nothing_is_described():
    fit = model().fit(simulated(11, NOTHING, duration_s=30.0))
    assert not fit.verdict.found
    boot = fit.bootstrap("one-step", n_replicates=99)
    table = boot.intervals()
    assert table.loc[["length_um", "leak_rate"], ["estimate", "lower", "upper"]].isna().all(axis=None)
    assert table.loc["length_um", "note"] == "not identified: no coupling to describe"
    amplitude = table.loc["amplitude"]
    assert "no coupling found; interval widened for the search over length and leak" in amplitude["note"]
    assert amplitude["lower"] <= 0.0 <= amplitude["upper"]
    d = np.array([fit.reference_distance_um])
    half = float(np.diff(boot.kernel_band(d)[["lower", "upper"]].to_numpy()[0])[0]) / 2
    plain = np.std([fit.model.kernel.value(r[:2], d, fit.span)[0] for r in boot.replicates], ddof=1)
    assert half >= 0.999 * fit.verdict.critical_z * plain


# --- bands ----------------------------------------------------------------------------------------------------


def test_bands_by_hand(fit, boot):
    d = np.array([100.0, 150.0, 200.0])
    curves = np.array([fit.model.kernel.value(r[:2], d, fit.span) for r in boot.replicates])
    spread = curves.std(axis=0, ddof=1)
    t = np.abs(curves - fit.kernel(d)) / spread
    pointwise, sup = np.sort(t, axis=0)[1899], np.sort(t.max(axis=1))[1899]  # (1999 + 1) 0.95
    band, wide = boot.kernel_band(d), boot.kernel_band(d, simultaneous=True)
    np.testing.assert_allclose(band["upper"] - band["estimate"], pointwise * spread, rtol=1e-10)
    np.testing.assert_allclose(wide["estimate"] - wide["lower"], sup * spread, rtol=1e-10)
    assert (sup > pointwise).all()


def test_bands_are_near_those_of_the_robust_covariance():
    """A kernel linear in its coefficients, leak fixed: replicates are near normal, and so is the band."""
    fit = model("spline", leak_rate=40.0).fit(simulated(5, duration_s=120.0))
    boot = fit.bootstrap("one-step", n_replicates=4000)
    d = np.linspace(fit.span.smallest_um, fit.span.largest_um, 12)
    for simultaneous in (False, True):
        own = fit.kernel_band(d, simultaneous=simultaneous)
        for method in ("symmetric", "studentised"):
            band = boot.kernel_band(d, simultaneous=simultaneous, method=method)
            np.testing.assert_allclose(band["upper"] - band["lower"], own["upper"] - own["lower"], rtol=0.15)


def test_bands_end_where_the_array_has_pairs(fit, boot):
    d = np.array([1.0, fit.span.smallest_um, fit.span.largest_um, 2 * fit.span.largest_um])
    band = boot.kernel_band(d)
    assert np.isnan(band["lower"]).tolist() == [True, False, False, True]
    assert band[["estimate", "lower", "upper"]].iloc[[0, 3]].isna().all(axis=None)


def test_few_replicates_have_no_band(fit):
    assert fit.bootstrap("one-step", n_replicates=18).kernel_band(np.array([100.0]))["lower"].isna().all()
    assert fit.bootstrap("one-step", n_replicates=19).kernel_band(np.array([100.0]))["lower"].notna().all()


# --- any figure -----------------------------------------------------------------------------------------------


def test_any_function_of_the_shared_parameters(fit, boot):
    tau = boot.of(lambda shared: 1000.0 * np.exp(-shared[-1]))
    leak = boot.intervals()
    table = tau.intervals()
    assert table["estimate"][0] == pytest.approx(1000 * fit.time_constant, rel=1e-12)
    ends = 1000.0 / leak.loc["leak_rate", ["upper", "lower"]].to_numpy(dtype=float)
    np.testing.assert_allclose(table[["lower", "upper"]].to_numpy()[0], ends, rtol=1e-12)
    assert table["n_used"][0] == 1999


def test_slopes_by_differences_serve_all_methods(fit, boot):
    """The leak rate as a figure of its own, on the log scale, has the interval of the table."""
    log_leak = boot.of(lambda shared: shared[-1])
    for method in METHODS:
        ours = np.exp(log_leak.intervals(method=method)[["lower", "upper"]].to_numpy()[0])
        want = boot.intervals(method=method).loc["leak_rate", ["lower", "upper"]].to_numpy(dtype=float)
        np.testing.assert_allclose(ours, want, rtol=1e-6)


def test_a_figure_of_the_kernel_that_is_not_always_defined(boot):
    """A reach that only strong replicates have: left out where it is not, and said so."""

    def reach(curve: kf.kernels.KernelCurve) -> float:
        length, amplitude = curve.natural["length_um"], curve.natural["amplitude"]
        return length if amplitude > 0.15 else np.nan

    figure = boot.of_kernel(reach)
    table = figure.intervals(0.9)
    n = int(np.sum(boot.replicates[:, 0] > 0.15))
    assert table["n_used"][0] == n < 1999
    assert f"rests on {n} of 1999 replicates" in table["note"][0]
    assert figure.values.shape == (1999, 1)
    nowhere = boot.of(lambda shared: np.nan)
    assert "not defined at the estimate" in nowhere.intervals()["note"][0]
    always = boot.of(lambda shared: 1.0)
    assert "the same in every replicate" in always.intervals()["note"][0]


def test_percentiles_of_normal_replicates_are_normal_ones(fit):
    """Random signs on 60 blocks are nearly normal: 20,000 replicates against the robust Wald interval, z quantiles."""
    from kernelfit.inference.bootstrap import OneStep

    boot = fit.bootstrap(OneStep("rademacher"), n_replicates=20_000)
    half = norm.ppf(0.975) * np.sqrt(fit.uncertainty.shared_robust[0, 0] * (1 - 1 / fit.n_blocks))
    table = boot.intervals().loc["amplitude", ["lower", "upper"]].to_numpy(dtype=float)
    np.testing.assert_allclose(table, fit.shared[0] + half * np.array([-1, 1]), atol=0.05 * half)
