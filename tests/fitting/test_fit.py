"""The whole fit: contract, threads, seeds, progress, interruption, what it says when something is wrong."""

from __future__ import annotations

import sys
import threading
import warnings

import numpy as np
import pandas as pd
import pytest
from scipy.stats import t
from worlds import BIN_S, LEAK, NOTHING, array, model, simulated

import kernelfit as kf
from kernelfit.errors import ArgumentError, StorageError
from kernelfit.fitting import search as search_module
from kernelfit.fitting.maximise import maximise
from kernelfit.recording.recording import Recording

quiet = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")


@pytest.fixture(scope="module")
def recording():
    return simulated(1)


@pytest.fixture(scope="module")
def fit(recording):
    return model("gaussian", after_spike="basis").fit(recording, threads=2)


# --- what a fit is ------------------------------------------------------------------------------------------


def test_the_truth_is_within_the_intervals(fit):
    table = fit.parameters
    truth = {"amplitude": 0.25 * np.exp((100.0**2 - fit.reference_distance_um**2) / (2 * 120.0**2)), "length_um": 120.0}
    for name, value in {**truth, "leak_rate": LEAK}.items():
        assert table.loc[name, "lower"] < value < table.loc[name, "upper"]
    assert fit.verdict.found
    assert fit.converged


def test_names_and_columns_of_the_contract(fit):
    assert list(fit.parameters.index) == ["amplitude", "length_um", "leak_rate"]
    assert list(fit.parameters.columns) == ["estimate", "std_error", "lower", "upper", "unit", "note"]
    assert list(fit.parameters["unit"]) == ["per spike", "µm", "1/s"]
    assert list(fit.parameters["note"]) == ["", "", ""]
    assert list(fit.baselines.index) == list(fit.unit_ids)
    assert {"estimate", "std_error", "rate_hz", "note"} <= set(fit.baselines.columns)
    assert list(fit.std_errors.columns) == ["model", "robust", "ratio"]
    assert list(fit.pairs_by_distance.columns) == ["distance_um", "n_pairs"]


PARAMETERS = {
    "flat": ["amplitude"],
    "exponential": ["amplitude", "length_um"],
    "gaussian": ["amplitude", "length_um"],
    "power-law": ["amplitude", "exponent"],
    "difference-of-gaussians": ["narrow_amplitude", "narrow_length_um", "wide_amplitude", "wide_length_um"],
    "mexican-hat": ["amplitude", "length_um"],
    "disc": ["amplitude", "length_um"],
    "spline": [f"coefficient_{k}" for k in range(1, 11)],
}


@quiet
@pytest.mark.parametrize("name", kf.kernels.KERNELS)
def test_every_family_fits_and_names_its_parameters(recording, name):
    kernel = kf.kernels.Spline(smoothing=1.0) if name == "spline" else name
    fit = model(kernel).fit(recording, threads=2)
    table = fit.parameters
    assert list(table.index) == [*PARAMETERS[name], "leak_rate"]
    assert fit.converged
    positive = [n for n in table.index if "length" in n or n in ("exponent", "leak_rate")]
    assert (table.loc[positive, ["estimate", "lower"]].dropna() > 0).all(axis=None)
    assert fit.log_likelihood > fit.uncoupled_log_likelihood
    assert np.isfinite(fit.kernel(np.array([50.0, 100.0, 250.0]))).all()
    assert name in fit.summary()


