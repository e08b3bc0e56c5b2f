"""Smoothing and ridge chosen by the data, on small recordings."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from worlds import BIN_S, LEAK, NOTHING, array, model, simulated

import kernelfit as kf
from kernelfit import kernels, terms
from kernelfit.engine.evaluate import expected_counts
from kernelfit.engine.twin import dense_counts, dense_gradients
from kernelfit.errors import ArgumentError, StorageError
from kernelfit.fitting import smoothing as smoothing_module
from kernelfit.fitting.maximise import Weighting, evaluate_locally, maximise
from kernelfit.fitting.penalties import after_spike_penalty, kernel_penalty, with_weights
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.fitting.smoothing import parabola_at
from kernelfit.fitting.smoothing_path import smoothing_path
from kernelfit.fitting.validation import GAP, TEST, HeldOut, best_held_out, fold_blocks, held_out

FEW = kernels.Spline(n_basis=7, smoothing="likelihood")


def spline_model(smoothing, **options):
    return model(dataclasses.replace(FEW, smoothing=smoothing), **options)


def counted(a_model, recording):
    sweeps = []
    fit = a_model.fit(recording, threads=2, progress=lambda progress: sweeps.append(progress))
    return fit, len(sweeps)


def law(*coefficients, n_side=3):
    """A spline kernel over the distances of the array."""
    low, high = kernels.pair_geometry(array(n_side)).distinct_um[[0, -1]]
    spline = kernels.Spline(n_basis=len(coefficients))
    return spline.at(coefficients=coefficients, smallest_um=float(low), largest_um=float(high))


@pytest.fixture(scope="module")
def recording():
    return simulated(3, law(0.2, 0.25, 0.05, -0.1, 0.05, 0.05, n_side=4), n_side=4, duration_s=60.0)


@pytest.fixture(scope="module")
def fit(recording):
    return spline_model("likelihood").fit(recording, threads=2)


@pytest.fixture(scope="module")
def path(fit):
    return fit.smoothing_path(validate=True, threads=2)


# --- the choice -------------------------------------------------------------------------------------------------------


def test_the_smoothing_chosen_has_the_highest_marginal_likelihood_of_all(fit, path):
    """Every smoothing of a fine grid refitted from scratch, by the marginal likelihood at its own optimum."""
    chosen = fit.smoothing.of("kernel")
    assert fit.model.kernel.smoothing == chosen.value
    assert chosen.at_bound == 0
    near = fit.smoothing_path(chosen.value * np.array([0.5, 0.8, 1.25, 2.0]), threads=2)
    for table in (near.table, path.table):
        at_choice = table["chosen"].to_numpy()
        assert at_choice.sum() == 1
        gap = table["log_marginal_likelihood"].to_numpy() - table["log_marginal_likelihood"][at_choice].iloc[0]
        # settled where another round would gain less than 1e-3; and the update holds the information, which changes a
        # little with the smoothing
        assert gap.max() < 0.02
    assert fit.smoothing.log_marginal_likelihood == pytest.approx(path.log_marginal_likelihood[path.chosen], abs=1e-4)


def test_the_fit_is_that_of_the_number_it_chose(fit, recording):
    stated = spline_model(fit.model.kernel.smoothing).fit(recording, threads=2)
    np.testing.assert_allclose(stated.shared, fit.shared, rtol=1e-6, atol=1e-7)
    assert stated.log_likelihood == pytest.approx(fit.log_likelihood, abs=1e-6)
    assert stated.effective_parameters == pytest.approx(fit.effective_parameters, rel=1e-7)
    assert stated.smoothing is None
    assert stated.model == fit.model


def test_bands_are_wider_for_not_knowing_the_smoothing(fit, recording):
    stated = spline_model(fit.model.kernel.smoothing).fit(recording, threads=2)
    d = fit.distinct_um
    for kind in ("model", "robust", "jackknife"):
        known, chosen = (f.with_covariance(kind).kernel_band(d) for f in (stated, fit))
        width, wider = (b["upper"] - b["lower"] for b in (known, chosen))
        assert (wider >= width * (1 - 1e-6)).all()
        assert wider.mean() > 1.02 * width.mean()


def test_choosing_costs_at_most_as_much_again_as_the_fit_without(recording):
    _, plain = counted(spline_model(0.0), recording)
    for chosen in (spline_model("likelihood"), spline_model("likelihood", leak_rate=LEAK)):
        fit, sweeps = counted(chosen, recording)
        assert sweeps <= 2 * plain
        assert fit.smoothing.settled
        assert 0 < fit.smoothing.n_sweeps < sweeps


def test_a_problem_of_the_fit_has_the_chosen_weights(fit):
    problem = fit.problem(threads=2)
    local = evaluate_locally(problem, fit.estimate)
    assert np.abs(local.score_shared).max() < 1e-3 * np.sqrt(np.diag(local.information.shared)).max()
    assert problem.kernel.smoothing == fit.model.kernel.smoothing


def test_a_straight_line_ends_at_a_finite_bound_and_says_so():
    line = law(0.2, 0.15, 0.1, 0.05)
    fits = [spline_model("likelihood").fit(simulated(seed, line), threads=2) for seed in range(4)]
    ended = [f for f in fits if f.smoothing.of("kernel").at_bound == 1]
    assert ended, "of four straight kernels at least one is taken for straight"
    for f in ended:
        chosen = f.smoothing.of("kernel")
        assert np.isfinite(chosen.value)
        assert chosen.value == pytest.approx(chosen.upper, rel=1e-2)
        assert f.effective_by_term.loc["kernel", "effective"] == pytest.approx(2.0, abs=0.01)
        said = [n for n in f.notes if n.where == "smoothing"]
        assert "upper bound, as good as endless: the data ask for no more than a straight line" in said[0].what
        assert said[0].severity == "info"


@pytest.mark.filterwarnings("ignore::kernelfit.errors.FitWarning")
def test_a_recording_without_coupling_can_be_fitted():
    fit = spline_model("likelihood").fit(simulated(4, NOTHING), threads=2)
    assert fit.converged
    assert np.isfinite(fit.model.kernel.smoothing)
    assert fit.effective_by_term.loc["kernel", "effective"] < 7


@pytest.mark.filterwarnings("ignore::kernelfit.errors.FitWarning")
@pytest.mark.parametrize("smoothing", ["likelihood", "validation"])
def test_where_the_data_determine_no_more_than_the_penalty_leaves_free(smoothing):
    """Three distances and differences of third order: a parabola goes through them whatever the smoothing."""
    rng = np.random.default_rng(3)
    trains = {f"u{k}": np.unique(rng.uniform(0.0, 20.0, n)) for k, n in enumerate((170, 120, 30))}
    few = kf.Recording.from_arrays(trains, np.array([[0.0, 0.0], [90.0, 0.0], [0.0, 170.0]]), windows=[(0.0, 20.0)])
    kernel = kernels.Spline(n_basis=7, smoothing=smoothing, order=3)
    fit = model(kernel, leak_rate=LEAK).fit(few, threads=2)
    chosen = fit.smoothing.of("kernel")
    assert chosen.lower == chosen.upper == chosen.value == 1.0  # any weight will do
    assert fit.effective_by_term.loc["kernel", "effective"] == pytest.approx(3.0, abs=1e-6)


@pytest.mark.filterwarnings("ignore::kernelfit.errors.FitWarning")
def test_where_nothing_can_be_chosen_the_guess_stays_and_is_said_to_be_one(recording, monkeypatch, tmp_path):
    def nothing_there(*_):
        raise np.linalg.LinAlgError("no parabola")

    monkeypatch.setattr(smoothing_module, "parabola_at", nothing_there)
    fit = spline_model("likelihood", leak_rate=LEAK).fit(recording, threads=2)
    assert not fit.smoothing.settled
    assert fit.model.kernel.smoothing == fit.smoothing.of("kernel").value
    said = next(n for n in fit.notes if n.where == "smoothing")
    assert said.severity == "warning"
    assert "could not choose the smoothing" in said.what
    fit.save(tmp_path / "fit.json")
    assert np.isnan(kf.load_fit(tmp_path / "fit.json").smoothing.log_marginal_likelihood)


def test_other_orders_and_axes(recording):
    for order, axis, left in ((1, "distance", "a constant"), (3, "log-distance", "a polynomial of degree 2 in log")):
        kernel = kernels.Spline(n_basis=7, smoothing="likelihood", order=order, axis=axis)
        fit = model(kernel, leak_rate=LEAK).fit(recording, threads=2)
        assert order <= fit.effective_by_term.loc["kernel", "effective"] <= 7
        assert kernel.smoothest.startswith(left)


def test_a_fixed_ridge_beside_the_smoothing(recording):
    kernel = kernels.Spline(n_basis=7, smoothing="likelihood", ridge=50.0)
    fit = model(kernel, leak_rate=LEAK).fit(recording, threads=2)
    assert fit.model.kernel.ridge == 50.0
    near = fit.smoothing_path(fit.model.kernel.smoothing * np.array([0.5, 2.0]), threads=2)
    assert near.log_marginal_likelihood[near.chosen] >= near.log_marginal_likelihood.max() - 2e-3


# --- after-spike ------------------------------------------------------------------------------------------------------


AFTER = terms.AfterSpike(time_constants_s=(0.01, 0.1), ridge="likelihood")


@pytest.fixture(scope="module")
def bursty():
    """A recording whose units differ in what their own spikes do."""
    rng = np.random.default_rng(8)
    trains = {}
    for k in range(9):
        times, t = [], 0.0
        while t < 40.0:
            t += rng.exponential(0.15)
            times.append(t)
            if rng.uniform() < 0.1 * k:
                times.append(t + rng.exponential(0.02))
        trains[f"u{k}"] = np.unique(np.array(times)[np.array(times) < 40.0])
    return kf.Recording.from_arrays(trains, array(), windows=[(0.0, 40.0)])


@pytest.fixture(scope="module")
def ridged(bursty):
    return model("flat", after_spike=AFTER, leak_rate=LEAK).fit(bursty, threads=2)


def test_the_ridge_chosen_has_the_highest_marginal_likelihood_of_all(ridged, bursty):
    chosen = ridged.smoothing.of("after-spike")
    assert ridged.model.after_spike.ridge == chosen.value
    assert chosen.at_bound == 0
    problem = ridged.problem(threads=2)
    penalty = (after_spike_penalty(problem),)

    def log_marginal(ridge):
        here = with_weights(problem, penalty, np.array([ridge]))
        optimum = maximise(here, ridged.estimate)
        return parabola_at(here, optimum, penalty, np.array([ridge])).peak(penalty, np.array([ridge])).log_marginal

    at_choice = log_marginal(chosen.value)
    for factor in (0.3, 0.7, 1.4, 3.0):
        assert log_marginal(chosen.value * factor) < at_choice + 2e-3
    effective = ridged.effective_by_term.loc["after-spike"]
    assert effective["coefficients"] == 18
    assert 1 < effective["effective"] < 18


def test_a_ridge_and_a_smoothing_have_a_weight_each(bursty):
    fit = model(FEW, after_spike=AFTER, leak_rate=LEAK).fit(bursty, threads=2)
    assert [w.term for w in fit.smoothing.weights] == ["kernel", "after-spike"]
    assert fit.model.kernel.smoothing == fit.smoothing.of("kernel").value
    assert fit.model.after_spike.ridge == fit.smoothing.of("after-spike").value
    assert fit.smoothing.settled


def test_units_without_own_effects_are_drawn_to_none(recording):
    """Trains of the simulation have no after-spike effects: the ridge ends at its bound, and says so."""
    fit = model("flat", after_spike=AFTER, leak_rate=LEAK).fit(recording, threads=2)
    usual = model("flat", after_spike=dataclasses.replace(AFTER, ridge=0.01), leak_rate=LEAK).fit(recording, threads=2)
    assert fit.effective_by_term.loc["after-spike", "effective"] < 6
    assert np.abs(fit.own[:, 1:]).max() < 0.3 * np.abs(usual.own[:, 1:]).max()
    assert fit.aic < usual.aic


def test_a_profiled_radius_stays_where_it_was_found(bursty):
    fit = model("disc", after_spike=AFTER, leak_rate=LEAK).fit(bursty, threads=2)
    assert fit.smoothing.of("after-spike").value > 0
    assert fit.effective_by_term.loc["kernel", "effective"] == 2.0


# --- stretches left out -----------------------------------------------------------------------------------------------


def test_folds_cover_the_sum_once_and_gaps_stand_between():
    problem = make_problem(spline_model(1.0), simulated(1), threads=2)
    total = problem.data.n_bins
    tested = np.zeros(int(problem.data.stretches[-1, 1]), dtype=int)
    for fold in range(5):
        blocks = fold_blocks(problem, fold, 5, 30)
        assert blocks.n_bins.sum() == total
        assert blocks.n_bins[TEST] == pytest.approx(total / 5, abs=1)
        assert blocks.n_bins[GAP] == (30 if fold in (0, 4) else 60)
        assert (blocks.stretches[1:, 0] == blocks.stretches[:-1, 1]).all()
        for start, stop, block in blocks.stretches:
            if block == TEST:
                tested[start:stop] += 1
    assert (tested == 1).all()


def test_folds_respect_windows(recording):
    cut = kf.Recording.from_arrays(
        {u: recording.spike_times(u) for u in recording.unit_ids},
        recording.positions,
        windows=[(0.0, 11.0), (13.0, 36.0), (40.0, 60.0)],
    )
    problem = make_problem(spline_model(1.0), cut, threads=2)
    for fold in range(4):
        blocks = fold_blocks(problem, fold, 4, 17)
        inside = np.zeros(int(problem.data.stretches[-1, 1]), dtype=bool)
        for start, stop in problem.data.stretches:
            inside[start:stop] = True
        for start, stop, _ in blocks.stretches:
            assert inside[start:stop].all()
        assert blocks.n_bins.sum() == problem.data.n_bins
        assert blocks.n_bins[TEST] == pytest.approx(problem.data.n_bins / 4, abs=1)


def test_held_out_log_likelihood_is_that_of_the_fold_under_a_fit_to_the_rest(recording):
    """One fold by hand: the rest fitted with weights, the fold judged through the expected counts of every bin."""
    problem = make_problem(spline_model(20.0), recording, threads=2)
    penalty = kernel_penalty(problem)
    start = maximise(problem, Estimate(np.full((16, 1), np.log(6.0)), np.append(np.full(7, 0.01), np.log(LEAK))))
    found = held_out(problem, start, penalty, np.array([20.0]), n_folds=3)
    gap_bins = round(found.gap_s / BIN_S)
    assert gap_bins == int(np.ceil(5.0 / (problem.leak(start.estimate.shared) * BIN_S)))
    blocks = fold_blocks(problem, 1, 3, gap_bins)
    rest = maximise(problem, start.estimate, weighting=Weighting(blocks, np.array([1.0, 0.0, 0.0])))
    (first, last, _) = blocks.stretches[blocks.stretches[:, 2] == TEST][0]
    mean = expected_counts(problem.data, problem.point(rest.estimate), int(first), int(last - first))
    begin, counts = dense_counts(problem.data)
    y = counts[first - begin : last - begin][:, problem.data.targets]
    assert found.log_likelihood[1, 0] == pytest.approx(float(np.sum(y * np.log(mean) - mean)), abs=0.02)


def test_a_unit_that_fires_in_one_fold_alone_is_left_out_of_it(recording):
    trains = {u: recording.spike_times(u) for u in recording.unit_ids}
    first = recording.unit_ids[0]
    trains[first] = trains[first][trains[first] < 10.0]
    late = kf.Recording.from_arrays(trains, recording.positions, windows=[(0.0, 60.0)])
    fit = spline_model("validation", leak_rate=LEAK).fit(late, threads=2)
    assert np.isfinite(fit.smoothing.held_out.log_likelihood).all()
    # the first fold is judged by fifteen units
    assert fit.smoothing.held_out.log_likelihood.shape == (5, 9)


def test_validation_chooses_where_the_held_out_log_likelihood_is_highest(recording):
    fit = spline_model("validation").fit(recording, threads=2)
    chosen, table = fit.smoothing.of("kernel"), fit.smoothing.held_out
    assert chosen.chosen_by == "validation"
    best = int(np.argmax(table.total))
    if chosen.at_bound == 0:
        assert table.smoothing[best - 1] < chosen.value < table.smoothing[best + 1]
    else:
        assert chosen.value == table.smoothing[best]
    assert any("stretches of time left out" in n.what for n in fit.notes)


def test_the_best_of_a_table_lies_between_its_points():
    x = np.array([-2.0, -1.0, 0.0, 1.0, 2.0])
    parabola = HeldOut(np.exp(x), -((x - 0.3) ** 2)[None, :] + np.zeros((3, 1)), 0.1)
    value, end = best_held_out(parabola)
    assert np.log(value) == pytest.approx(0.3)
    assert end == 0
    assert best_held_out(HeldOut(np.exp(x), x[None, :], 0.1)) == (pytest.approx(np.exp(2.0)), 1)
    assert best_held_out(HeldOut(np.exp(x), -x[None, :], 0.1)) == (pytest.approx(np.exp(-2.0)), -1)


def test_standard_error_of_a_held_out_difference():
    """Differences of two folds, 1 and 3: their sum is 4, with standard error sqrt(2) times their standard deviation."""
    table = HeldOut(np.array([1.0, 2.0]), np.array([[-1.0, 0.0], [-3.0, 0.0]]), 0.1)
    np.testing.assert_allclose(table.loss_std_error, [np.sqrt(2) * np.sqrt(2), 0.0])


# --- the path ---------------------------------------------------------------------------------------------------------


def test_along_the_path_effective_parameters_fall_from_the_basis_to_the_line(path):
    assert (np.diff(path.effective) < 0).all()
    assert path.effective[0] == pytest.approx(7.0, abs=0.2)
    assert path.effective[-1] == pytest.approx(2.0, abs=0.2)
    assert (np.diff(path.log_likelihood) < 1e-6).all()
    assert path.converged.all()
    assert path.held_out.total.shape == path.smoothing.shape
    assert path.kernels(np.array([100.0, 200.0])).shape == (path.smoothing.size, 2)


def test_the_path_passes_through_the_fit(fit, path):
    d = fit.distinct_um
    np.testing.assert_allclose(path.kernels(d)[path.chosen], fit.kernel(d), atol=2e-5)
    assert path.effective[path.chosen] == pytest.approx(fit.effective_by_term.loc["kernel", "effective"], abs=1e-3)
    assert path.leak_rate[path.chosen] == pytest.approx(fit.leak_rate, rel=1e-3)
    assert path.chosen_by == "likelihood"


def test_a_fit_without_smoothing_has_a_path_too(recording):
    fit = spline_model(0.0).fit(recording, threads=2)
    path = fit.smoothing_path([1.0, 100.0, 1e4], threads=2)
    assert path.chosen is None
    assert path.chosen_by == "stated"
    assert path.smoothing.tolist() == [1.0, 100.0, 1e4]
    usual = fit.smoothing_path(threads=2)
    assert usual.smoothing.size == 13


def test_paths_that_cannot_be(fit, recording, tmp_path):
    with pytest.raises(ArgumentError, match="'gaussian' has no smoothing"):
        model("gaussian").fit(recording, threads=2).smoothing_path()
    for wrong in ([0.0, 1.0], [-1.0], [], [np.nan]):
        with pytest.raises(ArgumentError, match="positive numbers"):
            fit.smoothing_path(wrong)
    fit.save(tmp_path / "fit.json")
    with pytest.raises(StorageError):
        kf.load_fit(tmp_path / "fit.json").smoothing_path()
    again = smoothing_path(kf.load_fit(tmp_path / "fit.json"), [fit.model.kernel.smoothing], recording=recording)
    np.testing.assert_allclose(again.theta[0], fit.shared[:7], atol=2e-5)


# --- effective parameters ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "the_model",
    [
        model(kernels.Spline(n_basis=7, smoothing=30.0, ridge=2.0)),
        model(kernels.Gaussian(ridge=40.0), after_spike=terms.AfterSpike(time_constants_s=(0.01, 0.1), ridge=3.0)),
        model(
            kernels.Spline(n_basis=5, smoothing=5.0), leak_rate=LEAK, after_spike=dataclasses.replace(AFTER, ridge=1)
        ),
    ],
    ids=["spline and ridge", "gaussian, ridge, after-spike", "fixed leak"],
)
def test_effective_parameters_are_the_dense_trace(the_model, recording):
    """tr((I + S)^-1 I) with I from the design matrix of every bin, all units and shared parameters together."""
    fit = the_model.fit(recording, threads=2)
    problem = fit.problem(threads=2)
    _, _, eta, gradients = dense_gradients(problem.data, problem.point(fit.estimate))
    n, p, q = *fit.own.shape, fit.shared.size
    gradients = gradients.copy()
    if problem.fits_leak:
        gradients[..., -1] *= fit.leak_rate
    design = np.zeros((*eta.shape, n * p + q))
    for i in range(n):
        design[:, i, i * p : (i + 1) * p] = gradients[:, i, :p]
        design[:, i, n * p :] = gradients[:, i, p:]
    information = np.einsum("tn,tnj,tnk->jk", BIN_S * np.exp(eta), design, design, optimize=True)
    penalty = np.zeros_like(information)
    penalty[n * p :, n * p :] = problem.penalty
    ridge = np.zeros(p)
    ridge[1:] = the_model.after_spike.ridge
    penalty[: n * p, : n * p] = np.diag(np.tile(ridge, n))
    diagonal = np.diag(np.linalg.solve(information + penalty, information))
    assert fit.effective_parameters == pytest.approx(diagonal.sum(), rel=1e-8)
    table = fit.effective_by_term
    k = problem.n_kernel
    assert table.loc["kernel", "effective"] == pytest.approx(diagonal[n * p : n * p + k].sum(), rel=1e-7)
    if p > 1:
        own = diagonal[: n * p].reshape(n, p)[:, 1:].sum()
        assert table.loc["after-spike", "effective"] == pytest.approx(own, rel=1e-8)
    assert table["coefficients"].sum() == fit.n_parameters
    assert fit.aic == pytest.approx(-2 * fit.log_likelihood + 2 * diagonal.sum(), rel=1e-10)


def test_without_penalties_they_are_the_coefficients(recording):
    fit = model("gaussian").fit(recording, threads=2)
    assert fit.effective_parameters == fit.n_parameters
    assert list(fit.effective_by_term.index) == ["baselines", "kernel", "leak"]


# --- ridge on amplitudes ----------------------------------------------------------------------------------------------


def test_a_ridge_on_amplitudes_is_in_the_objective(recording):
    fit = model(kernels.Gaussian(ridge=40.0)).fit(recording, threads=2)
    free = model("gaussian").fit(recording, threads=2)
    # at the top the pull of the data on the amplitude is that of the ridge
    bare = fit.problem(threads=2).with_kernel(kernels.Gaussian())
    score = evaluate_locally(bare, fit.estimate).score_shared
    assert score[0] == pytest.approx(40.0 * fit.shared[0], rel=1e-4)
    assert score[1] == pytest.approx(0.0, abs=1e-2)
    assert fit.log_likelihood < free.log_likelihood
    assert fit.effective_by_term.loc["kernel", "effective"] < 2


def test_a_strong_ridge_leaves_no_amplitude(recording):
    fit = model(kernels.Flat(ridge=1e9), leak_rate=LEAK).fit(recording, threads=2)
    assert abs(fit.parameters.loc["amplitude", "estimate"]) < 1e-4
    assert fit.effective_by_term.loc["kernel", "effective"] < 1e-3


# --- files ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("smoothing", ["likelihood", "validation"])
def test_a_saved_fit_knows_how_its_smoothing_was_chosen(smoothing, recording, tmp_path):
    the_model = model(dataclasses.replace(FEW, smoothing=smoothing), after_spike=AFTER, leak_rate=LEAK)
    fit = the_model.fit(recording, threads=2)
    fit.save(tmp_path / "fit.json")
    loaded = kf.load_fit(tmp_path / "fit.json")
    assert loaded.model == fit.model
    assert loaded.term_sizes == fit.term_sizes
    assert loaded.effective_parameters == fit.effective_parameters
    assert loaded.smoothing.weights == fit.smoothing.weights
    assert loaded.smoothing.settled == fit.smoothing.settled
    if smoothing == "validation":
        np.testing.assert_array_equal(loaded.smoothing.held_out.log_likelihood, fit.smoothing.held_out.log_likelihood)
        assert loaded.smoothing.held_out.gap_s == fit.smoothing.held_out.gap_s
    else:
        assert loaded.smoothing.held_out is None


def test_models_that_leave_numbers_to_the_data_say_so_where_a_number_is_wanted():
    with pytest.raises(ArgumentError, match="number only after a fit"):
        FEW.penalty(kernels.DistanceRange(100.0, 100.0, 300.0))
    with pytest.raises(ArgumentError, match="has no smoothing"):
        kernels.Gaussian().with_smoothing(3.0)
    settled = model(FEW, after_spike=AFTER).settled(smoothing=3.0, ridge=0.5)
    assert settled.kernel.smoothing == 3.0
    assert settled.after_spike.ridge == 0.5
    assert model(FEW, after_spike=AFTER).settled() == model(FEW, after_spike=AFTER)
