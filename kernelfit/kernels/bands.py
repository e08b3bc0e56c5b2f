"""Coupling constant within bands of distance: no law at all, and where every other family gets its start from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.kernels.base import DistanceRange, Kernel, Parameter


@dataclass(frozen=True)
class Bands(Kernel):
    """J(d) = theta_k in band k. Not in the registry: it describes data, it is not a claim about tissue.

    Parameters
    ----------
    edges_um : inner borders of the bands, ascending, µm; with none there is one band
    empty : True for no coupling at all, without parameters
    """

    edges_um: tuple[float, ...] = ()
    empty: bool = False
    name: ClassVar[str] = "bands"

    def parameters(self, span: DistanceRange) -> tuple[Parameter, ...]:
        """One amplitude a band."""
        n = 0 if self.empty else len(self.edges_um) + 1
        return tuple(Parameter(f"band_{k + 1}", "per spike") for k in range(n))

    def band(self, d_um: FloatArray) -> IntArray:
        """(m,) the band of each distance."""
        return np.searchsorted(np.array(self.edges_um), d_um, side="right")

    def value(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        """The band's amplitude, or zero."""
        return np.zeros(d_um.size) if self.empty else np.asarray(theta[self.band(d_um)])

    def gradient(self, theta: FloatArray, d_um: FloatArray, span: DistanceRange) -> FloatArray:
        """One in the band, zero elsewhere."""
        rows = np.arange(len(self.parameters(span)))
        return np.asarray(self.band(d_um)[None, :] == rows[:, None], dtype=np.float64)


def equal_bands(distinct_um: FloatArray, n_pairs: IntArray, n_bands: int) -> Bands:
    """At most `n_bands` bands holding about equally many pairs each.

    Parameters
    ----------
    distinct_um, n_pairs : (D,) sorted distinct distances and how many pairs have each
    n_bands : at most this many
    """
    share = (np.cumsum(n_pairs) - 0.5 * n_pairs) / np.sum(n_pairs)
    band = np.minimum((share * n_bands).astype(np.int64), n_bands - 1)
    first = np.flatnonzero(np.diff(band) > 0)
    return Bands(tuple(float(x) for x in 0.5 * (distinct_um[first] + distinct_um[first + 1])))
