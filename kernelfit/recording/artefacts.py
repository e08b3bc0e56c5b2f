"""Moments at which much of the array fires at once: artefacts, where chance cannot give them.

A spike is marked when at least 15 % of the active units (and at least 5) fire within 1 ms of it, and spikes lie there
at least three times as densely as 5 to 25 ms away: a burst of the tissue has shoulders, an artefact has none. How often
that happens by chance, bursts and waves included, is measured on the recording itself: every train is shifted as a
whole by up to 50 ms, differently for each unit, several times over. Where the shifted trains meet the mark too often,
the mark is raised until at most 1 % of the marked moments can be chance. Each marked moment is left out with 10.05 ms
to both sides.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from kernelfit._typing import FloatArray, IntArray
from kernelfit.recording.merged import TIME_TOLERANCE_S, MergedTrain, merge_intervals

SHARE_OF_UNITS = 0.15
MIN_UNITS = 5
WITHIN_S = 0.001
SHOULDER_FROM_S, SHOULDER_TO_S = 0.005, 0.025
SHARPNESS = 3.0
MARGIN_S = 0.01005  # 10 ms and half of a common sampling step, so that no spike lies on an edge
SHIFT_S = 0.050
N_SHIFTS = 8
FALSE_SHARE = 0.01
_SHRINK = 0.5  # beyond what shifted trains reach, each further unit at least halves the number expected by chance


@dataclass(frozen=True, eq=False)
class WholeArrayEvents:
    """What was found.

    Parameters
    ----------
    bounds : (n, 2) stretches proposed for exclusion, seconds, sorted, separate
    units_at_once : (n,) most units firing within 1 ms of one spike in each stretch
    threshold : units that had to fire at once
    n_active : units with a spike
    expected_by_chance : stretches that chance would give at this threshold
    n_spikes_inside : spikes in the stretches
    """

    bounds: FloatArray
    units_at_once: IntArray
    threshold: int
    n_active: int
    expected_by_chance: float
    n_spikes_inside: int


def whole_array_events(train: MergedTrain, *, rng: np.random.Generator) -> WholeArrayEvents:
    """Stretches in which so many units fire at once that chance cannot account for them.

    Parameters
    ----------
    train : spikes of all units
    rng : draws the shifts
    """
    n_active = int(np.unique(train.unit).size)
    lowest = max(math.ceil(SHARE_OF_UNITS * n_active - 1e-9), MIN_UNITS)
    at_once = sharp_units_at_once(train.time_s, train.unit, train.n_units, lowest)
    highest = int(at_once.max(initial=0))
    nothing = WholeArrayEvents(np.empty((0, 2)), np.empty(0, dtype=np.int64), lowest, n_active, 0.0, 0)
    shifted = [_shifted_marks(train, lowest, rng) for _ in range(N_SHIFTS)] if highest >= lowest else []
    chance: list[float] = []
    for threshold in range(lowest, highest + 1):
        marked = at_once >= threshold
        bounds = _stretches(train.time_s[marked])
        found = sum(len(_stretches(time_s[units >= threshold])) for time_s, units in shifted)
        chance.append(found / N_SHIFTS if found else _beyond(chance))
        if chance[-1] > FALSE_SHARE * len(bounds):
            continue
        place = np.searchsorted(bounds[:, 0], train.time_s[marked], side="right") - 1
        most = np.zeros(len(bounds), dtype=np.int64)
        np.maximum.at(most, place, at_once[marked])
        held = np.searchsorted(train.time_s, bounds[:, 1]) - np.searchsorted(train.time_s, bounds[:, 0])
        return WholeArrayEvents(bounds, most, threshold, n_active, chance[-1], int(held.sum()))
    return nothing


def _shifted_marks(train: MergedTrain, at_least: int, rng: np.random.Generator) -> tuple[FloatArray, IntArray]:
    """Times of marked spikes, and units at once, after a shift of every train by up to 50 ms."""
    time_s = train.time_s + rng.uniform(-SHIFT_S, SHIFT_S, train.n_units)[train.unit]
    order = np.argsort(time_s, kind="stable")
    at_once = sharp_units_at_once(time_s[order], train.unit[order], train.n_units, at_least)
    marked = at_once > 0
    return time_s[order][marked], at_once[marked]


def _beyond(chance: list[float]) -> float:
    """Stretches expected by chance where no shifted train got: fewer than one in all, and falling."""
    fewer_than_one = 1.0 / N_SHIFTS
    if not chance:
        return fewer_than_one * _SHRINK
    fall = chance[-1] / chance[-2] if len(chance) > 1 else _SHRINK
    return min(chance[-1], fewer_than_one) * min(fall, _SHRINK)


def sharp_units_at_once(time_s: FloatArray, unit: IntArray, n_units: int, at_least: int) -> IntArray:
    """As `units_at_once`, and 0 where spikes are not `SHARPNESS` times as dense as on the shoulders."""
    at_once = units_at_once(time_s, unit, n_units, at_least)
    marked = np.flatnonzero(at_once)
    around = time_s[marked]

    def spikes_between(start_s: float, stop_s: float) -> IntArray:
        return np.searchsorted(time_s, around + stop_s) - np.searchsorted(time_s, around + start_s)

    centre = spikes_between(-WITHIN_S, WITHIN_S) / (2.0 * WITHIN_S)
    shoulders = spikes_between(-SHOULDER_TO_S, -SHOULDER_FROM_S) + spikes_between(SHOULDER_FROM_S, SHOULDER_TO_S)
    blunt = centre < SHARPNESS * shoulders / (2.0 * (SHOULDER_TO_S - SHOULDER_FROM_S))
    at_once[marked[blunt]] = 0
    return at_once


def units_at_once(time_s: FloatArray, unit: IntArray, n_units: int, at_least: int) -> IntArray:
    """(n_spikes,) units with a spike within 1 ms of each spike, its own included; 0 below `at_least`."""
    low = np.searchsorted(time_s, time_s - (WITHIN_S + TIME_TOLERANCE_S))
    high = np.searchsorted(time_s, time_s + (WITHIN_S + TIME_TOLERANCE_S))
    candidates = np.flatnonzero(high - low >= at_least)
    result = np.zeros(time_s.size, dtype=np.int64)
    if candidates.size == 0:
        return result
    size = (high - low)[candidates]
    if size.sum() > n_units * candidates.size:  # so dense that asking every unit is cheaper
        n_distinct = np.zeros(candidates.size, dtype=np.int64)
        for one in range(n_units):
            before = np.concatenate([[0], np.cumsum(unit == one)])
            n_distinct += before[high[candidates]] > before[low[candidates]]
    else:
        owner = np.repeat(np.arange(candidates.size), size)
        member = np.arange(size.sum()) - np.repeat(np.cumsum(size) - size - low[candidates], size)
        distinct = np.unique(owner * n_units + unit[member])
        n_distinct = np.bincount(distinct // n_units, minlength=candidates.size)
    result[candidates] = np.where(n_distinct >= at_least, n_distinct, 0)
    return result


def _stretches(time_s: FloatArray) -> FloatArray:
    return merge_intervals(np.column_stack([time_s - MARGIN_S, time_s + MARGIN_S]))
