"""What derived figures are made from: the kernel at any point of the shared parameters, on the distances of an array.

A `Setting` is what stays as it is while parameters move: family, distances with pairs, the network of the array. A
`Law` is the setting at one point, and remembers the kernel on a grid that several figures look at.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import brentq

from kernelfit._typing import FloatArray
from kernelfit.errors import Unavailable
from kernelfit.inference.derived.pairs import Pairs, pairs_of
from kernelfit.inference.parameters import distances_with_pairs
from kernelfit.kernels import DistanceRange, Kernel

if TYPE_CHECKING:
    from kernelfit.fitting.result import CouplingFit
    from kernelfit.recording.recording import Recording

EVEN_POINTS, NEAR_POINTS = 400, 120  # of the grid on which falls and changes of sign are looked for
ROOT_UM = 1e-10  # to which distances are found
FINEST_SHARE = 1e-3  # of the largest distance: where the finer part of the grid begins at the latest


@dataclass(frozen=True, eq=False)
class Setting:
    """What figures need beside the parameters.

    Parameters
    ----------
    kernel, span : the family, and the distances it was made for
    near_um, far_um : smallest and largest distance with pairs whose source fires, µm
    median_um : of the distances of the pairs within these, µm
    n_kernel : kernel parameters among the shared ones
    leak_rate : 1/s where the model states it; None: the last shared parameter is its logarithm
    in_percent : True where e^J is a factor of the rate (the exponential link)
    pairs : who is coupled to whom, or why that is not known
    """

    kernel: Kernel
    span: DistanceRange
    near_um: float
    far_um: float
    median_um: float
    n_kernel: int
    leak_rate: float | None
    in_percent: bool
    pairs: Pairs | Unavailable

    @cached_property
    def grid_um(self) -> FloatArray:
        """(m,) rising distances from the smallest to the largest with pairs, finer where they are small, and the
        reference distance where it is among them."""
        even = np.linspace(self.near_um, self.far_um, EVEN_POINTS)
        finest = max(self.near_um, FINEST_SHARE * self.far_um)
        finer = np.geomspace(finest, self.far_um, NEAR_POINTS)
        inside = (finer > self.near_um) & (finer < self.far_um)
        return np.unique(np.concatenate([even, finer[inside], [self.span.reference_um] * self.reference_seen]))

    @property
    def reference_seen(self) -> bool:
        """Whether the reference distance lies within the distances with pairs."""
        return self.near_um <= self.span.reference_um <= self.far_um

    @property
    def where(self) -> str:
        """The distances with pairs, in words."""
        return f"{self.near_um:,.4g} to {self.far_um:,.4g} µm"

    @property
    def edge_place(self) -> int | None:
        """Place of the parameter in which J jumps, a radius, or None."""
        discrete = [p.discrete for p in self.kernel.parameters(self.span)]
        return discrete.index(True) if any(discrete) else None

    def at(self, shared: FloatArray) -> Law:
        """The law at shared parameters (Q,) on the working scale."""
        return Law(self, np.asarray(shared, dtype=np.float64))


@dataclass(frozen=True, eq=False)
class Law:
    """The setting at one point of the shared parameters (Q,), working scale."""

    setting: Setting
    shared: FloatArray

    def __call__(self, d_um: FloatArray | float) -> FloatArray:
        """(m,) J at distances, µm."""
        d = np.atleast_1d(np.asarray(d_um, dtype=np.float64))
        # draws far from the estimate may overflow: they are then infinite or NaN, and count as such
        with np.errstate(over="ignore", invalid="ignore", under="ignore"):
            return self.setting.kernel.value(self.shared[: self.setting.n_kernel], d, self.setting.span)

    def one(self, d_um: float) -> float:
        """J at one distance, µm."""
        return float(self(d_um)[0])

    @cached_property
    def on_grid(self) -> FloatArray:
        """(m,) J on the setting's grid."""
        return self(self.setting.grid_um)

    @cached_property
    def turns_um(self) -> tuple[float, ...]:
        """Distances (µm) within those with pairs at which J changes sign, rising."""
        signed = self.on_grid != 0.0
        grid, sign = self.setting.grid_um[signed], np.sign(self.on_grid[signed])
        at = np.flatnonzero(sign[:-1] * sign[1:] < 0)
        return tuple(float(brentq(self.one, grid[k], grid[k + 1], xtol=ROOT_UM)) for k in at)

    @property
    def exact(self) -> Law:
        """The law that its parameters have."""
        return self

    @property
    def leak(self) -> float:
        """alpha, 1/s."""
        stated = self.setting.leak_rate
        return float(np.exp(self.shared[-1])) if stated is None else stated

    @property
    def edge_um(self) -> float | None:
        """Where J jumps to zero, µm, or None."""
        place = self.setting.edge_place
        return None if place is None else float(np.exp(self.shared[place]))

    def with_edge(self, edge_um: float) -> Law:
        """The same with another radius."""
        shared = self.shared.copy()
        shared[self.setting.edge_place] = np.log(edge_um)
        return Law(self.setting, shared)


@dataclass(frozen=True, eq=False)
class DrawnLaw(Law):
    """A plausible other law: J moved along its derivative at the estimate, as bands take it to move.

    Where parameters compensate each other far off (two Gaussians of nearly the same length), the parameters of a draw
    by themselves would make a J that nothing in the recording allows.

    Parameters
    ----------
    setting, shared : as drawn
    estimate : the law it was drawn around
    move : (Q,) by which the parameters moved
    moved_on_grid : (m,) J on the grid, less that of the estimate
    """

    estimate: Law
    move: FloatArray
    moved_on_grid: FloatArray

    def __call__(self, d_um: FloatArray | float) -> FloatArray:
        d = np.atleast_1d(np.asarray(d_um, dtype=np.float64))
        n = self.setting.n_kernel
        slope = self.setting.kernel.gradient(self.estimate.shared[:n], d, self.setting.span)
        return np.asarray(self.estimate(d) + self.move[:n] @ slope)

    @cached_property
    def on_grid(self) -> FloatArray:
        """(m,) J on the setting's grid."""
        return self.estimate.on_grid + self.moved_on_grid

    @property
    def exact(self) -> Law:
        """The law that its parameters have, without following the derivative."""
        return Law(self.setting, self.shared)


def setting_of(fit: CouplingFit, recording: Recording | None = None) -> Setting:
    """The setting of a fit; `recording` for a loaded fit whose model left pairs out."""
    near, far = distances_with_pairs(fit)
    return Setting(
        kernel=fit.model.kernel,
        span=fit.span,
        near_um=near,
        far_um=far,
        median_um=_median(fit.distinct_um, fit.n_pairs.astype(np.float64), near, far),
        n_kernel=fit.n_kernel,
        leak_rate=fit.model.leak_rate,
        in_percent=fit.model.link.name == "exp",
        pairs=pairs_of(fit, recording),
    )


def _median(distance_um: FloatArray, n_pairs: FloatArray, near_um: float, far_um: float) -> float:
    """The distance that half of the pairs in range do not exceed, µm."""
    seen = (distance_um >= near_um) & (distance_um <= far_um)
    share = np.cumsum(n_pairs[seen]) / np.sum(n_pairs[seen])
    return float(distance_um[seen][np.searchsorted(share, 0.5)])
