"""What a derived figure is: a number that follows from the shared parameters, or a reason why there is none."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import Literal

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.errors import Unavailable
from kernelfit.inference.derived.setting import Law

Side = Literal["below", "above", "unknown"]


@dataclass(frozen=True, slots=True)
class Lost(Unavailable):
    """There is no such figure at this point of the parameters.

    Parameters
    ----------
    reason : why, as a reader is told
    side : where it went: below or above all that it can be, so that intervals know which end is open
    """

    side: Side = "unknown"


@dataclass(frozen=True, kw_only=True)
class DerivedFigure(ABC):
    """A number derived from a fit.

    Parameters
    ----------
    name, unit : as they stand in the table
    reads : what it is, in words that finish "this is the ..."
    least, most : the ends of what it can be; an end of an interval that is open stands there
    seen_from, seen_to : where it can be seen at all, for distances: within those with pairs
    on_log : True where intervals are symmetric on the log scale of its distance from `least`
    of_shape : it describes the shape of the kernel, and means nothing where there is no coupling
    of_time : it depends on the leak rate
    """

    name: str
    unit: str
    reads: str
    least: float = -np.inf
    most: float = np.inf
    seen_from: float = -np.inf
    seen_to: float = np.inf
    on_log: bool = False
    of_shape: bool = False
    of_time: bool = False

    @abstractmethod
    def value(self, law: Law) -> float | Lost:
        """The figure at one point of the shared parameters."""

    def lost(self, law: Law) -> Lost | None:
        """Why there is none at this point, or None: what `value` would say, without the search for it.

        Only figures that some parameters have and others do not say anything here.
        """
        return None

    def gradient(self, law: Law) -> FloatArray | None:
        """(Q,) derivative by the shared parameters, or None: by differences of the value."""
        return None

    def number(self, law: Law) -> float:
        """The figure as a number: infinite, with its sign, where it is lost on a known side, else NaN."""
        value = self.value(law)
        if isinstance(value, Lost):
            return {"below": -np.inf, "above": np.inf, "unknown": np.nan}[value.side]
        return value
