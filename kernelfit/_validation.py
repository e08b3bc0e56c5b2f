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

from kernelfit.errors import ArgumentError, shortened


def is_number(value: object) -> TypeGuard[float]:
    """Whether this is a finite number, Python's or numpy's; True and False are none."""
    return isinstance(value, Real) and not isinstance(value, bool) and math.isfinite(value)


def is_whole(value: object) -> TypeGuard[int]:
    """Whether this is a whole number, Python's or numpy's; True and False are none."""
    return isinstance(value, Integral) and not isinstance(value, bool)


# In words, by type; the first that fits is said.
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
    if isinstance(value, Real) and not isinstance(value, bool):
        return f"{value}"
    if isinstance(value, str):
        return f"the text {shortened(value)!r}"
    return next((words for kind, words in _IN_WORDS if isinstance(value, kind)), f"a {type(value).__name__}")


def check_truth_value(value: object, name: str) -> None:
    """Refuse what Python would take for True or False and is neither, such as "no".

    Raises
    ------
    ArgumentError : neither True nor False
    """
    if not isinstance(value, (bool, np.bool_)):
        raise ArgumentError(f"{name}: {described(value)} is neither True nor False.")
