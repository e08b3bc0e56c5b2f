"""Bootstrap tables and bands say what the table of parameters says of bounds, loose amplitudes and no coupling."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from worlds import LEAK, model, simulated

from kernelfit import kernels
from kernelfit.fitting.detection import CouplingVerdict
from kernelfit.fitting.problem import FASTEST_LEAK_BINS, SLOWEST_LEAK_SHARE

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")

NOT_FOUND = CouplingVerdict(False, 0.4, 3.0, "No coupling to describe.")


@pytest.fixture(scope="module")
def fit():
    return model("gaussian").fit(simulated(1, duration_s=30.0), threads=2)


def boot_of(fit, **replicates):
    """One-step replicates, with some shared parameters put where a test wants them."""
    boot = fit.bootstrap("one-step", n_replicates=399, seed=3)
    rows = boot.replicates.copy()
    for place, values in replicates.items():
        rows[:, int(place[1:])] = values
    return dataclasses.replace(boot, replicates=rows)


def test_a_strong_amplitude_beside_a_test_that_found_nothing_gives_way_in_every_table(fit):
    found = boot_of(fit).intervals()
    assert found.loc["amplitude", "lower"] > 0.0
    unsure = dataclasses.replace(fit, verdict=NOT_FOUND)
    boot = boot_of(unsure)
    row, stated = boot.intervals().loc["amplitude"], unsure.parameters.loc["amplitude"]
    assert row["lower"] == stated["lower"] == 0.0
    assert row["note"] == stated["note"]
    before = found.loc["amplitude"]
    reach = 3.0 / 1.959964 * (before["upper"] - before["estimate"])
    assert row["upper"] - row["estimate"] == pytest.approx(reach, rel=1e-6)
    assert boot.intervals().loc[["length_um", "leak_rate"], "estimate"].isna().all()
    apart_um = fit.distinct_um[[0, 10, -1]]
    for method in ("symmetric", "studentised"):
        band = boot.kernel_band(apart_um, method=method)
        assert ((band["lower"] <= 0.0) & (band["upper"] >= 0.0)).all()
    assert boot_of(fit).kernel_band(apart_um[:1])["lower"][0] > 0.0


def test_without_a_length_or_a_leak_to_search_for_nothing_is_widened():
    law = kernels.Flat().at(amplitude=0.2)
    coupled = model("flat", leak_rate=LEAK).fit(simulated(2, law, duration_s=20.0), threads=2)
    row = boot_of(dataclasses.replace(coupled, verdict=NOT_FOUND)).intervals().loc["amplitude"]
    assert row["upper"] == pytest.approx(boot_of(coupled).intervals().loc["amplitude", "upper"], rel=1e-12)
    assert row["note"] == (
        "no coupling found; interval taken out to 0, which the test of any coupling does not exclude"
    )


def test_ends_stop_at_the_bounds_of_the_parameters(fit):
    far = np.linspace(-12.0, 12.0, 399)
    table = boot_of(fit, _1=fit.shared[1] + far, _2=fit.shared[2] + far).intervals()
    leak, length = table.loc["leak_rate"], table.loc["length_um"]
    assert leak["upper"] == pytest.approx(FASTEST_LEAK_BINS / fit.model.bin_width)
    assert leak["lower"] == pytest.approx(SLOWEST_LEAK_SHARE / (fit.n_bins * fit.model.bin_width))
    assert (length["lower"], length["upper"]) == pytest.approx(fit.span.length_limits)
    assert "lower end at its bound" in leak["note"]
    assert "upper end at its bound" in length["note"]


def test_an_amplitude_that_nothing_holds_has_no_number_and_an_open_end(fit):
    at_bound, reasons = np.zeros(3), ("no spike follows another", "", "")
    at_bound[0] = -1.0
    loose = dataclasses.replace(fit, at_bound=at_bound, bound_reasons=reasons)
    boot = boot_of(loose)
    row, stated = boot.intervals().loc["amplitude"], loose.parameters.loc["amplitude"]
    assert np.isnan(row["estimate"])
    assert np.isnan(stated["estimate"])
    assert row["lower"] == stated["lower"] == -np.inf
    assert row["note"].startswith("not identified: no spike follows another")
    band = boot.kernel_band(fit.distinct_um[:2])
    assert band[["estimate", "lower", "upper"]].isna().all(axis=None)


# --- smoothing that the data chose ----------------------------------------------------------------------------


def test_one_step_says_that_it_holds_the_smoothing_and_is_the_sandwich_without_what_that_adds():
    recording = simulated(3, n_side=4, duration_s=30.0)
    chosen = model(kernels.Spline(n_basis=6, smoothing="likelihood"), leak_rate=LEAK).fit(recording, threads=2)
    boot = chosen.bootstrap("one-step", n_replicates=4000, seed=1)
    assert "at the smoothing chosen (what not knowing it adds to the intervals of the fit is not" in boot.sentence
    influence, n = chosen.uncertainty.block_influence, chosen.n_blocks
    sandwich = np.diag(n / (n - 1.0) * influence.T @ influence)
    np.testing.assert_allclose(np.var(boot.replicates, axis=0), sandwich, rtol=0.1)  # 2 % by chance
    robust = np.diag(chosen.uncertainty.shared_robust)
    assert (robust >= sandwich * (1.0 - 1e-9)).all()
    assert (robust > 1.01 * sandwich).any()


def test_one_step_says_nothing_of_a_smoothing_that_was_stated(fit):
    assert "smoothing" not in boot_of(fit).sentence