def test_numbers_that_belong_together(fit, recording):
    assert fit.leak_rate * fit.time_constant == pytest.approx(1.0)
    assert fit.parameters.loc["leak_rate", "estimate"] == pytest.approx(fit.leak_rate)
    assert fit.n_spikes == recording.n_spikes
    assert fit.duration_s == pytest.approx(40.0)
    m = fit.after_spike_constants_s.size
    assert fit.n_parameters == 9 * (1 + m) + 3
    assert fit.n_parameters - 2 < fit.effective_parameters < fit.n_parameters  # the ridge on after-spike coefficients
    assert fit.aic == pytest.approx(-2 * fit.log_likelihood + 2 * fit.effective_parameters)
    assert fit.bic == pytest.approx(-2 * fit.log_likelihood + fit.effective_parameters * np.log(fit.n_spikes))
    assert fit.pairs_by_distance["n_pairs"].sum() == 36
    np.testing.assert_allclose(fit.baselines["rate_hz"], np.exp(fit.baselines["estimate"]))
    np.testing.assert_array_equal(fit.positions, recording.positions)
    reference = fit.kernel(np.array([fit.reference_distance_um]))[0]
    assert reference == pytest.approx(fit.parameters.loc["amplitude", "estimate"])


def test_intervals_of_both_kinds(fit):
    """Robust: Student's t with blocks less one. Model: normal. A length's are symmetric in logarithms."""
    for kind, critical in (("robust", t.ppf(0.975, fit.n_blocks - 1)), ("model", 1.959963985)):
        table = fit.with_covariance(kind).parameters
        row = table.loc["amplitude"]
        assert row["upper"] - row["estimate"] == pytest.approx(critical * row["std_error"], rel=1e-8)
        row = table.loc["length_um"]
        factor = np.exp(critical * row["std_error"] / row["estimate"])
        assert (row["estimate"] / row["lower"], row["upper"] / row["estimate"]) == pytest.approx((factor, factor))
        np.testing.assert_allclose(table["std_error"], fit.std_errors[kind])
    np.testing.assert_allclose(fit.std_errors["ratio"], fit.std_errors["robust"] / fit.std_errors["model"])


def test_changing_the_covariance_changes_nothing_else(fit):
    other = fit.with_covariance("model")
    assert other is not fit
    assert fit.covariance_kind == "robust"
    np.testing.assert_array_equal(other.parameters["estimate"], fit.parameters["estimate"])
    assert not np.allclose(other.parameters["std_error"], fit.parameters["std_error"])
    assert not np.allclose(other.baselines["std_error"], fit.baselines["std_error"])
    with pytest.raises(ArgumentError, match="'robust', 'jackknife' or 'model'"):
        fit.with_covariance("bootstrap")


def test_the_problem_of_a_fit_is_the_one_it_was_fitted_to(fit, tmp_path):
    problem = fit.problem(threads=1)
    here = float(problem.evaluate(fit.estimate).log_likelihood.sum())
    assert here - problem.data.log_factorials == pytest.approx(fit.log_likelihood, rel=1e-12)
    assert fit.free.all()
    fit.save(tmp_path / "fit.json")
    loaded = kf.load_fit(tmp_path / "fit.json")
    with pytest.raises(StorageError, match="does not hold the spikes"):
        loaded.problem()
    np.testing.assert_array_equal(loaded.problem(fit.recording).data.counts, problem.data.counts)


def test_bands_widen_when_they_are_to_cover_the_whole_curve(fit):
    d = np.linspace(fit.span.smallest_um, fit.span.largest_um, 12)
    one, all_at_once = fit.kernel_band(d), fit.kernel_band(d, simultaneous=True)
    assert list(one.columns) == ["distance_um", "estimate", "lower", "upper"]
    assert isinstance(one.index, type(fit.pairs_by_distance.index))
    np.testing.assert_allclose(one["estimate"], fit.kernel(d))
    assert (all_at_once["upper"] > one["upper"]).all()
    assert (fit.kernel_band(d, level=0.8)["upper"] < one["upper"]).all()
    at_reference = fit.kernel_band(np.array([fit.reference_distance_um]))
    assert at_reference["lower"][0] == pytest.approx(fit.parameters.loc["amplitude", "lower"])
    one_distance = fit.kernel_band(d[3:4], simultaneous=True)  # covers the distances asked for, and this is one
    assert one_distance["upper"][0] == pytest.approx(one["upper"][3], rel=0.01)
    for level in (0.0, 1.0, -0.5, 95.0):
        with pytest.raises(ArgumentError, match="strictly between 0 and 1"):
            fit.kernel_band(d, level=level)


