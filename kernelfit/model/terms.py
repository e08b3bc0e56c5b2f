"""Terms beside the coupling (docs/model.md section 6): small immutable objects, with a plain string for the default."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace
from typing import ClassVar, Literal

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit._validation import given_as, is_number
from kernelfit.errors import ArgumentError

FIRST_RIDGE = 0.01
STEPS_PER_DECADE = 1.7  # time constants a factor of about four apart: traces overlap, and are told apart


@dataclass(frozen=True)
class AfterSpike:
    """What a unit's own spikes do to its rate: h_i = sum_m c_im S_im, exponential traces at fixed time constants.

    Each unit has its own coefficients. A trace starts at 1 with the spike and decays; coefficients are on the scale of
    the predictor, so exp(h) multiplies the rate under the exponential link.

    Parameters
    ----------
    time_constants_s : seconds, ascending; None: log-spaced from one bin to `longest_s`
    longest_s : longest time constant where they are chosen for you
    ridge : weight r of the penalty r/2 sum c^2, the same for all units; the default, a prior of standard deviation 10,
        only holds coefficients of lags that a unit with few spikes never showed. "likelihood" lets the marginal
        likelihood of all units choose it: units with few spikes are then drawn to no effect as far as the spread of
        the coefficients over units warrants

    Raises
    ------
    ArgumentError : an option out of its range
    """

    time_constants_s: tuple[float, ...] | None = None
    longest_s: float = 1.0
    ridge: float | Literal["likelihood"] = FIRST_RIDGE
    name: ClassVar[str] = "basis"

    def __post_init__(self) -> None:
        put = object.__setattr__  # plain numbers: numpy's cannot be written as JSON
        if self.time_constants_s is not None:
            given = self.time_constants_s if np.iterable(self.time_constants_s) else ()
            values = tuple(float(t) for t in given if is_number(t) and t > 0)
            rising = all(a < b for a, b in itertools.pairwise(values))
            if not values or len(values) < len(list(given)) or not rising:
                raise ArgumentError(
                    f"after_spike: time_constants_s={self.time_constants_s!r} must be positive seconds, each longer "
                    "than the one before, such as (0.002, 0.02, 0.2)."
                )
            put(self, "time_constants_s", values)
        if not (is_number(self.longest_s) and self.longest_s > 0):
            raise ArgumentError(f"after_spike: longest_s={self.longest_s!r} must be a positive number of seconds.")
        if self.ridge != "likelihood":
            if not (is_number(self.ridge) and self.ridge >= 0):
                raise ArgumentError(f"after_spike: ridge={self.ridge!r} must be a number, 0 or more, or 'likelihood'.")
            put(self, "ridge", float(self.ridge))
        put(self, "longest_s", float(self.longest_s))

    def constants(self, bin_width: float) -> FloatArray:
        """(M,) time constants in seconds at this bin width."""
        if self.time_constants_s is not None:
            return np.array(self.time_constants_s)
        longest = max(self.longest_s, bin_width)
        n = 1 + math.ceil(STEPS_PER_DECADE * math.log10(longest / bin_width) - 1e-9)
        return np.geomspace(bin_width, longest, n)

    def with_ridge(self, value: float) -> AfterSpike:
        """The same term with this number for its ridge. Raises ArgumentError for a number below 0."""
        return replace(self, ridge=value)


@dataclass(frozen=True)
class NoAfterSpike:
    """A unit's own spikes leave no trace in its rate."""

    ridge: ClassVar[float] = 0.0
    name: ClassVar[str] = "none"

    def constants(self, bin_width: float) -> FloatArray:
        """No time constants."""
        return np.empty(0)

    def with_ridge(self, value: float) -> NoAfterSpike:
        """The same: there is nothing to weigh."""
        return self


@dataclass(frozen=True)
class NoRateCourse:
    """Baselines are constant in time."""

    name: ClassVar[str] = "none"


AfterSpikeTerm = AfterSpike | NoAfterSpike
SameSiteTreatment = Literal["exclude", "own", "kernel"]


def after_spike_from(term: str | AfterSpikeTerm) -> AfterSpikeTerm:
    """The after-spike term of a name.

    Raises
    ------
    ArgumentError : no such term
    """
    if isinstance(term, (AfterSpike, NoAfterSpike)):
        return term
    if isinstance(term, str):
        if term == AfterSpike.name:
            return AfterSpike()
        if term == NoAfterSpike.name:
            return NoAfterSpike()
    raise ArgumentError(
        f"{given_as('after_spike', term)} is not known. Say 'basis', 'none' or give kf.terms.AfterSpike(...)."
    )


def rate_course_from(term: str | NoRateCourse) -> NoRateCourse:
    """The rate course of a name.

    Raises
    ------
    ArgumentError : no such course
    """
    if isinstance(term, NoRateCourse):
        return term
    if isinstance(term, str) and term == NoRateCourse.name:
        return NoRateCourse()
    raise ArgumentError(f"{given_as('rate_course', term)} is not known. Say 'none'.")
