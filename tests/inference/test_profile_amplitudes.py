"""The amplitudes compatible with each length: against kernels whose length is no parameter, and what is said."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import pytest
from worlds import LEAK, NOTHING, model, simulated

from kernelfit import Unavailable, kernels
from kernelfit.errors import ArgumentError
from kernelfit.kernels.base import AMPLITUDE, Kernel

LENGTHS = np.array([60.0, 150.0, 600.0])


@dataclass(frozen=True)
class StatedLength(Kernel):
    """A Gaussian of a stated length: its amplitude is an ordinary parameter with an ordinary profile."""

    name: ClassVar[str] = "stated-length"
    length_um: float = 100.0

    def parameters(self, span):
        return (AMPLITUDE,)

    def value(self, theta, d_um, span):
        return theta[0] * self.gradient(theta, d_um, span)[0]

    def gradient(self, theta, d_um, span):
        return np.exp(-0.5 * (d_um**2 - span.reference_um**2) / self.length_um**2)[None]


@pytest.fixture(scope="module")
def recording():
    return simulated(1)


@pytest.fixture(scope="module")
def fit(recording):
    return model().fit(recording)


def test_the_set_at_a_length_is_the_interval_of_a_kernel_of_that_length(recording, fit):
    found = fit.compatible_amplitudes(LENGTHS)
    assert found.leak == "re-estimated"
    for row in found.table.itertuples():
        profile = model(StatedLength(length_um=row.length_um)).fit(recording).profile("amplitude")
        assert row.estimate == pytest.approx(profile.estimate, rel=1e-4)
        assert (row.lower, row.upper) == pytest.approx((profile.interval.lower, profile.interval.upper), rel=1e-4)
        expected = (profile.scaled.lower, profile.scaled.upper)
        assert (row.scaled_lower, row.scaled_upper) == pytest.approx(expected, rel=1e-3)


@pytest.mark.parametrize("asked", ["held", 15.0])
def test_a_leak_may_be_held(recording, fit, asked):
    found = fit.compatible_amplitudes(LENGTHS[:2], leak=asked)
    leak = fit.leak_rate if asked == "held" else asked
    assert (found.leak, found.leak_rate) == ("held", pytest.approx(leak, rel=1e-12))
    assert np.allclose(found.table["leak_rate"], leak, rtol=1e-12)
    assert f"the leak held at {leak:.3g} 1/s" in found.sentence
    stated = model(StatedLength(length_um=LENGTHS[1]), leak_rate=leak).fit(recording).profile("amplitude").interval
    row = found.table.iloc[1]
    assert (row["lower"], row["upper"]) == pytest.approx((stated.lower, stated.upper), rel=1e-5)


def test_without_coupling_the_amplitude_is_bounded_whatever_the_length():
    fit = model().fit(simulated(3, NOTHING))
    assert not fit.verdict.found
    found = fit.compatible_amplitudes()
    table = found.table
    assert found.leak == "held"  # any leak will do, so it is not climbed
    assert (table["scaled_lower"] <= 0.0).all()
    assert (table["scaled_upper"] >= 0.0).all()
    assert found.largest == pytest.approx(np.abs(table[["scaled_lower", "scaled_upper"]].to_numpy()).max(), rel=1e-12)
    assert found.sentence.startswith("Whatever the length from ")
    assert f"|J| at {fit.reference_distance_um:.4g} µm is below {found.largest:.3g} per spike" in found.sentence
    assert "widened for the search" in found.sentence
    assert len(table) == 9


def test_the_set_misses_the_truth_at_no_length_near_it():
    # The truth is an amplitude of 0.25 at 100 µm and a length of 120 µm; d_ref differs by the jitter of the array.
    fit = model().fit(simulated(1, duration_s=120.0))
    truth = 0.25 * np.exp(-(fit.reference_distance_um**2 - 100.0**2) / (2 * 120.0**2))
    row = fit.compatible_amplitudes(np.array([120.0])).table.iloc[0]
    assert row["lower"] < truth < row["upper"]


def test_a_disc_is_held_at_radii_between_the_distances():
    fit = model("disc").fit(simulated(5, kernels.Disc().at(amplitude=0.2, length_um=170.0), duration_s=20.0))
    found = fit.compatible_amplitudes()
    candidates = fit.model.kernel.radius_candidates(fit.distinct_um)
    assert np.isin(found.table["length_um"], candidates).all()
    assert "|J| within the radius is below" in found.sentence


def test_families_with_other_parameters_say_so(recording):
    for kernel, words in (("flat", "no length to hold"), ("power-law", "amplitude, exponent")):
        refused = model(kernel, leak_rate=LEAK).fit(recording).compatible_amplitudes()
        assert isinstance(refused, Unavailable)
        assert words in refused.reason


def test_a_mexican_hat_is_stated_at_distance_0(recording):
    found = model("mexican-hat", leak_rate=LEAK).fit(recording).compatible_amplitudes(np.array([150.0]))
    assert "|J| at distance 0 is below" in found.sentence
    assert found.leak == "fixed"


def test_what_is_asked_wrongly(recording, fit):
    with pytest.raises(ArgumentError, match="lengths_um: 5 is outside"):
        fit.compatible_amplitudes([5.0, 100.0])
    with pytest.raises(ArgumentError, match="leak='free' is not known"):
        fit.compatible_amplitudes(leak="free")
    with pytest.raises(ArgumentError, match="leak=-3"):
        fit.compatible_amplitudes(leak=-3)
    with pytest.raises(ArgumentError, match="the model fixes the leak rate"):
        model(leak_rate=LEAK).fit(recording).compatible_amplitudes(leak=20.0)
