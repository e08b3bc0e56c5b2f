"""Sentences with known numbers. Per cent of the rate is 100 (e^J - 1), worked out beside each case."""

from __future__ import annotations

import math

import numpy as np
import pytest

from kernelfit.errors import Unavailable
from kernelfit.report import words
from kernelfit.report.words import Estimate


def jump(*percent: float) -> Estimate:
    """J with its interval, from changes of the rate in per cent."""
    return Estimate(*(math.log1p(p / 100.0) for p in percent))


TAU = Estimate(0.013, 0.011, 0.015)


def headline(j: Estimate, tau: Estimate = TAU, *, link: str = "exp", fixed: bool = False) -> str:
    text = words.one_spike_sentence(200.0, j, tau, link=link, level=0.95, leak_fixed=fixed)
    return text


def test_raising():
    assert headline(jump(12, 9, 15)) == (
        "One spike at 200 µm raises the rate by 12 % (95 % interval 9 to 15 %), "
        "fading with a time constant of 13 ms (11 to 15)."
    )


def test_lowering_turns_the_interval_round():
    assert headline(jump(-12, -15, -9)).startswith(
        "One spike at 200 µm lowers the rate by 12 % (95 % interval 9 to 15 %), fading"
    )


def test_an_interval_that_holds_zero_leaves_the_direction_open():
    text = headline(jump(2, -1, 5))
    assert "changes the rate by 2 % (95 % interval \N{MINUS SIGN}1 to 5 %), so its direction is open" in text


def test_strong_coupling_is_told_as_a_factor():
    # ln 4 = 1.386, ln 3.5, ln 4.5
    assert "multiplies the rate by 4.0 (95 % interval 3.5 to 4.5)" in headline(jump(300, 250, 350))


def test_a_fixed_leak_has_no_interval():
    text = headline(jump(12, 9, 15), Estimate(0.02), fixed=True)
    assert text.endswith(", fading with the time constant it was given, 20 ms.")


def test_what_could_not_be_estimated_says_why():
    missing = Estimate(math.nan, reason="faster than a bin")
    assert "time constant could not be estimated: faster than a bin" in headline(jump(12, 9, 15), missing)
    assert "has an effect that could not be estimated: no pairs" in headline(Estimate(math.nan, reason="no pairs"))


def test_other_links_speak_of_the_drive():
    text = headline(Estimate(0.113, 0.086, 0.140), link="softplus")
    assert "raises the drive by 0.113 (95 % interval 0.086 to 0.140)" in text
    assert "rate" not in text.split(", fading")[0]


def test_effects_at_several_distances():
    text = words.distances_sentence(
        np.array([100.0, 400.0, 800.0]), (jump(15, 12, 18), jump(4.1, 2.2, 6.0), jump(0.02, 0.01, 0.04)), "exp"
    )
    assert text == (
        "Farther away the change of the rate is 15 % (12 to 18) at 100 µm, 4.1 % (2.2 to 6.0) at 400 µm and "
        "below 0.1 % at 800 µm."
    )
    assert words.distances_sentence(np.array([100.0]), (Estimate(math.nan),), "exp") == ""


@pytest.mark.parametrize(
    ("ratios", "wanted"),
    [
        ([3.1, 3.1], "are 3.1 times those"),
        ([2.0, 4.26], "are 2.0 to 4.3 times those"),
        ([0.9, 1.05], "scatter as the model says"),
        ([math.nan], "cannot be compared"),
    ],
)
def test_sureness(ratios, wanted):
    assert wanted in words.sureness_sentence(100, 36.0, np.array(ratios))


def test_worth_is_the_square_of_the_ratio():
    assert "9 times shorter" in words.worth_sentence(3.0)
    assert words.worth_sentence(1.1) == ""
    assert words.worth_sentence(math.nan) == ""


def test_goodness():
    text = words.goodness_sentence(35, 4, 0.042, 0.05)
    assert text.startswith("The model describes the spike times of 31 of the 35 units tested (")
    assert "p = 0.042" in text
    assert "all 35 units" in words.goodness_sentence(35, 0, 0.4, 0.05)
    assert "nothing speaks against it" in words.goodness_sentence(35, 0, 0.4, 0.05)
    assert "does not describe the spike times of any of the 35 units" in words.goodness_sentence(35, 35, 0.0, 0.05)
    assert words.goodness_sentence(0, 0, math.nan, 0.05).startswith("No unit")
    assert "does not describe the spike times of the one unit" in words.goodness_sentence(1, 1, math.nan, 0.05)


def test_the_size_of_the_misfit():
    # median of 0.1, 0.2, 0.4 is 0.2
    text = words.misfit_sentence(np.array([0.4, 0.1, math.nan, 0.2]))
    assert text == (
        "Between the observed and the expected share of a unit's intervals the largest difference is 0.20 in the "
        "median unit, 0.40 in the worst."
    )
    assert words.misfit_sentence(np.array([math.nan])) == ""


def test_gain_over_constant_rates():
    text = words.explained_sentence(0.1063, 0.278, own_spikes=False)
    assert text == "Over constant rates, coupling explains 11 % of the deviance, 0.28 bits per spike."
    # own spikes have their part in the gain: it must not be read as that of the coupling
    assert "coupling and units' own earlier spikes together" in words.explained_sentence(0.1, 0.2, own_spikes=True)
    assert "could not be estimated: there is no spike" in words.explained_sentence(
        Unavailable("there is no spike in the likelihood."), 0.2, own_spikes=True
    )


def test_an_effect_the_recording_does_not_bound():
    text = words.not_ruled_out_sentence(80.0, Estimate(0.0, -6e19, 6e19), "exp", 0.95)
    assert text == "At 80 µm no effect can be ruled out, however large: the recording does not bound it."


def test_two_units_are_both_or_neither():
    assert "both units tested" in words.goodness_sentence(2, 0, 0.4, 0.05)
    assert "either of the two units tested" in words.goodness_sentence(2, 2, 0.4, 0.05)
    assert "either of the two units tested" in words.rejected_sentence(2, 2, 0.05)


def test_most_units_are_more_than_half():
    assert not words.mostly_rejected(0, 0)
    assert not words.mostly_rejected(10, 5)
    assert words.mostly_rejected(10, 6)
    text = words.rejected_sentence(10, 6, 0.05)
    assert text.startswith("The model does not describe the spike times of 6 of the 10 units tested (time rescaling")
    assert "intervals do not cover what it misses" in text
    assert "any of the 10 units tested" in words.rejected_sentence(10, 10, 0.05)


def test_passing_with_few_spikes_says_little():
    text = words.few_spikes_sentence(np.array([8.0, 20.0]), np.array([300.0, 500.0, 400.0]))
    assert text.startswith("The units that pass have a median of 14 spikes, those that fail a median of 400")
    assert "has 1 spike, the one that fails 9" in words.few_spikes_sentence(np.array([1.0]), np.array([9.0]))
    assert words.few_spikes_sentence(np.array([200.0]), np.array([400.0])) == ""
    assert words.few_spikes_sentence(np.array([8.0]), np.array([])) == ""


def test_units_without_a_test_are_counted():
    assert words.untested_sentence(58, 50).startswith("8 of the 58 units are not tested")
    assert words.untested_sentence(58, 58) == ""


def test_no_praise_and_no_exclamation():
    for text in words.CAUTIONS:
        assert "!" not in text
        assert text.endswith(".")
