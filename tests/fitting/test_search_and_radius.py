"""Starts, the best of several optima, a second one that comes close, and the profile of a radius."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from scipy.stats import chi2
from worlds import LEAK, NOTHING, model, simulated

from kernelfit import kernels
from kernelfit.fitting import radius as radius_module
from kernelfit.fitting import search as search_module
from kernelfit.fitting.covariance import covariances
from kernelfit.fitting.fit import _second_sentence
from kernelfit.fitting.maximise import Local, evaluate_locally, maximise
from kernelfit.fitting.null import NullSweep, fit_null
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.fitting.radius import (
    RadiusProfile,
    discrete_parameter,
    edge_critical,
    search_radius,
    variance_inflation,
)
from kernelfit.fitting.search import SearchResult, promising, search, shrunk, start_estimates

DISC = kernels.Disc().at(amplitude=0.3, length_um=160.0)


@pytest.fixture(scope="module")
def recording():
    return simulated(1)


@pytest.fixture(scope="module")
def gaussian(recording):
    problem = make_problem(model("gaussian"), recording, threads=2)
    return problem, fit_null(problem)


def sweeps_with(gains):
    return tuple(NullSweep(float(k), np.zeros(1), np.eye(1), np.zeros((1, 1)), g) for k, g in enumerate(gains))


@pytest.mark.parametrize(
    ("gains", "chosen"),
    [
        ([1.0, 5.0, 2.0, 9.0, 3.0], [3, 1]),  # two peaks, the higher first; 3.0 and less promise under 40 % of 9
        ([9.0, 8.0, 7.0, 6.0], [0, 1, 2]),  # one peak at the end, then its neighbours; three at most
        ([4.0], [0]),
        ([1.0, 10.0, 1.0, 3.0, 1.0], [1]),
    ],
)
def test_promising_leaks(gains, chosen):
    assert [int(s.leak) for s in promising(sweeps_with(gains))] == chosen


def test_starts_are_within_the_bounds_and_carry_the_null_rates(gaussian):
    problem, null = gaussian
    for sweep in promising(null.sweeps):
        for start in start_estimates(problem, null, sweep, 3):
            low, high = problem.bounds.T
            assert ((start.shared >= low - 1e-9) & (start.shared <= high + 1e-9)).all()
            np.testing.assert_array_equal(start.own, null.optimum.estimate.own)
            assert start.shared[-1] == pytest.approx(np.log(sweep.leak))
            assert abs(start.shared[0]) > 1e-3  # an amplitude of nothing would leave length and leak without a slope


def test_bands_without_information_have_no_say_in_the_starts(gaussian):
    """A band whose sources are silent has coupling 0 with information 0, not a certain 0."""
    problem, null = gaussian
    sweep = max(null.sweeps, key=lambda s: s.gain)
    coupling, information = sweep.coupling.copy(), sweep.information.copy()
    coupling[2], information[2], information[:, 2] = 0.0, 0.0, 0.0
    empty = dataclasses.replace(sweep, coupling=coupling, information=information)
    with_it, without = (start_estimates(problem, null, s, 1)[0].shared for s in (sweep, empty))
    assert without[0] > 0.3 * with_it[0] > 0


def test_a_start_worse_than_no_coupling_is_shrunk(gaussian):
    problem, null = gaussian
    floor = null.optimum.local.objective
    strong = Estimate(null.optimum.estimate.own, np.array([1.0, np.log(150.0), np.log(LEAK)]))
    assert evaluate_locally(problem, strong).objective < floor
    begin = shrunk(problem, strong, floor)
    assert begin.objective >= floor
    shared = begin.estimate.shared
    np.testing.assert_array_equal(shared[1:], strong.shared[1:])
    assert shared[0] in [0.5**k for k in range(1, 13)]


def test_the_best_optimum_is_found_from_a_dense_set_of_starts(gaussian):
    """No start of a 5 x 5 grid of lengths and leaks climbs higher than the search did."""
    problem, null = gaussian
    best = search(problem, null).best
    assert best.converged
    for length in (40.0, 90.0, 200.0, 450.0, 1000.0):
        for leak in (1.0, 5.0, 25.0, 120.0, 500.0):
            start = Estimate(null.optimum.estimate.own, np.array([0.02, np.log(length), np.log(leak)]))
            assert maximise(problem, start, tolerance=1e-4).local.objective <= best.local.objective + 1e-3


def test_every_start_is_on_record(gaussian):
    problem, null = gaussian
    found = search(problem, null)
    assert len(found.starts) == len(promising(null.sweeps)) + 1
    assert max(s.objective for s in found.starts) <= found.best.local.objective + 1e-9


def test_a_concave_problem_is_climbed_once(recording):
    problem = make_problem(model(kernels.Spline(n_basis=6), leak_rate=LEAK), recording, threads=2)
    assert len(search(problem, fit_null(problem)).starts) == 1


def test_a_second_optimum_is_reported_when_it_is_close(gaussian, monkeypatch):
    """Two optima, made up: 1.2 log-likelihood units apart is close, 2.5 is not; one place is not two."""
    problem, null = gaussian
    true = search(problem, null).best
    lower = {}

    def made_up(problem, start, **options):
        gap, shift = lower["gap"], lower["shift"]
        at = start.estimate if isinstance(start, Local) else start
        first = abs(at.shared[-1] - sweep_leak) < 1e-9 or at is true.estimate
        if first:
            return true
        shared = true.estimate.shared + np.array([0.0, shift, 0.0])
        estimate = Estimate(true.estimate.own, shared)
        local = dataclasses.replace(true.local, estimate=estimate, objective=true.local.objective - gap)
        return dataclasses.replace(true, local=local)

    best = max(null.sweeps, key=lambda s: s.gain)
    other = dataclasses.replace(best, leak=best.leak / 10)
    sweep_leak = np.log(best.leak)
    two = dataclasses.replace(null, sweeps=(best, other))
    monkeypatch.setattr(search_module, "maximise", made_up)
    monkeypatch.setattr(search_module, "shrunk", lambda problem, start, floor: start)
    for gap, shift, reported in ((1.2, 0.5, True), (2.5, 0.5, False), (1.2, 0.1, False), (1.2, -0.5, True)):
        lower.update(gap=gap, shift=shift)
        found = search(problem, two)
        assert found.best.local.objective == true.local.objective
        assert (found.second is not None) is reported


# --- the radius of a disc -----------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def disc():
    recording = simulated(3, DISC, duration_s=60.0)
    problem = make_problem(model("disc"), recording, threads=2)
    null = fit_null(problem)
    return problem, null, *search_radius(problem, null, discrete_parameter(problem))


def test_which_parameter_is_discrete(disc, gaussian):
    assert discrete_parameter(disc[0]) == 1
    assert discrete_parameter(gaussian[0]) is None


def test_the_profile_is_what_every_radius_climbed_on_its_own_gives(disc):
    problem, null, found, profile = disc
    held = np.array([False, True, False])
    candidates = problem.kernel.radius_candidates(problem.geometry.distinct_um)
    brute = []
    for radius in candidates:
        tops = [
            maximise(
                problem, Estimate(null.optimum.estimate.own, np.array([a, np.log(radius), np.log(LEAK)])), held=held
            )
            for a in (0.05, -0.02)
        ]
        brute.append(max(t.local.objective for t in tops))
    brute = np.array(brute)
    assert found.best.local.objective == pytest.approx(brute.max(), abs=1e-6)
    assert np.exp(found.best.estimate.shared[1]) == pytest.approx(candidates[np.argmax(brute)])
    tried = np.isin(candidates, profile.radius_um)
    np.testing.assert_allclose(profile.objective, brute[tried], atol=0.02)  # climbed loosely
    # radii that were not tried fit worse than any that an interval can reach
    assert (brute[~tried] < brute.max() - 0.5 * chi2.ppf(0.95, 1)).all()


def test_radius_and_leak_are_found(disc):
    problem, _, found, _ = disc
    assert np.exp(found.best.estimate.shared[1]) == pytest.approx(160.0, abs=40.0)
    assert problem.leak(found.best.estimate.shared) == pytest.approx(LEAK, rel=0.5)
    assert found.best.converged


def test_the_radius_is_held_in_the_covariance(disc):
    problem, _, found, _ = disc
    spread = covariances(problem, found.best)
    assert np.isnan(spread.shared_model[1]).all()
    assert np.isfinite(spread.shared_model[np.ix_([0, 2], [0, 2])]).all()


PROFILE = RadiusProfile(np.array([110.0, 150.0, 190.0, 230.0]), np.array([-9.0, -1.5, 0.0, -4.0]))
EDGES = np.array([100.0, 120.0, 180.0, 200.0, 260.0])


@pytest.mark.parametrize(
    ("inflation", "interval"),
    [
        (1.0, (120.0, 200.0)),  # drops 18, 3, 0, 8 against 7.35: 150 and 190 stay, out to 120 and 200
        (1.5, (120.0, 260.0)),  # against 11: 230 too
        (5.0, (100.0, 260.0)),  # against 36.7: all of them
        (0.1, (180.0, 200.0)),  # only the best: the distances around it
    ],
)
def test_interval_of_the_radius(inflation, interval):
    """Likelihood ratio of an edge against 7.35 (Hansen 2000, table 1, 95 %) times the inflation."""
    assert PROFILE.interval(0.95, EDGES, inflation) == interval


def test_an_interval_at_the_ends_of_the_array():
    profile = RadiusProfile(np.array([50.0, 400.0]), np.zeros(2))
    assert profile.interval(0.95, np.array([100.0, 300.0]), 1.0) == (100.0, 300.0)


def test_without_coupling_the_radius_search_still_ends():
    problem = make_problem(model("disc"), simulated(4, NOTHING, duration_s=20.0), threads=2)
    found, profile = search_radius(problem, fit_null(problem), 1)
    assert np.isfinite(profile.objective).all()
    assert np.isfinite(found.best.local.objective)


def test_a_second_optimum_is_put_in_words(gaussian):
    problem, null = gaussian
    best = search(problem, null).best
    shared = best.estimate.shared + np.array([0.0, 0.5, -0.7])
    local = dataclasses.replace(
        best.local, estimate=Estimate(best.estimate.own, shared), objective=best.local.objective - 1.25
    )
    second = dataclasses.replace(best, local=local)
    sentence = _second_sentence(problem, SearchResult(best, second, ()))
    assert "only 1.2 log-likelihood units below" in sentence
    assert f"length {np.exp(shared[1]):.3g} µm" in sentence
    assert f"time constant {1000 * np.exp(-best.estimate.shared[2]):.3g} ms" in sentence
    assert _second_sentence(problem, SearchResult(best, None, ())) is None


def test_the_profile_reaches_as_far_as_a_wide_interval(disc, monkeypatch):
    """Bursts make the robust variance up to 80 times the model's: the profile must drop by as much, or end there."""
    problem, null, *_ = disc
    monkeypatch.setattr(radius_module, "variance_inflation", lambda spread: 40.0)
    _, profile = search_radius(problem, null, 1)
    candidates = problem.kernel.radius_candidates(problem.geometry.distinct_um)
    drop = 2.0 * (profile.objective.max() - profile.objective)
    for end, last in ((0, candidates[0]), (-1, candidates[-1])):
        assert drop[end] > 40.0 * edge_critical(0.95) or profile.radius_um[end] == last


def test_inflation_is_that_of_the_amplitude(disc):
    problem, _, found, _ = disc
    spread = covariances(problem, found.best)
    want = spread.shared_robust[0, 0] / spread.shared_model[0, 0]
    assert variance_inflation(spread) == pytest.approx(max(want, 1.0))
    nothing = np.full_like(spread.shared_robust, np.nan)
    assert variance_inflation(dataclasses.replace(spread, shared_robust=nothing)) == 1.0
