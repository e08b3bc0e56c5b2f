"""The figure of the kernel over its smoothing: its data first, then that it draws them."""

from __future__ import annotations

import matplotlib as mpl
import numpy as np
import pytest

import kernelfit as kf
from kernelfit.fitting.smoothing_path import SmoothingPath
from kernelfit.fitting.validation import HeldOut
from kernelfit.kernels import DistanceRange
from kernelfit.report.figures_smoothing import DEEPEST_SHOWN, draw_smoothing, smoothing_data
from kernelfit.report.look import inline_svg, look

SMOOTHING = np.array([0.1, 10.0, 1e3, 1e5])


def path(*, chosen=2, validated=True, by="likelihood"):
    """An invented path: kernels from wavy to straight; the array has no pairs from 300 to 900 µm."""
    return SmoothingPath(
        smoothing=SMOOTHING,
        effective=np.array([6.0, 4.5, 3.0, 2.0]),
        log_likelihood=np.array([-100.0, -101.0, -102.0, -106.0]),
        log_marginal_likelihood=np.array([-130.0, -112.0, -110.0, -111.5]),
        leak_rate=np.full(4, 40.0),
        converged=np.ones(4, dtype=bool),
        theta=np.linspace(0.2, 0.0, 6) + np.array([[0.1], [0.05], [0.02], [0.0]]) * np.array([1, -1, 1, -1, 1, -1]),
        chosen=chosen,
        chosen_by=by,
        held_out=HeldOut(SMOOTHING, np.array([[-50.0, -48.0, -47.0, -49.0], [-51.0, -49.0, -49.5, -49.0]]), 0.1)
        if validated
        else None,
        kernel=kf.kernels.Spline(n_basis=6),
        span=DistanceRange(100.0, 100.0, 1000.0),
        distinct_um=np.concatenate([np.linspace(100.0, 300.0, 21), np.linspace(900.0, 1000.0, 11)]),
    )


def test_what_the_figure_shows():
    data = smoothing_data(path())
    assert data.title == "3 effective parameters out of 6 are left by the smoothing of this fit"
    np.testing.assert_allclose(data.marginal, [-20.0, -2.0, 0.0, -1.5])
    np.testing.assert_allclose(data.held_out, [-4.5, -0.5, 0.0, -1.5])
    # differences of the two folds from the best: their standard deviation times sqrt(2)
    np.testing.assert_allclose(
        data.held_out_error, np.sqrt(2) * np.std([[-3, -1, 0, -2], [-1.5, 0.5, 0, 0.5]], 0, ddof=1)
    )
    known = np.isfinite(data.distance_um)
    assert not known.all()  # nothing is drawn where the array has no pairs
    assert not ((data.distance_um[known] > 300.0) & (data.distance_um[known] < 900.0)).any()
    np.testing.assert_allclose(data.jump[:, known], path().kernels(data.distance_um[known]))
    assert "chosen by the marginal likelihood" in data.caption
    assert "stretches of time left out" in data.caption
    assert list(data.numbers()["smoothing"]) == SMOOTHING.tolist()
    assert data.numbers()["held_out_below_best"].tolist() == data.held_out.tolist()


def test_without_smoothing_in_the_fit_and_without_validation():
    data = smoothing_data(path(chosen=None, validated=False, by="stated"))
    assert data.title.startswith("Without smoothing the kernel has 6 parameters")
    assert "thick" not in data.caption
    assert "left out" not in data.caption
    assert data.numbers()["held_out_below_best"].isna().all()


@pytest.mark.parametrize(("chosen", "validated"), [(2, True), (2, False), (None, False)])
def test_it_draws_a_line_for_each_smoothing(chosen, validated):
    before = dict(mpl.rcParams)
    data = smoothing_data(path(chosen=chosen, validated=validated))
    figure = draw_smoothing(data)
    top, under = figure.axes[:2]
    drawn = [line for line in top.lines if np.size(line.get_xdata()) == data.distance_um.size]
    assert len(drawn) == 4 + (chosen is not None)  # the chosen one has a white edge
    assert under.get_xscale() == "log"
    assert under.get_ylim()[0] == pytest.approx(-1.1 * DEEPEST_SHOWN)
    assert under.get_xlabel() == "smoothing"
    assert figure.axes[2].get_ylabel() == "effective parameters"
    labels = [text.get_text() for text in under.get_legend().get_texts()] if under.get_legend() else []
    assert ("stretches left out" in labels) == validated
    with look():
        figure.canvas.draw()
        shown = {t.get_text() for t in under.get_xticklabels()}
        assert {"0.1", "1,000"} <= shown
    svg = inline_svg(figure, "smoothing", "a figure")
    assert "effective parameters" in svg
    assert "mathdefault" not in svg
    assert dict(mpl.rcParams) == before


def test_of_a_real_path():
    rng = np.random.default_rng(2)
    positions = np.array([[100.0 * (k % 3), 100.0 * (k // 3)] for k in range(9)]) + rng.uniform(-15, 15, (9, 2))
    law = kf.kernels.Gaussian().at(amplitude=0.25, length_um=120.0, reference_um=100.0)
    recording = kf.simulate_recording(positions, law, 6.0, 40.0, 30.0, 1, bin_width=0.005)
    kernel = kf.kernels.Spline(n_basis=6, smoothing=10.0)
    fit = kf.CouplingModel(kernel, bin_width=0.005, after_spike="none", leak_rate=40.0).fit(recording, threads=2)
    data = smoothing_data(fit.smoothing_path([1.0, 100.0], threads=2))
    assert data.smoothing.tolist() == [1.0, 10.0, 100.0]
    assert data.chosen == 1
    assert "chosen by the model" in data.caption
    draw_smoothing(data)
