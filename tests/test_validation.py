"""What counts as a number in an argument."""

from __future__ import annotations

import datetime
from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from kernelfit._validation import check_truth_value, described, is_number, is_whole
from kernelfit.errors import ArgumentError


@pytest.mark.parametrize("value", [1, 0, -2, 0.5, np.float32(0.25), np.int64(3), np.float64(1e-300)])
def test_numbers(value):
    assert is_number(value)


@pytest.mark.parametrize("value", ["1", None, True, np.nan, np.inf, -np.inf, 1j, [1.0], np.array([1.0, 2.0])])
def test_no_numbers(value):
    assert not is_number(value)


def test_whole_numbers():
    assert [v for v in (1, np.int32(2), 1.0, True, "1", None, np.float64(1)) if is_whole(v)] == [1, np.int32(2)]


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (None, "None"),
        (-1, "-1"),
        (np.float64(0.5), "0.5"),
        (np.nan, "nan"),
        (True, "a truth value"),
        (np.bool_(False), "a truth value"),
        ("far", "the text 'far'"),
        ("x" * 500, "the text '" + "x" * 57 + "...'"),
        (b"x", "bytes"),
        (Path("x"), "a path"),
        (1j, "a complex number"),
        (Fraction(1, 2), "1/2"),
        ([1], "a list"),
        ((1,), "a tuple"),
        ({1: 2}, "a dictionary"),
        ({1}, "a set"),
        (np.zeros(2), "an array"),
        (pd.DataFrame(), "a DataFrame"),
        (pd.Timestamp(0), "a date"),
        (np.datetime64("2026-01-01"), "a date"),
        (datetime.timedelta(1), "a length of time"),
        (iter([]), "a list_iterator"),
    ],
)
def test_what_was_given_is_said_in_words(value, words):
    assert described(value) == words


@pytest.mark.parametrize("value", [True, False, np.bool_(True)])
def test_truth_values(value):
    check_truth_value(value, "drop")


@pytest.mark.parametrize("value", ["no", 0, 1.0, None, []])
def test_no_truth_values(value):
    with pytest.raises(ArgumentError, match=r"drop: .* is neither True nor False"):
        check_truth_value(value, "drop")
