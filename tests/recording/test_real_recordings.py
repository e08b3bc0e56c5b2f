"""Facts that a correct loader reproduces, on eight open recordings of developing retina.

The tables are not part of the project: the folder is named by the environment variable KERNELFIT_RECORDINGS, and
these checks are skipped without it. Every expected number is from the README beside those tables ("Facts a correct
loader reproduces"; counts exact, distances to 0.1 µm, correlations to 0.001). Data: Eglen et al. (2014),
GigaScience 3:3, doi 10.1186/2047-217X-3-3.
"""

import os
from itertools import pairwise
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pytest

import kernelfit as kf

FOLDER = os.environ.get("KERNELFIT_RECORDINGS")
pytestmark = [
    pytest.mark.published,
    pytest.mark.skipif(not FOLDER, reason="KERNELFIT_RECORDINGS does not name the folder of real recordings"),
]

BIN_S = 0.1
SAME_SITE_UM = 1.0


class Facts(NamedTuple):
    units: int
    positions: int
    spikes: int
    start_s: float
    duration_s: float
    median_um: float
    same: tuple[float, int] | None  # mean correlation of pairs on one site, number of pairs
    near: tuple[float, int]
    mid: tuple[float, int]
    far: tuple[float, int]
    bands_um: tuple[float, float]
    silent_first_minute: int


FACTS = {
    "retina-mouse-p7-wt-1": Facts(
        16, 15, 18100, 0, 1782, 412.3, (0.767, 1), (0.604, 15), (0.314, 38), (0.108, 66), (200, 400), 2
    ),
    "retina-mouse-p11-wt-1": Facts(
        35, 26, 90145, 0, 3600, 400.0, (0.217, 9), (0.158, 91), (0.080, 219), (0.039, 276), (200, 400), 1
    ),
    "retina-mouse-p15-wt-1": Facts(
        39, 31, 154292, 0, 3600, 412.3, (0.217, 9), (0.213, 100), (0.068, 221), (0.024, 411), (200, 400), 11
    ),
    "retina-mouse-p5-control-1": Facts(
        58, 58, 133695, 6, 7274, 800.0, None, (0.246, 185), (0.148, 485), (0.129, 983), (300, 700), 27
    ),
    "retina-mouse-p5-bicuculline-1": Facts(
        57, 57, 339880, 0, 10803, 824.6, None, (0.311, 177), (0.141, 465), (0.069, 954), (300, 700), 17
    ),
    "retina-mouse-p5-wash-1": Facts(
        57, 57, 392779, 0, 15298, 824.6, None, (0.247, 177), (0.111, 465), (0.091, 954), (300, 700), 11
    ),
    "retina-ferret-p15-1": Facts(
        58, 42, 36476, 0, 1550, 280.0, (0.378, 20), (0.326, 126), (0.217, 550), (0.102, 957), (100, 250), 35
    ),
    "retina-mouse-p6-wt-1": Facts(
        258,
        186,
        311243,
        3603,
        2397,
        646.2,
        (0.198, 113),
        (0.199, 1390),
        (0.089, 10290),
        (0.012, 21360),
        (150, 500),
        102,
    ),
}

# recording -> exclusions, spikes inside them, correlations near, mid and far with those spikes taken out
MASKED = {
    "retina-mouse-p5-control-1": (219, 11167, (0.152, 0.047, 0.018)),
    "retina-mouse-p5-bicuculline-1": (369, 14356, (0.277, 0.119, 0.034)),
    "retina-mouse-p5-wash-1": (728, 30854, (0.181, 0.055, 0.018)),
}


def load(name):
    folder = Path(FOLDER)
    artefacts = folder / f"{name}.artefacts.csv"
    return kf.read_recording(
        folder / f"{name}.spikes.csv.gz",
        folder / f"{name}.sites.csv",
        exclusions=artefacts if artefacts.exists() else None,
    )


def pair_distances(rec):
    row, column = np.triu_indices(rec.n_units, k=1)
    return np.linalg.norm(rec.positions[row] - rec.positions[column], axis=1)


