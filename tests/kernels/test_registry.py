"""Kernels by name, by object, by description."""

from __future__ import annotations

import pytest

from kernelfit import kernels
from kernelfit.errors import ArgumentError


@pytest.mark.parametrize("name", sorted(kernels.KERNELS))
def test_by_name_and_as_it_is(name):
    kernel = kernels.kernel_from(name)
    assert kernel.name == name
    assert kernels.kernel_from(kernel) is kernel
    assert hash(kernel) == hash(kernels.kernel_from(name))


@pytest.mark.parametrize(
    ("wrong", "words"),
    [
        ("Gausian", "Did you mean 'gaussian'"),
        ("power_law", "Did you mean 'power-law'"),
        ("Mexican hat", "Did you mean 'mexican-hat'"),
        ("zzz", "no such kernel. Known: flat, exponential"),
        (kernels.Gaussian, r"Gaussian\(\)"),
        (3, "need a name"),
        (None, "need a name"),
    ],
)
def test_wrong_kernels_are_refused_with_the_way_out(wrong, words):
    with pytest.raises(ArgumentError, match=words):
        kernels.kernel_from(wrong)


def test_wrong_descriptions_are_refused():
    with pytest.raises(
        ArgumentError, match=r"no option 'knots'\. Its options: n_basis, smoothing, order, axis, ridge"
    ):
        kernels.kernel_from_description("spline", {"knots": 3})
    with pytest.raises(ArgumentError, match="Its options: ridge"):
        kernels.kernel_from_description("flat", {"n_basis": 3})
    with pytest.raises(ArgumentError, match="n_basis=2"):
        kernels.kernel_from_description("spline", {"n_basis": 2})
