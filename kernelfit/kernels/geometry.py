"""Who is how far from whom: sites, distances, and which pairs the kernel covers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import pandas as pd
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree
from scipy.spatial.distance import cdist

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.errors import ArgumentError, ModelError
from kernelfit.kernels.base import SAME_DISTANCE_UM, DistanceRange, require_positive
from kernelfit.recording.recording import SAME_SITE_UM

SameSite = Literal["exclude", "own", "kernel"]


@dataclass(frozen=True, eq=False)
class PairGeometry:
    """Distances between units and the pairs a kernel covers. Matrices are indexed [target, source].

    Parameters
    ----------
    distance_um : (n, n) distances, µm
    kept : (n, n) pairs in the kernel; never the diagonal
    same_site : (n, n) off-diagonal pairs on one site, whatever is done with them
    own_site : (n, n) pairs that share the one same-site coefficient; empty unless same_site="own" was asked
    reference_um : median distance from a site to its nearest neighbour, µm
    distinct_um : (D,) sorted distinct distances of the pairs kept, µm
    distance_index : (n, n) place of a pair's distance in `distinct_um`, -1 where the pair is not kept
    n_coordinates : number of coordinates of a position
    """

    distance_um: FloatArray
    kept: BoolArray
    same_site: BoolArray
    own_site: BoolArray
    reference_um: float
    distinct_um: FloatArray
    distance_index: IntArray
    n_coordinates: int

    @property
    def distance_range(self) -> DistanceRange:
        """Reference, smallest and largest distance, as kernels want them."""
        first, last = float(self.distinct_um[0]), float(self.distinct_um[-1])
        return DistanceRange(self.reference_um, first, last, self.n_coordinates)

    @property
    def pairs_by_distance(self) -> pd.DataFrame:
        """distance_um, n_pairs: unordered pairs in the kernel (in one direction at least) per distance."""
        index = np.maximum(self.distance_index, self.distance_index.T)  # -1 where one direction is not kept
        counted = index[np.triu_indices_from(index, k=1)]
        n_pairs = np.bincount(counted[counted >= 0], minlength=self.distinct_um.size)
        return pd.DataFrame({"distance_um": self.distinct_um.copy(), "n_pairs": n_pairs.astype(np.int64)})


def same_site_labels(positions: FloatArray) -> IntArray:
    """(n,) number of the site of each unit, in order of first appearance.

    Positions closer than 1 µm are one site; so are positions joined by a chain of such neighbours.

    Parameters
    ----------
    positions : (n, 1 to 3) µm, or (n,) along a line

    Raises
    ------
    ArgumentError : positions of another shape, or not finite
    """
    points = _checked(positions)
    n = len(points)
    close = cKDTree(points).query_pairs(SAME_SITE_UM, output_type="ndarray").reshape(-1, 2)
    apart = np.linalg.norm(points[close[:, 0]] - points[close[:, 1]], axis=1)
    close = close[apart < SAME_SITE_UM]  # the tree also returns pairs at exactly the limit
    links = coo_array((np.ones(len(close)), (close[:, 0], close[:, 1])), shape=(n, n))
    _, labels = connected_components(links, directed=False)
    _, first, site = np.unique(labels, return_index=True, return_inverse=True)
    return np.argsort(np.argsort(first))[site].astype(np.int64)


def pair_geometry(
    positions: FloatArray,
    *,
    max_distance_um: float | None = None,
    same_site: SameSite = "exclude",
    excluded_pairs: BoolArray | None = None,
    targets: BoolArray | None = None,
) -> PairGeometry:
    """Distances between units and the pairs the kernel covers.

    Parameters
    ----------
    positions : (n, 1 to 3) µm, or (n,) along a line
    max_distance_um : pairs farther apart are left out; None: no limit
    same_site : pairs on one site are left out ("exclude"), left out of the kernel and marked in `own_site`
        for a coefficient of their own ("own"), or kept in the kernel at their tiny distance ("kernel")
    excluded_pairs : (n, n) [target, source], True where the pair is left out
    targets : (n,) units that are explained; the others only drive

    Raises
    ------
    ArgumentError : an argument out of range or of the wrong shape
    ModelError : fewer than two units, all units on one site, or no pair left for the kernel
    """
    points = _checked(positions)
    n = len(points)
    if same_site not in ("exclude", "own", "kernel"):
        raise ArgumentError(f"same_site={same_site!r}: must be 'exclude', 'own' or 'kernel'.")
    if max_distance_um is not None:
        require_positive("max_distance", max_distance_um)
    if n < 2:
        raise ModelError(f"A coupling kernel needs at least two units; there {_are(n, 'unit')}. Select more.")
    site = same_site_labels(points)
    if site.max() == 0:
        raise ModelError(
            f"All {n} units lie on one site (no two are {SAME_SITE_UM:g} µm or more apart), so coupling "
            "cannot be related to distance. Check the positions and their unit of length (length_unit='mm'?)."
        )

    distance = cdist(points, points)
    apart = ~np.eye(n, dtype=bool)
    together = (site[:, None] == site[None, :]) & apart
    allowed = apart.copy()
    if excluded_pairs is not None:
        allowed &= ~_of_shape("excluded_pairs", excluded_pairs, (n, n))
    if targets is not None:
        allowed &= _of_shape("targets", targets, (n,))[:, None]

    candidates = allowed if same_site == "kernel" else allowed & ~together
    limit = np.inf if max_distance_um is None else max_distance_um + SAME_DISTANCE_UM
    kept = candidates & (distance <= limit)
    if not kept.any():
        raise ModelError(_nothing_kept(distance, candidates, max_distance_um))
    distinct, index = _distinct(distance, kept)
    return PairGeometry(
        distance_um=distance,
        kept=kept,
        same_site=together,
        own_site=together & allowed if same_site == "own" else np.zeros_like(together),
        reference_um=_reference(points, site),
        distinct_um=distinct,
        distance_index=index,
        n_coordinates=int(points.shape[1]),
    )


def _checked(positions: FloatArray) -> FloatArray:
    points = np.asarray(positions, dtype=np.float64)
    if points.ndim == 1:
        points = points[:, None]
    if points.ndim != 2 or points.shape[1] not in (1, 2, 3):
        raise ArgumentError(
            f"positions of shape {points.shape}: need a row per unit with 1 to 3 coordinates (µm)."
        )
    bad = ~np.isfinite(points).all(axis=1)
    if bad.any():
        k = int(np.flatnonzero(bad)[0])
        raise ArgumentError(f"positions, unit {k} (counted from 0): {points[k].tolist()} is not finite.")
    return points


def _of_shape(name: str, mask: BoolArray, shape: tuple[int, ...]) -> BoolArray:
    array = np.asarray(mask, dtype=bool)
    if array.shape != shape:
        raise ArgumentError(f"{name} of shape {array.shape}: must be {shape} for these positions.")
    return array


def _reference(points: FloatArray, site: IntArray) -> float:
    """Median over sites of the distance to the nearest other site; a site lies at the mean of its units."""
    size = np.bincount(site)
    centre = np.column_stack([np.bincount(site, weights=axis) / size for axis in points.T])
    nearest, _ = cKDTree(centre).query(centre, k=2)
    # sites are this far apart by definition; only the means of interlocking chains can come closer
    return max(float(np.median(np.asarray(nearest)[:, 1])), SAME_SITE_UM)


def _distinct(distance: FloatArray, kept: BoolArray) -> tuple[FloatArray, IntArray]:
    """Sorted distinct distances of the kept pairs, and each pair's place among them (-1: not kept)."""
    values = distance[kept]
    order = np.argsort(values, kind="stable")
    ordered = values[order]
    new = np.concatenate([[True], np.diff(ordered) > SAME_DISTANCE_UM])
    place = np.empty(values.size, dtype=np.int64)
    place[order] = np.cumsum(new) - 1
    index = np.full(distance.shape, -1, dtype=np.int64)
    index[kept] = place
    return ordered[new], index


def _nothing_kept(distance: FloatArray, candidates: BoolArray, max_distance_um: float | None) -> str:
    if candidates.any():
        closest = float(distance[candidates].min())
        return (
            f"No pair of units lies within max_distance = {max_distance_um:g} µm: the smallest distance in "
            f"the array is {closest:.4g} µm. Raise max_distance above it, or leave it out."
        )
    return (
        "No pair of units is left for the kernel: every one is excluded, on one site, or drives a unit that "
        "is not explained. Take back some of the excluded pairs or source-only units, or select more units."
    )


def _are(n: int, what: str) -> str:
    return f"is {n} {what}" if n == 1 else f"are {n} {what}s"
