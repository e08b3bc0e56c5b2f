"""Small loops over rows of cells that the sweep is made of.

A row holds one number per cell of a tile; cells run over bins, then lanes (`row[t * n_lanes + lane]`), a lane being one
target unit. Every loop here runs over a contiguous slice, so that the compiler turns it into vector instructions.
Sums may be reordered by the compiler, always in the same way for the same shapes.

Where a loop runs over several rows at once, indices are unsigned and pitches constant: only then does the compiler see
that what it writes cannot lie on what it reads, and vectors cost no checks.
"""

from __future__ import annotations

import numpy as np

from kernelfit._typing import FloatArray
from kernelfit.engine.compiled import compiled, compiled_in_order

CELLS_PER_TILE = 1024  # ten rows of this many doubles stay in the second cache level
ROW_PITCH = CELLS_PER_TILE + 24  # from row to row of a tile; rows a power of two apart contend for the same cache lines
LANE_PITCH = 48  # from sum to sum by lane, and so the most lanes of a block
GRAM = 3  # rows per side of a gram block
BINS_AT_ONCE = 4  # bins of a tile come in multiples of this
ETA_LIMIT = 700.0  # exp(709.8) overflows; a linear predictor beyond this is a failed step, whatever its size
_ZERO, _BINS, _ROW = np.uint64(0), np.uint64(BINS_AT_ONCE), np.uint64(ROW_PITCH)
_ROW_2 = np.uint64(2 * ROW_PITCH)
_SUM = tuple(np.uint64(k * LANE_PITCH) for k in range(GRAM * GRAM))
_ROUND = 6755399441055744.0  # 1.5 * 2**52: adding it rounds to an integer held in the low bits of the double
_LOG2_E = 1.4426950408889634074
_LN2_HIGH = 6.93147180369123816490e-01
_LN2_LOW = 1.90821492927058770002e-10
# 1/k! for k = 13 down to 0; on |r| <= ln2/2 the truncated series is exact to half a unit in the last place
_C13, _C12, _C11 = 1.6059043836821613e-10, 2.08767569878681e-09, 2.505210838544172e-08
_C10, _C9, _C8 = 2.755731922398589e-07, 2.7557319223985893e-06, 2.48015873015873e-05
_C7, _C6, _C5 = 1.984126984126984e-04, 1.388888888888889e-03, 8.333333333333333e-03
_C4, _C3 = 4.1666666666666664e-02, 1.6666666666666666e-01


@compiled_in_order
def exp_into(x: FloatArray, shift: float, out: FloatArray, scratch: FloatArray) -> None:
    """out = exp(x + shift), cell by cell, the exponent clipped to +-ETA_LIMIT; `scratch` is as long as `out`."""
    bits = out.view(np.int64)
    power = scratch.view(np.int64)
    for c in range(out.size):
        v = min(max(x[c] + shift, -ETA_LIMIT), ETA_LIMIT)
        rounded = v * _LOG2_E + _ROUND
        scratch[c] = rounded
        k = rounded - _ROUND
        r = (v - k * _LN2_HIGH) - k * _LN2_LOW
        p = _C13 * r + _C12
        p = p * r + _C11
        p = p * r + _C10
        p = p * r + _C9
        p = p * r + _C8
        p = p * r + _C7
        p = p * r + _C6
        p = p * r + _C5
        p = p * r + _C4
        p = p * r + _C3
        p = p * r + 0.5
        p = p * r + 1.0
        out[c] = p * r + 1.0
    for c in range(out.size):
        bits[c] += power[c] << 52  # times 2**k, by adding k to the exponent field


@compiled
def total(x: FloatArray) -> float:
    """Sum of a row."""
    s = 0.0
    for c in range(x.size):
        s += x[c]
    return s


@compiled
def multiply_into(x: FloatArray, y: FloatArray, out: FloatArray) -> None:
    """out = x * y, cell by cell."""
    for c in range(out.size):
        out[c] = x[c] * y[c]


