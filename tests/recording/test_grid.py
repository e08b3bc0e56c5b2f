"""Windows and bins: which bin a spike falls into, which bins count, what is history. Values worked out by hand."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kernelfit.errors import GridError
from kernelfit.recording.grid import make_grid
from kernelfit.recording.recording import Origin, Recording, SourceFile


def recording(*trains, windows=((0.0, 1.0),), exclusions=(), source_only=(), files=()):
    """Units a, b, ... 100 µm apart with these spike times."""
    return Recording(
        tuple("abcdefgh"[: len(trains)]),
        100.0 * np.arange(len(trains), dtype=float)[:, None],
        tuple(np.sort(np.array(t, dtype=float)) for t in trains),
        np.array(windows, dtype=float),
        np.array(exclusions, dtype=float).reshape(-1, 2),
        source_only=frozenset(source_only),
        origin=Origin(files),
    )


def events(grid):
    rows = zip(grid.event_bin.tolist(), grid.event_unit.tolist(), grid.event_count.tolist(), strict=True)
    return list(rows)


# --- the bin rule of docs/model.md section 3: floor((t - a)/D + 1e-6) ---------------------------------------------


def test_counts_by_bin_and_unit_sorted():
    grid = make_grid(recording([0.25, 0.05, 0.26], [0.25, 0.95]), 0.1)
    assert events(grid) == [(0, 0, 1), (2, 0, 2), (2, 1, 1), (9, 1, 1)]
    np.testing.assert_array_equal(grid.stretches, [[0, 10]])
    np.testing.assert_array_equal(grid.counts_in_sum, [3, 2])
    assert (grid.n_bins, grid.n_units, grid.bin_width, grid.n_outside, grid.n_excluded) == (10, 2, 0.1, 0, 0)
    assert grid.duration_s == pytest.approx(1.0)


def test_times_on_bin_edges_fall_into_the_bin_they_open():
    """k * 0.001 as a sum, a product or a decimal differ in the last bit; all must fall into bin k."""
    k = np.arange(1, 5000)
    written = np.array([float(f"{v / 1000:.3f}") for v in k])
    assert np.sum(np.floor(written / 0.001) != k) > 50  # without the 1e-6 many would fall into the bin before
    grid = make_grid(recording(written, np.cumsum(np.full(k.size, 0.001)), windows=((0.0, 6.0),)), 0.001)
    for unit in (0, 1):
        np.testing.assert_array_equal(grid.event_bin[grid.event_unit == unit], k)


def test_the_tolerance_is_a_millionth_of_a_bin():
    grid = make_grid(recording([0.3 - 0.9e-7], [0.3 - 1.1e-7]), 0.1)
    assert events(grid) == [(2, 1, 1), (3, 0, 1)]


def test_bins_start_with_the_window_wherever_it_starts():
    shifted = make_grid(recording([86400.037 + 0.25], windows=((86400.037, 86401.037),)), 0.1)
    assert events(shifted) == [(2, 0, 1)]


@pytest.mark.parametrize(
    ("stop", "n_bins"), [(1.0, 10), (1.0999, 10), (1.1 - 1e-8, 11), (1.1, 11), (0.3, 3), (0.7, 7), (0.1, 1)]
)
def test_an_incomplete_last_bin_is_left_out(stop, n_bins):
    grid = make_grid(recording([0.05], windows=((0.0, stop),)), 0.1)
    np.testing.assert_array_equal(grid.stretches, [[0, n_bins]])


def test_spikes_in_the_incomplete_last_bin_do_not_count():
    alone = make_grid(recording([0.05, 1.03], windows=((0.0, 1.05),)), 0.1)
    assert events(alone) == [(0, 0, 1)]
    np.testing.assert_array_equal(alone.counts_in_sum, [1])
    # with a window to follow they are history: 1.03 is 0.97 s before 2.0, ten bins back from the second window's bin 0
    followed = make_grid(recording([0.05, 1.03], windows=((0.0, 1.05), (2.0, 3.0))), 0.1)
    assert events(followed) == [(0, 0, 1), (10, 0, 1)]
    np.testing.assert_array_equal(followed.counts_in_sum, [1])


# --- several windows --------------------------------------------------------------------------------------


def test_windows_lie_on_one_timeline_the_gap_rounded_up():
    """The second window starts 1.23 s after the first: bin 13, so that no bin of the gap is lost."""
    grid = make_grid(recording([0.05, 1.24, 1.28], windows=((0.0, 1.0), (1.23, 2.0))), 0.1)
    np.testing.assert_array_equal(grid.window_first_bin, [0, 13])
    np.testing.assert_array_equal(grid.window_n_bins, [10, 7])
    np.testing.assert_array_equal(grid.stretches, [[0, 10], [13, 20]])
    np.testing.assert_array_equal(grid.window_of_stretch, [0, 1])
    np.testing.assert_allclose(grid.window_start_s, [0.0, 1.23])
    assert events(grid) == [(0, 0, 1), (13, 0, 2)]


def test_a_gap_of_whole_bins_is_not_rounded():
    grid = make_grid(recording([0.0], windows=((0.0, 0.3), (0.7, 1.0), (1.1, 1.4))), 0.1)
    np.testing.assert_array_equal(grid.window_first_bin, [0, 7, 11])


def test_touching_windows_leave_no_gap():
    grid = make_grid(recording([0.49, 0.5], windows=((0.0, 0.5), (0.5, 1.0))), 0.1)
    np.testing.assert_array_equal(grid.stretches, [[0, 5], [5, 10]])
    assert events(grid) == [(4, 0, 1), (5, 0, 1)]


def test_spikes_outside_windows_are_history_counted_back_from_the_next():
    """-0.25: bin -3 of the first window. 1.1 is 0.13 s before 1.23: two bins back from bin 13. 2.5 drives nothing."""
    grid = make_grid(recording([-0.25, 0.5, 1.1, 1.5, 2.5], windows=((0.0, 1.0), (1.23, 2.0))), 0.1)
    assert events(grid) == [(-3, 0, 1), (5, 0, 1), (11, 0, 1), (15, 0, 1)]
    np.testing.assert_array_equal(grid.counts_in_sum, [2])
    assert grid.n_outside == 3


def test_a_spike_just_before_a_window_never_falls_into_it():
    """0.3 - 1e-9 is within the edge tolerance of bin 0 of the window at 0.3, and is still before it."""
    grid = make_grid(recording([0.3 - 1e-9], [0.35], windows=((0.3, 1.3),)), 0.1)
    assert events(grid) == [(-1, 0, 1), (0, 1, 1)]
    np.testing.assert_array_equal(grid.counts_in_sum, [0, 1])


def test_a_spike_at_the_stop_of_a_window_is_outside():
    grid = make_grid(recording([1.0], [0.5], windows=((0.0, 1.0), (2.0, 3.0))), 0.1)
    np.testing.assert_array_equal(grid.counts_in_sum, [0, 1])
    assert grid.n_outside == 1


@settings(max_examples=200, deadline=None)
@given(
    lengths=st.lists(st.floats(0.1, 2.0), min_size=1, max_size=4),
    gaps=st.lists(st.floats(0.0, 1.0), min_size=4, max_size=4),
    times=st.lists(st.floats(-1.0, 12.0), min_size=1, max_size=30, unique=True),
    bin_s=st.sampled_from([0.1, 0.05, 0.03, 1 / 30]),
)
def test_order_in_time_is_order_in_bins(lengths, gaps, times, bin_s):
    """Whatever the windows: a later spike never lies in an earlier bin, and only spikes of windows count."""
    bounds, at = [], 0.0
    for n, gap in zip(lengths, gaps, strict=False):
        bounds.append((at, at + n))
        at += n + gap
    rec = recording(times, windows=bounds)
    grid = make_grid(rec, bin_s)
    t = np.sort(times)
    start, stop = np.array(bounds).T
    last = stop[-1] - bin_s
    bins = np.repeat(grid.event_bin, grid.event_count)
    assert (np.diff(bins) >= 0).all()
    assert bins.size >= np.sum(t < last)  # all but those after the last window
    inside = np.any((t[:, None] >= start) & (t[:, None] < stop), axis=1)
    assert grid.counts_in_sum.sum() <= inside.sum()
    ends = grid.window_first_bin + grid.window_n_bins
    assert (grid.window_first_bin[1:] >= ends[:-1]).all()
    # a time span on the timeline is the span in seconds, rounded at each window start at most
    assert abs(ends[-1] * bin_s - stop[-1]) <= (len(bounds) + 1) * bin_s


# --- exclusions: every bin they touch leaves the sum, spikes inside drive nothing -----------------------------


def test_every_bin_an_exclusion_touches_leaves_the_sum():
    """0.25 to 0.41 touches bins 2, 3, 4. The spikes at 0.21 and 0.45 lie in such bins, not in it: history."""
    grid = make_grid(recording([0.21, 0.3, 0.45, 0.7], exclusions=((0.25, 0.41),)), 0.1)
    np.testing.assert_array_equal(grid.stretches, [[0, 2], [5, 10]])
    assert events(grid) == [(2, 0, 1), (4, 0, 1), (7, 0, 1)]
    np.testing.assert_array_equal(grid.counts_in_sum, [1])
    assert grid.n_excluded == 1


@pytest.mark.parametrize(
    "exclusion", [(0.2, 0.5), (0.2 + 1e-9, 0.5 - 1e-9), (0.2 - 1e-9, 0.5 + 1e-9), (0.1 + 0.1, 0.5)]
)
def test_exclusions_on_bin_edges_take_no_neighbours(exclusion):
    grid = make_grid(recording([0.05], exclusions=(exclusion,)), 0.1)
    np.testing.assert_array_equal(grid.stretches, [[0, 2], [5, 10]])


def test_an_exclusion_shorter_than_a_bin_takes_the_whole_bin():
    grid = make_grid(recording([0.05], exclusions=((0.32, 0.33),)), 0.1)
    np.testing.assert_array_equal(grid.stretches, [[0, 3], [4, 10]])


def test_the_start_of_an_exclusion_is_inside_and_its_stop_is_not():
    grid = make_grid(recording([0.2, 0.4], exclusions=((0.2, 0.4),)), 0.1)
    assert grid.n_excluded == 1
    assert events(grid) == [(4, 0, 1)]


def test_exclusions_over_window_borders_and_outside_windows():
    windows = ((0.0, 1.0), (2.0, 3.0))
    grid = make_grid(recording([0.1, 1.5, 2.05, 2.5], windows=windows, exclusions=((0.8, 2.2), (5.0, 6.0))), 0.1)
    np.testing.assert_array_equal(grid.stretches, [[0, 8], [22, 30]])
    assert events(grid) == [(1, 0, 1), (25, 0, 1)]
    assert grid.n_excluded == 2


@pytest.mark.parametrize("exclusions", [((0.2, 0.8), (0.3, 0.4)), ((0.2, 0.5), (0.4, 0.8)), ((0.2, 0.5), (0.5, 0.8))])
def test_overlapping_exclusions_act_like_their_union(exclusions):
    grid = make_grid(recording([0.05, 0.35, 0.6, 0.9], exclusions=exclusions), 0.1)
    np.testing.assert_array_equal(grid.stretches, [[0, 2], [8, 10]])
    assert events(grid) == [(0, 0, 1), (9, 0, 1)]
    assert grid.n_excluded == 2


def test_bins_in_sum():
    grid = make_grid(recording([0.1], windows=((0.0, 1.0), (2.0, 3.0)), exclusions=((0.3, 0.5),)), 0.1)
    bins = np.arange(-3, 35)
    want = ((bins >= 0) & (bins < 3)) | ((bins >= 5) & (bins < 10)) | ((bins >= 20) & (bins < 30))
    np.testing.assert_array_equal(grid.bins_in_sum(bins), want)


# --- warm-up ----------------------------------------------------------------------------------------------


def test_warm_up_after_window_starts_and_exclusions_feeds_the_state_only():
    windows = ((0.0, 1.0), (2.0, 3.0))
    rec = recording([0.05, 0.25, 0.65, 2.1], windows=windows, exclusions=((0.5, 0.6),))
    grid = make_grid(rec, 0.1, warm_up_s=0.2)
    np.testing.assert_array_equal(grid.stretches, [[2, 5], [8, 10], [22, 30]])
    assert events(grid) == [(0, 0, 1), (2, 0, 1), (6, 0, 1), (21, 0, 1)]  # all of them drive
    np.testing.assert_array_equal(grid.counts_in_sum, [1])


def test_warm_up_is_rounded_up_to_whole_bins():
    assert make_grid(recording([0.5]), 0.1, warm_up_s=0.21).stretches.tolist() == [[3, 10]]
    assert make_grid(recording([0.5]), 0.1, warm_up_s=0.3).stretches.tolist() == [[3, 10]]


def test_a_window_shorter_than_the_warm_up_drops_out_and_still_feeds():
    grid = make_grid(recording([0.05, 2.5], windows=((0.0, 0.4), (2.0, 3.0))), 0.1, warm_up_s=0.5)
    np.testing.assert_array_equal(grid.stretches, [[25, 30]])
    np.testing.assert_array_equal(grid.window_of_stretch, [1])
    assert events(grid) == [(0, 0, 1), (25, 0, 1)]


# --- no spikes, many bins, refusals -------------------------------------------------------------------------


def test_without_spikes_there_are_bins_and_no_events():
    grid = make_grid(recording([], []), 0.1)
    assert grid.n_bins == 10
    assert grid.event_bin.size == grid.event_unit.size == grid.event_count.size == 0
    np.testing.assert_array_equal(grid.counts_in_sum, [0, 0])


def test_memory_follows_the_spikes_not_the_bins():
    grid = make_grid(recording([0.5, 86_000.0], windows=((0.0, 86_400.0),)), 1e-6)
    assert grid.n_bins == 86_400_000_000
    assert events(grid) == [(500_000, 0, 1), (86_000_000_000, 0, 1)]


FILES = (SourceFile("windows", "w.csv", ""), SourceFile("exclusions", "artefacts.csv", ""))


@pytest.mark.parametrize(
    ("bin_s", "warm_up_s", "parts"),
    [
        (0.0, 0.0, ["bin_width=0.0", "positive number of seconds"]),
        (-0.001, 0.0, ["bin_width=-0.001"]),
        (np.nan, 0.0, ["bin_width=nan"]),
        (np.inf, 0.0, ["bin_width=inf"]),
        (0.1, -1.0, ["warm_up_s=-1.0", "0 or more"]),
        (0.1, np.nan, ["warm_up_s=nan"]),
        (
            1e-8,
            0.0,
            [
                "bin_width=1e-08 s is finer than spikes are timed",
                "at least 1e-06 s",
                "1 ms is bin_width=0.001, or --bin-ms 1.",
            ],
        ),
        (
            5.0,
            0.0,
            ["w.csv", "wider than window 2 (10 to 11 s)", "1 s, or take the window out", "10 ms is bin_width=0.01"],
        ),
        (
            0.1,
            20.0,
            ["w.csv: a warm-up of 20 s leaves no bin of 0.1 s in any window.", "Use a shorter warm-up"],
        ),
    ],
)
def test_refusals_name_the_place_and_the_remedy(bin_s, warm_up_s, parts):
    rec = recording([0.5], [0.7], windows=((0.0, 9.0), (10.0, 11.0)), files=FILES)
    with pytest.raises(GridError) as error:
        make_grid(rec, bin_s, warm_up_s=warm_up_s)
    for part in parts:
        assert part in str(error.value)


def test_exclusions_that_cover_everything_are_refused_by_their_files_name():
    rec = recording([0.5], windows=((0.0, 1.0),), exclusions=((-1.0, 2.0),), files=FILES)
    with pytest.raises(GridError, match=r"artefacts\.csv: the exclusions leave no bin of 0\.1 s in any window\."):
        make_grid(rec, 0.1)
    with pytest.raises(GridError, match=r"artefacts\.csv: the exclusions and a warm-up of 0\.5 s leave no bin"):
        make_grid(rec, 0.1, warm_up_s=0.5)
