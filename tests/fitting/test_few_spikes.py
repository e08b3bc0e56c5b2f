"""A handful of spikes: amplitudes that nothing holds stop, are named with the reason, and drag nothing else along."""

from __future__ import annotations

import numpy as np
import pytest
from worlds import NOTHING, array, model, simulated

import kernelfit as kf
from kernelfit.fitting.amplitudes import GONE, STRONG, far_off, linear_mask, suppressing
from kernelfit.fitting.maximise import MAX_ITERATIONS, RIDGE_GAIN, maximise
from kernelfit.fitting.null import fit_null
from kernelfit.fitting.problem import Estimate, make_problem
from kernelfit.fitting.search import held_by_nothing, search
from kernelfit.kernels import KERNELS
from kernelfit.recording.recording import Recording

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")

PAUSE_S = 0.3


def taking_turns(seconds=30.0):
    """Nine units, one at a time: after any spike nobody fires for 0.3 s, however strong a suppression."""
    rng = np.random.default_rng(0)
    times = np.cumsum(PAUSE_S + rng.exponential(0.1, 1000))
    times = times[times < seconds]
    unit = rng.integers(0, 9, times.size)
    return Recording.from_arrays({f"u{k}": times[unit == k] for k in range(9)}, array(), [(0.0, seconds)])


@pytest.fixture(scope="module")
def turns():
    return taking_turns()


KERNELS_HERE = {
    **{name: family() for name, family in KERNELS.items() if name != "spline"},
    "spline": kf.kernels.Spline(n_basis=6),
    "spline, penalised": kf.kernels.Spline(n_basis=6, smoothing=1.0),
}


@pytest.mark.parametrize("kernel", KERNELS_HERE.values(), ids=KERNELS_HERE)
def test_what_runs_off_is_stopped_and_said(turns, kernel):
    """Measured before there was a stop: amplitudes of -1e6 to -1e15, and often the iteration limit."""
    fit = model(kernel).fit(turns, threads=1)
    assert fit.converged
    assert fit.solver.n_iterations < 100
    amplitudes = fit.parameters[fit.parameters["unit"] == "per spike"]
    assert amplitudes[["estimate", "std_error"]].isna().all(axis=None)
    assert amplitudes["note"].str.startswith("not identified: ").all()
    assert amplitudes["note"].str.contains(r"nothing holds it from below|which nothing holds|from above").all()
    assert np.isnan(fit.parameters.loc["leak_rate", "estimate"])
    noted = [n for n in fit.notes if "nothing holds it from" in n.what]
    assert noted
    assert noted[0].remedy
    assert not any("_" in n.where for n in fit.notes)
    assert fit.second_optimum is None


def test_an_open_end_is_infinite(turns):
    fit = model("flat").fit(turns, threads=1)
    row = fit.parameters.loc["amplitude"]
    assert row["lower"] == -np.inf
    assert np.isnan(row["upper"])
    assert "amplitude            could not be estimated: nothing holds it from below: after a spike" in fit.summary()
    assert fit.kernel_band(np.array([100.0]))[["estimate", "lower", "upper"]].isna().all(axis=None)


def test_the_reason_is_true(turns):
    """At the distance named nobody fires while the effect is strong, and a stronger one fits at least as well."""
    problem = make_problem(model("flat"), turns, threads=1)
    top = search(problem, fit_null(problem)).best
    amplitude, log_leak = top.estimate.shared
    assert amplitude <= -0.5 * far_off(problem)
    lasts = np.log(-amplitude / GONE) / np.exp(log_leak)  # s until the suppression has fallen to e^-20
    spikes = np.sort(np.concatenate(turns.trains))
    assert np.diff(spikes).min() > lasts > 0.5 * PAUSE_S
    stronger = Estimate(top.estimate.own, np.array([3.0 * amplitude, log_leak]))
    further = maximise(problem, stronger, held=np.array([True, False]))
    assert further.converged
    assert further.local.objective >= top.local.objective


def test_a_stated_leak_holds_it(turns):
    """At 10 1/s a spike 0.4 s later tells how strong the suppression was: e^4 of it is left over."""
    fit = model("flat", leak_rate=10.0).fit(turns, threads=1)
    assert fit.at_bound[0] == 0
    assert np.isfinite(fit.parameters.loc["amplitude", ["estimate", "lower", "upper"]].astype(float)).all()


# --- what is held is left alone ------------------------------------------------------------------------------


def test_strong_suppression_that_spikes_follow_keeps_its_interval():
    law = kf.kernels.Gaussian().at(amplitude=-2.0, length_um=80.0, reference_um=100.0)
    fit = model("gaussian").fit(simulated(3, law, duration_s=60.0, rate_hz=12.0), threads=2)
    assert fit.converged
    assert not fit.at_bound.any()
    row = fit.parameters.loc["amplitude"]
    assert row["lower"] < -2.0 * np.exp((100.0**2 - fit.reference_distance_um**2) / (2 * 80.0**2)) < row["upper"] < 0


