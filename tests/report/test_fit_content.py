"""What a report says and shows, built from a fit made by hand whose numbers are known (fakes.py)."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from fakes import (
    AMPLITUDE,
    LENGTH,
    PITCH_UM,
    FakeFit,
    FakeNote,
    FakeScoreTest,
    FakeSolver,
    FakeVerdict,
    fake_fit,
    fake_goodness,
    fake_recording,
)

from kernelfit.errors import Unavailable
from kernelfit.model.coupling import CouplingModel
from kernelfit.recording.recording import Recording
from kernelfit.report.captions import places_said
from kernelfit.report.content import build_content
from kernelfit.report.content_array import array_data, round_length, sites_of, view
from kernelfit.report.content_figures import (
    clear_pieces,
    curve_grid,
    kernel_data,
    pair_counts,
    representative_stretch,
)
from kernelfit.report.look import unit_label
from kernelfit.report.readings import result_lines
from kernelfit.report.truth import Truth, TruthValue


@pytest.fixture(scope="module")
def fit():
    return fake_fit()


@pytest.fixture(scope="module")
def content(fit):
    return build_content(fit, fit.recording, fit.goodness())


def content_of(**changes):
    changed = fake_fit(**changes)
    return build_content(changed, changed.recording, changed.goodness())


# --- sentences --------------------------------------------------------------------------------------------


def test_the_verdict_is_three_sentences_with_the_fits_own_numbers(content):
    # 100 (e^0.1133 - 1) = 12.0, of the ends 9.0 and 15.0; 1/76.9 = 13.0 ms, 1/90.9 = 11.0, 1/66.7 = 15.0
    assert content.verdict[0] == (
        "One spike at 200 µm raises the rate by 12 % (95 % interval 9 to 15 %), "
        "fading with a time constant of 13 ms (11 to 15)."
    )
    assert "at 400 µm" in content.verdict[1]
    assert "at 800 µm" in content.verdict[1]
    assert content.verdict[2].startswith("The model describes the spike times of 30 of the 59 units tested (")


def test_a_model_most_units_reject_is_said_before_any_number(fit):
    bent = fake_goodness(fit.recording, right_every=10)
    assert bent.n_rejected > 0.5 * bent.n_tested
    found = build_content(fit, fit.recording, bent)
    share = f"{bent.n_rejected} of the {bent.n_tested} units tested"
    assert found.verdict[0].startswith(f"The model does not describe the spike times of {share}")
    assert found.verdict[1].startswith("In this model, one spike at 200 µm raises the rate by 12 %")
    assert "at 400 µm" in found.verdict[2]
    assert share in found.captions.kernel
    assert result_lines(fit, bent)[:3] == found.verdict
    assert any("more than half of the units tested fail" in s for s in found.goodness)
    assert found.goodness_lead.startswith(
        f"The model describes the spike times of {bent.n_tested - bent.n_rejected} of"
    )


def test_without_coupling_the_caution_stands_before_what_cannot_be_ruled_out(fit):
    none = fake_fit(verdict=FakeVerdict(False, 0.42, "No coupling to describe: p = 0.42."))
    found = build_content(none, none.recording, fake_goodness(none.recording, right_every=10))
    assert found.verdict[0].startswith("No coupling to describe")
    assert found.verdict[1].startswith("The model does not describe")
    assert "cannot be ruled out" in found.verdict[2]


def test_a_fit_that_stopped_says_so_first_whatever_its_goodness():
    stopped = fake_fit(converged=False, solver=FakeSolver(converged=False, message="the step limit was reached"))
    found = build_content(stopped, stopped.recording, fake_goodness(stopped.recording, right_every=10))
    assert found.verdict[0].startswith("The fit did not converge.")
    assert not any("before any number" in s for s in found.goodness)


def test_an_invented_recording_is_named_at_the_top(fit):
    truth = Truth((TruthValue("amplitude", 0.12, "per spike"),), "Invented for a test.")
    found = build_content(fit, fit.recording, fit.goodness(), truth=truth)
    assert found.notices[0].severity == "info"
    assert "invented" in found.notices[0].text


def test_the_kernels_title_tells_the_farthest_effect_worth_a_number(content):
    # 100 (e^J - 1) at 800 µm: 0.1133 exp(-(800^2 - 200^2) / (2 262^2)) is 0.0014, or 0.14 %
    assert content.figures.kernel.title == "One spike raises the rate by 12 % at 200 µm and by 0.14 % at 800 µm"


def test_own_spikes_are_not_in_the_number_for_the_network(content):
    (said,) = [s for s in content.coupling if "spectral radius" in s]
    assert "0.42" in said
    assert "Effects of own spikes are not in this number" in said


def test_effects_at_other_distances_follow_the_kernel(content):
    # J(400) = 0.1133 exp(-(400^2 - 200^2) / (2 262^2)), in per cent of the rate
    expected = 100 * math.expm1(AMPLITUDE * math.exp(-(400**2 - PITCH_UM**2) / (2 * LENGTH**2)))
    assert f"{expected:.1f} % (" in content.verdict[1]


def test_no_coupling_found_is_the_headline():
    found = content_of(verdict=FakeVerdict(False, 0.42, "No coupling to describe: p = 0.42."))
    assert found.verdict[0].startswith("No coupling to describe: p = 0.42.")
    assert found.figures.kernel.title == "No coupling to describe"
    assert "does not show coupling" in found.coupling_lead
    # 100 (e^0.0862 - 1) = 9.0, 100 (e^0.1398 - 1) = 15.0
    assert (
        found.verdict[1]
        == "At 200 µm an effect between 9.0 and 15.0 % of the rate cannot be ruled out (95 % interval)."
    )
    assert "No curve is drawn" in found.captions.kernel


def test_a_fit_that_did_not_converge_is_marked_everywhere():
    stopped = fake_fit(converged=False, solver=FakeSolver(converged=False, message="the step limit was reached"))
    found = build_content(stopped, stopped.recording, stopped.goodness())
    assert found.notices[0].severity == "error"
    assert "the step limit was reached" in found.notices[0].text
    assert found.verdict[0].startswith("The fit did not converge.")
    assert "did not converge" in found.methods.paragraph
    assert result_lines(stopped, stopped.goodness())[0].startswith("The fit did not converge.")


def test_warnings_stand_at_the_top_and_all_notes_in_the_text():
    notes = (
        FakeNote("warning", "The bins are too wide for the leak found.", "leak rate", "Use bins of 1 ms."),
        FakeNote("info", "Two starts ended in the same optimum.", "", ""),
    )
    found = content_of(notes=notes)
    assert [n.severity for n in found.notices] == ["warning"]
    assert found.notices[0].text == ("The bins are too wide for the leak found. Where: leak rate. Use bins of 1 ms.")
    assert len(found.notes) == 2


def test_without_after_spike_terms_the_score_test_speaks():
    model = CouplingModel(bin_width=0.005, after_spike="none")
    found = content_of(model=model, after_spike_test=FakeScoreTest(statistic=812.4, df=300, p_value=1e-12))
    assert "Score test: chi-squared 812 with 300 degrees of freedom, p < 0.001" in found.after_spike
    assert isinstance(found.figures.after_spike, Unavailable)
    assert "Rao" in " ".join(found.methods.references)


def test_a_score_test_that_cannot_be_made_gives_its_reason():
    model = CouplingModel(bin_width=0.005, after_spike="none")
    found = content_of(model=model, after_spike_test=Unavailable("the recording is too short (3 blocks of time)"))
    reason = "could not be estimated: the recording is too short (3 blocks of time)."
    assert found.after_spike.endswith(f"What it would add {reason}")
    assert "Rao" not in " ".join(found.methods.references)
    assert "score test" not in found.methods.paragraph


def test_a_fixed_leak_is_said_and_has_no_band():
    found = content_of(model=CouplingModel(bin_width=0.005, leak_rate=50.0))
    assert "the time constant it was given, 20 ms" in found.verdict[0]
    assert not np.isfinite(found.figures.course.lines[0].lower).any()
    assert "held at 50 per second" in found.methods.paragraph


def test_a_coefficient_of_its_own_for_one_site_is_told():
    model = CouplingModel(bin_width=0.005, same_site="own")
    found = content_of(model=model, extra_parameters=(("same_site", 0.3, 0.1, 0.5, "per spike", ""),))
    # 100 (e^0.3 - 1) = 35, e^0.1: 11, e^0.5: 65
    assert "Between units on one site a spike raises the rate by 35 % (95 % interval 11 to 65 %)." in found.coupling


def test_a_parameter_that_could_not_be_estimated_says_why():
    nan = math.nan
    found = content_of(extra_parameters=(("same_site", nan, nan, nan, "per spike", "no pairs on one site"),))
    assert any("could not be estimated: no pairs on one site" in s for s in found.coupling)
    cells = [cell.text for row in found.tables.parameters.rows for cell in row]
    assert "could not be estimated" in cells
    assert "nan" not in " ".join(cells).lower()


def test_the_five_lines_of_a_console(fit):
    lines = result_lines(fit, fit.goodness())
    assert len(lines) == 5
    assert all(line.isprintable() for line in lines)


# --- methods ----------------------------------------------------------------------------------------------


def test_the_methods_paragraph_holds_what_a_reviewer_asks_for(content, fit):
    text = content.methods.paragraph
    for wanted in (
        "60 units",
        f"{fit.n_spikes:,} spikes in 240 s",
        "one silent unit was not explained",
        "bins of 5 ms",
        "Gaussian function",
        "reference distance of 200 µm",
        "100 blocks of 2.4 s",
        "seed 0",
        "kernelfit 0.1.0",
    ):
        assert wanted in text


def test_every_method_named_has_a_reference_and_no_other(content):
    for reference in content.methods.references:
        surname = reference.split(" ")[0]
        assert surname in content.methods.paragraph or surname in {"Barbieri"}
    assert not any("Eilers" in r for r in content.methods.references)  # no spline here
    assert not any("Rao" in r for r in content.methods.references)  # no score test here


def test_model_based_intervals_name_no_sandwich():
    found = content_of(covariance_kind="model")
    assert "expected information" in found.methods.paragraph
    assert not any("White" in r for r in found.methods.references)
    assert "model-based" in found.tables.parameters.caption
    assert "intervals of this page are model-based" in found.sure_lead


def test_exclusions_are_counted():
    recording = fake_recording().with_exclusions(np.array([[1.0, 2.0], [5.0, 5.5]]))
    found = content_of(recording=recording)
    assert "2 excluded stretches (1.5 s in all) were left out" in found.methods.paragraph


# --- tables -----------------------------------------------------------------------------------------------


def test_the_standard_error_table_holds_both_kinds_and_their_ratio(content):
    table = content.tables.std_errors
    assert [c.title for c in table.columns][1:3] == ["model-based interval", "robust interval"]
    first = table.rows[0]
    assert first[0].text == "amplitude"
    assert first[2].text == "0.113 (0.086 to 0.140)"
    assert first[5].text == "3.1"


def test_goodness_table_opens_with_all_units_and_says_why_there_is_no_test(content):
    rows = content.tables.goodness.rows
    assert rows[0][0].text == "all units together"
    assert len(rows) == 61
    silent = next(r for r in rows if r[0].text == "u59")
    assert silent[3].text == ""
    assert "no spike" in silent[-1].text


def test_silent_units_have_no_baseline_but_a_reason(content):
    silent = next(r for r in content.tables.units.rows if r[0].text == "u59")
    assert [cell.text for cell in silent[5:8]] == ["", "", ""]
    assert silent[-1].text == "silent: not estimable"


def test_truth_stands_beside_the_estimate():
    fit = fake_fit()
    truth = Truth((TruthValue("amplitude", 0.11, "per spike"), TruthValue("length_um", 400.0, "µm")), "Invented.")
    found = build_content(fit, fit.recording, fit.goodness(), truth=truth)
    rows = [[cell.text for cell in row] for row in found.tables.truth.rows]
    assert rows[0] == ["effect J of one spike at 200 µm (per spike)", "0.11", "0.113 (0.086 to 0.140)", "yes"]
    assert rows[1][3] == "no"


def test_a_derived_window_is_said(content):
    assert any("no windows were given" in value for _, value in content.tables.recording.rows)


# --- data of figures --------------------------------------------------------------------------------------


def test_the_kernel_is_drawn_from_the_nearest_to_the_farthest_pair_only(content, fit):
    data = content.figures.kernel
    distances = fit.pairs_by_distance.distance_um
    assert np.nanmin(data.distance_um) == distances.min()
    assert np.nanmax(data.distance_um) == distances.max()
    assert data.pairs.n_pairs.sum() == fit.pairs_by_distance.n_pairs.sum()


def test_the_curve_is_broken_where_the_array_has_no_pairs():
    grid = curve_grid(np.array([100.0, 120.0, 900.0, 950.0]), 150.0)
    inside = grid[np.isfinite(grid)]
    assert not ((inside > 120.0) & (inside < 900.0)).any()
    assert np.isnan(grid).sum() == 1
    # 120 and 900 µm themselves have pairs
    assert {100.0, 120.0, 900.0, 950.0} <= set(inside)


def test_one_distance_is_a_point():
    recording = Recording(
        unit_ids=("a", "b"),
        positions=np.array([[0.0], [100.0]]),
        trains=(np.array([1.0, 2.0, 3.0]), np.array([1.5])),
        window_bounds=np.array([[0.0, 10.0]]),
    )
    data = kernel_data(fake_fit(recording=recording, reference_distance_um=100.0))
    assert data.distance_um.tolist() == [100.0]


def test_many_distances_are_collected_in_stretches():
    table = pd.DataFrame({"distance_um": np.arange(1.0, 501.0), "n_pairs": np.full(500, 3)})
    bars = pair_counts(table)
    assert bars.grouped
    assert bars.distance_um.size == 70
    assert bars.n_pairs.sum() == 1500


def test_effect_fades_to_a_third_in_one_time_constant(content):
    line = content.figures.course.lines[0]
    at_tau = np.interp(content.figures.course.time_constant_s, content.figures.course.lag_s, line.effect)
    # 100 (exp(J/e) - 1), e the base of the natural logarithm; linear interpolation costs a little
    assert at_tau == pytest.approx(100 * math.expm1(AMPLITUDE / math.e), rel=1e-3)
    assert line.lower[-1] < line.effect[-1] < line.upper[-1]


def test_after_spike_quartiles_enclose_the_median(content):
    data = content.figures.after_spike
    assert data.n_units == 59  # the silent unit has no curve
    assert (data.lower_quartile <= data.median).all()
    assert (data.median <= data.upper_quartile).all()


def test_ks_panels_go_from_best_to_worst_and_agree_with_the_table(content, fit):
    data = content.figures.ks
    goodness = fit.goodness()
    assert [p.title.split(":")[0].split("\n")[0] for p in data.panels] == [
        "best",
        "median",
        "worst",
        "all units together",
    ]
    assert data.glance.rejected.sum() == goodness.n_rejected
    assert (np.diff(data.glance.ratio) >= 0).all()
    # a ratio above 1 is the same as a single p-value below 5 %
    assert (data.glance.ratio > 1).sum() == (goodness.units.p_value < 0.05).sum()


def test_units_of_one_site_stand_apart_and_sites_stay_where_they_are():
    positions = np.array([[0.0, 0.0], [0.0, 0.0], [100.0, 0.0], [100.0, 0.4]])
    data = array_data(positions, np.array([1.0, 2.0, np.nan, 0.0]), "t", "q")
    assert data.n_shared == 4
    assert data.site_um.tolist() == [[0.0, 0.0], [100.0, 0.0]]
    gaps = np.linalg.norm(data.place_um[:, None] - data.place_um[None], axis=-1)
    assert (gaps[~np.eye(4, dtype=bool)] > 10.0).all()
    assert np.isnan(data.value[2:]).all()


def test_an_array_in_space_is_seen_along_its_shortest_side():
    # a shank along z with two columns in x: y is not drawn, and no unit hides another
    shank = np.array([[x, 0.0, z] for x in (0.0, 30.0) for z in (0.0, 25.0, 50.0, 75.0)])
    assert view(shank) == ([0, 2], "y")
    data = array_data(shank, np.ones(8), "t", "q")
    assert data.seen_along == "y"
    assert data.n_shared == 0
    assert np.ptp(data.site_um, axis=0).tolist() == [30.0, 75.0]
    flat = np.column_stack([shank[:, 0], shank[:, 2], np.zeros(8)])
    assert view(flat) == ([0, 1], "z")


def test_units_above_one_another_stand_apart():
    layers = np.array([[x, 100.0 * x, z] for x in (0.0, 100.0, 200.0) for z in (0.0, 40.0)])
    data = array_data(layers, np.ones(6), "t", "q")
    gaps = np.linalg.norm(data.place_um[:, None] - data.place_um[None], axis=-1)
    assert (gaps[~np.eye(6, dtype=bool)] > 10.0).all()
    assert data.n_shared == 6
    assert "lie above one another in z; they stand around it" in places_said(data)


def test_ids_no_font_can_draw_are_named_by_their_row():
    assert unit_label("c11", 4) == "unit c11"
    assert unit_label("Ячейка-7", 4) == "unit Ячейка-7"
    assert unit_label("\N{CJK UNIFIED IDEOGRAPH-7D30}-1", 4) == "unit no. 5"
    assert unit_label("\N{ARABIC LETTER ALEF}1", 0) == "unit no. 1"  # runs from right to left
    long = unit_label("probe-A/shank-3/electrode-0117/cluster-0042", 0)
    assert long.startswith("unit probe-A")
    assert long.endswith("0042")  # ends tell units apart
    assert len(long) <= 23


def test_sites_are_positions_closer_than_a_micrometre():
    assert sites_of(np.array([[0.0], [0.5], [2.0], [0.0]])).tolist() == [0, 0, 1, 0]


@pytest.mark.parametrize(
    ("length", "bar"), [(420.0, 200.0), (199.0, 100.0), (50.0, 50.0), (1.9, 1.0), (7000.0, 5000.0)]
)
def test_scale_bars_have_round_lengths(length, bar):
    assert round_length(length) == bar


def test_the_stretch_shown_keeps_clear_of_exclusions_and_window_ends():
    recording = replace(fake_recording(6), window_bounds=np.array([[0.0, 100.0], [120.0, 240.0]])).with_exclusions(
        np.array([[10.0, 15.0], [150.0, 155.0]])
    )
    pieces = clear_pieces(recording)
    assert pieces.tolist() == [[0.0, 10.0], [15.0, 100.0], [120.0, 150.0], [155.0, 240.0]]
    start, stop = representative_stretch(recording, 20.0)
    assert stop - start == pytest.approx(20.0)
    assert any(a <= start and stop <= b for a, b in pieces)


def test_short_recordings_show_what_there_is():
    recording = replace(fake_recording(6), window_bounds=np.array([[0.0, 3.0], [10.0, 17.0]]))
    assert representative_stretch(recording, 20.0) == (10.0, 17.0)
    assert representative_stretch(replace(recording, window_bounds=np.array([[0.0, 0.4]])), 20.0) is None


def test_raster_rates_are_per_unit(content, fit):
    data = content.figures.raster
    counts = sum(np.count_nonzero((t >= data.start_s) & (t < data.stop_s)) for t in fit.recording.trains)
    explained = 59
    assert data.observed_hz.mean() == pytest.approx(counts / explained / (data.stop_s - data.start_s), rel=0.02)


def test_too_few_spikes_for_any_test_give_a_reason():
    recording = replace(fake_recording(4), trains=tuple(np.array([1.0, 2.0]) for _ in range(4)))
    fit = fake_fit(recording=recording)
    found = build_content(fit, recording, fake_goodness(recording))
    assert isinstance(found.figures.ks, Unavailable) or found.figures.ks.panels
    assert "No unit has enough spikes" in found.verdict[2]


@pytest.mark.parametrize(("kernel", "word"), [("disc", "radius"), ("gaussian", "length")])
def test_the_length_of_a_disc_is_its_radius(kernel, word):
    fit = fake_fit(model=CouplingModel(kernel=kernel, bin_width=0.005))
    found = build_content(fit, fit.recording, fit.goodness())
    assert found.coupling_lead.startswith(f"The {kernel} kernel has a {word} of ")
    assert any(row[1].text == f"{word} of the kernel (µm)" for row in found.tables.parameters.rows)
    assert ("The radius was profiled" in found.methods.paragraph) == (word == "radius")


def test_a_scale_bar_stays_within_a_narrow_array():
    shank = np.array([[x, y] for x in (0.0, 32.0) for y in 25.0 * np.arange(16.0)])
    # the array is 32 µm wide and its sites 25 µm apart: 50 µm is the longest round length within 57 µm
    assert array_data(shank, np.ones(32), "t", "q").scale_bar_um == 50.0


def test_a_kernel_nobody_bounds_is_not_drawn():
    class Loose(FakeFit):
        def kernel_band(self, distances_um, level=0.95, simultaneous=False):
            return super().kernel_band(distances_um).assign(lower=-6e19, upper=6e19)

    loose = Loose(recording=fake_recording(), verdict=FakeVerdict(False, 0.7, "No coupling to describe."))
    found = build_content(loose, loose.recording, loose.goodness())
    assert isinstance(found.figures.kernel, Unavailable)
    assert "does not bound" in found.figures.kernel.reason
    assert "no effect can be ruled out" in found.verdict[1]


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_an_amplitude_that_nothing_holds_is_told_by_its_reason():
    """Two units that take turns, 0.3 s and more apart: no strength of suppression is too much, and none is the best."""
    rng = np.random.default_rng(0)
    times = np.cumsum(0.3 + rng.exponential(0.1, 140))
    first = rng.random(times.size) < 0.5
    recording = Recording.from_arrays(
        {"a": times[first], "b": times[~first]}, np.array([[0.0], [100.0]]), [(0.0, 60.0)]
    )
    fit = CouplingModel("flat", bin_width=0.005, after_spike="none").fit(recording, threads=1)
    assert fit.verdict.found
    content = build_content(fit, recording, fit.goodness())
    told = " ".join(content.verdict)
    assert "could not be estimated: nothing holds it from below: after a spike no unit 100 µm away fired" in told
    assert "its time constant could not be estimated: goes with the amplitude, which nothing holds" in told
    assert "-4" not in told  # no number from where the climb was stopped
