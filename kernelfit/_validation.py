"""Checks of arguments that several parts share: what counts as a number, and what else was given, in words."""

from __future__ import annotations

import datetime
import math
import os
from collections.abc import Mapping
from numbers import Integral, Number, Real
from typing import TypeGuard

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.errors import ArgumentError, shortened


def is_number(value: object) -> TypeGuard[float]:
    """Whether this is a finite number, Python's or numpy's; True and False are none."""
    if not isinstance(value, Real) or isinstance(value, bool):
        return False
    try:
        return math.isfinite(value)
    except OverflowError:  # a whole number that no float holds
        return False


def is_whole(value: object) -> TypeGuard[int]:
    """Whether this is a whole number, Python's or numpy's; True and False are none."""
    return isinstance(value, Integral) and not isinstance(value, bool)


# --- what was given, in words -----------------------------------------------------------------------------

# By type; the first that fits is said.
_IN_WORDS: tuple[tuple[type | tuple[type, ...], str], ...] = (
    ((bool, np.bool_), "a truth value"),
    (Number, "a complex number"),
    (bytes, "bytes"),
    (os.PathLike, "a path"),
    ((datetime.timedelta, np.timedelta64), "a length of time"),
    ((datetime.date, np.datetime64), "a date"),
    (datetime.time, "a time of day"),
    (pd.DataFrame, "a DataFrame"),
    (pd.Series, "a Series"),
    (np.ndarray, "an array"),
    (Mapping, "a dictionary"),
    (list, "a list"),
    (tuple, "a tuple"),
    ((set, frozenset), "a set"),
)


def described(value: object) -> str:
    """What was given where something else is needed: "None", "a list", "-1", "the text 'far'"."""
    if value is None:
        return "None"
    if isinstance(value, Integral) and not isinstance(value, bool) and not is_number(value):
        return "a number too large"
    if isinstance(value, Real) and not isinstance(value, bool):
        return f"{value}"
    if isinstance(value, str):
        return f"the text {_quoted(value)}"
    name = type(value).__name__
    article = "an" if name[:1].lower() in "aeiou" else "a"
    return next((words for kind, words in _IN_WORDS if isinstance(value, kind)), f"{article} {name}")


def _quoted(text: str) -> str:
    return repr(shortened(str(text)))  # str(): numpy's own text has another repr


def given_as(name: str, value: object) -> str:
    """An argument as it was given, to begin a refusal with: "level=1.5", "kind='far'", "seed (a list)"."""
    if isinstance(value, str):
        return f"{name}={_quoted(value)}"
    if value is None or isinstance(value, (bool, np.bool_)):
        return f"{name}={value}"
    words = described(value)
    return f"{name}={words}" if isinstance(value, Real) and words == f"{value}" else f"{name} ({words})"


# --- checks of one argument -------------------------------------------------------------------------------


def check_truth_value(value: object, name: str) -> None:
    """Refuse what Python would take for True or False and is neither, such as "no".

    Raises
    ------
    ArgumentError : neither True nor False
    """
    if not isinstance(value, (bool, np.bool_)):
        raise ArgumentError(f"{name}: {described(value)} is neither True nor False.")


def check_level(level: object) -> None:
    """Refuse what is no coverage of an interval.

    Raises
    ------
    ArgumentError : not a number strictly between 0 and 1
    """
    if not (is_number(level) and 0.0 < level < 1.0):
        raise ArgumentError(f"{given_as('level', level)} must lie strictly between 0 and 1, such as 0.95.")


def check_whole(value: object, name: str, least: int, remedy: str = "") -> None:
    """Refuse what is no whole number, or one below `least`; `remedy` ends the sentence.

    Raises
    ------
    ArgumentError : no such number
    """
    if not (is_whole(value) and value >= least):
        range_ = ", 0 or more" if least == 0 else f" from {least} on"
        raise ArgumentError(f"{given_as(name, value)} must be a whole number{range_}{remedy}.")


def check_seed(seed: object) -> None:
    """Refuse what random numbers cannot start from (ArgumentError)."""
    check_whole(seed, "seed", 0)


def check_threads(threads: object) -> None:
    """Refuse what is no number of threads (ArgumentError); None is as many as there are."""
    if threads is not None:
        check_whole(threads, "threads", 1, ", or None for all there are")


def check_callback(progress: object) -> None:
    """Refuse what cannot be told of progress (ArgumentError); None is nobody."""
    if progress is not None and not callable(progress):
        raise ArgumentError(f"{given_as('progress', progress)} cannot be called. Give a function, such as print.")


def positive(value: object, name: str, what: str) -> float:
    """A number above 0, as a plain float; `what` it counts, with an example, ends the refusal.

    Raises
    ------
    ArgumentError : not such a number
    """
    if not (is_number(value) and value > 0):
        raise ArgumentError(f"{given_as(name, value)} must be a positive number of {what}.")
    return float(value)


def numbers(values: object, name: str, remedy: str, *, least: float = -math.inf) -> FloatArray:
    """A number, or numbers of any shape, as a float array; text is not made into numbers.

    Parameters
    ----------
    values : a number, a list, an array, a Series
    name : of the argument
    remedy : what to give instead, a sentence
    least : none may lie below

    Raises
    ------
    ArgumentError : something that is no finite number, or one below `least`; the message names the first such value
    """
    try:
        array = np.asarray(values)
    except (ValueError, TypeError):  # rows of several lengths
        raise ArgumentError(f"{name}: {described(values)} cannot be made an array of numbers. {remedy}") from None

    def refusal(value: object, why: str) -> ArgumentError:
        start = f"{name} holds {described(value)}, which" if array.ndim else given_as(name, values)
        return ArgumentError(f"{start} is {why}. {remedy}")

    if array.dtype.kind not in "iuf":
        for value in array.flat:
            if not is_number(value):
                raise refusal(value, "not finite" if isinstance(value, float) else "no number")
    floats = array.astype(np.float64)
    for value in floats[~np.isfinite(floats)].tolist():
        raise refusal(value, "not finite")
    for value in floats[floats < least].tolist():
        raise refusal(value, f"below {least:g}")
    return floats


def flat_numbers(values: object, name: str, remedy: str, *, least: float = -math.inf) -> FloatArray:
    """(n,) numbers, as `numbers`; a single one is a list of one.

    Raises
    ------
    ArgumentError : as `numbers`, or rows and columns
    """
    array = np.atleast_1d(numbers(values, name, remedy, least=least))
    if array.ndim > 1:
        raise ArgumentError(f"{name} has shape {array.shape}, and a flat list is needed. {remedy}")
    return array


DISTANCES = "Give distances in µm, finite and not negative, such as [100.0, 200.0]."


def distances(distances_um: object) -> FloatArray:
    """(m,) distances asked for, µm; a single one is a list of one (ArgumentError for anything else)."""
    return flat_numbers(distances_um, "distances_um", DISTANCES, least=0.0)