def test_no_band_where_the_array_has_no_pairs(fit):
    near, far = fit.span.smallest_um, fit.span.largest_um
    inside = np.array([near, 0.5 * (near + far), far])
    beyond = np.array([0.0, near - 0.01, far + 0.01, 5 * far])
    for simultaneous in (False, True):
        band = fit.kernel_band(np.concatenate([beyond, inside]), simultaneous=simultaneous)
        assert len(band) == 7
        np.testing.assert_array_equal(band["distance_um"][:4], beyond)
        assert band.loc[:3, ["estimate", "lower", "upper"]].isna().all(axis=None)
        # what lies beyond does not widen the simultaneous band either
        pd.testing.assert_frame_equal(
            band[4:].reset_index(drop=True), fit.kernel_band(inside, simultaneous=simultaneous)
        )
    assert fit.kernel_band(beyond).drop(columns="distance_um").isna().all(axis=None)
    assert np.isfinite(fit.kernel(beyond)).all()  # the formula itself goes on


@quiet
def test_distances_of_a_silent_source_have_no_band():
    """Unit 0 stands far off and is silent: its pairs are in the kernel's range, and nothing was recorded at them."""
    positions = np.array([[900.0, 0.0], [0.0, 0.0], [100.0, 0.0], [0.0, 130.0], [110.0, 140.0]])
    driven = kf.simulate_recording(positions[1:], NOTHING, 8.0, LEAK, 20.0, 4, bin_width=BIN_S)
    trains = {"far": [], **{u: driven.spike_times(u) for u in driven.unit_ids}}
    fit = model("flat").fit(Recording.from_arrays(trains, positions, driven.window_bounds), threads=2)
    assert fit.span.largest_um > 900.0
    band = fit.kernel_band(np.array([100.0, 178.0, 800.0, 900.0]))
    assert list(np.isfinite(band["lower"])) == [True, True, False, False]


@quiet
def test_the_band_of_a_disc_knows_that_its_radius_is_estimated():
    """Sure of the amplitude within the interval of the radius, of zero beyond it, and of neither between its ends."""
    law = kf.kernels.Disc().at(amplitude=0.3, length_um=160.0)
    fit = model("disc").fit(simulated(3, law, duration_s=30.0), threads=2)
    low, high = fit.parameters.loc["length_um", ["lower", "upper"]]
    row = fit.parameters.loc["amplitude"]
    d = np.array([fit.span.smallest_um, low, 0.5 * (low + high), high, fit.span.largest_um])
    band = fit.kernel_band(d)
    np.testing.assert_allclose(band["lower"], [row["lower"], row["lower"], 0.0, 0.0, 0.0])
    np.testing.assert_allclose(band["upper"], [row["upper"], row["upper"], row["upper"], 0.0, 0.0])


def test_tables_are_fresh_copies(fit):
    """Nobody can change a fit by writing into a table of it."""
    for name in ("parameters", "baselines", "std_errors", "pairs_by_distance"):
        before, other = getattr(fit, name), getattr(fit, name)
        other.iloc[:, 0] = other.iloc[::-1, 0].to_numpy()
        pd.testing.assert_frame_equal(getattr(fit, name), before)


def test_after_spike_curves_and_bands(fit):
    lags = np.array([0.005, 0.05, 0.5])
    curves = fit.after_spike_curves(lags)
    assert curves.shape == (9, 3)
    band = fit.after_spike_band("u03", lags)
    np.testing.assert_allclose(band["estimate"], curves[2])
    assert (band["lower"] > 0).all()
    assert (band["lower"] <= band["estimate"]).all()
    assert (band["estimate"] <= band["upper"]).all()
    assert fit.after_spike_test is None
    with pytest.raises(ArgumentError, match="unit='nobody' is not in this fit"):
        fit.after_spike_band("nobody", lags)


