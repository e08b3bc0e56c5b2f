"""One combination of parameters that changes nothing leaves the others, the leak and the kernel their errors."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from worlds import BIN_S, LEAK, model, simulated

import kernelfit as kf
from kernelfit import kernels, simulate_recording
from kernelfit.fitting.arrow import Determined, solve_determined, solve_symmetric
from kernelfit.fitting.fit import fit_model

# six sites around a seventh: distances 100, 173.2 and 200 um, but for a nanometre; a difference of Gaussians has four
ANGLE = np.arange(6) * np.pi / 3
HEXAGON = 100.0 * np.vstack([[0.0, 0.0], np.column_stack([np.cos(ANGLE), np.sin(ANGLE)])])
HEXAGON[1, 0] += 0.001
DISTANCES = np.array([100.0, 100.0 * np.sqrt(3.0), 200.0])
LAW = kernels.Gaussian().at(amplitude=0.25, length_um=120.0, reference_um=100.0)


@pytest.fixture(scope="module")
def recording():
    return simulate_recording(HEXAGON, LAW, 6.0, LEAK, 120.0, 3, bin_width=BIN_S)


@pytest.fixture(scope="module")
def fit(recording):
    return fit_model(model("difference-of-gaussians"), recording, threads=2)


@pytest.fixture(scope="module")
def by_band(recording):
    """The same likelihood with a coefficient for each distance: what is determined, in parameters that are."""
    from kernelfit.fitting.covariance import covariances
    from kernelfit.fitting.maximise import maximise
    from kernelfit.fitting.null import first_estimate
    from kernelfit.fitting.problem import Estimate, make_problem
    from kernelfit.kernels.bands import Bands

    problem = make_problem(model(Bands((140.0, 190.0))), recording, threads=2)
    start = Estimate(first_estimate(problem).own, np.array([0.2, 0.1, 0.05, np.log(LEAK)]))
    optimum = maximise(problem, start)
    return optimum, covariances(problem, optimum)


def test_the_combination_is_named(fit):
    assert fit.verdict.found
    assert fit.uncertainty.weak_direction is not None
    assert any("changes nothing" in note.what for note in fit.notes)


def test_a_climb_that_ended_on_a_ridge_is_noted(fit):
    """Converged, as nothing is gained any more, but a reader must not take the numbers for a top."""
    assert fit.converged
    assert "flat here" in fit.solver.message
    ridge = next(note for note in fit.notes if "ended on a ridge" in note.what)
    assert ridge.severity == "info"
    assert "fit.profile" in ridge.remedy


def test_a_top_has_no_such_note():
    fit = fit_model(model("gaussian"), simulated(1), threads=2)
    assert not any("ridge" in note.what for note in fit.notes)


def test_a_bound_of_another_parameter_is_named_as_that_ones(fit):
    """The wide length is the narrow one times a factor: it goes with that, and is not itself longer than the bound."""
    reason = "longer than 1440 µm"
    at_bound = np.array([0.0, 1.0, 0.0, 0.0, 0.0])
    stopped = dataclasses.replace(fit, at_bound=at_bound, free=at_bound == 0, bound_reasons=("", reason, "", "", ""))
    notes = stopped.parameters["note"]
    assert notes["narrow_length_um"] == f"at its bound: {reason}"
    assert notes["wide_length_um"] == f"goes with narrow_length_um, at its bound: {reason}"


def test_leak_and_kernel_have_the_errors_of_coefficients_by_distance(fit, by_band):
    """Three coefficients describe three distances as well as any kernel: the same J, the same model-based errors."""
    optimum, spread = by_band
    model_based = fit.with_covariance("model")
    leak = model_based.parameters.loc["leak_rate"]
    assert leak["std_error"] / leak["estimate"] == pytest.approx(np.sqrt(spread.shared_model[3, 3]), rel=0.01)
    band = model_based.kernel_band(DISTANCES)
    np.testing.assert_allclose(band["estimate"], optimum.estimate.shared[:3], atol=0.003)
    half = 0.5 * (band["upper"] - band["lower"]) / 1.959964
    np.testing.assert_allclose(half, np.sqrt(np.diag(spread.shared_model))[:3], rtol=0.02)
    robust = fit.kernel_band(DISTANCES)
    assert (robust["upper"] > robust["lower"]).all()
    assert np.isfinite(fit.parameters.loc["leak_rate", ["std_error", "lower", "upper"]].astype(float)).all()


def test_what_loads_on_the_combination_has_none(fit):
    """A single amplitude or length, and the kernel where the array has no pairs: another kernel fits as well there."""
    named = np.flatnonzero(np.abs(np.nan_to_num(fit.uncertainty.weak_direction)) > 0.1)
    assert named.size >= 2
    for name in fit.parameters.index[named]:
        assert np.isnan(fit.parameters.loc[name, "std_error"])
        assert "not identified" in fit.parameters.loc[name, "note"]
    between = fit.kernel_band(np.array([140.0])).iloc[0]
    assert np.isnan(between["lower"])
    assert np.isfinite(between["estimate"])
    assert np.isfinite(fit.baselines["std_error"]).all()


def test_a_file_keeps_what_is_determined(fit, tmp_path):
    fit.save(tmp_path / "fit.json")
    loaded = kf.load_fit(tmp_path / "fit.json")
    np.testing.assert_array_equal(loaded.uncertainty.weak_moves, fit.uncertainty.weak_moves)
    np.testing.assert_array_equal(loaded.uncertainty.alone, fit.uncertainty.alone)
    np.testing.assert_array_equal(loaded.free, fit.free)
    np.testing.assert_array_equal(loaded.kernel_band(DISTANCES), fit.kernel_band(DISTANCES))


def test_parameters_that_were_estimated_are_free_whatever_their_variance(fit):
    assert fit.free.dtype == bool
    np.testing.assert_array_equal(fit.free, fit.at_bound == 0)
    assert fit.free.sum() > np.isfinite(fit.parameters["std_error"]).sum()


def test_a_variance_that_is_missing_holds_nothing_in_a_refit():
    """Too few numbers for a covariance must not keep a smoothing path where it begins."""
    recording = simulated(1)
    fit = fit_model(model(kernels.Spline(n_basis=5, smoothing=1.0)), recording, threads=2)
    nothing = np.full_like(fit.uncertainty.shared_model, np.nan)
    bare = dataclasses.replace(fit, uncertainty=dataclasses.replace(fit.uncertainty, shared_model=nothing))
    paths = [f.smoothing_path([0.01, 1e6], recording=recording, threads=2) for f in (fit, bare)]
    np.testing.assert_allclose(paths[1].log_likelihood, paths[0].log_likelihood, rtol=1e-12)
    assert np.ptp(paths[1].log_likelihood) > 0


def test_influence_goes_on_along_what_is_determined(fit, recording):
    assert np.isfinite(fit.influence(recording, threads=2).stretches["leak_rate"]).all()


def test_derived_figures_that_load_on_it_have_no_interval(fit):
    told = fit.derived(distances_um=np.array([100.0, 140.0])).filter(like="percent", axis=0)
    assert len(told) == 2
    np.testing.assert_array_equal(np.isfinite(told["lower"]), [True, False])


def test_solutions_in_what_is_determined():
    """Against the pseudo-inverse of the scaled matrix; and the plain solution where nothing is missing."""
    rng = np.random.default_rng(1)
    root = rng.normal(size=(4, 3)) * np.array([[1.0], [100.0], [0.01], [1.0]])
    matrix, right = root @ root.T, rng.normal(size=(4, 2))
    scale = np.diag(1 / np.sqrt(np.diag(matrix)))
    expected = scale @ np.linalg.pinv(scale @ matrix @ scale, rcond=1e-9, hermitian=True) @ scale @ right
    np.testing.assert_allclose(solve_determined(matrix, right), expected, rtol=1e-7)
    assert Determined.of(matrix).weak.shape == (1, 4)
    full = matrix + np.diag(np.diag(matrix))
    np.testing.assert_array_equal(solve_determined(full, right), solve_symmetric(full, right))
    assert len(Determined.of(full).weak) == 0
