"""The known truth of an invented recording, to be shown beside the estimates."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class TruthValue:
    """One number the recording was made from.

    Parameters
    ----------
    name : as in `fit.parameters` ("amplitude", "length_um", "leak_rate"), or a free name
    value : in the unit of the estimate
    unit : as in `fit.parameters`
    """

    name: str
    value: float
    unit: str


@dataclass(frozen=True, slots=True)
class Truth:
    """What an invented recording was made from.

    Parameters
    ----------
    values : the numbers
    sentence : what was invented, in a sentence or two
    """

    values: tuple[TruthValue, ...]
    sentence: str
