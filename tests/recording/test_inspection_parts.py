"""The measurements behind the inspection, each against counting by hand or by plain loops."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from planted import coupled_trains, grid_positions, recording_of, steady_trains
from scipy import stats

from kernelfit.recording.activity import blocks, burstiness, even_share, gaps, intervals
from kernelfit.recording.artefacts import MARGIN_S, units_at_once, whole_array_events
from kernelfit.recording.bin_width import advise, excess_fall
from kernelfit.recording.checks_input import doubt_about_times
from kernelfit.recording.coincidence import pair_excess, pairs_to_leave_out
from kernelfit.recording.correlogram import (
    SLOW_STEPS,
    SLOW_WIDTH_S,
    BinnedSpikes,
    FineCounts,
    counts_by_bins,
    counts_by_pairs,
    fine_counts,
    fine_width,
    lag_measure,
)
from kernelfit.recording.layout import lay_out
from kernelfit.recording.merged import (
    close_pairs,
    inside,
    merge_intervals,
    merge_trains,
    remove_intervals,
    time_step,
)


def bursty(seed: int, n_units: int = 6, n_spikes: int = 60, duration_s: float = 20.0) -> dict[str, np.ndarray]:
    """Trains with shared bursts, some equal times included, on a grid of 0.1 ms."""
    rng = np.random.default_rng(seed)
    centres = rng.uniform(0.0, duration_s, 8)
    times = [rng.choice(centres, n_spikes) + rng.normal(0.0, 0.02, n_spikes) for _ in range(n_units)]
    return {f"u{k}": np.unique(np.round(t[(t > 0) & (t < duration_s)], 4)) for k, t in enumerate(times)}


# --- what counts and length alone say about the unit of time ------------------------------------------


@pytest.mark.parametrize(
    ("times", "severity"),
    [(1.0, None), (1e3, "warning"), (1e6, "error"), (2e4, "error")],
    ids=["seconds", "milliseconds", "microseconds", "samples"],
)
def test_other_units_of_time_are_noticed_from_counts_alone(times: float, severity: str | None) -> None:
    """Four units at 3 Hz for 20 s: 60 spikes in 20,000 s are one in 333 s, in 4.6 days one in 6,700 s."""
    trains = steady_trains(np.random.default_rng(3), n_units=4, rate_hz=3.0, duration_s=20.0)
    doubt = doubt_about_times(recording_of({u: times * t for u, t in trains.items()}, windows=((0.0, 20.0 * times),)))
    assert (None if doubt is None else doubt.severity) == severity
    if doubt is not None:
        assert "--time-unit" in doubt.remedy


def test_a_long_recording_of_slow_cells_is_not_doubted() -> None:
    """The slowest recordings of young tissue: 0.05 Hz for two hours."""
    trains = steady_trains(np.random.default_rng(3), n_units=4, rate_hz=0.05, duration_s=7200.0)
    assert doubt_about_times(recording_of(trains, windows=((0.0, 7200.0),))) is None


# --- stretches and the merged train ------------------------------------------------------------------


def test_stretches_are_merged_and_taken_out() -> None:
    merged = merge_intervals(np.array([[5.0, 6.0], [1.0, 2.0], [1.5, 3.0], [1.6, 1.7], [6.0, 7.0]]))
    assert merged.tolist() == [[1.0, 3.0], [5.0, 7.0]]  # touching ones are one
    assert merge_intervals(np.empty((0, 2))).shape == (0, 2)
    left = remove_intervals(np.array([[0.0, 2.0], [4.0, 10.0]]), merged)
    assert left.tolist() == [[0.0, 1.0], [4.0, 5.0], [7.0, 10.0]]
    times = np.array([0.5, 1.0, 2.999, 3.0, 5.0, 7.0])
    assert inside(times, merged).tolist() == [False, True, True, False, True, False]  # start inside, stop not
    assert not inside(times, np.empty((0, 2))).any()


def test_the_merged_train_keeps_what_is_observed() -> None:
    trains = {"a": np.array([0.5, 1.5, 4.5, 9.0]), "b": np.array([1.5, 4.2, 5.5])}
    recording = recording_of(trains, [[0.0], [100.0]], windows=((1.0, 2.0), (4.0, 6.0)), exclusions=((5.0, 5.8),))
    train = merge_trains(recording)
    assert train.time_s.tolist() == [1.5, 1.5, 4.2, 4.5]
    assert train.unit.tolist() == [0, 1, 1, 0]
    assert train.window.tolist() == [0, 0, 1, 1]
    assert train.duration_s == pytest.approx(2.2)
    assert train.counts().tolist() == [2, 2]
    # The clock of observed time: 1 s of the first window, then the second; and back.
    assert train.observed_time() == pytest.approx([0.5, 0.5, 1.2, 1.5])
    assert train.clock_time(np.array([0.5, 1.2, 2.1])) == pytest.approx([1.5, 4.2, 5.9])
    assert train.without(np.array([[4.1, 4.3]])).time_s.tolist() == [1.5, 1.5, 4.5]


@pytest.mark.parametrize("seed", range(3))
def test_close_pairs_are_all_pairs_by_plain_loops(seed: int) -> None:
    recording = recording_of(bursty(seed), grid_positions(3)[:6], windows=((0.0, 9.0), (9.0, 20.0)))
    train = merge_trains(recording)
    found = sorted(
        (int(min(a, b)), int(max(a, b)), round(float(lag), 9))
        for first, second, lags in close_pairs(train, 0.05)
        for a, b, lag in zip(first, second, lags, strict=True)
    )
    expected = []
    for i, j in itertools.combinations(range(train.n_spikes), 2):
        lag = train.time_s[j] - train.time_s[i]
        a, b = int(train.unit[i]), int(train.unit[j])
        if a != b and train.window[i] == train.window[j] and lag < 0.05 - 1e-7:
            expected.append((min(a, b), max(a, b), round(float(lag), 9)))
    assert found == sorted(expected)
    assert len(found) > 100


def test_a_sample_of_close_pairs_is_a_fair_share() -> None:
    train = merge_trains(recording_of(steady_trains(np.random.default_rng(0), 9, 20.0, 100.0), windows=((0.0, 100.0),)))
    everything = sum(lag.size for _, _, lag in close_pairs(train, 0.05))
    some = sum(lag.size for _, _, lag in close_pairs(train, 0.05, 0.2))
    assert some == pytest.approx(0.2 * everything, rel=0.03)


@pytest.mark.parametrize(("rate_hz", "found"), [(1.0, 1.0), (1e3, 1e-3), (2e4, 5e-5), (3e4, 1 / 3e4), (None, None)])
def test_the_time_grid_is_found(rate_hz: float | None, found: float | None) -> None:
    times = np.sort(np.random.default_rng(1).uniform(0.0, 500.0, 2000))
    if rate_hz is not None:
        times = np.unique(np.round(times * rate_hz)) / rate_hz
    train = merge_trains(recording_of({"a": times, "b": times[:0]}, [[0.0], [1.0]], windows=((0.0, 501.0),)))
    assert time_step(train) == (None if found is None else pytest.approx(found))


# --- correlograms -------------------------------------------------------------------------------------


def test_fine_counts_against_plain_loops() -> None:
    recording = recording_of(bursty(4), grid_positions(3)[:6], windows=((0.0, 20.0),), pairs=(("u0", "u1"),))
    train, layout = merge_trains(recording), lay_out(recording)
    fine = fine_counts(train, layout, 1e-4)
    by_hand = np.zeros_like(fine.counts)
    for a, b in itertools.combinations(range(6), 2):
        if (a, b) == (0, 1):
            continue  # left out of the kernel
        distance = layout.distance_um[a, b]
        band = next(k for k, band in enumerate(layout.bands) if distance <= band.to_um)
        steps = np.abs(np.round((recording.trains[a][:, None] - recording.trains[b][None]) * 1e4)).astype(int)
        for lag in steps[steps < 500]:
            by_hand[band, lag // 5] += 1
    assert (fine.counts == by_hand).all()
    assert fine.counts.sum() > 200


def test_the_first_lag_bin_of_times_on_a_grid_is_narrower() -> None:
    # Steps of 0.1 ms: lags 0 (once), 0.1 ... 0.4 ms (either sign) in the first bin of 0.5 ms, five either way later.
    assert lag_measure(5e-4, 3, 1e-4) == pytest.approx([9e-4, 10e-4, 10e-4])
    assert lag_measure(5e-4, 3, None) == pytest.approx([10e-4] * 3)
    assert fine_width(None) == fine_width(1e-4) == 5e-4
    assert fine_width(1e-3) == 1e-3
    assert fine_width(4e-4) == pytest.approx(8e-4)  # whole steps, not one and a quarter


def test_independent_trains_are_at_chance_in_every_band_and_at_every_lag() -> None:
    recording = recording_of(steady_trains(np.random.default_rng(5), rate_hz=8.0))
    inspection = recording.inspect()
    for (_, scale), part in inspection.correlograms.groupby(["band", "scale"]):
        z = (part["n_coincidences"] - part["expected"]) / np.sqrt(part["expected"])
        # Poisson counts: z is standard normal (slow lags share spikes and vary a little less or more).
        assert z.abs().max() < 4.5, scale
        assert part["n_coincidences"].sum() == pytest.approx(part["expected"].sum(), rel=0.02)


@pytest.mark.parametrize("seed", range(3))
def test_both_ways_of_slow_counting_agree_with_plain_loops(seed: int) -> None:
    recording = recording_of(bursty(seed), grid_positions(3)[:6], windows=((0.0, 7.03), (7.5, 20.0)))
    train, layout = merge_trains(recording), lay_out(recording)
    start = train.windows[train.window, 0]
    bins = ((train.time_s - start) / SLOW_WIDTH_S + 1e-6).astype(np.int64)
    n_bins = np.array([140, 250])
    whole = bins < n_bins[train.window]
    spikes = BinnedSpikes(bins[whole], train.unit[whole], train.window[whole], n_bins)
    by_hand = np.zeros((len(layout.bands), len(SLOW_STEPS)), dtype=np.int64)
    for i, j in itertools.permutations(range(spikes.bin.size), 2):
        step = int(spikes.bin[j] - spikes.bin[i])
        if spikes.window[i] == spikes.window[j] and step in SLOW_STEPS:
            band = layout.band_of_pair[spikes.unit[i], spikes.unit[j]]
            if band >= 0:
                by_hand[band, SLOW_STEPS.index(step)] += 1
    assert (counts_by_pairs(spikes, layout) == by_hand).all()
    assert (counts_by_bins(spikes, layout) == by_hand).all()


# --- distances ----------------------------------------------------------------------------------------


def test_bands_follow_the_reference_distance() -> None:
    layout = lay_out(recording_of({f"u{k}": np.empty(0) for k in range(100)}, grid_positions(10)))
    assert layout.reference_um == 100.0
    assert [b.label for b in layout.bands] == [
        "same site",
        "up to 150 µm",
        "150 to 300 µm",
        "300 to 600 µm",
        "beyond 600 µm",
    ]
    # 10 x 10 grid: 2 * 10 * 9 adjacent and 2 * 9 * 9 diagonal pairs in the first band that is not the same site.
    assert layout.pairs_in_band()[:2].tolist() == [0, 180 + 162]
    assert layout.pairs_in_band().sum() == 100 * 99 // 2


def test_the_reference_distance_is_over_sites_not_units() -> None:
    positions = np.array([[0.0], [0.4], [0.8], [100.0], [300.0]])  # three units on the first site
    layout = lay_out(recording_of({f"u{k}": np.empty(0) for k in range(5)}, positions))
    # Nearest other site of each of the three sites, from its first unit: 100, 99.2 and 200 µm.
    assert layout.n_sites == 3
    assert layout.reference_um == pytest.approx(100.0)
    assert layout.pairs_in_band()[0] == 3


# --- artefacts ----------------------------------------------------------------------------------------


def test_units_at_once_against_plain_loops() -> None:
    rng = np.random.default_rng(6)
    time_s = np.sort(rng.uniform(0.0, 0.2, 400))
    for n_units in (5, 60):  # the dense way and the sparse way
        unit = rng.integers(0, n_units, 400)
        near = np.abs(time_s[:, None] - time_s[None]) <= 0.001 + 1e-7
        by_hand = np.array([np.unique(unit[row]).size for row in near])
        assert (units_at_once(time_s, unit, n_units, 4) == np.where(by_hand >= 4, by_hand, 0)).all()


def test_marked_moments_get_their_margin() -> None:
    trains = {f"u{k}": np.array([10.0 + 1e-4 * k, 30.0 + 1e-4 * k]) for k in range(9)}
    train = merge_trains(recording_of(trains, windows=((0.0, 60.0),)))
    events = whole_array_events(train, rng=np.random.default_rng(0))
    assert events.units_at_once.tolist() == [9, 9]
    assert events.bounds == pytest.approx(
        np.array([[10.0 - MARGIN_S, 10.0008 + MARGIN_S], [30.0 - MARGIN_S, 30.0008 + MARGIN_S]])
    )
    assert events.n_spikes_inside == 18


@pytest.mark.parametrize("seed", range(5))
def test_broad_bursts_of_a_small_array_are_no_artefacts(seed: int) -> None:
    """16 units, 15 % are 2.4 units: three within 1 ms are common in a burst, and chance accounts for them."""
    rng = np.random.default_rng(seed)
    centres = rng.uniform(5.0, 595.0, 60)
    trains = {f"u{k:02d}": np.sort(rng.choice(centres, 1500) + rng.normal(0.0, 0.15, 1500)) for k in range(16)}
    train = merge_trains(recording_of(trains, grid_positions(4)))
    at_once = units_at_once(train.time_s, train.unit, 16, 3)
    assert (at_once >= 3).sum() > 1000
    assert len(whole_array_events(train, rng=rng).bounds) == 0


@pytest.mark.parametrize("n_units", [16, 36, 60])
@pytest.mark.parametrize("spread_s", [0.03, 0.1])
def test_tight_bursts_have_shoulders_and_are_no_artefacts(n_units: int, spread_s: float) -> None:
    """Every unit fires some 13 times within a burst: far more units within 1 ms than trains shifted by 50 ms give."""
    rng = np.random.default_rng(n_units)
    centres = rng.uniform(5.0, 595.0, 60)
    trains = {f"u{k}": np.sort(rng.choice(centres, 800) + rng.normal(0.0, spread_s, 800)) for k in range(n_units)}
    train = merge_trains(recording_of(trains))
    assert len(whole_array_events(train, rng=rng).bounds) <= 1  # a stray moment in 60 bursts at the most


# --- coincidences -------------------------------------------------------------------------------------


def test_pairs_without_excess_are_hardly_ever_flagged() -> None:
    """Bursty but unsynchronised trains: over 20 recordings of 300 pairs no false discovery is expected."""
    flagged = 0
    for seed in range(20):
        rng = np.random.default_rng(seed)
        centres = rng.uniform(1.0, 199.0, 60)
        trains = {f"u{k:02d}": np.sort(rng.choice(centres, 400) + rng.normal(0.0, 0.05, 400)) for k in range(25)}
        recording = recording_of(trains, windows=((0.0, 200.0),))
        train, layout = merge_trains(recording), lay_out(recording)
        excess = pair_excess(train, layout, recording.unit_ids, None, 5e-4)
        flagged += len(excess.near) + len(excess.far)
    assert flagged <= 1


@pytest.mark.parametrize("tau_s", [0.003, 0.005])
def test_a_fast_coupling_is_not_one_cell_seen_twice(tau_s: float) -> None:
    trains = coupled_trains(np.random.default_rng(8), rate_hz=5.0, offspring=0.15, tau_s=tau_s)
    recording = recording_of(trains)
    excess = pair_excess(merge_trains(recording), lay_out(recording), recording.unit_ids, None, 5e-4)
    assert len(excess.near) <= 2  # of 72 neighbouring pairs that all couple


def test_a_unit_that_coincides_everywhere_is_not_one_cell_seen_twice() -> None:
    rng = np.random.default_rng(7)
    trains = steady_trains(rng)
    clicks = np.sort(rng.uniform(0.0, 600.0, 400))
    for unit in ("u00", "u12", "u14", "u24", "u20", "u04", "u11"):
        trains[unit] = np.sort(np.concatenate([trains[unit], clicks + rng.uniform(0.0, 2e-4, 400)]))
    recording = recording_of(trains)
    excess = pair_excess(merge_trains(recording), lay_out(recording), recording.unit_ids, None, 5e-4)
    assert len(excess.far) >= 15
    assert pairs_to_leave_out(excess).empty


# --- course of the recording --------------------------------------------------------------------------


def test_intervals_by_hand() -> None:
    trains = {"a": np.array([1.0, 1.0005, 1.0025, 3.0, 8.0, 8.0015]), "b": np.array([5.0])}
    recording = recording_of(trains, [[0.0], [9.0]], windows=((0.0, 6.0), (7.0, 9.0)), exclusions=((2.0, 2.5),))
    held = intervals(merge_trains(recording))
    # 1.0025 to 3.0 crosses the exclusion, 3.0 to 8.0 the gap between windows.
    assert held.length_s == pytest.approx([0.0005, 0.002, 0.0015])
    assert held.n_per_unit.tolist() == [3, 0]
    assert held.n_short.tolist() == [1, 0]
    assert held.n_medium.tolist() == [2, 0]
    assert held.shortest_s[0] == pytest.approx(0.0005)
    assert np.isnan(held.shortest_s[1])
    assert np.isnan(held.share_short[1])


def test_blocks_join_windows_end_to_end() -> None:
    trains = {"a": np.arange(0.5, 100.0, 1.0)}
    recording = recording_of(trains, [[0.0]], windows=((0.0, 20.0), (60.0, 80.0)))
    table = blocks(merge_trains(recording)).table
    assert table["start_s"].tolist() == [0.0, 10.0, 60.0, 70.0]
    assert table["stop_s"].tolist() == pytest.approx([10.0, 20.0, 70.0, 80.0])
    assert table["n_spikes"].tolist() == [10] * 4
    assert table["rate_hz"].tolist() == [1.0] * 4


def test_gaps_reach_from_edge_to_edge_and_not_over_exclusions() -> None:
    trains = {"a": np.array([12.0, 13.0]), "b": np.array([40.0])}
    recording = recording_of(trains, [[0.0], [9.0]], windows=((0.0, 60.0),), exclusions=((45.0, 49.0),))
    table = gaps(merge_trains(recording))
    assert table[["start_s", "stop_s"]].to_numpy().tolist() == [[13.0, 40.0], [0.0, 12.0], [49.0, 60.0]]


@pytest.mark.parametrize("mean", [0.3, 2.0, 9.5, 60.0])
def test_theeven_share_is_that_of_poisson_counts(mean: float) -> None:
    counts = np.sort(np.random.default_rng(8).poisson(mean, 400_000))
    simulated = counts[-40_000:].sum() / counts.sum()
    assert even_share(mean) == pytest.approx(simulated, rel=0.01)  # Monte-Carlo error below 0.3 %


def test_population_events_are_counted() -> None:
    rng = np.random.default_rng(9)
    waves = np.arange(20.0, 600.0, 30.0)
    trains = {f"u{k}": np.sort(rng.choice(waves, 400) + rng.uniform(0.0, 2.0, 400)) for k in range(4)}
    burst = burstiness(merge_trains(recording_of(trains, grid_positions(2))))
    assert burst is not None
    assert burst.n_events == waves.size
    assert burst.event_share_of_spikes == pytest.approx(1.0)


# --- bin width ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("disturbed_s", "fall_s", "share_short", "step_s", "width_s"),
    [
        (0.0, 0.014, 0.0, None, 0.001),  # a tenth of the fall, down to the next of 1, 2, 5, 10 ms
        (0.0, 0.060, 0.0, None, 0.005),
        (0.0, 1.0, 0.0, None, 0.010),  # never wider than 10 ms
        (0.001, 1.0, 0.0, None, 0.010),
        (0.001, 0.014, 0.0, None, 0.005),  # five times the disturbed lag wins over the fall
        (0.0, 0.014, 0.13, None, 0.005),  # spikes counted twice disturb 1 ms
        (0.0, 0.014, 0.0, 0.004, 0.010),  # at least two steps of the times
        (0.0, np.nan, 0.0, None, 0.005),
        (0.0, np.inf, 0.0, None, 0.010),
    ],
)
def test_the_suggested_bin_width(
    disturbed_s: float, fall_s: float, share_short: float, step_s: float | None, width_s: float
) -> None:
    advice = advise(
        disturbed_s=disturbed_s, fall_s=fall_s, share_short=share_short, step_s=step_s, artefacts_left_out=False
    )
    assert advice.width_s == pytest.approx(width_s)
    assert advice.reason.endswith("Repeat the fit at half and at twice this width.")


@pytest.mark.parametrize("tau_s", [0.02, 0.2, 1.0])
def test_the_fall_of_an_exponential_excess_is_its_half_life(tau_s: float) -> None:
    lags = (np.arange(100) + 0.5) * 5e-4
    slow_lags = np.array(SLOW_STEPS) * SLOW_WIDTH_S
    expected = np.full((2, 100), 1e4)
    counts = np.rint(expected * (1.0 + 3.0 * np.exp(-lags / tau_s))).astype(np.int64)
    fine = FineCounts(width_s=5e-4, counts=counts, expected=expected, share=1.0)
    slow_expected = np.full(slow_lags.size, 1e6)
    fall = excess_fall(fine, slow_expected * (1.0 + 3.0 * np.exp(-slow_lags / tau_s)), slow_expected, 1)
    assert fall == pytest.approx(tau_s * np.log(2.0), abs=0.05 if tau_s > 0.06 else 0.004)


def test_no_fall_without_excess() -> None:
    expected = np.full((1, 100), 50.0)
    counts = stats.poisson.rvs(50.0, size=(1, 100), random_state=1)
    fine = FineCounts(width_s=5e-4, counts=counts, expected=expected, share=1.0)
    level = np.full(len(SLOW_STEPS), 1e4)
    assert np.isnan(excess_fall(fine, level, level, 0))
