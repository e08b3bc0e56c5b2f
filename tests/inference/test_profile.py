"""Profile likelihood: ends against brute force on a likelihood written out plainly, against a general-purpose library,
under other coordinates, and what is said where there is no end."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar

import numpy as np
import pytest
import statsmodels.api as sm
from plain_likelihood import PlainLikelihood, profile_ends
from scipy.optimize import brentq, minimize
from scipy.stats import chi2, t
from worlds import BIN_S, GAUSSIAN, LEAK, NOTHING, array, model, simulated

import kernelfit.inference.profile_radius as profile_radius
import kernelfit.inference.profile_walk as walking
from kernelfit import Unavailable, kernels, load_fit
from kernelfit.errors import ArgumentError, NotConvergedError, StorageError
from kernelfit.fitting.maximise import maximise
from kernelfit.fitting.problem import Estimate
from kernelfit.inference.profile_point import PathPoint
from kernelfit.inference.profile_walk import Walk, walk
from kernelfit.kernels.base import AMPLITUDE, Kernel, Parameter

MODEL_DROP = 0.5 * chi2.ppf(0.95, 1)
PROMISED = 1e-4  # relative, of an end


@pytest.fixture(scope="module")
def recording():
    return simulated(1)


@pytest.fixture(scope="module")
def fit(recording):
    return model().fit(recording)


@pytest.fixture(scope="module")
def profiles(fit):
    return {name: fit.profile(name) for name in fit.parameters.index}


def dropped(fit, place, x):
    """How far the log-likelihood falls where a shared parameter is held at x (working scale), climbed from the fit."""
    problem = fit.problem()
    shared = fit.shared.copy()
    shared[place] = x
    held = np.arange(shared.size) == place
    top = maximise(problem, fit.estimate).local.objective
    return top - maximise(problem, Estimate(fit.own, shared), held=held).local.objective


# --- ends against brute force ---------------------------------------------------------------------------------


def gaussian(reference, amplitude, length):
    return lambda d: amplitude * np.exp(-(d**2 - reference**2) / (2.0 * length**2))


def test_ends_equal_a_brute_force_search():
    # Expected values: Nelder-Mead on the likelihood written out in plain_likelihood.py, root by Brent's method.
    recording = simulated(2, duration_s=30.0, bin_s=0.02)
    fit = model(bin_s=0.02).fit(recording)
    plain = PlainLikelihood(recording, 0.02)
    assert plain.reference == pytest.approx(fit.reference_distance_um, rel=1e-12)
    amplitude, length, leak = fit.parameters["estimate"]

    def by_amplitude(v, x):
        return plain.at(gaussian(plain.reference, v, np.exp(x[0])), np.exp(x[1]))

    def by_length(v, x):
        return plain.at(gaussian(plain.reference, x[0], v), np.exp(x[1]))

    def by_leak(v, x):
        return plain.at(gaussian(plain.reference, x[0], np.exp(x[1])), v)

    assert by_amplitude(amplitude, [np.log(length), np.log(leak)]) == pytest.approx(fit.log_likelihood, abs=1e-6)
    for name, function, value, others in (
        ("amplitude", by_amplitude, amplitude, [np.log(length), np.log(leak)]),
        ("length_um", by_length, length, [amplitude, np.log(leak)]),
        ("leak_rate", by_leak, leak, [amplitude, np.log(length)]),
    ):
        interval = fit.profile(name).interval
        scale = 0.25 * (interval.upper - interval.lower)
        lower, upper = profile_ends(function, value, others, MODEL_DROP, scale=scale)
        assert interval.lower == pytest.approx(lower, rel=PROMISED)
        assert interval.upper == pytest.approx(upper, rel=PROMISED)


@pytest.fixture(scope="module")
def centre_surround():
    law = kernels.DifferenceOfGaussians().at(
        narrow_amplitude=0.5, narrow_length_um=80.0, wide_amplitude=0.3, wide_length_um=220.0, reference_um=100.0
    )
    recording = simulated(3, law, n_side=4, duration_s=150.0, bin_s=0.02, rate_hz=8.0)
    return recording, model("difference-of-gaussians", bin_s=0.02).fit(recording)


@pytest.mark.parametrize(("place", "side"), [(0, "upper"), (2, "upper"), (3, "lower")])
def test_parameters_that_mix_several_are_profiled_in_other_coordinates(centre_surround, place, side):
    # Amplitudes and the wide length of a difference of Gaussians are no working parameters. Expected drop at an end
    # where no other parameter meets a bound: the plain likelihood in the natural parameters, climbed by Nelder-Mead.
    recording, fit = centre_surround
    plain = PlainLikelihood(recording, 0.02)
    name = fit.parameters.index[place]
    profile = fit.profile(name)
    end = getattr(profile.interval, side)
    log = np.array([False, True, False, True])

    def loss(x):
        natural = np.insert(x[:3], place, np.log(end) if log[place] else end)
        a_n, s_n, a_w, s_w = np.where(log, np.exp(np.where(log, natural, 0.0)), natural)

        def jump(d):
            q = d**2 - plain.reference**2
            return a_n * np.exp(-0.5 * q / s_n**2) - a_w * np.exp(-0.5 * q / s_w**2)

        return -plain.at(jump, np.exp(x[3]))

    curve = profile.curve
    row = curve.iloc[int(np.argmin(np.abs(curve["value"] - end)))]
    others = [n for n in fit.parameters.index[:4] if n != name]
    start = [np.log(row[n]) if "length" in n else row[n] for n in others] + [np.log(row["leak_rate"])]
    found = minimize(loss, start, method="Nelder-Mead", options={"xatol": 1e-5, "fatol": 1e-7, "adaptive": True})
    # the drop rises by 2 x 1.92 over a half-width: 4e-4 in the drop is 1e-4 of a half-width
    assert fit.log_likelihood + found.fun == pytest.approx(MODEL_DROP, abs=4e-4)


def test_the_wide_length_is_open_where_it_is_a_constant_over_the_array(centre_surround):
    _, fit = centre_surround
    interval = fit.profile("wide_length_um").interval
    assert interval.upper_open
    assert "cannot be told from a constant" in interval.upper_reason


def test_a_flat_kernel_at_a_stated_leak_agrees_with_poisson_regression(recording):
    # Expected: statsmodels, the amplitude moved into the offset and the baselines regressed (docs/model.md section 3).
    fit = model("flat", leak_rate=LEAK).fit(recording)
    plain = PlainLikelihood(recording, BIN_S)
    traces = plain.traces(LEAK)
    drive = traces.sum(axis=1, keepdims=True) - traces

    def log_likelihood(amplitude):
        total = 0.0
        for i in range(recording.n_units):
            offset = amplitude * drive[:, i] + np.log(BIN_S)
            y = plain.y[:, i]
            total += sm.GLM(y, np.ones_like(y), family=sm.families.Poisson(), offset=offset).fit(tol=1e-12).llf
        return total

    estimate, spread = fit.parameters.loc["amplitude", ["estimate", "std_error"]]
    top = log_likelihood(estimate)
    assert top == pytest.approx(fit.log_likelihood, rel=1e-10)
    interval = fit.profile("amplitude").interval
    for sign, end in ((-1.0, interval.lower), (1.0, interval.upper)):
        far = estimate + sign * 4.0 * spread
        expected = brentq(lambda v: top - log_likelihood(v) - MODEL_DROP, *sorted((estimate, far)), xtol=1e-9)
        assert end == pytest.approx(expected, rel=1e-6)


def test_the_curve_is_the_likelihood_climbed_at_each_of_its_points(fit, profiles):
    curve = profiles["length_um"].curve
    for k in (0, len(curve) // 3, len(curve) - 1):
        expected = dropped(fit, 1, np.log(curve["value"][k]))
        assert curve["log_likelihood_drop"][k] == pytest.approx(expected, abs=1e-5)
    assert curve["value"].is_monotonic_increasing
    assert np.allclose(curve["signed_root"] ** 2 / 2, curve["log_likelihood_drop"].clip(lower=0), atol=1e-12)
    centre = curve.iloc[int(curve["log_likelihood_drop"].argmin())]
    for name in fit.parameters.index.drop("length_um"):
        assert centre[name] == pytest.approx(fit.parameters.loc[name, "estimate"], rel=1e-5)


def test_few_sweeps_are_enough(profiles):
    # Four ends, two of each kind, and eight points of the curve on each side.
    assert all(profile.n_sweeps <= 40 for profile in profiles.values())
    assert all(profile.curve["converged"].all() for profile in profiles.values())


def test_a_copy_of_the_curve_is_handed_out(profiles):
    curve = profiles["amplitude"].curve
    curve["value"] = 0.0
    assert (profiles["amplitude"].curve["value"] != 0.0).any()


# --- a parabola -----------------------------------------------------------------------------------------------


def test_the_ends_of_a_parabola_are_those_of_wald(fit, monkeypatch):
    # A likelihood that is a parabola of standard error 0.05 around 0.3: ends 0.3 +- 1.96 x 0.05, by definition.
    calls = []

    def parabola(held, x, start, tolerance=None):
        calls.append(x)
        nothing = Estimate(np.zeros_like(start.own), np.zeros_like(start.shared))
        return PathPoint(x, -0.5 * ((x - 0.3) / 0.05) ** 2, -(x - 0.3) / 0.05**2, 400.0, start, nothing, True)

    monkeypatch.setattr(walking, "path_point", parabola)
    held = held_amplitude(fit)
    start = Estimate(fit.own, np.array([0.3, *fit.shared[1:]]))
    cut = float(np.sqrt(2 * MODEL_DROP))
    walked = walk(held, start, lambda here: [cut, 5.0], 4)
    assert walked.walk.curvature() == pytest.approx(400.0, rel=1e-9)
    interval = walked.interval("model", cut)
    assert (interval.lower, interval.upper) == pytest.approx((0.3 - cut * 0.05, 0.3 + cut * 0.05), rel=1e-9)
    assert walked.interval("robust", 5.0).upper == pytest.approx(0.55, rel=1e-9)
    assert len(calls) <= 16


def held_amplitude(fit):
    from kernelfit.inference.held import hold

    return hold(fit.problem(), fit.shared, "amplitude")


def test_much_data_make_the_profile_that_of_wald():
    # The likelihood tends to a parabola: with 2,000 s the ends are within a tenth of a standard error of Wald's.
    fit = model("flat", leak_rate=LEAK).fit(simulated(2, duration_s=2000.0, n_side=3)).with_covariance("model")
    profile = fit.profile("amplitude")
    wald = fit.parameters.loc["amplitude"]
    assert abs(profile.interval.lower - wald["lower"]) < 0.1 * wald["std_error"]
    assert abs(profile.interval.upper - wald["upper"]) < 0.1 * wald["std_error"]


# --- other coordinates ----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class LengthAsItIs(Kernel):
    """A Gaussian whose length is climbed as it is, not as a logarithm; exponent of the distance from the reference."""

    name: ClassVar[str] = "length-as-it-is"

    def parameters(self, span):
        low, high = span.length_limits
        return (AMPLITUDE, Parameter("length_um", "µm", scale="linear", shape=True, lower=low, upper=high))

    def value(self, theta, d_um, span):
        return theta[0] * np.exp(-0.5 * (d_um**2 - span.reference_um**2) / theta[1] ** 2)

    def gradient(self, theta, d_um, span):
        squared = d_um**2 - span.reference_um**2
        fall = np.exp(-0.5 * squared / theta[1] ** 2)
        return np.stack([fall, theta[0] * fall * squared / theta[1] ** 3])


def test_ends_do_not_depend_on_the_scale_the_length_is_climbed_on(recording, profiles):
    other = model(LengthAsItIs()).fit(recording)
    for name in ("amplitude", "length_um", "leak_rate"):
        expected, interval = profiles[name].interval, other.profile(name).interval
        assert (interval.lower, interval.upper) == pytest.approx((expected.lower, expected.upper), rel=PROMISED)


# --- the robust kind ------------------------------------------------------------------------------------------


def test_scaling_by_a_ratio_of_one_changes_nothing(fit):
    # The robust variance made the one that the curve implies; many blocks, so that the t quantile is the normal one.
    many = replace(fit.uncertainty, n_blocks=10**9)
    ratio = replace(fit, uncertainty=many).profile("length_um").variance_ratio
    same = replace(many, shared_robust=fit.uncertainty.shared_robust / ratio)
    profile = replace(fit, uncertainty=same).profile("length_um")
    assert profile.variance_ratio == pytest.approx(1.0, rel=1e-12)
    ends, scaled = profile.interval, profile.scaled
    assert (scaled.lower, scaled.upper) == pytest.approx((ends.lower, ends.upper), rel=1e-6)


@pytest.mark.parametrize("name", ["amplitude", "length_um", "leak_rate"])
def test_the_ratio_is_the_robust_variance_over_the_one_the_curve_implies(fit, profiles, name):
    # Expected: the second difference of the drop, whose error of the second order in a tenth of a standard error is
    # below one in a hundred.
    place = list(fit.parameters.index).index(name)
    step = 0.1 * np.sqrt(fit.uncertainty.shared_model[place, place])
    curvature = sum(dropped(fit, place, fit.shared[place] + s) for s in (step, -step)) / step**2
    expected = fit.uncertainty.shared_robust[place, place] * curvature
    assert profiles[name].variance_ratio == pytest.approx(expected, rel=0.01)


def test_a_linear_model_that_is_true_is_scaled_by_the_two_covariances():
    # There the curve implies the expected information; the slopes are taken 0.2 standard errors off, hence 0.1 %.
    fit = model("flat", leak_rate=LEAK).fit(simulated(1))
    expected = fit.std_errors.loc["amplitude", "ratio"] ** 2
    assert fit.profile("amplitude").variance_ratio == pytest.approx(expected, rel=1e-3)


def test_the_scaled_ends_lie_where_the_drop_over_the_ratio_reaches_the_t_quantile(fit):
    wide = replace(fit.uncertainty, shared_robust=9.0 * fit.uncertainty.shared_robust)
    profile = replace(fit, uncertainty=wide).profile("amplitude", level=0.5)
    assert profile.variance_ratio == pytest.approx(9.0 * fit.profile("amplitude").variance_ratio, rel=1e-9)
    expected = 0.5 * t.ppf(0.75, fit.n_blocks - 1) ** 2
    assert profile.scaled.critical == pytest.approx(expected, rel=1e-12)
    for end in (profile.scaled.lower, profile.scaled.upper):
        assert dropped(fit, 0, end) / profile.variance_ratio == pytest.approx(expected, rel=1e-4)


def test_few_blocks_leave_the_model_kind_alone(fit):
    few = replace(fit.uncertainty, n_blocks=4)
    profile = replace(fit, uncertainty=few).profile("amplitude")
    assert isinstance(profile.scaled, Unavailable)
    assert "4 blocks" in profile.scaled.reason
    assert np.isfinite(profile.interval.upper)


# --- open ends ------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def without_distance():
    """A law that does not change with distance: the length of a gaussian has no upper end."""
    flat = kernels.Flat().at(amplitude=0.15)
    fit = model().fit(simulated(4, flat, duration_s=60.0))
    assert fit.at_bound[1] == 1.0
    return fit


def test_a_length_at_its_bound_has_one_end(without_distance):
    fit = without_distance
    profile = fit.profile("length_um")
    interval = profile.interval
    assert interval.upper_open
    assert np.isinf(interval.upper)
    assert "cannot be told from a kernel that does not change with distance" in interval.upper_reason
    assert "never falls far enough" in interval.upper_reason
    assert not interval.lower_open
    assert dropped(fit, 1, np.log(interval.lower)) == pytest.approx(MODEL_DROP, rel=1e-4)
    # The robust kind takes its variances where the likelihood falls: the model is true, so the ratio is near 1 with 60
    # blocks, whose variance has a relative standard error of sqrt(2 / 60); allowed are four of them.
    assert profile.scaled.upper_open
    assert profile.variance_ratio == pytest.approx(1.0, abs=4 * np.sqrt(2 / fit.n_blocks))
    assert dropped(fit, 1, np.log(profile.scaled.lower)) / profile.variance_ratio == pytest.approx(
        profile.scaled.critical, rel=1e-4
    )


def test_a_length_whose_bound_is_kept_is_open_there():
    # A weak fall over a small array: the best length lies inside, yet no fall at all is kept too.
    law = kernels.Gaussian().at(amplitude=0.15, length_um=300.0, reference_um=100.0)
    fit = model().fit(simulated(9, law, duration_s=40.0))
    assert fit.at_bound[1] == 0.0
    interval = fit.profile("length_um").interval
    assert interval.upper_open
    assert not interval.lower_open
    high = np.log(fit.span.length_limits[1])
    fallen = dropped(fit, 1, high)
    assert fallen < MODEL_DROP
    assert f"by {fallen:.2g} of {MODEL_DROP:.3g} needed" in interval.upper_reason


# --- what must be said ----------------------------------------------------------------------------------------


def test_a_better_optimum_is_said_and_measured_from(fit, profiles):
    shifted = replace(fit, shared=fit.shared + np.array([0.0, 0.3, 0.0]))
    profile = shifted.profile("length_um")
    assert "better optimum" in profile.notes[0].what
    expected = profiles["length_um"].interval
    assert (profile.interval.lower, profile.interval.upper) == pytest.approx((expected.lower, expected.upper), rel=1e-4)


def test_a_second_hill_is_said(fit):
    held = held_amplitude(fit)
    nothing = Estimate(fit.own, fit.shared)
    tops = [PathPoint(x, -d, 0.0, 1.0, nothing, nothing, True) for x, d in ((0.0, 0.0), (1.0, 2.0), (2.0, 1.0))]
    two_hills = Walk(held, tops[0])
    two_hills.points.extend(tops[1:])
    assert walking.Walked(two_hills, {}, 0.0).rises_again
    one = Walk(held, tops[0])
    one.points.append(tops[1])
    assert not walking.Walked(one, {}, 0.0).rises_again


def test_without_coupling_an_amplitude_is_cut_wider_and_a_length_means_nothing():
    fit = model(leak_rate=LEAK).fit(simulated(3, NOTHING))
    assert not fit.verdict.found
    amplitude = fit.profile("amplitude")
    assert amplitude.interval.critical == pytest.approx(0.5 * fit.verdict.critical_z**2, rel=1e-12)
    assert amplitude.interval.lower <= 0.0 <= amplitude.interval.upper
    assert any("No coupling was found" in note.what for note in amplitude.notes)
    assert any("means nothing" in note.what for note in fit.profile("length_um").notes)


def test_a_penalty_is_said(recording):
    fit = model(kernels.Spline(n_basis=5, smoothing=5.0)).fit(recording)
    profile = fit.profile("coefficient_2")
    assert profile.penalised
    assert any("penalised log-likelihood" in note.what for note in profile.notes)
    assert dropped(fit, 1, profile.interval.upper) == pytest.approx(MODEL_DROP, rel=1e-4)
    assert profile.variance_ratio >= 1.0


def test_what_cannot_be_profiled(recording, fit, tmp_path):
    stated = model(leak_rate=LEAK).fit(recording)
    profile = stated.profile("leak_rate")
    assert isinstance(profile, Unavailable)
    assert "fixed by the model at 40" in profile.reason
    with pytest.raises(ArgumentError, match=r"name='reach' is no parameter.*length_um"):
        fit.profile("reach")
    with pytest.raises(ArgumentError, match=r"level=1\.5"):
        fit.profile("length_um", level=1.5)
    with pytest.raises(ArgumentError, match="n_points=1"):
        fit.profile("length_um", n_points=1)
    with pytest.raises(NotConvergedError, match="did not converge"):
        replace(fit, solver=replace(fit.solver, converged=False)).profile("length_um")
    fit.save(tmp_path / "fit.json")
    with pytest.raises(StorageError, match="recording="):
        load_fit(tmp_path / "fit.json").profile("length_um")
    again = load_fit(tmp_path / "fit.json").profile("length_um", recording=recording, n_points=3)
    assert again.interval.lower == pytest.approx(fit.profile("length_um").interval.lower, rel=1e-6)


def test_progress_is_told_and_threads_change_nothing(fit, profiles):
    told = []
    one = fit.profile("amplitude", threads=1, progress=told.append)
    assert one.interval == profiles["amplitude"].interval
    assert len(told) == one.n_sweeps
    assert told[0].stage == "profile of amplitude"


# --- a radius -------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def disc():
    law = kernels.Disc().at(amplitude=0.2, length_um=170.0)
    return model("disc").fit(simulated(5, law, duration_s=30.0))


def test_a_radius_is_profiled_over_the_distances_of_the_array(disc):
    profile = disc.profile("length_um")
    lower, upper = disc.radius_interval
    assert profile.scaled.lower == (0.0 if profile.scaled.lower_open else lower)
    assert profile.scaled.upper == (np.inf if profile.scaled.upper_open else upper)
    curve = profile.curve
    assert curve["log_likelihood_drop"].min() == 0.0
    place = int(curve["log_likelihood_drop"].argmin())
    assert curve["value"][place] == pytest.approx(profile.estimate, rel=1e-12)
    for k in (place - 1, place + 1):
        expected = dropped(disc, 1, np.log(curve["value"][k]))
        assert curve["log_likelihood_drop"][k] == pytest.approx(expected, abs=0.02)  # climbed loosely, by design
    assert any("jumps at the distances" in note.what for note in profile.notes)


def test_a_radius_at_which_the_climb_stops_short_is_marked(disc, monkeypatch):
    """Every second climb says that it stopped short."""
    whole = disc.profile("length_um")
    assert whole.curve["converged"].all()
    assert not any("did not reach their top" in note.what for note in whole.notes)
    asked = []

    def short(problem, start, **options):
        asked.append(start)
        return replace(maximise(problem, start, **options), converged=len(asked) % 2 == 0)

    monkeypatch.setattr(profile_radius, "maximise", short)
    cut = disc.profile("length_um")
    np.testing.assert_array_equal(cut.curve["converged"], np.arange(len(cut.curve)) % 2 == 1)
    n = (len(cut.curve) + 1) // 2
    wanted = f"At {n} of {len(cut.curve)} radii the other parameters did not reach their top."
    assert wanted in [note.what for note in cut.notes]


def test_beside_a_radius_the_others_are_profiled_with_it_held(disc):
    profile = disc.profile("amplitude")
    assert any("held at its estimate" in note.what for note in profile.notes)
    assert profile.curve["length_um"].nunique() == 1
    problem, shared = disc.problem(), disc.shared.copy()
    shared[0] = profile.interval.upper
    held = np.array([True, True, False])
    top = maximise(problem, Estimate(disc.own, shared), held=held).local.objective
    assert disc.log_likelihood - top == pytest.approx(MODEL_DROP, rel=1e-4)


def test_same_site_pairs_have_a_profile_of_their_own():
    positions = np.vstack([array(3), array(3)[:2]])
    from kernelfit import simulate_recording

    recording = simulate_recording(positions, GAUSSIAN, 6.0, LEAK, 40.0, 8, bin_width=BIN_S)
    fit = model(same_site="own").fit(recording)
    interval = fit.profile("same_site").interval
    assert dropped(fit, 2, interval.lower) == pytest.approx(MODEL_DROP, rel=1e-4)
    assert dropped(fit, 2, interval.upper) == pytest.approx(MODEL_DROP, rel=1e-4)