def test_fitted_rates_are_the_models_and_its_residuals_cancel(fit, recording):
    rates = fit.fitted_rates(0.0, 40.0)
    assert rates.rate_hz.shape == rates.counts.shape == (8000, 9)
    np.testing.assert_allclose(rates.time_s[:3], [0.0, 0.005, 0.01])
    np.testing.assert_array_equal(rates.counts.sum(axis=0), recording.counts)
    # the score of each baseline vanishes: expected counts equal observed ones
    np.testing.assert_allclose(rates.rate_hz.sum(axis=0) * BIN_S, recording.counts, rtol=1e-6)
    part = fit.fitted_rates(10.0, 10.1)
    np.testing.assert_allclose(part.rate_hz, rates.rate_hz[2000:2020])
    for start, stop in ((-5.0, -1.0), (40.0, 50.0), (7.0, 7.0)):
        with pytest.raises(ArgumentError, match="no window holds"):
            fit.fitted_rates(start, stop)
    for start, stop in ((np.nan, 1.0), (0.0, np.inf)):
        with pytest.raises(ArgumentError, match="must be finite times"):
            fit.fitted_rates(start, stop)


def test_spectral_radius_is_that_of_rates_times_jumps_over_leak(fit, recording):
    d = np.linalg.norm(recording.positions[:, None] - recording.positions, axis=-1)
    J = np.where(np.eye(9, dtype=bool), 0.0, fit.kernel(d))
    matrix = (recording.counts / 40.0)[:, None] * J / fit.leak_rate
    assert fit.spectral_radius == pytest.approx(np.abs(np.linalg.eigvals(matrix)).max(), rel=1e-9)


# --- the same result every time -----------------------------------------------------------------------------


@quiet
def test_threads_change_no_bit():
    recording = simulated(2, n_side=4, duration_s=10.0)  # 16 units: two blocks of targets
    fits = [model("exponential", after_spike="basis").fit(recording, threads=t) for t in (1, 2, 3)]
    for other in fits[1:]:
        np.testing.assert_array_equal(other.shared, fits[0].shared)
        np.testing.assert_array_equal(other.own, fits[0].own)
        np.testing.assert_array_equal(other.uncertainty.shared_robust, fits[0].uncertainty.shared_robust)
        assert other.log_likelihood == fits[0].log_likelihood
        assert other.verdict == fits[0].verdict


def test_the_order_of_units_does_not_matter(recording, fit):
    """Only rounding may change: estimates agree to a millionth of a standard error."""
    order = np.random.default_rng(0).permutation(9)
    shuffled = Recording(
        tuple(recording.unit_ids[k] for k in order),
        recording.positions[order],
        tuple(recording.trains[k] for k in order),
        recording.window_bounds,
    )
    other = model("gaussian", after_spike="basis").fit(shuffled, threads=2)
    assert other.log_likelihood == pytest.approx(fit.log_likelihood, rel=1e-10)
    gap = np.abs(other.parameters["estimate"] - fit.parameters["estimate"]) / fit.parameters["std_error"]
    assert gap.max() < 1e-4
    np.testing.assert_allclose(
        other.baselines.loc[list(fit.unit_ids), "estimate"], fit.baselines["estimate"], atol=1e-5
    )


def test_moving_turning_and_shifting_in_time_does_not_matter(recording, fit):
    angle = 0.7
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    moved = Recording(
        recording.unit_ids,
        recording.positions @ turn.T + [5000.0, -300.0],
        tuple(t + 1000.0 for t in recording.trains),
        recording.window_bounds + 1000.0,
    )
    other = model("gaussian", after_spike="basis").fit(moved, threads=2)
    assert other.log_likelihood == pytest.approx(fit.log_likelihood, rel=1e-9)
    np.testing.assert_allclose(other.parameters["estimate"], fit.parameters["estimate"], rtol=1e-5)