def test_an_optimum_without_strong_suppression_is_not_touched():
    problem = make_problem(model("gaussian"), simulated(1), threads=1)
    top = search(problem, fit_null(problem)).best
    assert held_by_nothing(problem, top) is top


def test_a_same_site_coefficient_that_nothing_holds_leaves_the_others_alone():
    """Two units on one site that never fire within 0.5 s (20 time constants) of each other; the rest as ever."""
    base = simulated(1, duration_s=60.0)
    rng = np.random.default_rng(2)
    times = np.cumsum(0.5 + rng.exponential(0.1, 400))
    times = times[times < 60.0]
    first = rng.random(times.size) < 0.5
    positions = np.vstack([base.positions, [[400.0, 0.0], [400.2, 0.0]]])
    trains = (*base.trains, times[first], times[~first])
    paired = Recording((*base.unit_ids, "y", "z"), positions, trains, base.window_bounds)
    fit = model("gaussian", same_site="own", leak_rate=40.0).fit(paired, threads=2)
    assert fit.converged
    same_site = fit.parameters.loc["same_site"]
    assert "no other unit on its site fired" in same_site["note"]
    assert same_site["lower"] == -np.inf
    assert np.isfinite(fit.parameters.loc[["amplitude", "length_um"], ["estimate", "lower", "upper"]]).all(axis=None)


# --- which amplitudes ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["gaussian", "mexican-hat", "difference-of-gaussians"])
def test_which_amplitudes_suppress(turns, name):
    problem = make_problem(model(name), turns, threads=1)
    driven = problem.driven_um
    shape = [0.0, np.log(100.0), 0.0, 0.0, np.log(20.0)] if name.startswith("diff") else [0.0, np.log(100.0), 3.0]
    for amplitude in (-1.0, 1.0):
        shared = np.array(shape)
        shared[0] = amplitude * 1e4
        value = problem.kernel.value(shared[: problem.n_kernel], driven, problem.span)
        want = np.zeros(problem.n_shared, dtype=bool)
        want[0] = value.min() < -STRONG
        np.testing.assert_array_equal(suppressing(problem, shared, driven, STRONG), want)
    assert linear_mask(problem).sum() == (2 if name.startswith("diff") else 1)


def test_only_the_coefficients_of_the_silent_distances_suppress(turns):
    problem = make_problem(model(kf.kernels.Spline(n_basis=6), leak_rate=20.0), turns, threads=1)
    shared = np.array([-2.0 * far_off(problem), 0.1, 0.1, 0.0, 0.0, 0.0])
    np.testing.assert_array_equal(
        suppressing(problem, shared, problem.driven_um, STRONG), [True, False, False, False, False, False]
    )


def test_a_stated_leak_that_passes_in_a_bin_asks_for_larger_jumps(turns):
    """At alpha D = 10 a jump of -20 e^10 leaves -20 after a bin: no less than that is off."""
    fast = make_problem(model("flat", leak_rate=10.0 / 0.005), turns, threads=1)
    assert fast.data.bin_width == 0.005
    assert far_off(fast) == pytest.approx(20.0 * np.exp(10.0))
    slow = make_problem(model("flat", leak_rate=20.0), turns, threads=1)
    assert far_off(slow) == far_off(make_problem(model("flat"), turns, threads=1)) == pytest.approx(20.0 * np.exp(3.0))


# --- many tiny recordings ------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", KERNELS)
def test_tiny_recordings_end_at_a_top(name):
    """Four units, 10 s, one spike in 2 s each: all fits end well before the limit, and no interval is a number of
    the size where the climb was stopped."""
    kernel = kf.kernels.Spline(n_basis=5, smoothing=1.0) if name == "spline" else name
    for seed in range(6):
        recording = simulated(seed, NOTHING, n_side=2, duration_s=10.0, rate_hz=0.5)
        fit = model(kernel).fit(recording, threads=1)
        assert fit.converged, fit.solver.message
        assert fit.solver.n_iterations < MAX_ITERATIONS
        suppression = -fit.kernel(fit.distinct_um).min()
        if suppression >= 0.5 * far_off(fit.problem(threads=1)):
            amplitudes = fit.parameters[fit.parameters["unit"] == "per spike"]
            assert amplitudes["estimate"].isna().any()


def test_a_gain_within_the_stop_decides(turns):
    """Moved to where the rate is gone, the likelihood may fall by no more than the stop of the climb."""
    problem = make_problem(model("flat"), turns, threads=1)
    null = fit_null(problem)
    start = Estimate(null.optimum.estimate.own, np.array([-30.0, np.log(12.0)]))
    near = maximise(problem, start, held=np.array([True, False]))
    moved = held_by_nothing(problem, near)
    assert moved.at_bound[0] == -1.0
    assert not moved.free[1]  # the leak is tied to it
    assert moved.local.objective >= near.local.objective - RIDGE_GAIN
