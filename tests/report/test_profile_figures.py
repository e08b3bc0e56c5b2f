"""Figures of profile likelihoods: what they show is what was computed, and titles state what was found."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from worlds import LEAK, NOTHING, model, simulated

from kernelfit import Unavailable, kernels
from kernelfit.report.figures_profile import draw_amplitudes, draw_contour, draw_profiles
from kernelfit.report.look import save_figure
from kernelfit.report.profile_data import amplitudes_data, contour_data, profiles_data


@pytest.fixture(scope="module")
def fit():
    return model().fit(simulated(1))


@pytest.fixture(scope="module")
def profiles(fit):
    return [fit.profile(name) for name in fit.parameters.index]


def test_the_curve_meets_the_cut_where_the_interval_ends(fit, profiles):
    data = profiles_data(fit, profiles)
    assert [p.name for p in data.parameters] == ["amplitude", "length", "leak rate"]
    for parameter, profile in zip(data.parameters, profiles, strict=True):
        for end in (profile.scaled.lower, profile.scaled.upper):
            # the curve is drawn through its points, of which the ends lie within 0.2 % of one
            assert np.interp(end, parameter.value, parameter.fall) == pytest.approx(-parameter.cut, rel=1e-2)
        assert parameter.fall.max() == pytest.approx(0.0, abs=1e-9)
        assert np.allclose(parameter.model_fall, parameter.fall * profile.variance_ratio)
        headline, usual, other = parameter.intervals
        assert (headline.lower, headline.upper) == (profile.scaled.lower, profile.scaled.upper)
        assert (usual.lower, usual.upper) == tuple(fit.parameters.loc[profile.name, ["lower", "upper"]])
        assert (other.lower, other.upper) == (profile.interval.lower, profile.interval.upper)
    numbers = data.numbers()
    assert list(numbers.columns) == ["parameter", "value", "fall", "model_fall"]
    assert set(numbers["parameter"]) == {"amplitude", "length", "leak rate"}


def test_titles_state_what_was_found(fit, profiles):
    assert profiles_data(fit, profiles).title.startswith("The interval of the amplitude reaches farther up: 0.")
    open_above = replace(profiles[1], scaled=replace(profiles[1].scaled, upper=np.inf, upper_open=True))
    title = profiles_data(fit, [profiles[0], open_above]).title
    assert title == f"The recording sets the length no upper limit: at least {open_above.scaled.lower:.1f} µm"
    symmetric = replace(profiles[0], scaled=replace(profiles[0].scaled, lower=0.2, upper=0.3), estimate=0.25)
    assert profiles_data(fit, [symmetric]).title.startswith("The likelihood falls evenly on both sides")


def test_what_could_not_be_profiled_is_left_out(fit, profiles):
    gone = Unavailable("the leak is fixed")
    assert len(profiles_data(fit, [*profiles[:2], gone]).parameters) == 2
    assert profiles_data(fit, [gone]) == gone


def test_few_blocks_leave_one_curve(fit, profiles):
    alone = replace(profiles[0], scaled=Unavailable("4 blocks"), variance_ratio=np.nan)
    parameter = profiles_data(fit, [alone]).parameters[0]
    assert np.array_equal(parameter.fall, parameter.model_fall)
    assert [i.kind for i in parameter.intervals] == ["profile, model", "standard errors"]


def test_profiles_are_drawn_with_open_ends_and_jumps(tmp_path):
    disc = model("disc").fit(simulated(5, kernels.Disc().at(amplitude=0.2, length_um=170.0), duration_s=30.0))
    data = profiles_data(disc, [disc.profile(name) for name in disc.parameters.index])
    assert data.parameters[1].name == "radius"
    assert data.parameters[1].jumps
    svg, png = save_figure(draw_profiles(data), tmp_path, "profiles")
    text = svg.read_text(encoding="utf-8")
    assert "radius (µm)" in text
    assert "fall of the log-likelihood" in text
    assert png.stat().st_size > 10_000


def test_a_contour_is_drawn_from_its_surface(fit, tmp_path):
    contour = fit.profile_contour("length_um", "leak_rate", n_points=7)
    data = contour_data(fit, contour)
    assert data.names == ("length", "leak rate")
    assert (data.x[0], data.x[-1]) == pytest.approx((contour.values_a[0], contour.values_a[-1]))
    corners = data.drop[[0, 0, -1, -1], [0, -1, 0, -1]]
    assert corners == pytest.approx(contour.scaled_drop[[0, 0, -1, -1], [0, -1, 0, -1]], rel=1e-9)
    assert data.title == "A larger length goes with a larger leak rate"
    assert data.correlation > 0.3
    text = save_figure(draw_contour(data), tmp_path, "contour")[0].read_text(encoding="utf-8")
    assert "leak rate (1/s)" in text
    shifted = replace(contour, scaled_drop=np.zeros_like(contour.drop))
    assert contour_data(fit, shifted).title == "No lower limit to the length, whatever the leak rate"


def test_amplitudes_are_drawn_with_and_without_coupling(fit, tmp_path):
    found = fit.compatible_amplitudes(np.array([60.0, 120.0, 300.0]))
    data = amplitudes_data(fit, found)
    table = found.table
    assert np.interp(table["length_um"], data.length_um, data.upper) == pytest.approx(table["scaled_upper"], rel=1e-3)
    assert data.estimate == pytest.approx((fit.parameters.loc["length_um", "estimate"], fit.shared[0]))
    assert data.title.startswith("Whatever the length (60 to 300 µm), J at 86 µm lies between 0.")
    text = save_figure(draw_amplitudes(data), tmp_path, "amplitudes")[0].read_text(encoding="utf-8")
    assert "length held (µm)" in text
    nothing = model(leak_rate=LEAK).fit(simulated(3, NOTHING))
    data = amplitudes_data(nothing, nothing.compatible_amplitudes(np.array([60.0, 120.0])))
    assert "|J| at 86 µm is below 0." in data.title
    assert data.estimate is None
    assert "fixed by the model at 40 per second" in data.caption
    draw_amplitudes(data)