@quiet
def test_windows_cut_at_bin_edges_with_their_history_change_nothing():
    """Two windows that touch are one: the state is carried over, so log-likelihood and estimates stay."""
    whole = simulated(1, duration_s=20.0)
    cut = Recording(whole.unit_ids, whole.positions, whole.trains, np.array([[0.0, 7.0], [7.0, 20.0]]))
    a, b = (model("gaussian").fit(r, threads=2) for r in (whole, cut))
    assert b.log_likelihood == pytest.approx(a.log_likelihood, rel=1e-12)
    np.testing.assert_allclose(b.parameters["estimate"], a.parameters["estimate"], rtol=1e-6)


def test_the_seed_moves_only_the_test_of_coupling(recording):
    a, b = (model("flat").fit(recording, threads=2, seed=s) for s in (0, 1))
    np.testing.assert_array_equal(a.shared, b.shared)
    assert (a.seed, b.seed) == (0, 1)
    assert a.verdict.critical_z != b.verdict.critical_z


def test_the_recording_and_the_global_generator_stay_as_they_were(recording):
    before = [t.copy() for t in recording.trains]
    state = np.random.get_state()[1].copy()  # noqa: NPY002
    model("flat").fit(recording, threads=2)
    np.testing.assert_array_equal(np.random.get_state()[1], state)  # noqa: NPY002
    for a, b in zip(before, recording.trains, strict=True):
        np.testing.assert_array_equal(a, b)


# --- progress and interruption --------------------------------------------------------------------------------


def test_progress_is_told_stage_by_stage(recording):
    told = []
    fit = model("gaussian", after_spike="basis").fit(recording, threads=2, progress=told.append)
    assert len(told) > 20
    assert [p.sweeps for p in told] == list(range(1, len(told) + 1))
    assert all(p.expected_sweeps >= p.sweeps and p.seconds_left >= 0 for p in told)
    stages = list(dict.fromkeys(p.stage for p in told))
    assert stages == ["rates without coupling", "looking for coupling", "climbing", "standard errors"]
    silent = model("gaussian", after_spike="basis").fit(recording, threads=2)
    np.testing.assert_array_equal(silent.shared, fit.shared)


@pytest.mark.skipif(sys.platform == "win32", reason="the operating system does not tell")
def test_progress_tells_how_much_memory_the_process_holds(recording):
    """An array of 100 MB that was written to cannot be in less."""
    held = np.ones(12_500_000)
    told = []
    model("flat", leak_rate=LEAK).fit(recording, threads=1, progress=told.append)
    assert held.nbytes < told[-1].peak_bytes < 1e12


@pytest.mark.parametrize("at", [1, 12, 25])
def test_an_interruption_leaves_cleanly(recording, at):
    """Ctrl-C arrives as KeyboardInterrupt wherever the program is; here in the callback. No thread may stay behind."""

    def stop(progress):
        if progress.sweeps == at:
            raise KeyboardInterrupt

    before = threading.active_count()
    with pytest.raises(KeyboardInterrupt):
        model("gaussian", after_spike="basis").fit(simulated(1, n_side=4, duration_s=10.0), threads=2, progress=stop)
    assert threading.active_count() == before
    assert model("flat").fit(recording, threads=2).converged  # and the next fit works


# --- when something is wrong ----------------------------------------------------------------------------------


def test_a_fit_that_did_not_converge_says_so_everywhere(recording, monkeypatch):
    def hurried(problem, start, **options):
        return maximise(problem, start, **{**options, "max_iterations": 2})

    monkeypatch.setattr(search_module, "maximise", hurried)
    with pytest.warns(kf.FitWarning, match="did not converge: stopped after 2 steps"):
        fit = model("gaussian").fit(recording, threads=2)
    assert not fit.converged
    assert not fit.solver.converged
    assert fit.solver.max_gradient > 1e-3
    assert fit.notes[0].severity == "error"
    assert "Treat every number with caution" in fit.notes[0].remedy
    assert "NOT CONVERGED" in fit.summary()


