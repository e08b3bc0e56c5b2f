"""The kernel summed over the space around a unit: over the distances with pairs, and, apart, what is extrapolated.

In one coordinate 2 int J dd, in two 2 pi int J d dd, in three 4 pi int J d^2 dd.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.integrate import quad
from scipy.special import roots_legendre

from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.setting import Law, Setting

SPHERE = {1: 2.0, 2: 2.0 * np.pi, 3: 4.0 * np.pi}
SPACE = {1: "the line", 2: "the plane", 3: "space"}
PANELS, NODES = 128, 8  # a length is at least d_ref / 5: panels are short beside it on any usual array
FAR_OUT = 1e6  # times the largest distance: there the law has its final slope
TOLERANCE = 1e-9
WORST_ERROR = 1e-4  # relative, as the quadrature itself estimates it


def integral(law: Law, low_um: float, high_um: float, part: float = 0.0) -> float:
    """Sum of J over the shell between two distances; `part` 1 or -1: of its positive or negative part, unsigned.

    Gauss-Legendre within panels that break where J changes sign or jumps, so that it is smooth in the parameters.
    """
    m = law.setting.span.n_coordinates
    breaks = [*np.linspace(low_um, high_um, PANELS + 1), *law.turns_um]
    if law.edge_um is not None:
        breaks.append(law.edge_um)
    ends = np.unique(np.clip(breaks, low_um, high_um))
    node, weight = roots_legendre(NODES)
    half = 0.5 * np.diff(ends)[:, None]
    d = (0.5 * (ends[1:] + ends[:-1])[:, None] + half * node).ravel()
    jump = law(d)
    if part:
        jump = np.maximum(part * jump, 0.0)
    return float(SPHERE[m] * np.sum(jump * d ** (m - 1) * (half * weight).ravel()))


@dataclass(frozen=True, kw_only=True)
class Mass(DerivedFigure):
    """J summed over the distances with pairs."""

    def value(self, law: Law) -> float | Lost:
        return integral(law, law.setting.near_um, law.setting.far_um)


@dataclass(frozen=True, kw_only=True)
class ExtrapolatedMass(DerivedFigure):
    """J summed over what lies closer than the closest pair and farther than the farthest: by the formula alone."""

    def value(self, law: Law) -> float | Lost:
        lost = self.lost(law)
        if lost is not None:
            return lost
        beyond = _tail(law)
        return beyond if isinstance(beyond, Lost) else integral(law, 0.0, law.setting.near_um) + beyond

    def lost(self, law: Law) -> Lost | None:
        far = law.setting.far_um * FAR_OUT * np.array([1.0, 2.0])
        size = np.abs(law.exact(far))
        m = law.setting.span.n_coordinates
        if size[1] == 0.0 or np.log2(size[1] / size[0]) < -m:
            return None
        name = law.setting.kernel.name
        return Lost(f"the {name} kernel found does not fall fast enough to have a finite sum over all of {SPACE[m]}")


def _tail(law: Law) -> float | Lost:
    """J summed from the largest distance with pairs to infinity, over the logarithm of the distance."""
    far, m = law.setting.far_um, law.setting.span.n_coordinates
    largest = float(np.max(np.abs(law.on_grid))) * far**m

    def density(x: float) -> float:
        d = far * np.exp(min(x, 500.0 / m))  # beyond, d^m would overflow and J has long been nothing
        value = law.one(d) * float(d) ** m
        return value if np.isfinite(value) else 0.0  # a polynomial times exp(-d^2) is inf times 0 far out

    if largest == 0.0:
        return 0.0
    value, error, *_ = quad(density, 0.0, np.inf, epsabs=TOLERANCE * largest, epsrel=TOLERANCE, full_output=1)
    if not error <= WORST_ERROR * largest:
        return Lost(f"the sum beyond the largest distance with pairs ({far:,.4g} µm) could not be computed")
    return SPHERE[m] * float(value)


@dataclass(frozen=True, kw_only=True)
class MassRatio(DerivedFigure):
    """Positive over negative mass, both over the distances with pairs."""

    def value(self, law: Law) -> float | Lost:
        lost = self.lost(law)
        if lost is not None:
            return lost
        near, far = law.setting.near_um, law.setting.far_um
        return integral(law, near, far, 1.0) / integral(law, near, far, -1.0)

    def lost(self, law: Law) -> Lost | None:
        if not law.on_grid.min() < 0.0:
            return Lost(f"J is nowhere negative at distances with pairs ({law.setting.where})", "above")
        if not law.on_grid.max() > 0.0:
            return Lost(f"J is nowhere positive at distances with pairs ({law.setting.where})", "below")
        return None


def mass_figures(setting: Setting) -> tuple[DerivedFigure, ...]:
    """mass, mass_extrapolated and mass_ratio."""
    m = setting.span.n_coordinates
    unit = f"{ {1: 'µm', 2: 'µm²', 3: 'µm³'}[m] } per spike"
    return (
        Mass(
            name="mass",
            unit=unit,
            reads=f"effect of a spike summed over {SPACE[m]} around its unit, at distances with pairs: {setting.where}",
        ),
        ExtrapolatedMass(
            name="mass_extrapolated",
            unit=unit,
            reads="what the kernel's formula adds to that closer by and farther away, where the array has no pairs",
            of_shape=True,
        ),
        MassRatio(
            name="mass_ratio",
            unit="",
            reads="raising over lowering effects, each summed over the distances with pairs",
            least=0.0,
            on_log=True,
            of_shape=True,
        ),
    )
