"""Invented recordings for the tests of the inspection: clean ones, and clean ones with one fault planted in them."""

from __future__ import annotations

import numpy as np

from kernelfit.recording.recording import Recording

DEAD_S = 0.003  # after each spike of a unit, so that clean trains have no short intervals
PITCH_UM = 100.0
DURATION_S = 600.0

Trains = dict[str, np.ndarray]


def grid_positions(side: int) -> np.ndarray:
    """(side^2, 2) sites of a square grid, micrometres."""
    return PITCH_UM * np.array([(x, y) for y in range(side) for x in range(side)], dtype=np.float64)


def thinned(times_s: np.ndarray, dead_s: float = DEAD_S) -> np.ndarray:
    """Sorted times without those that come too soon after one kept."""
    kept: list[float] = []
    for t in np.sort(times_s):
        if not kept or t - kept[-1] >= dead_s:
            kept.append(float(t))
    return np.array(kept)


def steady_trains(
    rng: np.random.Generator, n_units: int = 25, rate_hz: float = 4.0, duration_s: float = DURATION_S
) -> Trains:
    """Independent trains at a steady rate with a dead time."""
    return {
        f"u{k:02d}": thinned(rng.uniform(0.0, duration_s, rng.poisson(rate_hz * duration_s))) for k in range(n_units)
    }


def coupled_trains(
    rng: np.random.Generator,
    side: int = 5,
    rate_hz: float = 3.0,
    duration_s: float = DURATION_S,
    offspring: float = 0.08,
    tau_s: float = 0.015,
) -> Trains:
    """Every spike causes `offspring` spikes on each of its up to four neighbours, after an exponential time."""
    positions = grid_positions(side)
    distance = np.hypot(*(positions[:, None] - positions[None]).transpose(2, 0, 1))
    neighbours = [np.flatnonzero((distance[k] > 0) & (distance[k] < 1.2 * PITCH_UM)) for k in range(side**2)]
    trains = [list(rng.uniform(0.0, duration_s, rng.poisson(rate_hz * duration_s))) for _ in range(side**2)]
    waiting = [(k, t) for k, train in enumerate(trains) for t in train]
    while waiting:
        k, t = waiting.pop()
        for j in neighbours[k]:
            for delay in rng.exponential(tau_s, rng.poisson(offspring)):
                if t + delay < duration_s:
                    trains[j].append(t + delay)
                    waiting.append((int(j), t + delay))
    return {f"u{k:02d}": thinned(np.array(train)) for k, train in enumerate(trains)}


def recording_of(
    trains: Trains,
    positions_um: np.ndarray | None = None,
    windows: tuple[tuple[float, float], ...] = ((0.0, DURATION_S),),
    exclusions: tuple[tuple[float, float], ...] = (),
    pairs: tuple[tuple[str, str], ...] = (),
) -> Recording:
    """A recording of these trains, on a square grid unless positions are given."""
    if positions_um is None:
        positions_um = grid_positions(int(np.ceil(np.sqrt(len(trains)))))[: len(trains)]
    return Recording(
        unit_ids=tuple(trains),
        positions=np.asarray(positions_um, dtype=np.float64),
        trains=tuple(np.sort(t) for t in trains.values()),
        window_bounds=np.array(windows, dtype=np.float64),
        exclusion_bounds=np.reshape(np.array(exclusions, dtype=np.float64), (-1, 2)),
        excluded_pairs=pairs,
    )


def with_artefacts(trains: Trains, rng: np.random.Generator, moments_s: np.ndarray, share: float) -> Trains:
    """At each moment a random share of the units fires within 1 ms (0.5 ms to either side)."""
    units = list(trains)
    n = round(share * len(units))
    added: dict[str, list[float]] = {u: [] for u in units}
    for moment in moments_s:
        for unit in rng.permutation(units)[:n]:
            added[str(unit)].append(float(moment + rng.uniform(-0.0005, 0.0005)))
    return {u: np.sort(np.concatenate([t, added[u]])) for u, t in trains.items()}