@pytest.fixture(scope="module")
def uncoupled():
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        fit = model("gaussian").fit(simulated(7, NOTHING, duration_s=60.0), threads=2)
    return fit, [str(w.message) for w in caught if issubclass(w.category, kf.FitWarning)]


def test_without_coupling_the_fit_says_that_there_is_none(uncoupled):
    fit, warned = uncoupled
    assert not fit.verdict.found
    assert fit.verdict.p_value > 0.05
    assert "No coupling to describe" in fit.verdict.sentence
    assert fit.verdict.sentence in fit.summary()
    assert any("No coupling to describe" in w for w in warned)


def test_without_coupling_length_and_leak_are_not_numbers_and_the_reason_stands_beside(uncoupled):
    table = uncoupled[0].parameters
    for name in ("length_um", "leak_rate"):
        assert table.loc[name, ["estimate", "std_error", "lower", "upper"]].isna().all()
        assert table.loc[name, "note"] == "not identified: no coupling to describe"
    row = table.loc["amplitude"]
    assert row["lower"] < 0 < row["upper"]
    assert "widened for the search" in row["note"]
    assert row["upper"] - row["estimate"] > 2.5 * row["std_error"]


def test_without_coupling_the_band_holds_zero(uncoupled):
    band = uncoupled[0].kernel_band(np.array([100.0, 150.0, 200.0]))
    assert ((band["lower"] <= 0) & (band["upper"] >= 0)).all()


@quiet
def test_a_fixed_leak_is_marked_fixed(recording):
    fit = model("flat", leak_rate=50.0).fit(recording, "model", threads=2)
    row = fit.parameters.loc["leak_rate"]
    assert row["note"] == "fixed"
    assert row["estimate"] == fit.leak_rate == 50.0
    assert row[["std_error", "lower", "upper"]].isna().all()
    assert fit.n_parameters == 10
    assert fit.covariance_kind == "model"


def with_trains(recording, **changes):
    """The recording with some units' trains replaced."""
    trains = tuple(
        np.asarray(changes.get(u, t), dtype=float) for u, t in zip(recording.unit_ids, recording.trains, strict=True)
    )
    return Recording(recording.unit_ids, recording.positions, trains, recording.window_bounds)


@quiet
def test_silent_units_keep_their_row_with_the_reason(recording):
    silent = with_trains(recording, u02=[], u05=[-0.5])
    fit = model("gaussian").fit(silent, threads=2)
    table = fit.baselines
    assert list(table.index) == list(recording.unit_ids)
    for unit in ("u02", "u05"):
        assert table.loc[unit, ["estimate", "std_error"]].isna().all()
        assert table.loc[unit, "rate_hz"] == 0.0
        assert "silent in the bins that count: baseline minus infinity" in table.loc[unit, "note"]
    note = next(n for n in fit.notes if n.where == "units")
    assert "2 units without a spike in the bins that count: u02, u05" in note.what
    assert fit.n_parameters == 7 + 3
    assert fit.converged


@quiet
def test_a_silent_unit_with_distances_of_its_own_does_not_stop_the_fit():
    """Distances whose only sources are silent carry no information: the others must decide."""
    positions = np.array([[0, 0], [100, 0], [0, 130], [170, 160], [170.2, 160.0], [50, 220]], dtype=float)
    law = kf.kernels.Gaussian().at(amplitude=0.2, length_um=150.0, reference_um=100.0)
    recording = with_trains(kf.simulate_recording(positions, law, 8.0, 50.0, 60.0, 1, bin_width=BIN_S), u05=[])
    fit = model("gaussian", same_site="own").fit(recording, threads=2)
    assert fit.converged
    assert fit.parameters.loc["amplitude", "estimate"] > 0.1
    # the one pair on a site has a silent source: no coefficient, and a note
    assert "same_site" not in fit.parameters.index
    assert any("there is no same-site coefficient" in n.what for n in fit.notes)


