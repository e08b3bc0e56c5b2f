"""Telling the caller how far a long computation has come."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Progress:
    """One report of progress.

    Parameters
    ----------
    stage : what is being done, in words
    sweeps : sweeps over the recording so far
    expected_sweeps : about how many it will take in all
    seconds_left : rough, from the sweeps so far
    peak_bytes : memory the sweeps need, rough
    """

    stage: str
    sweeps: int
    expected_sweeps: int
    seconds_left: float
    peak_bytes: int


ProgressCallback = Callable[[Progress], None]
