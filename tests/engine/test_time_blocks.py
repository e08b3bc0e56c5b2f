"""Blocks of time cut all of the sum, once, in order, and respect windows."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sweep_cases import recording

from kernelfit.engine.time_blocks import time_blocks
from kernelfit.errors import GridError
from kernelfit.recording.grid import make_grid
from kernelfit.recording.recording import Recording


def grid_of(windows, exclusions=(), bin_s=0.1):
    rng = np.random.default_rng(0)
    return make_grid(recording(rng, 2, windows=windows, exclusions=exclusions), bin_s)


def bins_by_block(blocks):
    return [
        [t for start, stop, b in blocks.stretches if b == k for t in range(start, stop)] for k in range(blocks.n_blocks)
    ]


def test_one_window_is_cut_into_equal_blocks():
    blocks = time_blocks(grid_of(((0.0, 10.0),)), 2.5)  # 100 bins in blocks of 25
    np.testing.assert_array_equal(blocks.stretches, [[0, 25, 0], [25, 50, 1], [50, 75, 2], [75, 100, 3]])
    np.testing.assert_array_equal(blocks.n_bins, [25, 25, 25, 25])


def test_blocks_that_do_not_divide_a_window_grow_rather_than_shrink():
    blocks = time_blocks(grid_of(((0.0, 10.0),)), 3.0)  # 100 bins: 3 blocks of 33 or 34, not 4 of 25
    np.testing.assert_array_equal(blocks.n_bins, [33, 33, 34])


def test_short_windows_are_put_together_until_they_reach_the_length():
    windows = tuple((10.0 * k, 10.0 * k + 1.0) for k in range(7))  # seven trials of 10 bins
    blocks = time_blocks(grid_of(windows), 2.5)
    np.testing.assert_array_equal(blocks.stretches[:, 2], [0, 0, 0, 1, 1, 1, 1])
    np.testing.assert_array_equal(blocks.n_bins, [30, 40])


def test_a_long_window_does_not_share_its_blocks_with_short_ones_that_fill_their_own():
    windows = ((0.0, 1.0), (3.0, 4.0), (10.0, 16.0), (20.0, 21.0), (30.0, 31.0))
    blocks = time_blocks(grid_of(windows), 2.0)
    np.testing.assert_array_equal(blocks.n_bins, [20, 20, 20, 20, 20])
    np.testing.assert_array_equal(blocks.stretches[:, 2], [0, 0, 1, 2, 3, 4, 4])


@pytest.mark.parametrize(
    ("windows", "n_bins", "blocks_of_rows"),
    [
        (((0.0, 1.0), (10.0, 14.0)), [30, 20], [0, 0, 1]),  # nothing before: with the first block after
        (((0.0, 4.0), (10.0, 11.0), (20.0, 24.0)), [20, 30, 20, 20], [0, 1, 1, 2, 3]),  # with the one before
        (((0.0, 4.0), (10.0, 11.0)), [20, 30], [0, 1, 1]),
        (((0.0, 0.5), (10.0, 10.5)), [10], [0, 0]),  # all there is
    ],
)
def test_what_stays_short_joins_a_neighbour(windows, n_bins, blocks_of_rows):
    """A block of 10 bins among blocks of 20 would count as much in the robust variance and the sign flips."""
    blocks = time_blocks(grid_of(windows), 2.0)
    np.testing.assert_array_equal(blocks.n_bins, n_bins)
    np.testing.assert_array_equal(blocks.stretches[:, 2], blocks_of_rows)


def test_exclusions_do_not_count_towards_the_length():
    blocks = time_blocks(grid_of(((0.0, 10.0),), ((1.0, 4.0),)), 3.5)  # 70 bins left: two blocks of 35
    np.testing.assert_array_equal(blocks.stretches, [[0, 10, 0], [40, 65, 0], [65, 100, 1]])
    np.testing.assert_array_equal(blocks.n_bins, [35, 35])


def test_a_length_below_a_bin_gives_a_block_a_bin():
    assert time_blocks(grid_of(((0.0, 0.7),)), 0.001).n_blocks == 7


def test_a_length_above_the_recording_gives_one_block():
    blocks = time_blocks(grid_of(((0.0, 3.0), (5.0, 6.0))), 1000.0)
    assert blocks.n_blocks == 1
    np.testing.assert_array_equal(blocks.n_bins, [40])


@settings(max_examples=100, deadline=None)
@given(
    lengths=st.lists(st.integers(1, 60), min_size=1, max_size=8),
    holes=st.lists(st.tuples(st.integers(0, 200), st.integers(1, 30)), max_size=5),
    target=st.integers(1, 80),
)
def test_blocks_tile_the_sum_in_order(lengths, holes, target):
    """Any windows and exclusions: every bin of the sum in one block, none too short, none needlessly long."""
    starts = np.cumsum([0, *[n + 3 for n in lengths[:-1]]])
    windows = np.column_stack([starts, starts + lengths]) * 0.1
    exclusions = np.array([(a, a + n) for a, n in sorted(holes)], dtype=float).reshape(-1, 2) * 0.1
    rec = Recording(("a", "b"), np.array([[0.0], [9.0]]), (np.array([0.05]), np.array([])), windows, exclusions)
    try:
        grid = make_grid(rec, 0.1)
    except GridError:  # exclusions can cover everything
        return
    blocks = time_blocks(grid, target * 0.1)
    rows = blocks.stretches
    in_sum = [t for a, b in grid.stretches for t in range(a, b)]
    assert [t for a, b, _ in rows for t in range(a, b)] == in_sum
    assert (rows[:, 1] > rows[:, 0]).all()
    np.testing.assert_array_equal(np.unique(rows[:, 2]), np.arange(blocks.n_blocks))
    assert (np.diff(rows[:, 2]) >= 0).all()
    np.testing.assert_array_equal([len(b) for b in bins_by_block(blocks)], blocks.n_bins)
    assert blocks.n_bins.min() >= min(target, len(in_sum))  # none shorter than asked, unless all there is
    assert blocks.n_bins.max() < 4 * target  # short of two, and a short group on either side at most


@pytest.mark.parametrize("length_s", [0.3, 1.0, 2.7])
def test_every_bin_has_one_block_on_an_irregular_grid(length_s):
    grid = grid_of(((0.0, 5.0), (5.35, 6.0), (9.0, 9.2)), ((2.0, 2.05), (4.9, 5.5)), bin_s=0.01)
    blocks = time_blocks(grid, length_s)
    assert blocks.n_bins.sum() == grid.n_bins


@given(
    lengths=st.lists(st.integers(1, 40), min_size=1, max_size=6),
    target=st.integers(1, 30),
    parts=st.integers(1, 6),
    size=st.integers(1, 5),
)
@settings(deadline=None, max_examples=60)
def test_blocks_split_and_joined_still_hold_every_bin_once(lengths, target, parts, size):
    starts = np.cumsum([0, *lengths[:-1]]) + 3 * np.arange(len(lengths))
    windows = tuple((0.1 * a, 0.1 * (a + n)) for a, n in zip(starts, lengths, strict=True))
    blocks = time_blocks(grid_of(windows), 0.1 * target)
    fine = blocks.split(parts)
    finer = fine.n_blocks // blocks.n_blocks
    assert 1 <= finer <= parts
    assert finer == parts or finer == blocks.n_bins.min()
    wide = blocks.join(size)
    assert wide.n_blocks == -(-blocks.n_blocks // size)
    for other, group in ((fine.join(finer), 1), (wide, size)):
        want = [[t for b in bins_by_block(blocks)[k : k + group] for t in b] for k in range(0, blocks.n_blocks, group)]
        assert bins_by_block(other) == want
        np.testing.assert_array_equal(other.n_bins, [len(b) for b in want])
    np.testing.assert_array_equal(fine.n_bins, [len(b) for b in bins_by_block(fine)])
    by_block = fine.n_bins.reshape(blocks.n_blocks, finer)
    assert (by_block.max(axis=1) - by_block.min(axis=1) <= 1).all()
