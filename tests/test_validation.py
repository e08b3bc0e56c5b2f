"""What counts as a number in an argument."""

from __future__ import annotations

import numpy as np
import pytest

from kernelfit._validation import is_number, is_whole


@pytest.mark.parametrize("value", [1, 0, -2, 0.5, np.float32(0.25), np.int64(3), np.float64(1e-300)])
def test_numbers(value):
    assert is_number(value)


@pytest.mark.parametrize("value", ["1", None, True, np.nan, np.inf, -np.inf, 1j, [1.0], np.array([1.0, 2.0])])
def test_no_numbers(value):
    assert not is_number(value)


def test_whole_numbers():
    assert [v for v in (1, np.int32(2), 1.0, True, "1", None, np.float64(1)) if is_whole(v)] == [1, np.int32(2)]
