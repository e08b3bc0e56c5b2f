"""The section on how sure the numbers are: what its titles and sentences claim, from numbers written out here."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from fakes import fake_fit

from kernelfit.errors import Unavailable
from kernelfit.fitting.block_length import BlockCurve
from kernelfit.inference.influence import Influence
from kernelfit.inference.sureness import Sureness
from kernelfit.report.content_sureness import blocks_text, blocks_title, influence_sentence, kinds_title
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


def curve(std_error, n_blocks, *, chosen, settled=True):
    """Of one parameter beside one that was not estimated."""
    n = np.array(n_blocks, dtype=float)
    errors = np.column_stack([std_error, np.full(n.size, np.nan)])
    return BlockCurve(240.0 / n, n, errors, np.zeros_like(errors), 1.65 / np.sqrt(n), chosen, settled)


def test_few_blocks_without_correlation_are_no_evidence_of_long_enough_ones():
    """1.65/sqrt(10) - 1/10 = 0.42: what ten blocks would show."""
    few = curve([0.9, 1.0, 1.1], [40, 20, 10], chosen=2)
    assert blocks_title(few) == "No dependence between neighbouring blocks could be seen (10 blocks)"
    text = blocks_text(few, "24 s")
    assert "no dependence between neighbouring blocks could be seen (10 blocks" in text
    assert "a correlation above 0.42" in text
    assert "too few blocks to try longer ones" in text
    assert "long enough" not in text


@pytest.mark.parametrize(
    ("longer", "flat"),
    [(1.0, True), (1.26, True), (1.28, False), (0.66, True)],  # 1.645/sqrt(2 (20 - 1)) = 0.267; smaller is no sign
)
def test_standard_errors_do_not_grow_only_where_longer_blocks_were_tried(longer, flat):
    tried = curve([0.5, 1.0, longer], [80, 40, 20], chosen=1)
    assert (blocks_title(tried) == "Standard errors do not grow with the length of the blocks") is flat
    assert ("standard errors do not grow" in blocks_text(tried, "6 s")) is flat
    assert ("grow by more than chance" in blocks_text(tried, "6 s")) is not flat


def test_blocks_that_go_together_are_too_short():
    short = curve([0.9, 1.0, 1.1], [80, 40, 20], chosen=2, settled=False)
    assert "still grow" in blocks_title(short)
    assert "lower limits" in blocks_text(short, "12 s")


def carried(stretch_converged, unit_converged):
    """A stretch that moves the length of 262 µm by 30 (one step) or 44, a unit that moves it by -20 or -31."""
    refits = pd.DataFrame(
        {
            "left_out": ["stretch", "unit"],
            "which": ["3 to 6 s", "u7"],
            "parameter": ["length_um", "length_um"],
            "one_step": [30.0, -20.0],
            "refitted": [44.0, -31.0],
            "converged": [stretch_converged, unit_converged],
        }
    )
    moves = pd.DataFrame({"length_um_in_std_errors": [1.5, -0.2]})
    influence = Influence(("length_um",), moves, moves, moves, refits)
    return Sureness(Unavailable("not asked for"), influence, {}, pd.DataFrame(), {})


def test_a_refit_that_converged_is_quoted_and_one_that_did_not_is_not():
    fit = fake_fit()
    both = influence_sentence(fit, carried(True, True))
    assert "would be 306 instead of 262 µm (refitted)" in both
    assert "would be 231 instead of 262 µm (refitted)" in both
    one = influence_sentence(fit, carried(False, True))
    assert "would be 292 instead of 262 µm (in one step; the refit did not converge)" in one
    assert "would be 231 instead of 262 µm (refitted)" in one
    assert "306" not in one
