"""From positions and amounts to the data of an array map: what is drawn where, and what the view hides."""

from __future__ import annotations

import math

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.recording.recording import COORDINATES, SAME_SITE_UM
from kernelfit.report.figure_data import ArrayData

LOG_SCALE_FROM = 20.0  # amounts further apart than this factor need a log scale
RING = 0.24  # of the spacing: how far units on one site stand from it


def array_data(positions_um: FloatArray, value: FloatArray, title: str, quantity: str) -> ArrayData:
    """Amounts at their sites, seen along the shortest side of an array in space; units of one place around it.

    Parameters
    ----------
    positions_um : (n_units, 1 to 3)
    value : (n_units,) NaN or not positive where there is nothing to show
    """
    shown_axes, seen_along = view(positions_um)
    plane = np.zeros((positions_um.shape[0], 2))
    plane[:, : len(shown_axes)] = positions_um[:, shown_axes]
    site_of = sites_of(plane)
    n_sites = int(site_of.max()) + 1
    first = np.array([np.flatnonzero(site_of == s)[0] for s in range(n_sites)])
    sites = plane[first]
    spacing = neighbour_spacing(sites)
    place = plane.copy()
    shared = np.zeros(n_sites, dtype=bool)
    for site in range(n_sites):
        members = np.flatnonzero(site_of == site)
        if members.size > 1:
            shared[site] = True
            angle = 2.0 * np.pi * np.arange(members.size) / members.size
            place[members] += RING * spacing * np.column_stack([np.cos(angle), np.sin(angle)])
    amount = np.where(value > 0.0, value, np.nan)
    known = amount[np.isfinite(amount)]
    across = float(np.ptp(sites[:, 0])) + spacing  # the bar lies along x and must not leave a narrow array
    extent = float(np.ptp(sites, axis=0).max()) if n_sites > 1 else spacing
    return ArrayData(
        title=title,
        quantity=quantity,
        place_um=place,
        site_um=sites,
        shared_um=sites[shared],
        value=amount,
        on_log_scale=bool(known.size and known.max() > LOG_SCALE_FROM * known.min()),
        spacing_um=spacing,
        scale_bar_um=round_length(min(0.3 * max(extent, spacing), across)),
        n_shared=int(shared[site_of].sum()),
        seen_along=seen_along,
    )


def view(positions_um: FloatArray) -> tuple[list[int], str]:
    """Which coordinates are drawn, and the name of the one that is not: the shortest of three, else ""."""
    n = positions_um.shape[1]
    if n < 3:
        return list(range(n)), ""
    extent = np.ptp(positions_um, axis=0)
    dropped = n - 1 - int(np.argmin(extent[::-1]))  # of equals the last: an array in a plane is seen along z
    return [k for k in range(n) if k != dropped], COORDINATES[dropped].removesuffix("_um")


def sites_of(positions_um: FloatArray) -> IntArray:
    """(n_units,) index of each unit's site; positions closer than 1 µm are one site."""
    from scipy.spatial import cKDTree

    site = np.full(positions_um.shape[0], -1, dtype=np.int64)
    tree = cKDTree(positions_um)
    count = 0
    for k in range(positions_um.shape[0]):
        if site[k] < 0:
            near = [j for j in tree.query_ball_point(positions_um[k], SAME_SITE_UM) if site[j] < 0]
            site[near] = count
            count += 1
    return site


def neighbour_spacing(sites_um: FloatArray) -> float:
    """Median distance from a site to its nearest neighbour; 100 µm for a lone site."""
    from scipy.spatial import cKDTree

    if sites_um.shape[0] < 2:
        return 100.0
    nearest = np.asarray(cKDTree(sites_um).query(sites_um, k=2)[0])
    spacing = float(np.median(nearest[:, 1]))
    return spacing if spacing > 0.0 else 100.0


def round_length(length_um: float) -> float:
    """The largest of 1, 2, 5, 10, 20... that is not longer."""
    decade = 10.0 ** math.floor(math.log10(length_um))
    return float(max(m * decade for m in (1.0, 2.0, 5.0) if m * decade <= length_um * (1 + 1e-9)))