@quiet
def test_source_only_units_keep_their_row_with_the_reason(recording):
    fit = model("gaussian").fit(recording.select(source_only=["u01"]), threads=2)
    row = fit.baselines.loc["u01"]
    assert np.isnan(row["estimate"])
    assert np.isnan(row["rate_hz"])
    assert row["note"] == "source only: drives others and is not explained"
    assert np.isnan(fit.fitted_rates(0.0, 1.0).rate_hz[:, 0]).all()
    assert fit.pairs_by_distance["n_pairs"].sum() == 36  # still a source of every other


@quiet
def test_one_coefficient_for_pairs_on_one_site():
    """Twins that excite each other by 0.6: the coefficient holds it and the kernel does not."""
    positions = np.vstack([array(), array()[0] + [0.3, 0.0]])
    rng = np.random.default_rng(4)
    base = kf.simulate_recording(positions, NOTHING, 8.0, LEAK, 60.0, rng, bin_width=BIN_S)
    twin = base.trains[9]
    echo = base.trains[0][rng.random(base.trains[0].size) < 0.3] + 0.006
    recording = with_trains(base, u10=np.sort(np.concatenate([twin, echo])))
    fit = model("flat", same_site="own", leak_rate=LEAK).fit(recording, threads=2)
    assert list(fit.parameters.index) == ["amplitude", "same_site", "leak_rate"]
    row = fit.parameters.loc["same_site"]
    assert row["lower"] > 0.1
    assert row["unit"] == "per spike"
    assert abs(fit.parameters.loc["amplitude", "estimate"]) < 0.1
    excluded = model("flat", leak_rate=LEAK).fit(recording, threads=2)
    assert any("1 pair of units on one site left out of the kernel" in n.what for n in excluded.notes)


def test_a_length_at_its_bound_is_named_with_the_reason():
    recording = simulated(2, lambda d: np.where(d > 180, 0.2, 0.1))
    with pytest.warns(kf.FitWarning, match="The length ran into its bound: longer than"):
        fit = model("exponential", leak_rate=LEAK).fit(recording, threads=2)
    row = fit.parameters.loc["length_um"]
    assert row["note"].startswith("at its bound: longer than")
    assert "five times the largest distance" in row["note"]
    assert np.isnan(row["std_error"])
    assert np.isfinite(row["estimate"])
    assert np.isfinite(fit.parameters.loc["amplitude", "std_error"])
    assert "could not be estimated" not in fit.summary()


def test_a_kernel_too_short_for_the_array_is_named():
    """Units on a line 100 and 110 µm apart by turns; coupling at 100 and none at 110: the fall is too steep to see."""
    x = np.cumsum([0.0, 100.0, 110.0, 100.0, 110.0, 100.0, 110.0, 100.0])[:, None]
    recording = kf.simulate_recording(x, lambda d: np.where(d < 101, 0.5, 0.0), 6.0, LEAK, 80.0, 3, bin_width=BIN_S)
    with pytest.warns(kf.FitWarning, match="The length ran into its bound: shorter than 20 µm"):
        fit = model("exponential", leak_rate=LEAK).fit(recording, threads=2)
    assert "no pairs close enough to see the kernel fall" in fit.parameters.loc["length_um", "note"]


def echoing(lag_bins):
    """Eight units repeat a quarter of the first one's spikes this many bins later, and that is all there is."""
    base = simulated(5, NOTHING, duration_s=60.0)
    rng = np.random.default_rng(1)
    first = base.trains[0]
    echoes = [first[rng.random(first.size) < 0.25] + lag_bins * BIN_S for _ in range(8)]
    trains = {f"u{k + 2:02d}": np.sort(np.concatenate([base.trains[k + 1], e])) for k, e in enumerate(echoes)}
    return with_trains(base, **trains)


