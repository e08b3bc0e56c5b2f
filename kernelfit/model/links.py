"""Rate links f: from the linear predictor to a rate. A link is one class and one line in LINKS."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from difflib import get_close_matches
from typing import ClassVar

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit._validation import given_as
from kernelfit.errors import ArgumentError

EXP = 0  # codes by which the compiled loops know a link


@dataclass(frozen=True)
class Link(ABC):
    """Rate in Hz from the linear predictor; `code` tells the compiled loops which one it is."""

    name: ClassVar[str]
    code: ClassVar[int]

    @abstractmethod
    def rate(self, eta: FloatArray) -> FloatArray:
        """f(eta), Hz, any shape."""

    @abstractmethod
    def slope(self, eta: FloatArray) -> FloatArray:
        """f'(eta), Hz per unit of the predictor."""

    @abstractmethod
    def predictor(self, rate_hz: FloatArray) -> FloatArray:
        """eta with f(eta) = rate_hz; -inf for a rate of 0."""


@dataclass(frozen=True)
class Exp(Link):
    """f = exp: a jump J multiplies the rate by e^J."""

    name: ClassVar[str] = "exp"
    code: ClassVar[int] = EXP

    def rate(self, eta: FloatArray) -> FloatArray:
        """exp(eta)."""
        return np.exp(eta)

    def slope(self, eta: FloatArray) -> FloatArray:
        """exp(eta)."""
        return np.exp(eta)

    def predictor(self, rate_hz: FloatArray) -> FloatArray:
        """log(rate_hz)."""
        with np.errstate(divide="ignore"):
            return np.log(rate_hz)


LINKS: dict[str, type[Link]] = {Exp.name: Exp}


def link_from(link: str | Link) -> Link:
    """The link object of a name.

    Raises
    ------
    ArgumentError : no such link
    """
    if isinstance(link, Link):
        return link
    if not isinstance(link, str) or link not in LINKS:
        close = get_close_matches(link, LINKS, n=1) if isinstance(link, str) else []
        hint = f" Did you mean {close[0]!r}?" if close else ""
        raise ArgumentError(f"{given_as('link', link)} is not known. Known links: {', '.join(sorted(LINKS))}.{hint}")
    return LINKS[link]()
