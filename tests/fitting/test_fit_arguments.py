"""Calls of a fit's methods that cannot be meant: refused in words that name argument and value, before any work.

Expected words are those of the docstrings: which argument, what it was, what to give instead.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from worlds import model, simulated

from kernelfit.errors import ArgumentError, RecordingError

TEXT, LIST = "x", ["a", "b"]
NO_NUMBERS = [TEXT, "1", LIST, {}, 1j, True, np.zeros((2, 2), dtype=complex), object()]


@pytest.fixture(scope="module")
def fit():
    return model(after_spike="basis").fit(simulated(1), threads=1)


@pytest.fixture(scope="module")
def bootstrap(fit):
    return fit.bootstrap(n_replicates=50)


@pytest.fixture(scope="module")
def goodness(fit):
    return fit.goodness()


CALLS = {
    "goodness seed": lambda f, v: f.goodness(seed=v),
    "kernel distances_um": lambda f, v: f.kernel(v),
    "kernel_band distances_um": lambda f, v: f.kernel_band(v),
    "kernel_band level": lambda f, v: f.kernel_band([100.0], v),
    "fitted_rates start_s": lambda f, v: f.fitted_rates(v, 2.0),
    "fitted_rates stop_s": lambda f, v: f.fitted_rates(0.0, v),
    "after_spike_curves lags_s": lambda f, v: f.after_spike_curves(v),
    "after_spike_band lags_s": lambda f, v: f.after_spike_band("u01", v),
    "after_spike_band level": lambda f, v: f.after_spike_band("u01", [0.01], v),
    "derived distances_um": lambda f, v: f.derived(distances_um=v),
    "derived level": lambda f, v: f.derived(v),
    "derived bootstrap": lambda f, v: f.derived(bootstrap=v),
    "profile name": lambda f, v: f.profile(v),
    "profile level": lambda f, v: f.profile("length_um", v),
    "profile n_points": lambda f, v: f.profile("length_um", n_points=v),
    "profile threads": lambda f, v: f.profile("length_um", threads=v),
    "profile progress": lambda f, v: f.profile("length_um", progress=v),
    "profile_contour first": lambda f, v: f.profile_contour(v, "length_um"),
    "profile_contour second": lambda f, v: f.profile_contour("length_um", v),
    "profile_contour n_points": lambda f, v: f.profile_contour("length_um", "amplitude", n_points=v),
    "compatible_amplitudes lengths_um": lambda f, v: f.compatible_amplitudes(v),
    "compatible_amplitudes level": lambda f, v: f.compatible_amplitudes([100.0], v),
    "compatible_amplitudes leak": lambda f, v: f.compatible_amplitudes([100.0], leak=v),
    "compatible_amplitudes progress": lambda f, v: f.compatible_amplitudes([100.0], progress=v),
    "bootstrap kind": lambda f, v: f.bootstrap(v),
    "bootstrap n_replicates": lambda f, v: f.bootstrap(n_replicates=v),
    "bootstrap seed": lambda f, v: f.bootstrap(n_replicates=5, seed=v),
    "bootstrap recording": lambda f, v: f.bootstrap(n_replicates=5, recording=v),
    "bootstrap jobs": lambda f, v: f.bootstrap(n_replicates=5, jobs=v),
    "bootstrap progress": lambda f, v: f.bootstrap(n_replicates=5, progress=v),
    "influence threads": lambda f, v: f.influence(threads=v),
    "problem recording": lambda f, v: f.problem(v),
    "with_covariance covariance": lambda f, v: f.with_covariance(v),
}


@pytest.mark.parametrize("value", NO_NUMBERS, ids=lambda v: type(v).__name__)
@pytest.mark.parametrize("call", CALLS)
def test_what_cannot_be_meant_names_the_argument(fit, call, value):
    argument = call.split()[1]
    with pytest.raises(ArgumentError, match=rf"^{argument}( |=|:)|, {argument}( |=)") as refused:
        CALLS[call](fit, value)
    said = str(refused.value)
    assert "object at 0x" not in said
    assert "\n" not in said
    if isinstance(value, str):
        assert f"{value!r}" in said


MAY_BE_NONE = {"recording", "threads", "jobs", "progress", "bootstrap", "leak", "lengths_um"}
NEEDED = [c for c in CALLS if c.split()[1] not in MAY_BE_NONE and c != "derived distances_um"]


@pytest.mark.parametrize("call", NEEDED)
def test_nothing_is_no_value_where_one_is_needed(fit, call):
    with pytest.raises(ArgumentError, match=rf"{call.split()[1]}=None"):
        CALLS[call](fit, None)


@pytest.mark.parametrize("value", ["no", 0, None, LIST])
def test_true_or_false(fit, bootstrap, value):
    for band in (fit.kernel_band, bootstrap.kernel_band):
        with pytest.raises(ArgumentError, match=r"simultaneous: .* is neither True nor False"):
            band([100.0], simultaneous=value)
    with pytest.raises(ArgumentError, match=r"simultaneous: .* is neither True nor False"):
        fit.after_spike_band("u01", [0.01], simultaneous=value)


@pytest.mark.parametrize("value", [None, *NO_NUMBERS], ids=lambda v: type(v).__name__)
def test_calls_of_a_bootstrap(bootstrap, value):
    with pytest.raises(ArgumentError, match=r"^distances_um"):
        bootstrap.kernel_band(value)
    for call in (bootstrap.intervals, lambda level: bootstrap.kernel_band([100.0], level)):
        with pytest.raises(ArgumentError, match=r"^level"):
            call(value)
    for call in (bootstrap.intervals, lambda method: bootstrap.kernel_band([100.0], method=method)):
        with pytest.raises(ArgumentError, match=r"^(method|level)"):
            call(method=value)
    for call in (bootstrap.of, bootstrap.of_kernel):
        with pytest.raises(ArgumentError, match=r"^function.* cannot be called"):
            call(value)


@pytest.mark.parametrize("value", [*NO_NUMBERS, pd.Series([1, 2])], ids=lambda v: type(v).__name__)
def test_calls_of_a_goodness(goodness, value):
    for call in (goodness.z, goodness.ks_curve):
        with pytest.raises(RecordingError, match=r"^unit.* is not in this fit"):
            call(value)
    with pytest.raises(ArgumentError, match=r"^n_lags.* must be a whole number from 1 on; 10 is usual"):
        goodness.serial_independence(n_lags=value)


def test_a_unit_that_is_none(fit):
    for value in (*NO_NUMBERS, None):
        with pytest.raises(ArgumentError, match=r"^unit.* is not in this fit\. Its units: u01, u02, .*\.\.\."):
            fit.after_spike_band(value, [0.01])


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_distances_of_a_smoothing_path_and_its_grid():
    spline = model("spline").fit(simulated(1, duration_s=20.0), threads=1)
    for value in (*NO_NUMBERS, [0.0, 1.0], []):
        with pytest.raises(ArgumentError, match=r"^smoothing.*Give positive numbers, such as"):
            spline.smoothing_path(value)
    path = spline.smoothing_path([10.0], threads=1)
    with pytest.raises(ArgumentError, match=r"^distances_um='far' is no number"):
        path.kernels("far")
    with pytest.raises(ArgumentError, match=r"^validate: the text 'no' is neither True nor False"):
        spline.smoothing_path([10.0], validate="no")


def test_single_numbers_and_lists_are_taken(fit):
    assert fit.kernel(100.0).shape == ()
    assert fit.kernel([[100.0, 200.0]]).shape == (1, 2)
    assert len(fit.kernel_band(100)) == 1
    assert fit.after_spike_curves(0.01).shape == (9, 1)
    np.testing.assert_array_equal(fit.after_spike_curves([0.01]), fit.after_spike_curves(0.01))
    assert "percent_change_at_100_um" in fit.derived(distances_um=100).index