@compiled
def add_by_lane(x: FloatArray, sums: FloatArray) -> None:
    """sums[lane] += sum over bins of x; the number of lanes is the length of `sums`."""
    lanes = sums.size
    for t in range(x.size // lanes):
        row = x[t * lanes : (t + 1) * lanes]
        for i in range(lanes):
            sums[i] += row[i]


@compiled
def add_products_by_lane(x: FloatArray, y: FloatArray, sums: FloatArray) -> None:
    """sums[lane] += sum over bins of x * y. Four bins at a time, so that `sums` is loaded and stored less often."""
    lanes = sums.size
    n_bins = x.size // lanes
    t = 0
    while t + 4 <= n_bins:
        x0, y0 = x[t * lanes : (t + 1) * lanes], y[t * lanes : (t + 1) * lanes]
        x1, y1 = x[(t + 1) * lanes : (t + 2) * lanes], y[(t + 1) * lanes : (t + 2) * lanes]
        x2, y2 = x[(t + 2) * lanes : (t + 3) * lanes], y[(t + 2) * lanes : (t + 3) * lanes]
        x3, y3 = x[(t + 3) * lanes : (t + 4) * lanes], y[(t + 3) * lanes : (t + 4) * lanes]
        for i in range(lanes):
            sums[i] += x0[i] * y0[i] + x1[i] * y1[i] + x2[i] * y2[i] + x3[i] * y3[i]
        t += 4
    while t < n_bins:
        x0, y0 = x[t * lanes : (t + 1) * lanes], y[t * lanes : (t + 1) * lanes]
        for i in range(lanes):
            sums[i] += x0[i] * y0[i]
        t += 1


@compiled
def add_gram_row_by_lane(a: FloatArray, b: FloatArray, n_bins: int, n_lanes: int, sums: FloatArray) -> None:
    """sums[j, lane] += sum over bins of a * b_j: one row by three.

    a : a row; b : three rows, flat, ROW_PITCH apart; sums : flat, LANE_PITCH apart
    n_bins : rounded up to a multiple of BINS_AT_ONCE, so `a` must end in zeros where the tile does not fill them
    """
    lanes = np.uint64(n_lanes)
    for t in range(_ZERO, np.uint64(n_bins), _BINS):
        for lane in range(lanes):
            s0 = s1 = s2 = 0.0
            for k in range(_BINS):
                c = (t + k) * lanes + lane
                s0 += a[c] * b[c]
                s1 += a[c] * b[c + _ROW]
                s2 += a[c] * b[c + _ROW_2]
            sums[lane] += s0
            sums[lane + _SUM[1]] += s1
            sums[lane + _SUM[2]] += s2


@compiled
def add_gram_block_by_lane(a: FloatArray, b: FloatArray, n_bins: int, n_lanes: int, sums: FloatArray) -> None:
    """sums[i, j, lane] += sum over bins of a_i * b_j: three rows by three, all as in `add_gram_row_by_lane`.

    Vectors run over lanes, so no sum can stay in a register from bin to bin. Three rows by three over four bins make 36
    products of 24 loads and nine sums, where product by product it would be 72 loads.
    """
    lanes = np.uint64(n_lanes)
    for t in range(_ZERO, np.uint64(n_bins), _BINS):
        for lane in range(lanes):
            s00 = s01 = s02 = s10 = s11 = s12 = s20 = s21 = s22 = 0.0
            for k in range(_BINS):
                c = (t + k) * lanes + lane
                x0, x1, x2 = a[c], a[c + _ROW], a[c + _ROW_2]
                y0, y1, y2 = b[c], b[c + _ROW], b[c + _ROW_2]
                s00 += x0 * y0
                s01 += x0 * y1
                s02 += x0 * y2
                s10 += x1 * y0
                s11 += x1 * y1
                s12 += x1 * y2
                s20 += x2 * y0
                s21 += x2 * y1
                s22 += x2 * y2
            sums[lane] += s00
            sums[lane + _SUM[1]] += s01
            sums[lane + _SUM[2]] += s02
            sums[lane + _SUM[3]] += s10
            sums[lane + _SUM[4]] += s11
            sums[lane + _SUM[5]] += s12
            sums[lane + _SUM[6]] += s20
            sums[lane + _SUM[7]] += s21
            sums[lane + _SUM[8]] += s22


@compiled
def add_gram_block(
    a0: FloatArray, a1: FloatArray, a2: FloatArray, b0: FloatArray, b1: FloatArray, b2: FloatArray, out: FloatArray
) -> None:
    """out[i, j] += a_i . b_j for three rows by three: nine sums in registers for six loads."""
    s00 = s01 = s02 = s10 = s11 = s12 = s20 = s21 = s22 = 0.0
    for c in range(a0.size):
        x0, x1, x2 = a0[c], a1[c], a2[c]
        y0, y1, y2 = b0[c], b1[c], b2[c]
        s00 += x0 * y0
        s01 += x0 * y1
        s02 += x0 * y2
        s10 += x1 * y0
        s11 += x1 * y1
        s12 += x1 * y2
        s20 += x2 * y0
        s21 += x2 * y1
        s22 += x2 * y2
    out[0, 0] += s00
    out[0, 1] += s01
    out[0, 2] += s02
    out[1, 0] += s10
    out[1, 1] += s11
    out[1, 2] += s12
    out[2, 0] += s20
    out[2, 1] += s21
    out[2, 2] += s22