def pair_correlations(rec, trains):
    """Pearson correlation of counts in 100 ms bins for every unordered pair; NaN with a silent unit."""
    start, stop = rec.window_bounds[0]
    n_bins = round((stop - start) / BIN_S)
    counts = np.zeros((rec.n_units, n_bins))
    for k, train in enumerate(trains):
        # 1e-6 of a bin: a time that lies on an edge belongs to the bin it starts, whatever its last bit.
        index = np.floor((train - start) / BIN_S + 1e-6).astype(int)
        np.add.at(counts[k], index[index < n_bins], 1.0)
    counts -= counts.mean(axis=1, keepdims=True)
    norm = np.linalg.norm(counts, axis=1)
    norm[norm == 0] = np.nan
    row, column = np.triu_indices(rec.n_units, k=1)
    return ((counts @ counts.T) / np.outer(norm, norm))[row, column]


def in_bands(facts, distance):
    near, mid = facts.bands_um
    edges = (-np.inf, SAME_SITE_UM, near, mid, np.inf)
    same = distance < SAME_SITE_UM
    bands = [(distance > low) & (distance <= high) & ~same for low, high in pairwise(edges[1:])]
    return [same, *bands]


@pytest.mark.parametrize("name", FACTS)
def test_facts(name):
    facts, rec = FACTS[name], load(name)
    assert rec.n_units == facts.units
    assert len(np.unique(rec.positions, axis=0)) == facts.positions
    assert rec.n_spikes == sum(t.size for t in rec.trains) == facts.spikes
    assert rec.window_bounds.tolist() == [[facts.start_s, facts.start_s + facts.duration_s]]
    assert rec.duration == facts.duration_s
    assert rec.origin.windows_stated is False

    distance = pair_distances(rec)
    assert np.median(distance) == pytest.approx(facts.median_um, abs=0.05 + 1e-9)
    correlation = pair_correlations(rec, rec.trains)
    expected = (facts.same, facts.near, facts.mid, facts.far)
    for band, printed in zip(in_bands(facts, distance), expected, strict=True):
        r, n_pairs = printed if printed is not None else (None, 0)
        assert band.sum() == n_pairs
        if r is not None:
            assert correlation[band].mean() == pytest.approx(r, abs=0.001)

    first_minute = rec.select(stop_s=facts.start_s + 60.0)
    assert int((first_minute.counts == 0).sum()) == facts.silent_first_minute
    assert first_minute.n_units == facts.units


@pytest.mark.parametrize("name", MASKED)
def test_masked_facts(name):
    facts, rec = FACTS[name], load(name)
    n_exclusions, n_inside, printed = MASKED[name]
    start, stop = rec.exclusion_bounds.T
    assert len(start) == n_exclusions
    kept = [t[np.searchsorted(start, t, "right") == np.searchsorted(stop, t, "right")] for t in rec.trains]
    assert rec.n_spikes - sum(t.size for t in kept) == n_inside
    correlation = pair_correlations(rec, kept)
    for band, r in zip(in_bands(facts, pair_distances(rec))[1:], printed, strict=True):
        assert np.nanmean(correlation[band]) == pytest.approx(r, abs=0.001)


def test_the_unit_that_is_all_artefact():
    for name in ("retina-mouse-p5-bicuculline-1", "retina-mouse-p5-wash-1"):
        rec = load(name)
        times = rec.spike_times("e84")
        start, stop = rec.exclusion_bounds.T
        inside = np.searchsorted(start, times, "right") > np.searchsorted(stop, times, "right")
        assert times.size in (304, 569)
        assert inside.all()


def test_unit_sets_of_one_preparation():
    control, drug, wash = (set(load(f"retina-mouse-p5-{c}-1").unit_ids) for c in ("control", "bicuculline", "wash"))
    assert control - drug == {"e15", "e42"}
    assert drug - control == {"e84"}
    assert drug == wash


def test_ids_that_look_like_integers_are_text():
    rec = load("retina-mouse-p6-wt-1")
    assert rec.unit_ids[:2] == ("5", "36")
    assert rec.spike_times("1938")[0] == 3603.63485


def test_written_and_read_back_to_the_last_bit(tmp_path):
    rec = load("retina-ferret-p15-1")
    folder = kf.write_recording(rec, tmp_path / "out")
    again = kf.read_recording(folder / "spikes.csv", folder / "sites.csv", folder / "windows.csv")
    assert again.unit_ids == rec.unit_ids
    assert again.positions.tobytes() == rec.positions.tobytes()
    assert all(a.tobytes() == b.tobytes() for a, b in zip(again.trains, rec.trains, strict=True))
