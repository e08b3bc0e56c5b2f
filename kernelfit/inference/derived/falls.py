"""How far the coupling goes: where its size has fallen to a share of what it is at the reference distance."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from kernelfit.inference.derived.figure import DerivedFigure, Lost
from kernelfit.inference.derived.setting import ROOT_UM, Law, Setting


@dataclass(frozen=True, kw_only=True)
class Fall(DerivedFigure):
    """The first distance beyond the reference at which |J| is `share` of what it is there; of a disc, its radius."""

    share: float
    share_words: str

    def value(self, law: Law) -> float | Lost:
        if law.edge_um is not None:
            return law.edge_um
        found = self._between(law)
        if isinstance(found, Lost):
            return found
        wanted = self.share * abs(law.one(law.setting.span.reference_um))
        return float(brentq(lambda d: abs(law.one(d)) - wanted, *found, xtol=ROOT_UM))

    def lost(self, law: Law) -> Lost | None:
        found = None if law.edge_um is not None else self._between(law)
        return found if isinstance(found, Lost) else None

    def _between(self, law: Law) -> tuple[float, float] | Lost:
        """Two distances with the fall between them."""
        setting = law.setting
        reference = setting.span.reference_um
        if not setting.reference_seen:
            return Lost(f"the array has no pairs at the reference distance ({reference:,.4g} µm)")
        k = int(np.searchsorted(setting.grid_um, reference))
        distance, size = setting.grid_um[k:], np.abs(law.on_grid[k:])
        there = float(size[0])
        if not (there > 0.0 and math.isfinite(there)):
            return Lost("J is zero at the reference distance, so there is nothing to fall from")
        fallen = np.flatnonzero(size < self.share * there)
        if fallen.size == 0:
            return Lost(
                f"|J| does not fall to {self.share_words} of its value at the reference distance within the largest "
                f"distance with pairs ({setting.far_um:,.4g} µm)",
                "above",
            )
        return float(distance[fallen[0] - 1]), float(distance[fallen[0]])


def fall_figures(setting: Setting) -> tuple[DerivedFigure, ...]:
    """reach_um and half_distance_um."""

    def fall(name: str, share: float, words: str) -> Fall:
        return Fall(
            name=name,
            unit="µm",
            reads=f"distance at which the effect of a spike has fallen to {words} of that at the reference distance",
            least=setting.span.reference_um if setting.edge_place is None else 0.0,
            seen_to=setting.far_um,
            on_log=True,
            of_shape=True,
            share=share,
            share_words=words,
        )

    return fall("reach_um", math.exp(-1.0), "1/e (37 %)"), fall("half_distance_um", 0.5, "half")
