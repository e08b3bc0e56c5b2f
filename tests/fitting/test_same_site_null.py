"""Coupling across distance is asked for beside the coefficient of pairs on one site, and that coefficient by itself."""

from __future__ import annotations

import numpy as np
import pytest
from worlds import BIN_S, LEAK, array, model

from kernelfit import kernels, simulate_recording
from kernelfit.fitting.detection import detect_coupling
from kernelfit.fitting.fit import fit_model
from kernelfit.fitting.null import fit_null, null_blocks, with_bands
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.recording.recording import Recording

ON_SITE = 0.9
PAIRED = np.repeat(array(), 2, axis=0)  # nine sites, two units each
NEARBY = kernels.Disc().at(amplitude=ON_SITE, length_um=20.0)  # no two sites are as near as that
NONE = kernels.Disc().at(amplitude=0.0, length_um=20.0)


def paired(seed, law=NEARBY, duration_s=60.0, rate_hz=3.0):
    """Nine pairs of units on one site each, coupled by `law`."""
    apart = PAIRED + np.tile([[0.0, 0.0], [5.0, 0.0]], (9, 1))  # the simulation leaves pairs on one site out
    recording = simulate_recording(apart, law, rate_hz, LEAK, duration_s, seed, bin_width=BIN_S)
    trains = {unit: recording.spike_times(unit) for unit in recording.unit_ids}
    return Recording.from_arrays(trains, PAIRED, recording.window_bounds)


@pytest.fixture(scope="module")
def fit():
    return fit_model(model("gaussian", same_site="own"), paired(1), threads=2)


@pytest.fixture(scope="module")
def problem():
    return make_problem(model("gaussian", same_site="own"), paired(1), threads=2)


@pytest.fixture(scope="module")
def null(problem):
    return fit_null(problem)


def test_pairs_on_one_site_alone_are_no_coupling_across_distance(fit):
    assert not fit.verdict.found
    assert fit.verdict.same_site_found
    assert fit.verdict.sentence.startswith("No coupling across distance")
    assert "Units on one site are coupled (p < 0.001 from 1,999 flips)" in fit.verdict.sentence


def test_what_pairs_on_one_site_tell_is_stated(fit):
    """The same-site coefficient and the leak keep estimates and plain intervals; those of the kernel do not."""
    row, leak = fit.parameters.loc["same_site"], fit.parameters.loc["leak_rate"]
    assert row["lower"] < ON_SITE < row["upper"]
    assert abs(np.log(leak["estimate"] / LEAK)) < 3 * leak["std_error"] / leak["estimate"]
    assert leak["lower"] < leak["estimate"] < leak["upper"] < 2.5 * LEAK
    assert leak["note"] == row["note"] == ""
    half = row["upper"] - row["estimate"]
    assert half < 2.1 * row["std_error"]  # the normal 1.96, by a t law of some hundred blocks
    assert np.isnan(fit.parameters.loc["length_um", "estimate"])
    assert "no coupling across distance" in fit.parameters.loc["amplitude", "note"]
    assert fit.parameters.loc["amplitude", "lower"] <= 0 <= fit.parameters.loc["amplitude", "upper"]


def test_the_null_with_a_same_site_coefficient_is_its_maximum(problem, null):
    """No step off it is higher, in the coefficient or the own parameters, and it gains what it says."""
    sweep = max(null.sweeps, key=lambda s: s.gain)
    assert abs(np.log(sweep.leak / LEAK)) < np.log(3.0)
    here = with_bands(problem, null.bands, sweep.leak)
    zeros = np.zeros(here.n_kernel)

    def height(own, coefficient):
        sums = here.evaluate(Estimate(own, np.append(zeros, coefficient)))
        return float(sums.log_likelihood.sum()) - problem.data.log_factorials

    own, coefficient = sweep.same_site.estimate.own, sweep.same_site.coefficient
    top = height(own, coefficient)
    assert sweep.same_site.gain == pytest.approx(top - null.optimum.local.log_likelihood, abs=1e-6)
    assert sweep.same_site.gain > 50
    for step in (-0.01, 0.01):
        assert height(own, coefficient + step) < top
        assert height(own + step, coefficient) < top


def test_scores_of_bands_hold_nothing_of_the_coefficient(problem, null):
    """Least squares of the dense kind: own parameters and coefficient eliminated at once."""
    sweep = max(null.sweeps, key=lambda s: s.gain)
    here = with_bands(problem, null.bands, sweep.leak)
    k = here.n_kernel
    estimate = Estimate(sweep.same_site.estimate.own, np.append(np.zeros(k), sweep.same_site.coefficient))
    sums = here.evaluate(estimate, blocks=null_blocks(problem))
    n = problem.data.n_targets
    whole = np.zeros((n + 1 + k, n + 1 + k))  # baselines, coefficient, bands
    whole[:n, :n] = np.diag(sums.own_own[:, 0, 0])
    whole[:n, n:] = np.roll(sums.own_shared[:, 0, :], 1, axis=1)
    whole[n:, :n] = whole[:n, n:].T
    whole[n:, n:] = np.roll(np.roll(sums.shared_shared, 1, axis=0), 1, axis=1)
    nuisance, bands = np.arange(n + 1), np.arange(n + 1, n + 1 + k)
    share = np.linalg.solve(whole[np.ix_(nuisance, nuisance)], whole[np.ix_(nuisance, bands)])
    information = whole[np.ix_(bands, bands)] - whole[np.ix_(bands, nuisance)] @ share
    scores = np.column_stack([sums.score[..., 0], np.roll(sums.score[..., 1:].sum(axis=1), 1, axis=1)])
    size = np.sqrt(np.diag(information))
    expected = scores[:, bands] - scores[:, nuisance] @ share
    np.testing.assert_allclose(sweep.information / np.outer(size, size), information / np.outer(size, size), atol=1e-8)
    np.testing.assert_allclose(sweep.block_score / size, expected / size, atol=1e-7)


def test_coupling_across_distance_is_found_beside_the_coefficient():
    law = kernels.Gaussian().at(amplitude=0.25, length_um=120.0, reference_um=100.0)
    null = fit_null(make_problem(model("gaussian", same_site="own"), paired(3, law), threads=2))
    verdict = detect_coupling(null, 0)
    assert verdict.found
    assert "spikes of other units across distance" in verdict.sentence


def test_size_beside_coupled_pairs():
    """40 recordings with coupled pairs and nothing across distance: 5 % are found on average, by chance not above 8."""
    found = []
    for seed in range(40):
        recording = paired(100 + seed, duration_s=30.0)
        problem = make_problem(model("gaussian", same_site="own"), recording, threads=2)
        found.append(detect_coupling(fit_null(problem), seed).found)
    assert sum(found) <= 8  # binomial quantile 99.9 % of 40 at 5 %


def test_without_any_coupling_neither_is_found():
    recording = paired(5, NONE)
    fit = fit_model(model("gaussian", same_site="own"), recording, threads=2)
    assert not fit.verdict.found
    assert not fit.verdict.same_site_found
    assert "not shown to be coupled" in fit.verdict.sentence
    assert np.isnan(fit.parameters.loc["leak_rate", "estimate"])