def test_a_leak_faster_than_a_bin_is_named():
    with pytest.warns(kf.FitWarning, match="The leak rate ran into its bound"):
        fit = model("flat").fit(echoing(1.0), threads=2)
    assert fit.leak_rate == pytest.approx(3.0 / BIN_S)
    assert "is faster than a bin: use narrower bins" in fit.parameters.loc["leak_rate", "note"]


def test_bins_too_wide_for_the_leak_are_named():
    """alpha D above 0.5 (docs/model.md section 3), with the width that would do."""
    with pytest.warns(kf.FitWarning, match=r"bins of 5 ms are too wide for the time constant found"):
        fit = model("flat").fit(echoing(1.2), threads=2)
    note = next(n for n in fit.notes if n.where == "bin width")
    assert f"at most {500 / fit.leak_rate:.2g} ms" in note.remedy


def test_wide_bins_are_fine_where_the_leak_is_slow(fit):
    assert not any(n.where == "bin width" for n in fit.notes)


@quiet
def test_few_blocks_of_time_are_named():
    fit = model("flat", leak_rate=LEAK).fit(simulated(1, duration_s=12.0), threads=2)
    assert any("Robust standard errors rest on 12 blocks" in n.what for n in fit.notes)


@quiet
def test_a_single_block_of_time_has_no_robust_intervals_and_says_so():
    fit = model("flat", leak_rate=LEAK).fit(simulated(1, duration_s=1.5), threads=2)
    assert fit.n_blocks == 1
    assert fit.parameters.loc["amplitude", ["std_error", "lower", "upper"]].isna().all()
    assert fit.parameters.loc["amplitude", "note"]
    assert np.isfinite(fit.with_covariance("model").parameters.loc["amplitude", "std_error"])


@quiet
def test_what_an_after_spike_term_would_add():
    own = {"after_spike_constants_s": np.array([0.02]), "after_spike_coefficients": np.array([-2.0])}
    refractory = simulated(6, duration_s=60.0, rate_hz=25.0, **own)
    fit = model("flat").fit(refractory, threads=2)
    assert fit.after_spike_test.p_value < 0.001
    assert fit.after_spike_test.bits_per_spike > 0
    assert "fit with after_spike='basis'" in fit.after_spike_test.sentence
    assert isinstance(fit.after_spike_curves(np.array([0.01])), kf.Unavailable)
    plain = model("flat").fit(simulated(1), threads=2)
    assert plain.after_spike_test.p_value > 0.001
    assert "would add little" in plain.after_spike_test.sentence or plain.after_spike_test.p_value < 0.05


@quiet
def test_exclusions_history_and_derived_windows_are_noted():
    base = simulated(1, duration_s=20.0)
    outside = Recording(base.unit_ids, base.positions, base.trains, np.array([[2.0, 18.0]]), np.array([[5.0, 6.0]]))
    fit = model("flat", leak_rate=LEAK).fit(outside, threads=2)
    said = " ".join(n.what for n in fit.notes)
    assert "spikes lie outside the windows" in said
    assert "spikes lie inside exclusions" in said
    assert fit.duration_s == pytest.approx(15.0)
    times = {u: base.spike_times(u) for u in base.unit_ids}
    derived = model("flat", leak_rate=LEAK).fit(kf.Recording.from_arrays(times, base.positions), threads=2)
    assert any("No windows were given: the window runs from 0 s" in n.what for n in derived.notes)


def test_a_covariance_of_another_name_is_refused_before_any_work(recording):
    told = []
    with pytest.raises(ArgumentError, match="covariance='hac' is not known"):
        model("flat").fit(recording, "hac", progress=told.append)
    assert not told


@quiet
def test_html_is_escaped():
    recording = simulated(1, duration_s=10.0)
    html = model("flat", leak_rate=LEAK).fit(recording, threads=2)._repr_html_()
    assert "<table" in html
    assert "not for clinical" in html
