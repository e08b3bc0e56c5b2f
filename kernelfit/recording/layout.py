"""How the units of a recording lie: distances, sites, bands of distance, what a kernel range covers."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.recording.recording import SAME_SITE_UM, Recording

SAME_SITE = "same site"
_DISTANCE_STEP_UM = 0.1  # distances closer than this are counted as one distance
_BAND_MULTIPLES = (
    1.5,
    3.0,
    6.0,
)  # of the reference distance; the first takes in the diagonal of a square grid
_RANGE_MULTIPLES = (1.0, 1.5, 2.0, 3.0, 5.0, 10.0)


@dataclass(frozen=True, slots=True)
class Band:
    """One band of distance: above `from_um`, up to and including `to_um`. The first is the same site."""

    label: str
    from_um: float
    to_um: float


@dataclass(frozen=True, eq=False)
class Layout:
    """Distances between the units of a recording.

    Parameters
    ----------
    distance_um : (n_units, n_units) micrometres
    left_out : (n_units, n_units) True for pairs that the recording leaves out of the kernel, and on the
        diagonal
    """

    distance_um: FloatArray
    left_out: BoolArray

    @property
    def n_units(self) -> int:
        """Number of units."""
        return int(self.distance_um.shape[0])

    @cached_property
    def same_site(self) -> BoolArray:
        """(n_units, n_units) True for two different units closer than 1 µm."""
        return np.asarray((self.distance_um < SAME_SITE_UM) & ~np.eye(self.n_units, dtype=bool))

    @cached_property
    def reference_um(self) -> float | None:
        """Median nearest-neighbour distance between distinct sites, micrometres; None with a single site."""
        apart = np.where(self.distance_um < SAME_SITE_UM, np.inf, self.distance_um)
        nearest = apart[self._one_per_site].min(axis=1)
        nearest = nearest[np.isfinite(nearest)]
        return float(np.median(nearest)) if nearest.size else None

    @cached_property
    def _one_per_site(self) -> IntArray:
        earlier = np.tril(self.same_site, -1).any(axis=1)
        return np.flatnonzero(~earlier)

    @property
    def n_sites(self) -> int:
        """Number of distinct sites."""
        return int(self._one_per_site.size)

    @property
    def extent_um(self) -> float:
        """Largest distance between two units, micrometres."""
        return float(self.distance_um.max())

    @cached_property
    def bands(self) -> tuple[Band, ...]:
        """Bands of distance, in multiples of the reference distance: same site, neighbours, further ones."""
        same = Band(SAME_SITE, 0.0, SAME_SITE_UM)
        if self.reference_um is None:
            return (same,)
        edges = [SAME_SITE_UM]
        for multiple in _BAND_MULTIPLES:
            edge = _readable(multiple * self.reference_um)
            if edges[-1] < edge < self.extent_um:
                edges.append(edge)
        edges.append(np.inf)
        bands = [same]
        for low, high in pairwise(edges):
            label = f"{low:g} to {high:g} µm" if low > SAME_SITE_UM else f"up to {high:g} µm"
            label = f"beyond {low:g} µm" if high == np.inf else label
            bands.append(Band(label if len(edges) > 2 else "all distances", low, high))
        return tuple(bands)

    @cached_property
    def band_of_pair(self) -> IntArray:
        """(n_units, n_units) index into `bands`; -1 on the diagonal and for pairs left out of the kernel."""
        upper = np.array([b.to_um for b in self.bands[1:]])
        band = 1 + np.searchsorted(upper, self.distance_um, side="left")
        band = np.minimum(np.where(self.same_site, 0, band), len(self.bands) - 1)
        return np.where(self.left_out, -1, band).astype(np.int64)

    def pairs_in_band(self) -> IntArray:
        """(n_bands,) unordered pairs of units in each band."""
        band = self.band_of_pair[np.triu_indices(self.n_units, 1)]
        return np.bincount(band[band >= 0], minlength=len(self.bands)).astype(np.int64)

    def neighbours(self) -> BoolArray:
        """(n_units, n_units) True for pairs on one site or adjacent ones (up to 1.5 reference distances)."""
        if self.reference_um is None:
            return self.same_site
        near = self.distance_um <= _BAND_MULTIPLES[0] * self.reference_um
        return np.asarray(near & ~np.eye(self.n_units, dtype=bool))

    def distances(self) -> pd.DataFrame:
        """distance_um, n_pairs, n_pairs_within: unordered pairs the kernel can use, per distinct distance.

        Pairs on one site and pairs left out are not among them. Distances are rounded to 0.1 µm.
        """
        upper = np.triu_indices(self.n_units, 1)
        usable = ~(self.same_site | self.left_out)[upper]
        rounded = np.round(self.distance_um[upper][usable] / _DISTANCE_STEP_UM).astype(np.int64)
        distinct, n_pairs = np.unique(rounded, return_counts=True)
        return pd.DataFrame(
            {
                "distance_um": distinct * _DISTANCE_STEP_UM,
                "n_pairs": n_pairs.astype(np.int64),
                "n_pairs_within": np.cumsum(n_pairs).astype(np.int64),
            }
        ).round({"distance_um": 1})

    def ranges(self) -> pd.DataFrame:
        """What a kernel cut at `max_distance_um` rests on: n_pairs, n_distances, n_units (with a partner)."""
        if self.reference_um is None:
            return pd.DataFrame(columns=["max_distance_um", "n_pairs", "n_distances", "n_units"])
        usable = ~(self.same_site | self.left_out)
        reaches = [_readable(m * self.reference_um) for m in _RANGE_MULTIPLES]
        reaches = [r for r in reaches if r < self.extent_um] + [float(np.ceil(self.extent_um))]
        table = self.distances()
        rows = []
        for reach in reaches:
            within = usable & (self.distance_um <= reach)
            n_distances = int(np.sum(table["distance_um"] <= reach + _DISTANCE_STEP_UM / 2))
            rows.append((reach, int(within.sum()) // 2, n_distances, int(within.any(axis=1).sum())))
        return pd.DataFrame(rows, columns=["max_distance_um", "n_pairs", "n_distances", "n_units"])


def _readable(distance_um: float) -> float:
    """A distance rounded up to two or three digits, so that a grid's own spacing stays inside."""
    step = 10.0 ** (np.floor(np.log10(distance_um)) - 1)
    return float(np.round(np.ceil(distance_um / step - 1e-6) * step, 6))


def lay_out(recording: Recording) -> Layout:
    """Distances between all units of `recording`."""
    x = np.array(recording.positions)
    squared = np.zeros((len(x), len(x)))
    for column in x.T:
        squared += (column[:, None] - column[None, :]) ** 2
    left_out = np.eye(len(x), dtype=bool)
    for a, b in recording.excluded_pairs:
        i, j = recording.index_of(a), recording.index_of(b)
        left_out[i, j] = left_out[j, i] = True
    return Layout(distance_um=np.sqrt(squared), left_out=left_out)
