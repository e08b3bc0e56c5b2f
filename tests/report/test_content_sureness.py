"""The section on how sure the numbers are: what its titles and sentences claim, from numbers written out here."""

from __future__ import annotations

import math

import numpy as np
import pytest

from kernelfit.report.content_sureness import kinds_title
from kernelfit.report.sureness_data import Compared, Interval

ALIKE = np.array([1.2, 0.9])


def compared(*ends, name="amplitude (per spike)", estimate=0.36):
    return Compared(name, estimate, tuple(Interval(f"kind {k}", *e) for k, e in enumerate(ends)))


def test_kinds_agree_where_every_end_does():
    assert kinds_title(ALIKE, [compared((0.20, 0.52), (0.22, 0.55))]) == "All kinds of interval agree"


@pytest.mark.parametrize(
    "ends",
    [
        ((0.21, 0.52), (0.07, 0.66)),
        ((0.07, 0.66), (0.21, 0.52)),
        ((0.21, 0.52), (0.21, 0.70)),
        ((0.21, 0.52), (0.05, 0.52)),
        ((0.21, 0.52), (0.21, math.inf)),
        ((0.21, 0.52), (-math.inf, 0.52)),
        ((0.21, 0.52), (0.38, 0.52)),  # leaves the estimate out
    ],
)
def test_ends_that_differ_are_no_agreement_whatever_the_ratio_of_standard_errors(ends):
    others = compared((250.0, 270.0), (251.0, 271.0), name="length (µm)", estimate=260.0)
    assert kinds_title(ALIKE, [others, compared(*ends)]) == "Kinds of interval differ for amplitude (per spike)"


def test_ends_open_in_every_kind_agree_and_one_interval_alone_says_nothing():
    assert kinds_title(ALIKE, [compared((0.2, math.inf), (0.21, math.inf))]) == "All kinds of interval agree"
    assert kinds_title(ALIKE, [compared((0.2, 0.5), (math.nan, math.nan))]) == "Intervals of every kind"


@pytest.mark.parametrize(("ratios", "shown"), [([1.2, 3.0], "1.2 to 3.0"), ([0.5, 0.9], "0.50 to 0.90")])
def test_robust_ones_much_wider_or_narrower_are_the_title(ratios, shown):
    title = kinds_title(np.array([*ratios, np.nan]), [compared((0.2, 0.5), (0.2, 0.5))])
    assert title == f"Robust intervals are {shown} times as wide as those that take the model at its word"
