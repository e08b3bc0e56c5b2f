"""Recordings and calls that ask too much: refused in words, or fitted with the reason beside what is missing."""

from __future__ import annotations

import numpy as np
import pytest
from worlds import LEAK, NOTHING, model, simulated

import kernelfit as kf
from kernelfit.errors import ArgumentError, ModelError, NotIdentifiedError
from kernelfit.fitting.by_block import FEWEST_BLOCKS
from kernelfit.recording.recording import Recording

quiet = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")


@pytest.fixture(scope="module")
def recording():
    return simulated(1, duration_s=20.0)


def with_unit(recording, spikes):
    """The same recording with one more unit, "z", 100 µm beside the others."""
    return Recording(
        (*recording.unit_ids, "z"), np.vstack([recording.positions, [[300.0, 0.0]]]),
        (*recording.trains, np.array(spikes)), recording.window_bounds,
    )  # fmt: skip


# --- own parameters that spikes do not determine ------------------------------------------------------------


@pytest.mark.filterwarnings("error::RuntimeWarning")
@pytest.mark.parametrize("spike_s", [19.9999, 10.0])
def test_a_unit_that_does_not_show_its_after_spike_effect_is_named(recording, spike_s):
    """A single spike: in the last bin its traces are all zero, earlier no second spike holds their coefficients up."""
    late = with_unit(recording, [spike_s])
    with pytest.raises(NotIdentifiedError, match=r"spikes table: unit 'z' has 1 spike in .* ridge .*min_spikes"):
        model(after_spike=kf.terms.AfterSpike(ridge=0.0)).fit(late, threads=1)


@quiet
@pytest.mark.filterwarnings("error::RuntimeWarning")
@pytest.mark.parametrize("spike_s", [19.9999, 10.0])
def test_a_ridge_carries_what_a_single_spike_leaves_open(recording, spike_s):
    fit = model(after_spike="basis").fit(with_unit(recording, [spike_s]), threads=1)
    assert fit.converged
    assert np.isfinite(fit.baselines["std_error"]).all()


# --- time scales that leave nothing -------------------------------------------------------------------------


@pytest.mark.parametrize("leak_rate", [5e3, 1e9])
def test_a_leak_that_leaves_nothing_after_a_bin_is_refused(recording, leak_rate):
    """exp(-20) of a jump is left at 20 time constants a bin: 4000 1/s at 5 ms."""
    with pytest.raises(ArgumentError, match=r"leak_rate=.* nothing is left after one bin of 5 ms.* at most 4e\+03"):
        model("flat", leak_rate=leak_rate).fit(recording)


@quiet
@pytest.mark.parametrize(("leak_rate", "said"), [(0.9, True), (1.1, False)])
def test_a_stated_leak_too_slow_for_the_recording_is_said(recording, leak_rate, said):
    """A twentieth of 20 s is 1 s."""
    fit = model("flat", leak_rate=leak_rate).fit(recording, threads=1)
    assert any("cannot be told from a drifting rate" in note.what for note in fit.notes) is said


def test_a_trace_that_is_gone_after_a_bin_is_refused(recording):
    with pytest.raises(ArgumentError, match="after_spike: of a trace with a time constant of 1e-06 s nothing is left"):
        model(after_spike=kf.terms.AfterSpike((1e-6, 0.01))).fit(recording)


# --- who is explained ---------------------------------------------------------------------------------------


def test_nobody_to_explain_is_said_as_such(recording):
    with pytest.raises(ModelError, match=r"every unit that fires .* is source-only"):
        model().fit(recording.select(source_only=recording.unit_ids))


# --- too little time ----------------------------------------------------------------------------------------


@quiet
def test_without_blocks_of_time_the_missing_intervals_have_their_reason(recording):
    fit = model("flat", leak_rate=LEAK).fit(recording.select(stop_s=0.9), threads=1)
    assert fit.n_blocks == 1
    assert any("single block of time" in note.what for note in fit.notes)
    assert not any("1 blocks" in note.what for note in fit.notes)
    row = fit.parameters.loc["amplitude"]
    assert np.isnan(row["std_error"])
    assert "1 block of time, 6 are needed" in row["note"]
    assert fit.baselines.loc[np.isnan(fit.baselines["std_error"]), "note"].ne("").all()
    model_based = fit.with_covariance("model")
    assert np.isfinite(model_based.parameters.loc["amplitude", ["std_error", "lower", "upper"]].astype(float)).all()
    assert (model_based.baselines.loc[fit.baselines["std_error"].isna(), "note"] != "").sum() == (fit.counts == 0).sum()


@quiet
@pytest.mark.parametrize("seed", range(4))
def test_without_coupling_the_amplitude_still_has_an_interval(seed):
    """The leak is not identified there, and may end at its slowest, a twentieth of the recording."""
    fit = model("exponential").fit(simulated(seed, NOTHING, duration_s=20.0), threads=1)
    assert fit.n_blocks >= FEWEST_BLOCKS - 1
    if not fit.verdict.found:
        row = fit.parameters.loc["amplitude"]
        assert row["lower"] < 0.0 < row["upper"]
        assert row["note"].startswith("no coupling found; interval widened")


# --- calls --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("options", [{"threads": 0}, {"threads": -1}, {"threads": 1.5}, {"seed": -1}, {"seed": None}])
def test_numbers_of_a_call_are_checked(recording, options):
    with pytest.raises(ArgumentError, match=f"{next(iter(options))}=.* must be a whole number"):
        model().fit(recording, **options)


def test_what_is_not_a_recording_is_refused():
    with pytest.raises(ArgumentError, match=r"recording: the text 'spikes.csv' is not a recording.*read_recording"):
        model().fit("spikes.csv")
