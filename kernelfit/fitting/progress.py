"""Telling the caller how far a long computation has come."""

from __future__ import annotations

import sys
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
    peak_bytes : most memory the process has held so far, which after a few sweeps is what the fit takes; 0: not known
    """

    stage: str
    sweeps: int
    expected_sweeps: int
    seconds_left: float
    peak_bytes: int


ProgressCallback = Callable[[Progress], None]


def peak_memory_bytes() -> int:
    """Most memory this process has held so far, bytes; 0 where the operating system does not tell."""
    try:
        import resource  # not on every system
    except ImportError:
        return 0
    unit = 1 if sys.platform == "darwin" else 1024
    return int(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss) * unit
