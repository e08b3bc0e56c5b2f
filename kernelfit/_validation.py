"""Checks of arguments that several parts share: what counts as a number."""

from __future__ import annotations

import math
from numbers import Integral, Real
from typing import TypeGuard


def is_number(value: object) -> TypeGuard[float]:
    """Whether this is a finite number, Python's or numpy's; True and False are none."""
    return isinstance(value, Real) and not isinstance(value, bool) and math.isfinite(value)


def is_whole(value: object) -> TypeGuard[int]:
    """Whether this is a whole number, Python's or numpy's; True and False are none."""
    return isinstance(value, Integral) and not isinstance(value, bool)
