"""Blocks of time: the clusters of the robust variance and the units of the bootstrap (docs/model.md section 8)."""

from __future__ import annotations

import numpy as np

from kernelfit._typing import IntArray
from kernelfit.engine.evaluate import TimeBlocks
from kernelfit.recording.grid import Grid


def time_blocks(grid: Grid, length_s: float) -> TimeBlocks:
    """Cut the bins of the sum into blocks of about `length_s` seconds that respect windows.

    A window at least as long as a block is cut into equal blocks no shorter than it; shorter windows are put together,
    in order, until they reach it. Those that do not, before a longer window or at the end, join the block before them,
    or the first one of the window that follows where there is none. Only bins of the sum count towards a block's
    length, so no block is shorter than asked unless all of the sum is.

    Parameters
    ----------
    grid : windows and stretches in the sum
    length_s : seconds, at least one bin

    Returns
    -------
    TimeBlocks : stretches cut at block borders, in order of time
    """
    target = max(1, round(length_s / grid.bin_width))
    rows: list[tuple[int, int, int]] = []
    lengths: list[int] = []
    for w in np.unique(grid.window_of_stretch):
        stretches = grid.stretches[grid.window_of_stretch == w]
        total = int(np.sum(stretches[:, 1] - stretches[:, 0]))
        if total < target:
            if not lengths or lengths[-1] >= target:
                lengths.append(0)
            rows += [(int(a), int(b), len(lengths) - 1) for a, b in stretches]
            lengths[-1] += total
            continue
        n_blocks = total // target
        edges = [total * k // n_blocks for k in range(1, n_blocks + 1)]
        first = len(lengths)
        done, k = 0, 0
        for a, b in stretches:
            at = int(a)
            while at < b:
                stop = min(int(b), at + edges[k] - done)
                rows.append((at, stop, first + k))
                done += stop - at
                at = stop
                if done == edges[k]:
                    k += 1
        lengths += [int(n) for n in np.diff([0, *edges])]
    table = np.array(rows, dtype=np.int64)
    block = _without_short_blocks(np.array(lengths), target)
    table[:, 2] = block[table[:, 2]]
    return TimeBlocks(table, np.bincount(block, weights=lengths).astype(np.int64))


def _without_short_blocks(n_bins: IntArray, target: int) -> IntArray:
    """(G,) number of each block once those below `target` bins have joined the one before, the first the one after."""
    stays = n_bins >= target
    return np.asarray(np.maximum(np.cumsum(stays) - 1, 0), dtype=np.int64)
