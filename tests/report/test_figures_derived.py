"""The kernel with the distances read off it: its data, and what is drawn of them."""

from __future__ import annotations

import numpy as np
import pytest
from worlds import NOTHING, model, simulated

import kernelfit as kf
from kernelfit.errors import Unavailable
from kernelfit.report.derived_data import MarkedKernel, marked_kernel
from kernelfit.report.figures_derived import draw_marked_kernel

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")

LAWS = {
    "mexican-hat": kf.kernels.MexicanHat().at(amplitude=0.5, length_um=110.0, n_coordinates=2),
    "exponential": kf.kernels.Exponential().at(amplitude=0.15, length_um=90.0, reference_um=100.0),
    "disc": kf.kernels.Disc().at(amplitude=0.2, length_um=210.0),
}


@pytest.fixture(scope="module", params=LAWS)
def fit(request):
    return model(request.param).fit(simulated(3, LAWS[request.param], n_side=4), threads=2)


def marked(fit) -> MarkedKernel:
    data = marked_kernel(fit, fit.derived())
    assert isinstance(data, MarkedKernel)
    return data


def test_the_marks_lie_on_the_curve_with_the_intervals_of_the_table(fit):
    names = {
        "mexican-hat": ["half", "1/e (reach)", "sign change", "trough"],
        "exponential": ["half", "1/e (reach)"],
        "disc": ["radius"],
    }[fit.model.kernel.name]
    data, table = marked(fit), fit.derived()
    assert [mark.name for mark in data.marks] == names
    of = {"half": "half_distance_um", "sign change": "sign_change_um", "trough": "trough_um"}
    for mark in data.marks:
        row = table.loc[of.get(mark.name, "reach_um")]
        assert (mark.distance_um, mark.lower, mark.upper) == (row["estimate"], row["lower"], row["upper"])
        assert mark.jump == pytest.approx(float(fit.kernel(np.array([mark.distance_um]))[0]), abs=1e-9)
    assert len(data.numbers()) == len(names)
    missing = {name for name, _ in data.missing}
    assert missing == ({"sign_change_um", "trough_um"} if len(names) < 4 else set())


def test_the_title_is_the_finding(fit):
    place = {m.name: f"{m.distance_um:.0f} µm" for m in marked(fit).marks}
    said = {
        "mexican-hat": f"One spike raises the rate closer than {place.get('sign change')} and lowers it beyond",
        "exponential": f"The effect of a spike has fallen to 37 % at {place.get('1/e (reach)')}",
        "disc": f"The effect of a spike ends at {place.get('radius')}",
    }[fit.model.kernel.name]
    assert marked(fit).title == said


def test_every_mark_is_drawn_with_its_row_and_number(fit):
    data = marked(fit)
    figure = draw_marked_kernel(data)
    top, strip, under = figure.axes
    drawn = {tuple(np.ravel(line.get_xydata())) for line in top.lines}
    rows = {tuple(np.ravel(line.get_xydata())) for line in strip.lines}
    for k, mark in enumerate(data.marks):
        assert (mark.distance_um, mark.jump) in drawn
        assert (mark.distance_um, k) in rows
    assert [label.get_text() for label in strip.get_yticklabels()] == [mark.name for mark in data.marks]
    assert [text.get_text().split(" µm (")[0] for text in strip.texts]
    assert len(strip.texts) == len(data.marks)
    assert under.get_xlabel() == "distance (µm)"


def test_open_ends_run_to_where_the_array_ends():
    law = kf.kernels.Exponential().at(amplitude=-0.3, length_um=200.0, reference_um=100.0)
    fit = model("exponential").fit(simulated(3, law, n_side=4), threads=2)
    data = marked(fit)
    assert data.marks[1].upper == np.inf
    strip = draw_marked_kernel(data).axes[1]
    right = max(float(np.max(line.get_xdata())) for line in strip.lines)
    assert right == pytest.approx(fit.span.largest_um)
    assert any("at least" in text.get_text() for text in strip.texts)


def test_nothing_is_drawn_without_coupling_or_without_a_fall():
    uncoupled = model("exponential").fit(simulated(8, NOTHING), threads=2)
    got = marked_kernel(uncoupled, uncoupled.derived())
    assert isinstance(got, Unavailable)
    assert got.reason == "no coupling to describe"
    flat = model("flat").fit(simulated(3, kf.kernels.Flat().at(amplitude=0.1), duration_s=60.0), threads=2)
    assert flat.verdict.found
    got = marked_kernel(flat, flat.derived())
    assert isinstance(got, Unavailable)
    assert "does not fall to half" in got.reason
