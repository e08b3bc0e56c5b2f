"""Kinds of bootstrap on small fits: what their replicates scatter by, seeds, processes, failures."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from worlds import LEAK, model, simulated

import kernelfit as kf
from kernelfit.errors import ArgumentError, ModelError, NotConvergedError, StorageError
from kernelfit.inference.bootstrap import BlockWeights, OneStep, Parametric, kind_from
from kernelfit.inference.bootstrap.blocks import blocks_of, counts_by_block
from kernelfit.inference.bootstrap.refitting import inverse_information

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")


@pytest.fixture(scope="module")
def recording():
    return simulated(3, duration_s=60.0)


@pytest.fixture(scope="module")
def fit(recording):
    return model().fit(recording)


# --- the covariance of the replicates -------------------------------------------------------------------------


@pytest.mark.parametrize("law", ["exponential", "multinomial", "rademacher", "mammen"])
def test_one_step_replicates_have_the_robust_covariance(fit, law):
    """Kline and Santos (2012). Laws whose weights sum to G carry G/(G - 1), independent ones do not (both exact)."""
    boot = fit.bootstrap(OneStep(law), n_replicates=4000)
    deviation = boot.replicates - fit.shared
    robust = fit.uncertainty.shared_robust * (1.0 if boot.kind.law.refits else 1 - 1 / fit.n_blocks)
    for q in range(3):
        for r in range(3):
            product = deviation[:, q] * deviation[:, r]
            error = product.std() / np.sqrt(product.size)
            assert product.mean() == pytest.approx(robust[q, r], abs=4 * error)
    np.testing.assert_allclose(boot.covariance, np.cov(boot.replicates.T), rtol=1e-12)


def test_every_block_counting_once_is_the_fit_itself(fit, recording):
    """Weights of 1: one step goes nowhere, a refit ends where it began, and both have the robust covariance."""
    ones = np.ones(fit.n_blocks)
    step = OneStep().replicator(fit, None).with_weights(ones)
    np.testing.assert_array_equal(step.shared, fit.shared)
    scale = OneStep().law.spread(fit.n_blocks) ** 2
    np.testing.assert_allclose(step.covariance * scale, fit.uncertainty.shared_robust, rtol=1e-6)
    refit = BlockWeights().replicator(fit, recording).with_weights(ones)
    assert refit.converged
    np.testing.assert_allclose(refit.shared, fit.shared, rtol=1e-6)
    np.testing.assert_allclose(refit.covariance, fit.uncertainty.shared_robust, rtol=1e-4)


def test_blocks_are_those_of_the_robust_covariance(recording):
    """Also where usual blocks were joined, as with a slow state common to all units."""
    slow = simulated(3, duration_s=60.0, rate_course=lambda t: 0.6 * np.sin(2 * np.pi * t / 20.0))
    usual = 0
    for recording_made in (recording, slow):
        fit = model(leak_rate=LEAK).fit(recording_made)
        problem = fit.problem()
        blocks = blocks_of(fit, problem)
        assert blocks.n_blocks == fit.n_blocks != usual
        assert blocks.n_bins.mean() * fit.model.bin_width == pytest.approx(fit.block_length_s, rel=1e-12)
        usual = blocks.n_blocks
        counts = counts_by_block(problem, blocks)
        np.testing.assert_array_equal(counts.sum(axis=0), problem.data.counts)
        # from spike times: the first block's spikes
        end_s = blocks.n_bins[0] * fit.model.bin_width
        first = [np.sum(recording_made.spike_times(u) < end_s) for u in recording_made.unit_ids]
        np.testing.assert_array_equal(counts[0], first)


def test_one_step_is_near_full_refits_where_the_model_is_linear():
    """Leak fixed, amplitudes free: the objective is concave; one step misses what weights do to the information.

    Band widths within 10 %, and each replicate near its refit with the same weights.
    """
    recording = simulated(5, duration_s=120.0)
    fit = model("spline", leak_rate=LEAK).fit(recording)
    refits = fit.bootstrap("block-weights", n_replicates=199, jobs=1)
    step = fit.bootstrap("one-step", n_replicates=199)
    assert refits.n_failed == 0
    d = np.linspace(fit.span.smallest_um, fit.span.largest_um, 15)
    spread = step.kind.law.spread(fit.n_blocks)
    for simultaneous in (False, True):
        ours, full = (b.kernel_band(d, simultaneous=simultaneous) for b in (step, refits))
        ratio = spread * (ours["upper"] - ours["lower"]) / (full["upper"] - full["lower"])
        assert ratio.mean() == pytest.approx(1.0, abs=0.1)
    for a, b in zip(step.replicates.T, refits.replicates.T, strict=True):
        assert np.corrcoef(a, b)[0, 1] > 0.9


def test_parametric_replicates_have_the_model_covariance():
    """Where the model is true; 100 replicates know a standard deviation to 7 %, and the fit is not linear: 30 %."""
    fit = model().fit(simulated(6, duration_s=120.0))
    boot = fit.bootstrap("parametric", n_replicates=100, jobs=1)
    assert boot.n_failed == 0
    spread = np.sqrt(np.diag(boot.covariance))
    np.testing.assert_allclose(spread, np.sqrt(np.diag(fit.uncertainty.shared_model)), rtol=0.3)
    assert (np.abs(boot.replicates.mean(axis=0) - fit.shared) < 0.5 * spread).all()
    own = np.sqrt(np.median(boot.own_covariances[:, range(3), range(3)], axis=0))
    np.testing.assert_allclose(own, np.sqrt(np.diag(fit.uncertainty.shared_model)), rtol=0.3)


def test_inverse_information_is_the_model_covariance(fit, recording):
    from kernelfit.fitting.maximise import maximise

    optimum = maximise(fit.problem(), fit.estimate)
    np.testing.assert_allclose(
        inverse_information(optimum.local.information, optimum.free), fit.uncertainty.shared_model, rtol=1e-6
    )


# --- seeds and processes --------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["one-step", "block-weights", "parametric"])
def test_a_replicate_depends_on_its_number_and_the_seed_alone(fit, kind):
    few = fit.bootstrap(kind, n_replicates=3, seed=4, jobs=1)
    more = fit.bootstrap(kind, n_replicates=6, seed=4, jobs=2)
    for name in ("replicates", "converged", "at_bound", "own_covariances"):
        np.testing.assert_array_equal(getattr(more, name)[:3], getattr(few, name))
    assert (fit.bootstrap(kind, n_replicates=3, seed=5, jobs=1).replicates != few.replicates).any()


def test_a_loaded_fit(fit, recording, tmp_path):
    fit.save(tmp_path / "fit.json")
    loaded = kf.load_fit(tmp_path / "fit.json")
    np.testing.assert_array_equal(
        loaded.bootstrap(n_replicates=20).replicates, fit.bootstrap(n_replicates=20).replicates
    )
    with pytest.raises(StorageError, match="recording="):
        loaded.bootstrap("block-weights", n_replicates=1)
    other = simulated(4, duration_s=60.0)
    with pytest.raises(StorageError, match="not the one"):
        loaded.bootstrap("block-weights", n_replicates=1, recording=other)
    again = loaded.bootstrap("block-weights", n_replicates=2, jobs=1, recording=recording)
    np.testing.assert_array_equal(again.replicates, fit.bootstrap("block-weights", n_replicates=2, jobs=1).replicates)


def test_progress_is_told(fit):
    told = []
    fit.bootstrap("block-weights", n_replicates=3, jobs=1, progress=told.append)
    assert [(p.done, p.n_replicates, p.n_failed) for p in told] == [(1, 3, 0), (2, 3, 0), (3, 3, 0)]
    assert told[0].seconds_left > 0 == told[-1].seconds_left


# --- failures -------------------------------------------------------------------------------------------------


def test_replicates_that_fail_are_kept_and_counted(recording):
    """A fit so strong that simulations from it explode now and then."""
    fit = model().fit(recording)
    shared = fit.shared.copy()
    shared[0] *= 1.6
    wild = replace(fit, shared=shared)
    boot = Parametric().replicator(fit, None)
    boot = replace(boot, estimate=wild.estimate)
    replicates = [boot.replicate(np.random.default_rng(k)) for k in range(12)]
    failed = [r for r in replicates if not r.converged]
    assert 0 < len(failed) < 12
    assert all("exploded" in r.message and np.isnan(r.shared).all() for r in failed)


def test_intervals_say_on_how_many_they_rest(fit):
    boot = fit.bootstrap("one-step", n_replicates=50)
    spoiled = replace(
        boot,
        converged=np.arange(50) >= 3,
        replicates=np.where(np.arange(50)[:, None] < 2, np.nan, boot.replicates),
        messages=tuple("no step leads on" if k < 3 else "" for k in range(50)),
    )
    assert spoiled.n_failed == 3
    assert len(spoiled.replicates) == len(spoiled.table) == 50
    assert spoiled.failures["replicate"].tolist() == [0, 1, 2]
    assert "3 gave no estimate" in spoiled.sentence
    for method in ("percentile", "basic", "studentised", "bca"):
        table = spoiled.intervals(0.9, method)
        assert (table["n_used"] == 47).all()
        assert table["note"].str.contains("rests on 47 of 50 replicates").all()
        good = replace(
            boot,
            converged=boot.converged[3:], replicates=boot.replicates[3:], at_bound=boot.at_bound[3:],
            own_covariances=boot.own_covariances[3:], messages=boot.messages[3:],
        )  # fmt: skip
        np.testing.assert_array_equal(table[["lower", "upper"]], good.intervals(0.9, method)[["lower", "upper"]])


def test_a_unit_without_spikes_in_the_drawn_blocks_is_left_out(recording):
    """Its baseline would go to minus infinity; the others are fitted as if it were not there to explain."""
    trains = {u: recording.spike_times(u) for u in recording.unit_ids}
    rare = recording.unit_ids[0]
    trains[rare] = trains[rare][trains[rare] < 2.0]
    fit = model().fit(kf.Recording.from_arrays(trains, recording.positions, recording.window_bounds))
    replicator = BlockWeights("multinomial").replicator(fit, None)
    weight = np.ones(fit.n_blocks)
    fires = replicator.counts[:, 0] > 0
    weight[fires] = 0.0
    weight[~fires] *= fit.n_blocks / np.sum(~fires)
    without = replicator.with_weights(weight)
    assert without.converged
    assert np.isfinite(without.shared).all()
    none = replicator.with_weights(np.zeros(fit.n_blocks))
    assert not none.converged
    assert "no unit fires" in none.message


# --- calls ----------------------------------------------------------------------------------------------------


def test_names_and_arguments(fit):
    assert kind_from("one-step") == OneStep("exponential")
    assert kind_from("parametric") == Parametric()
    assert BlockWeights("multinomial") != BlockWeights()
    for arguments, said in (
        ({"kind": "jackknife"}, r"'jackknife' is not known. Say 'one-step', 'block-weights', 'parametric'"),
        ({"n_replicates": 0}, "n_replicates=0"),
        ({"n_replicates": 10.0}, r"n_replicates=10\.0"),
        ({"seed": -1}, "seed=-1"),
        ({"jobs": 0}, "jobs=0"),
    ):
        with pytest.raises(ArgumentError, match=said):
            fit.bootstrap(**arguments)
    boot = fit.bootstrap("one-step", n_replicates=99)
    with pytest.raises(ArgumentError, match="level=95"):
        boot.intervals(95)
    with pytest.raises(ArgumentError, match="'normal' is not known"):
        boot.intervals(method="normal")
    with pytest.raises(ArgumentError, match=r"method='percentile' is not known. Say 'symmetric'"):
        boot.kernel_band(np.array([100.0]), method="percentile")
    with pytest.raises(ArgumentError, match=r"bca.*blocks of time"):
        replace(boot, kind=Parametric()).intervals(method="bca")


def test_what_cannot_be_replicated(fit, recording):
    stuck = replace(fit, solver=replace(fit.solver, converged=False))
    with pytest.raises(NotConvergedError, match="did not reach an optimum"):
        stuck.bootstrap()
    short = model().fit(recording.select(stop_s=5.0))
    assert short.n_blocks < 6
    for kind in ("one-step", "block-weights"):
        with pytest.raises(ModelError, match=r"cannot be resampled, 6 are needed.*parametric"):
            short.bootstrap(kind)
