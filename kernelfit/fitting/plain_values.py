"""Arrays as plain JSON values and back; NaN is null."""

from __future__ import annotations

from typing import Any

import numpy as np

from kernelfit._typing import AnyArray, FloatArray, IntArray


def plain(array: AnyArray) -> Any:
    """Nested lists, NaN as null."""
    if array.dtype.kind == "f" and np.isnan(array).any():
        boxed = array.astype(object)
        boxed[np.isnan(array)] = None
        return boxed.tolist()
    return array.tolist()


def plain_or_null(array: AnyArray | None) -> Any:
    """The same, null for None."""
    return None if array is None else plain(array)


def floats(values: Any, *shape: int) -> FloatArray:
    """Back to an array of that shape."""
    return np.array(values, dtype=np.float64).reshape(shape)


def floats_or_none(values: Any, *shape: int) -> FloatArray | None:
    """Back to an array of that shape, None for null."""
    return None if values is None else floats(values, *shape)


def whole_numbers(values: Any) -> IntArray:
    """Back to an array of whole numbers."""
    return np.array(values, dtype=np.int64)
