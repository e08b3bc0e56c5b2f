"""Choices of a model: what is refused, in which words, and what numpy's numbers become."""

from __future__ import annotations

import json

import numpy as np
import pytest

from kernelfit import CouplingModel, kernels, terms
from kernelfit.errors import ArgumentError


def test_numpy_numbers_are_numbers():
    model = CouplingModel(bin_width=np.float32(0.5), leak_rate=np.int64(50), max_distance=np.float64(300))
    assert (model.bin_width, model.leak_rate, model.max_distance) == (0.5, 50.0, 300.0)
    assert all(type(v) is float for v in (model.bin_width, model.leak_rate, model.max_distance))


@pytest.mark.parametrize("value", [True, "0.001", 0, -1.0, np.nan, np.inf, [0.001]])
@pytest.mark.parametrize("name", ["bin_width", "leak_rate", "max_distance"])
def test_what_is_not_a_positive_number_is_refused(name, value):
    with pytest.raises(ArgumentError, match=f"{name}.* must be a positive number of"):
        CouplingModel(**{name: value})


@pytest.mark.parametrize("value", ["1", -0.1, np.nan, None])
def test_a_warm_up_is_a_time(value):
    with pytest.raises(ArgumentError, match=r"warm_up_s=.* must be a number of seconds, 0 or more"):
        CouplingModel(warm_up_s=value)


@pytest.mark.parametrize(
    "value", [0.1, "0.1", (), (0.1, 0.1), (0.2, 0.1), (0.0, 0.1), (-0.1,), (np.nan,), (0.1, np.inf), ("0.1",), (True,)]
)
def test_time_constants_are_rising_positive_seconds(value):
    with pytest.raises(ArgumentError, match=r"time_constants_s=.* must be positive seconds, each longer"):
        terms.AfterSpike(value)


@pytest.mark.parametrize("options", [{"longest_s": "1"}, {"longest_s": 0.0}, {"ridge": -1.0}, {"ridge": "0"}])
def test_options_of_the_after_spike_term_are_numbers(options):
    with pytest.raises(ArgumentError, match=r"after_spike: (longest_s|ridge)="):
        terms.AfterSpike(**options)


def test_after_spike_takes_arrays_and_keeps_plain_numbers():
    term = terms.AfterSpike(np.array([0.01, 0.1]), longest_s=np.float32(0.5), ridge=np.int64(0))
    assert term.time_constants_s == (0.01, 0.1)
    assert json.dumps([term.time_constants_s, term.longest_s, term.ridge])


def test_spline_keeps_plain_numbers():
    """Options are written as JSON, which knows no number of numpy."""
    kernel = kernels.Spline(n_basis=np.int64(6), smoothing=np.float32(2), order=np.int32(1))
    assert json.loads(json.dumps(kernel.describe())) == {
        "n_basis": 6, "smoothing": 2.0, "order": 1, "axis": "distance"
    }  # fmt: skip
    with pytest.raises(ArgumentError, match="smoothing='2'"):
        kernels.Spline(smoothing="2")
