"""Where the coupling turns from one sign to the other, and where and how deep it is then.

The trough is the lowest point of J where J is positive at the smallest distance with pairs and negative farther away;
where it is the other way round, the highest.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from kernelfit.inference.derived.figure import DerivedFigure, Lost, Side
from kernelfit.inference.derived.setting import ROOT_UM, Law, Setting

SLOPE_STEP = 1e-4  # of the range of distances: over so much J is taken to be smooth


@dataclass(frozen=True, kw_only=True)
class SignChange(DerivedFigure):
    """The smallest distance with pairs at which J changes sign."""

    def value(self, law: Law) -> float | Lost:
        found = self.lost(law)
        return law.turns_um[0] if found is None else found

    def lost(self, law: Law) -> Lost | None:
        if law.on_grid.min() < 0.0 < law.on_grid.max():
            return None
        inside = law(np.linspace(0.0, law.setting.near_um, 20))  # extrapolated, to tell on which side it was lost
        turned = (inside * np.sum(law.on_grid) < 0.0).any()
        return Lost(f"J has one sign at all distances with pairs ({law.setting.where})", "below" if turned else "above")


@dataclass(frozen=True, kw_only=True)
class Trough(DerivedFigure):
    """The trough: its distance, or J there.

    Parameters
    ----------
    sign : of J at the smallest distance with pairs, at the estimate
    depth : True for J at the trough, False for its distance
    """

    sign: float
    depth: bool

    def value(self, law: Law) -> float | Lost:
        lost = self.lost(law)
        if lost is not None:
            return lost
        grid = law.setting.grid_um
        k = int(np.argmin(self.sign * law.on_grid))
        step = SLOPE_STEP * (law.setting.far_um - law.setting.near_um)

        def slope(d_um: float) -> float:
            left, right = law(np.array([d_um - step, d_um + step]))
            return self.sign * float(right - left)

        low, high = float(grid[k - 1]), float(grid[k + 1])
        bracketed = slope(low) < 0.0 < slope(high)
        place = float(brentq(slope, low, high, xtol=ROOT_UM)) if bracketed else float(grid[k])
        return law.one(place) if self.depth else place

    def lost(self, law: Law) -> Lost | None:
        height = self.sign * law.on_grid
        k = int(np.argmin(height))
        if not height[k] < 0.0:
            return Lost(
                f"J has one sign at all distances with pairs ({law.setting.where})",
                "above" if not self.depth else self._towards(0.0),
            )
        if k == height.size - 1:
            return Lost(
                f"J is still on its way at the largest distance with pairs ({law.setting.far_um:,.4g} µm): the "
                "trough, if there is one, lies beyond",
                "above" if not self.depth else self._towards(-1.0),
            )
        if k == 0:
            return Lost("J has the trough's sign at the smallest distance with pairs already", "below")
        return None

    def _towards(self, end: float) -> Side:
        """The side on which a depth of 0, or one without limit, lies."""
        return "above" if (end == 0.0) == (self.sign > 0) else "below"


def sign_figures(setting: Setting, law: Law) -> tuple[DerivedFigure, ...]:
    """sign_change_um, trough_um and trough_depth."""
    sign = 1.0 if law.one(setting.near_um) >= 0.0 else -1.0
    word = "trough" if sign > 0 else "peak (J is negative close by)"
    change = SignChange(
        name="sign_change_um",
        unit="µm",
        reads="distance at which the effect of a spike turns from one sign to the other",
        least=0.0,
        seen_from=setting.near_um,
        seen_to=setting.far_um,
        on_log=True,
        of_shape=True,
    )
    place = Trough(
        name="trough_um",
        unit="µm",
        reads=f"distance of the {word}, where the effect of the other sign is largest",
        least=0.0,
        seen_from=setting.near_um,
        seen_to=setting.far_um,
        on_log=True,
        of_shape=True,
        sign=sign,
        depth=False,
    )
    depth = Trough(
        name="trough_depth",
        unit="per spike",
        reads=f"J at the {word}",
        least=-np.inf if sign > 0 else 0.0,
        most=0.0 if sign > 0 else np.inf,
        of_shape=True,
        sign=sign,
        depth=True,
    )
    return change, place, depth
