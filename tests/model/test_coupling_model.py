"""What is fitted, as a description: immutable, checked when it is made, comparable."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

import kernelfit as kf
from kernelfit.errors import ArgumentError
from kernelfit.model.links import LINKS, link_from


def test_defaults_of_the_contract():
    model = kf.CouplingModel()
    assert model.kernel == kf.kernels.Gaussian()
    assert model.link.name == "exp"
    assert (model.bin_width, model.leak_rate, model.max_distance, model.warm_up_s) == (0.001, None, None, 0.0)
    assert model.same_site == "exclude"
    assert model.after_spike == kf.terms.AfterSpike()
    assert model.rate_course.name == "none"


def test_a_description_is_frozen_and_comparable():
    a, b = kf.CouplingModel(kernel="spline", leak_rate=40), kf.CouplingModel(kernel=kf.kernels.Spline(), leak_rate=40.0)
    assert a == b
    assert hash(a) == hash(b)
    assert a != kf.CouplingModel(kernel="spline", leak_rate=41)
    with pytest.raises(dataclasses.FrozenInstanceError):
        a.bin_width = 0.002


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ({"kernel": "gausian"}, r"kernel='gausian': no such kernel\. Did you mean 'gaussian'\?"),
        ({"kernel": 3}, "kernel=3: need a name"),
        ({"kernel": kf.kernels.Gaussian}, r"make an object: Gaussian\(\)"),
        ({"link": "expo"}, r"link='expo' is not known\. .* Did you mean 'exp'\?"),
        ({"bin_width": 0}, "bin_width=0 must be a positive number of seconds, such as 0.001"),
        ({"bin_width": "1 ms"}, "bin_width='1 ms'"),
        ({"bin_width": True}, "bin_width=True"),
        ({"bin_width": float("nan")}, "bin_width=nan"),
        ({"leak_rate": -1}, "leak_rate=-1 must be a positive number of 1/s"),
        ({"max_distance": 0.0}, "max_distance=0.0 must be a positive number of µm"),
        ({"same_site": "keep"}, "same_site='keep' is not known. Say 'exclude', 'own' or 'kernel'"),
        ({"after_spike": "yes"}, r"after_spike='yes' is not known\. Say 'basis', 'none' or give"),
        ({"rate_course": "shared"}, r"rate_course='shared' is not known\. Say 'none'"),
        ({"warm_up_s": -0.1}, "warm_up_s=-0.1 must be a number of seconds, 0 or more"),
        ({"warm_up_s": float("inf")}, "warm_up_s=inf"),
    ],
)
def test_refusals_name_the_argument_the_value_and_the_remedy(options, says):
    with pytest.raises(ArgumentError, match=says):
        kf.CouplingModel(**options)


@pytest.mark.parametrize("bin_s", [0.0005, 0.001, 0.005, 0.02, 0.5, 2.0])
def test_after_spike_time_constants_run_from_a_bin_to_the_longest(bin_s):
    """Log-spaced, neighbours at most a factor of about four apart, so that traces overlap."""
    constants = kf.terms.AfterSpike().constants(bin_s)
    assert constants[0] == pytest.approx(bin_s)
    assert constants[-1] == pytest.approx(max(1.0, bin_s))
    if constants.size > 1:
        ratio = constants[1:] / constants[:-1]
        np.testing.assert_allclose(ratio, ratio[0])
        assert 1.0 < ratio[0] <= 10 ** (1 / 1.7) + 1e-9


def test_given_time_constants_are_kept():
    term = kf.terms.AfterSpike(time_constants_s=[0.003, 0.04])
    np.testing.assert_array_equal(term.constants(0.001), [0.003, 0.04])
    assert kf.CouplingModel(after_spike="none").after_spike.constants(0.001).size == 0


@pytest.mark.parametrize("name", LINKS)
def test_a_link_its_slope_and_its_inverse_belong_together(name):
    """Source: definition of a derivative and of an inverse; covers links not yet written."""
    link = link_from(name)
    eta = np.linspace(-4.0, 4.0, 33)
    h = 1e-5
    np.testing.assert_allclose(link.slope(eta), (link.rate(eta + h) - link.rate(eta - h)) / (2 * h), rtol=1e-8)
    np.testing.assert_allclose(link.predictor(link.rate(eta)), eta, atol=1e-12)
    assert link.predictor(np.array([0.0]))[0] == -np.inf
