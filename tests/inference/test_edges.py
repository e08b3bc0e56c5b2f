"""Intervals at the ends of the parameter space, and beside a test that found no coupling."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

import kernelfit as kf
from kernelfit.fitting.detection import SEARCH_LEVELS, CouplingVerdict
from kernelfit.fitting.problem import FASTEST_LEAK_BINS, SLOWEST_LEAK_SHARE
from kernelfit.inference.intervals import critical_value
from kernelfit.inference.parameters import parameter_table
from kernelfit.inference.profile_conditions import model_cut

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")

BIN_S, LEAK = 0.005, 40.0


def square_array(n=9):
    grid = np.array([[100.0 * (k % 3), 100.0 * (k // 3)] for k in range(n)])
    return grid + np.random.default_rng(5).uniform(-15, 15, grid.shape)


def fitted(kernel, law, duration_s, seed=1, **options):
    recording = kf.simulate_recording(square_array(), law, 6.0, LEAK, duration_s, seed, bin_width=BIN_S)
    return kf.CouplingModel(kernel=kernel, bin_width=BIN_S, after_spike="none", **options).fit(recording, threads=2)


@pytest.fixture(scope="module")
def gaussian():
    law = kf.kernels.Gaussian().at(amplitude=0.25, length_um=120.0, reference_um=100.0)
    return fitted("gaussian", law, 40.0)


def with_spread(fit, **errors):
    """The fit with these robust standard errors of amplitude, log length and log leak, no covariance."""
    variance = np.diag([errors.get(name, 0.05) ** 2 for name in ("amplitude", "length", "leak")])
    return dataclasses.replace(fit, uncertainty=dataclasses.replace(fit.uncertainty, shared_robust=variance))


def test_intervals_inside_the_bounds_are_left_alone(gaussian):
    table = with_spread(gaussian).parameters
    assert list(table["note"]) == ["", "", ""]
    ratio = table["upper"] / table["estimate"]
    assert ratio["length_um"] == pytest.approx(table.loc["length_um", "estimate"] / table.loc["length_um", "lower"])


def test_the_interval_of_a_length_ends_at_its_bounds(gaussian):
    """A factor of e^10 either way: cut to [reference / 5, 5 x largest distance], with the reasons of the family."""
    row = with_spread(gaussian, length=5.0).parameters.loc["length_um"]
    assert (row["lower"], row["upper"]) == pytest.approx(gaussian.span.length_limits)
    assert "lower end at its bound: shorter than" in row["note"]
    assert "upper end at its bound: longer than" in row["note"]
    assert "cannot be told from a kernel that does not change with distance" in row["note"]
    assert row["std_error"] == pytest.approx(5.0 * row["estimate"])


def test_the_interval_of_the_leak_ends_at_its_bounds(gaussian):
    row = with_spread(gaussian, leak=8.0).parameters.loc["leak_rate"]
    assert row["upper"] == pytest.approx(FASTEST_LEAK_BINS / BIN_S)
    assert row["lower"] == pytest.approx(SLOWEST_LEAK_SHARE / gaussian.duration_s)
    assert "faster than a bin" in row["note"]
    assert "drifting rate" in row["note"]


def test_one_end_alone_has_one_reason(gaussian):
    """98 µm: a factor of 5.7 from the shortest length that can be told, 14.7 from the longest."""
    shortest, longest = gaussian.span.length_limits
    reach = np.log(gaussian.parameters.loc["length_um", "estimate"] / shortest) / 1.5
    row = with_spread(gaussian, length=reach).parameters.loc["length_um"]
    assert row["lower"] == pytest.approx(shortest)
    assert row["upper"] < longest
    assert row["note"].startswith("lower end at its bound")
    assert "upper end" not in row["note"]


def test_the_radius_says_where_the_array_ends():
    """An amplitude as far as the array reaches: no larger radius can be told."""
    fit = fitted("disc", kf.kernels.Flat().at(amplitude=0.12), 60.0)
    assert fit.verdict.found
    row = fit.parameters.loc["length_um"]
    assert row["upper"] == fit.distinct_um[-1]
    assert "upper end at its bound: a disc that holds every pair" in row["note"]
    assert "likelihood interval" in row["note"]
    assert "whatever the level" not in row["note"]
    at_half = parameter_table(fit, "robust", 0.5).loc["length_um"]
    assert (at_half["lower"], at_half["upper"]) == fit.radius_interval
    assert "at 95 % whatever the level" in at_half["note"]
    inside = dataclasses.replace(fit, radius_interval=(fit.distinct_um[3], fit.distinct_um[5]))
    assert "bound" not in inside.parameters.loc["length_um", "note"]


# --- beside a verdict of no coupling ---------------------------------------------------------------------------


NOT_FOUND = CouplingVerdict(False, 0.4, 2.5, "No coupling to describe.")


def test_no_interval_excludes_what_the_test_does_not(gaussian):
    """An amplitude eight standard errors from zero beside a test that found nothing: one of them must give way."""
    found = with_spread(gaussian, amplitude=gaussian.shared[0] / 8)
    assert found.parameters.loc["amplitude", "lower"] > 0
    unsure = dataclasses.replace(found, verdict=NOT_FOUND)
    row = unsure.parameters.loc["amplitude"]
    assert row["lower"] == 0.0
    assert row["upper"] == pytest.approx(row["estimate"] + max(2.5, 2.02) * row["std_error"], rel=0.05)
    assert row["note"].endswith("and out to 0, which the test of any coupling does not exclude")
    apart_um = gaussian.distinct_um[[0, 10, -1]]
    for simultaneous in (False, True):
        band = unsure.kernel_band(apart_um, simultaneous=simultaneous)
        assert ((band["lower"] <= 0) & (band["upper"] >= 0)).all()
        assert (found.kernel_band(apart_um[:1], simultaneous=simultaneous)["lower"] > 0).all()
    assert "takes for granted that there is coupling of this form" in unsure.summary()
    assert "takes for granted" not in found.summary()


def test_an_interval_that_holds_zero_says_no_more_than_it_did(gaussian):
    unsure = dataclasses.replace(with_spread(gaussian, amplitude=10.0), verdict=NOT_FOUND)
    row = unsure.parameters.loc["amplitude"]
    assert row["note"] == "no coupling found; interval widened for the search over length and leak"
    assert row["lower"] < 0 < row["upper"]


def test_the_search_is_paid_for_at_the_level_asked_for(gaussian):
    """Wider at 99 % and narrower at 50 %, by the quantiles the verdict holds; nothing where nothing was searched."""
    roots = tuple(1.5 + 2.0 * level for level in SEARCH_LEVELS)
    verdict = dataclasses.replace(NOT_FOUND, critical_z=3.4, search_roots=roots)
    found = with_spread(gaussian, amplitude=10.0)
    unsure = dataclasses.replace(found, verdict=verdict)
    at = gaussian.distinct_um[:1]
    for level, root in ((0.5, 2.5), (0.95, 3.4), (0.99, 3.48)):
        row = parameter_table(unsure, unsure.covariance_kind, level).loc["amplitude"]
        assert row["upper"] - row["estimate"] == pytest.approx(root * row["std_error"], rel=1e-9)
        band, plain = (fit.kernel_band(at, level=level).iloc[0] for fit in (unsure, found))
        wider = root / critical_value(level, found.uncertainty.degrees_of_freedom("robust"))
        assert band["upper"] - band["estimate"] == pytest.approx(wider * (plain["upper"] - plain["estimate"]), rel=1e-9)
        assert model_cut(unsure, "amplitude", level).widened == pytest.approx(root, rel=1e-9)


def test_a_flat_kernel_at_a_stated_leak_pays_for_no_search():
    coupled = fitted("flat", kf.kernels.Flat().at(amplitude=0.2), 20.0, leak_rate=LEAK)
    fit = dataclasses.replace(coupled, verdict=NOT_FOUND)
    found = dataclasses.replace(fit, verdict=dataclasses.replace(NOT_FOUND, found=True))
    row, plain = fit.parameters.loc["amplitude"], found.parameters.loc["amplitude"]
    assert row["upper"] == plain["upper"]
    assert row["lower"] == min(plain["lower"], 0.0)
    assert row["note"].startswith("no coupling found")
    assert "widened" not in row["note"]
    assert model_cut(fit, "amplitude", 0.95).widened == 0.0
    d = fit.distinct_um[:1]
    assert fit.kernel_band(d)["upper"][0] == found.kernel_band(d)["upper"][0]


@pytest.mark.parametrize("kernel", ["gaussian", "flat"])
def test_tiny_uncoupled_recordings_do_not_contradict_themselves(kernel):
    """Ten units, 20 s, 2 Hz. Of 200 such recordings 3 had a Gaussian amplitude, 8 a band, that excluded 0 beside a test
    that did not."""
    positions = np.array([[100.0 * (k % 4), 100.0 * (k // 4)] for k in range(10)])
    nothing = kf.kernels.Flat().at(amplitude=0.0)
    for seed in range(12):
        recording = kf.simulate_recording(positions, nothing, 2.0, LEAK, 20.0, seed, bin_width=BIN_S)
        fit = kf.CouplingModel(kernel=kernel, bin_width=BIN_S, leak_rate=LEAK, after_spike="none").fit(recording)
        if not fit.verdict.found:
            row = fit.parameters.loc["amplitude"]
            band = fit.kernel_band(fit.distinct_um)
            assert row["lower"] <= 0 <= row["upper"]
            assert ((band["lower"] <= 0) & (band["upper"] >= 0)).all()
