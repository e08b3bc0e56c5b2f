"""What counts as a number in an argument."""

from __future__ import annotations

import datetime
from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from kernelfit._validation import (
    check_callback,
    check_level,
    check_seed,
    check_threads,
    check_truth_value,
    described,
    distances,
    flat_numbers,
    given_as,
    is_number,
    is_whole,
    numbers,
    positive,
)
from kernelfit.errors import ArgumentError


@pytest.mark.parametrize("value", [1, 0, -2, 0.5, np.float32(0.25), np.int64(3), np.float64(1e-300)])
def test_numbers(value):
    assert is_number(value)


@pytest.mark.parametrize("value", ["1", None, True, np.nan, np.inf, -np.inf, 1j, [1.0], np.array([1.0, 2.0]), 10**400])
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
        (object(), "an object"),
        (10**400, "a number too large"),
        (np.str_("far"), "the text 'far'"),
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


@pytest.mark.parametrize(
    ("value", "words"),
    [
        ("far", "level='far'"),
        (np.str_("far"), "level='far'"),
        (1.5, "level=1.5"),
        (np.float64(np.nan), "level=nan"),
        (None, "level=None"),
        (True, "level=True"),
        ([0.5], "level (a list)"),
        (10**400, "level (a number too large)"),
    ],
)
def test_an_argument_is_named_with_what_was_given(value, words):
    assert given_as("level", value) == words


NO_NUMBERS = [None, "x", "1", True, 1j, [1], np.zeros(2), {}, pd.DataFrame({"a": [1.0, 2.0]}), object(), np.nan]


@pytest.mark.parametrize("value", [*NO_NUMBERS, 0, 1, 1.0, -0.5, 95])
def test_no_levels(value):
    with pytest.raises(ArgumentError, match=r"level.* must lie strictly between 0 and 1, such as 0\.95\."):
        check_level(value)


@pytest.mark.parametrize("value", [*NO_NUMBERS, -1, 1.0])
def test_no_seeds(value):
    with pytest.raises(ArgumentError, match=r"seed.* must be a whole number, 0 or more\."):
        check_seed(value)


@pytest.mark.parametrize("value", [v for v in NO_NUMBERS if v is not None] + [0, -1, 1.0])
def test_no_numbers_of_threads(value):
    with pytest.raises(ArgumentError, match=r"threads.* must be a whole number from 1 on, or None for all there are\."):
        check_threads(value)


@pytest.mark.parametrize("value", [*NO_NUMBERS, 0, -1])
def test_no_positive_numbers(value):
    with pytest.raises(ArgumentError, match=r"duration.* must be a positive number of seconds, such as 60\."):
        positive(value, "duration", "seconds, such as 60")


@pytest.mark.parametrize("value", [v for v in NO_NUMBERS if v is not None])
def test_what_cannot_be_called(value):
    with pytest.raises(ArgumentError, match=r"progress.* cannot be called\. Give a function"):
        check_callback(value)


def test_what_is_right_passes():
    check_level(np.float32(0.9))
    check_seed(np.int64(0))
    for nothing in (check_threads, check_callback):
        nothing(None)
    check_threads(2)
    check_callback(print)
    assert type(positive(np.int32(3), "duration", "seconds")) is float


@pytest.mark.parametrize(
    ("given", "made"),
    [
        (100, [100.0]),
        ([1, 2.5], [1.0, 2.5]),
        ((0,), [0.0]),
        (np.array([1, 2], dtype=np.uint8), [1.0, 2.0]),
        (pd.Series([1.0, 2.0], index=["a", "b"]), [1.0, 2.0]),
        (np.array([1, Fraction(1, 2)], dtype=object), [1.0, 0.5]),
        ([], []),
    ],
)
def test_lists_of_numbers(given, made):
    array = distances(given)
    assert array.dtype == np.float64
    assert array.tolist() == made


def test_numbers_keep_their_shape_and_are_not_the_callers():
    given = np.ones((2, 3))
    array = numbers(given, "x", "")
    array[:] = 0.0
    assert (given == 1.0).all()
    assert numbers(3, "x", "").shape == ()


@pytest.mark.parametrize(
    ("given", "says"),
    [
        (None, "distances_um=None is no number. Give distances in µm"),
        ("far", "distances_um='far' is no number"),
        ("100", "distances_um='100' is no number"),
        (b"100", "distances_um (bytes) is no number"),
        ({}, "distances_um (a dictionary) is no number"),
        (True, "distances_um=True is no number"),
        (1j, "distances_um (a complex number) is no number"),
        (-1, "distances_um=-1 is below 0"),
        (np.nan, "distances_um=nan is not finite"),
        ([1.0, "2"], "distances_um holds the text '1.0', which is no number"),  # numpy makes text of both
        ([1.0, None], "distances_um holds None, which is no number"),
        ([1.0, np.inf], "distances_um holds inf, which is not finite"),
        ([1.0, -2.0], "distances_um holds -2.0, which is below 0"),
        ([True, False], "distances_um holds a truth value, which is no number"),
        ([10**400], "distances_um holds a number too large, which is no number"),
        (["a"], "distances_um holds the text 'a', which is no number"),
        ([pd.Timestamp(0)], "distances_um holds a date, which is no number"),
        ([[1.0], [2.0, 3.0]], "distances_um: a list cannot be made an array of numbers"),
        (np.ones((2, 2)), "distances_um has shape (2, 2), and a flat list is needed"),
    ],
)
def test_no_lists_of_numbers(given, says):
    with pytest.raises(ArgumentError) as refused:
        distances(given)
    assert str(refused.value).startswith(says)
    assert str(refused.value).endswith("finite and not negative, such as [100.0, 200.0].")


def test_limits_are_said():
    with pytest.raises(ArgumentError, match=r"lags_s holds 1\.0, which is below 2\. Give more\."):
        flat_numbers([3.0, 1.0], "lags_s", "Give more.", least=2.0)
