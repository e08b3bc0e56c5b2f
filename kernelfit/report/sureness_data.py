"""What the figures on how sure the numbers are show, as data."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pandas as pd

from kernelfit._typing import FloatArray
from kernelfit.recording.recording import stretch_text


@dataclass(frozen=True)
class Interval:
    """One interval of one kind. An infinite end is open; NaN ends: none, for the reason given."""

    kind: str  # in words: "robust", "profile likelihood"
    lower: float
    upper: float
    reason: str = ""

    @property
    def known(self) -> bool:
        """Whether there is anything to draw."""
        return not (math.isnan(self.lower) or math.isnan(self.upper))


@dataclass(frozen=True)
class Compared:
    """One parameter and its intervals of every kind."""

    name: str  # as on the axis: "length (µm)"
    estimate: float
    intervals: tuple[Interval, ...]


@dataclass(frozen=True)
class KindsData:
    """Interval kinds side by side; the headline kind is drawn as the estimate's."""

    title: str
    parameters: tuple[Compared, ...]
    headline: str
    level: float

    def numbers(self) -> pd.DataFrame:
        """parameter, kind, estimate, lower, upper, note"""
        rows = [(p.name, i.kind, p.estimate, i.lower, i.upper, i.reason) for p in self.parameters for i in p.intervals]
        return pd.DataFrame(rows, columns=["parameter", "kind", "estimate", "lower", "upper", "note"])


@dataclass(frozen=True, eq=False)
class BlocksData:
    """Standard errors against the length of the blocks of time, each over the one that is used."""

    title: str
    length_s: FloatArray  # (L,)
    n_blocks: FloatArray  # (L,)
    names: tuple[str, ...]
    relative: FloatArray  # (L, Q) standard error over that at the chosen length
    model_based: FloatArray  # (Q,) model-based standard error over the same
    chosen_s: float

    def numbers(self) -> pd.DataFrame:
        """block_length_s, n_blocks, then the relative standard error of each parameter"""
        table = {"block_length_s": self.length_s, "n_blocks": self.n_blocks.astype(np.int64)}
        return pd.DataFrame({**table, **{n: self.relative[:, k] for k, n in enumerate(self.names)}})


@dataclass(frozen=True, eq=False)
class InfluenceData:
    """What leaving out each stretch, and each unit, does to the parameters, in robust standard errors."""

    title: str
    names: tuple[str, ...]
    middle_s: FloatArray  # (G,) middle of each stretch
    width_s: FloatArray  # (G,)
    by_stretch: FloatArray  # (G, Q)
    site_um: FloatArray  # (n, 2) sites of the units explained
    by_unit: FloatArray  # (n, Q)
    unit_ids: tuple[str, ...]

    def numbers(self) -> pd.DataFrame:
        """kind, which, then the move of each parameter in robust standard errors"""
        stretches = pd.DataFrame(self.by_stretch, columns=list(self.names))
        stretches.insert(
            0,
            "which",
            [stretch_text(m - w / 2, m + w / 2) for m, w in zip(self.middle_s, self.width_s, strict=True)],
        )
        units = pd.DataFrame(self.by_unit, columns=list(self.names))
        units.insert(0, "which", list(self.unit_ids))
        stretches.insert(0, "left_out", "stretch")
        units.insert(0, "left_out", "unit")
        return pd.concat([stretches, units], ignore_index=True)
