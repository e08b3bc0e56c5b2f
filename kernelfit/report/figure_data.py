"""What each figure shows, as data: built and tested before anything is drawn. Figures compute nothing.

Every class has `numbers()`, the table behind the figure, which the results folder holds as a file beside it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from kernelfit._typing import BoolArray, FloatArray


@dataclass(frozen=True, eq=False)
class PairCounts:
    """Number of pairs against distance: a bar per distinct distance or, where those are many, per stretch."""

    distance_um: FloatArray  # (n_bars,) middle of each bar
    n_pairs: FloatArray  # (n_bars,) unordered pairs
    width_um: float
    grouped: bool  # True: a bar collects the distances in a stretch of `width_um`

    def numbers(self) -> pd.DataFrame:
        """distance_um, n_pairs"""
        return pd.DataFrame({"distance_um": self.distance_um, "n_pairs": self.n_pairs.astype(np.int64)})


@dataclass(frozen=True, eq=False)
class KernelData:
    """The kernel with its band, in two readings, over the distances at which the array has pairs."""

    title: str
    distance_um: FloatArray  # (n,) rising; NaN in the curve where the array has no pairs
    jump: FloatArray  # (n,) J
    lower: FloatArray
    upper: FloatArray
    in_percent: bool  # True: the `exp` link, J has a reading in per cent of the rate
    reference_um: float
    level: float
    pairs: PairCounts
    reach_um: float  # right end of the axis
    found: bool  # False: no coupling to describe; only the reference point is drawn, the shape means nothing
    at_reference: tuple[float, float, float]  # J at the reference distance, lower, upper

    def numbers(self) -> pd.DataFrame:
        """distance_um, estimate, lower, upper; no row where the array has no pairs"""
        table = pd.DataFrame(
            {
                "distance_um": self.distance_um,
                "estimate": self.jump,
                "lower": self.lower,
                "upper": self.upper,
            }
        )
        return table[table["distance_um"].notna()].reset_index(drop=True)


@dataclass(frozen=True, eq=False)
class CourseLine:
    """The effect of one spike against time at one distance; NaN bands where the leak was fixed."""

    distance_um: float
    effect: FloatArray  # (n,) per cent of the rate, or the drive where the link is not `exp`
    lower: FloatArray
    upper: FloatArray
    main: bool  # the line that carries the band


@dataclass(frozen=True, eq=False)
class CourseData:
    """The time course of one spike's effect."""

    title: str
    lag_s: FloatArray  # (n,)
    lines: tuple[CourseLine, ...]
    in_percent: bool
    time_constant_s: float
    level: float

    def numbers(self) -> pd.DataFrame:
        """lag_s, distance_um, estimate, lower, upper: one block of rows per distance"""
        blocks = [
            pd.DataFrame(
                {
                    "lag_s": self.lag_s,
                    "distance_um": line.distance_um,
                    "estimate": line.effect,
                    "lower": line.lower,
                    "upper": line.upper,
                }
            )
            for line in self.lines
        ]
        return pd.concat(blocks, ignore_index=True)


@dataclass(frozen=True, eq=False)
class AfterSpikeData:
    """After-spike curves: what a unit's own spike does to its rate, over all units that have one."""

    title: str
    lag_s: FloatArray  # (n_lags,)
    median: FloatArray  # (n_lags,) rate multiplier
    lower_quartile: FloatArray
    upper_quartile: FloatArray
    few: FloatArray  # (n_shown, n_lags) single units, faint
    n_units: int

    def numbers(self) -> pd.DataFrame:
        """lag_s, median, lower_quartile, upper_quartile"""
        return pd.DataFrame(
            {
                "lag_s": self.lag_s,
                "median": self.median,
                "lower_quartile": self.lower_quartile,
                "upper_quartile": self.upper_quartile,
            }
        )


@dataclass(frozen=True, eq=False)
class ArrayData:
    """Amounts at the sites of the array, units on one site side by side around it."""

    title: str
    quantity: str  # label of the colour bar, with unit
    place_um: FloatArray  # (n_units, 2) where each unit's mark is drawn
    site_um: FloatArray  # (n_sites, 2) sites as seen
    shared_um: FloatArray  # (n_shared_sites, 2) those with several units around them
    value: FloatArray  # (n_units,) NaN: nothing to show, an open mark
    on_log_scale: bool
    spacing_um: float  # typical distance between neighbouring sites; marks are sized by it
    scale_bar_um: float
    n_shared: int  # units that share their place on the map with another
    seen_along: str  # the coordinate that is not drawn, of three; "" where all are


@dataclass(frozen=True, eq=False)
class KsPanel:
    """One KS plot: share of rescaled intervals against what the model expects, with two bands."""

    title: str
    expected: FloatArray  # (n_points,)
    observed: FloatArray
    test_band: float  # half-width: the test used rejects where the line leaves it
    free_band: float  # half-width of the Dvoretzky-Kiefer-Wolfowitz band, which needs no model for the rate
    n_intervals: int
    rejected: bool


@dataclass(frozen=True, eq=False)
class KsGlanceData:
    """All units' KS statistics over their critical values, sorted."""

    ratio: FloatArray  # (n_units,) sorted; above 1 the single test rejects
    rejected: BoolArray  # (n_units,) after the correction for many tests
    level: float


@dataclass(frozen=True, eq=False)
class KsData:
    """KS plots of a few units and of all together, and all units at a glance."""

    title: str
    panels: tuple[KsPanel, ...]
    glance: KsGlanceData
    numbered: bool  # a panel names its unit by its row, because the font cannot draw its id


@dataclass(frozen=True, eq=False)
class RasterData:
    """A stretch of the recording: spikes of the units, and observed and fitted rate under them."""

    title: str
    rows: tuple[FloatArray, ...]  # spike times of each unit, seconds, bottom row first
    start_s: float
    stop_s: float
    time_s: FloatArray  # (n,) middle of each stretch of `averaged_s`
    observed_hz: FloatArray  # (n,) mean over units
    fitted_hz: FloatArray
    averaged_s: float

    def numbers(self) -> pd.DataFrame:
        """time_s, observed_hz, fitted_hz"""
        return pd.DataFrame({"time_s": self.time_s, "observed_hz": self.observed_hz, "fitted_hz": self.fitted_hz})
