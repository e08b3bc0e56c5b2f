"""Who is coupled to whom in the array of a fit, and by how much a rise of the drive raises each rate."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from kernelfit._typing import BoolArray, FloatArray, IntArray
from kernelfit.errors import Unavailable
from kernelfit.fitting.problem import geometry_of
from kernelfit.kernels import pair_geometry

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.kernels import PairGeometry
    from kernelfit.recording.recording import Recording

SAME_RADIUS = 1e-6  # relative: the spectral radius of the same pairs differs by rounding only


@dataclass(frozen=True, eq=False)
class Pairs:
    """The pairs of an array.

    Parameters
    ----------
    slope_hz : (n_targets,) E[f'_i], Hz per unit of the drive, taken as observed: the mean rate, under the exponential
        link
    targets : (n_targets,) which units they are
    fires : (n_units,) units with a spike in the sum
    distinct_um : (D,) distances, µm
    place : (n_targets, n_units) place of each pair's distance, D where the pair is not in the kernel
    own_site : (n_targets, n_units) pairs that share the same-site coefficient
    """

    slope_hz: FloatArray
    targets: IntArray
    fires: BoolArray
    distinct_um: FloatArray
    place: IntArray
    own_site: BoolArray

    @cached_property
    def spikes_by_distance(self) -> FloatArray:
        """(D + 1,) spikes that a spike of an average unit adds, times alpha, for J = 1 at each distance; last: on
        one site."""
        rise = self.slope_hz[:, None] * (self.fires / self.fires.sum())
        return self._summed(rise, self.own_site)

    def among_targets(self, by_distance: FloatArray) -> FloatArray:
        """(n_targets, n_targets) J between explained units from J at each distance and, last, on one site."""
        jump = np.append(by_distance[:-1], 0.0)[self.place] + by_distance[-1] * self.own_site
        return np.asarray(jump[:, self.targets])

    def weights_of(self, mode: FloatArray) -> FloatArray:
        """(D + 1,) how much J at each distance (last: on one site) enters the quadratic form of a mode (n_targets,)."""
        weight = np.zeros(self.place.shape)
        weight[:, self.targets] = mode[:, None] * mode
        return self._summed(weight, self.own_site)

    def _summed(self, weight: FloatArray, own_site: BoolArray) -> FloatArray:
        by_distance = np.bincount(self.place.ravel(), weight.ravel(), minlength=self.distinct_um.size + 1)
        by_distance[-1] = weight[own_site].sum()
        return np.asarray(by_distance)


def pairs_of(fit: CouplingFit, recording: Recording | None) -> Pairs | Unavailable:
    """The pairs of a fit. A loaded fit does not hold the pairs that were left out by name: it then needs `recording`.

    Raises
    ------
    StorageError : `recording` is not the one that was fitted
    """
    if fit.model.link.name != "exp":
        return Unavailable("stated for the exponential link only, under which E[f'] is the mean rate")
    if recording is not None:
        return _pairs(fit, fit.problem(recording).geometry)
    if fit.recording is not None:
        return _pairs(fit, geometry_of(fit.model, fit.recording, fit.targets))
    rebuilt = _pairs(fit, _geometry_from_positions(fit))
    if abs(_radius(fit, rebuilt) - fit.spectral_radius) > SAME_RADIUS * fit.spectral_radius:
        return Unavailable("a loaded fit does not know which pairs were left out: pass recording=")
    return rebuilt


def _pairs(fit: CouplingFit, geometry: PairGeometry) -> Pairs:
    place = geometry.distance_index[fit.targets]
    return Pairs(
        slope_hz=fit.counts[fit.targets] / fit.duration_s,
        targets=fit.targets,
        fires=fit.counts > 0,
        distinct_um=geometry.distinct_um,
        place=np.where(place < 0, geometry.distinct_um.size, place),
        own_site=geometry.own_site[fit.targets],
    )


def _geometry_from_positions(fit: CouplingFit) -> PairGeometry:
    is_target = np.zeros(len(fit.unit_ids), dtype=bool)
    is_target[fit.targets] = True
    model = fit.model
    return pair_geometry(
        fit.positions, max_distance_um=model.max_distance, same_site=model.same_site, targets=is_target
    )


def _radius(fit: CouplingFit, pairs: Pairs) -> float:
    same_site = fit.shared[fit.n_kernel] if fit.has_same_site else 0.0
    jump = pairs.among_targets(np.append(fit.kernel(pairs.distinct_um), same_site))
    return float(np.max(np.abs(np.linalg.eigvals(pairs.slope_hz[:, None] * jump)))) / fit.leak_rate
