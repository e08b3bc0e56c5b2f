"""The compiled sweep against its plain twin, and against itself with other threads, blocks and weights."""

from __future__ import annotations

import dataclasses
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sweep_cases import BIN_S, SUMS, assert_agree, make_case, random_point, sizes

from kernelfit.engine.evaluate import SweepData, TimeBlocks, compensate, evaluate, expected_counts, lane_blocks, whole
from kernelfit.engine.twin import evaluate_plainly

# Source of every expected value: the recursions of docs/model.md section 4, written down once more in plain numpy
# (kernelfit.engine.twin). 1e-12 of what is added up is the agreement that reordered sums owe their twin.

SHAPES = [
    # units, coupling parameters, after-spike traces
    (1, 0, 0), (1, 2, 1), (7, 1, 0), (7, 3, 2), (7, 9, 6), (16, 0, 3), (16, 4, 1), (16, 6, 0), (33, 2, 6), (33, 5, 2),
    (33, 9, 0), (70, 1, 1), (70, 8, 3), (70, 7, 6),
]  # fmt: skip


@pytest.mark.parametrize("fit_leak", [True, False], ids=["leak", "fixed"])
@pytest.mark.parametrize(("n_units", "n_coupling", "n_traces"), SHAPES)
def test_sweep_equals_its_twin(n_units, n_coupling, n_traces, fit_leak):
    """Three windows, one off the bins, with history before them, blocks of time and weights."""
    case = make_case(n_units * 100 + n_coupling * 10 + n_traces, n_units, n_coupling, n_traces, fit_leak=fit_leak)
    got = evaluate(case.data, case.point, blocks=case.blocks, block_weight=case.weight, threads=2)
    want = evaluate_plainly(case.data, case.point, case.blocks, case.weight)
    assert_agree(got, want, sizes(case.data, case.point, case.blocks, case.weight))


OPTIONS = {
    "one window": {"windows": ((0.0, 4.0),)},
    "a window of one bin": {"windows": ((0.0, 0.01), (0.5, 2.0))},
    "windows that touch": {"windows": ((0.0, 1.0), (1.0, 2.003), (2.003, 3.0))},
    "far from zero": {"windows": ((86_400.0, 86_403.0),)},
    "exclusions": {"exclusions": ((0.5, 0.7), (0.95, 0.951), (5.2, 5.9))},
    "an exclusion over a whole window": {"exclusions": ((2.3, 3.6),)},
    "warm-up": {"warm_up_s": 0.33},
    "warm-up longer than a window": {"warm_up_s": 1.5, "windows": ((0.0, 4.0), (5.0, 6.0))},
    "exclusions and warm-up": {"exclusions": ((0.5, 0.7), (5.2, 5.4)), "warm_up_s": 0.1},
    "silent units": {"silent": (0, 3, 10)},
    "source-only units": {"targets": (1, 2, 5, 6, 7, 9)},
    "many spikes a bin": {"rate_hz": 150.0},
    "hardly a spike": {"rate_hz": 0.3},
    "blocks of one bin": {"windows": ((0.0, 0.3),), "block_s": 0.01},
}


@pytest.mark.parametrize("options", OPTIONS.values(), ids=OPTIONS)
def test_sweep_equals_its_twin_on_odd_recordings(options):
    case = make_case(5, 11, 2, 2, **options)
    got = evaluate(case.data, case.point, blocks=case.blocks, block_weight=case.weight, threads=1)
    want = evaluate_plainly(case.data, case.point, case.blocks, case.weight)
    assert_agree(got, want, sizes(case.data, case.point, case.blocks, case.weight))


@st.composite
def small_cases(draw):
    """Counts, stretches in blocks, targets and shapes of a small problem, and a seed for its numbers."""
    n_units = draw(st.integers(1, 5))
    n_bins = draw(st.integers(1, 40))
    before = draw(st.integers(0, 5))
    counts = np.array(
        draw(st.lists(st.sampled_from([0, 0, 0, 0, 1, 1, 3]), min_size=n_bins * n_units, max_size=n_bins * n_units))
    ).reshape(n_bins, n_units)
    edges = draw(st.lists(st.integers(0, n_bins), min_size=2, max_size=7, unique=True).map(sorted))
    stretches = [(a, b) for a, b in pairwise(edges)]
    kept = [s for s in stretches if draw(st.booleans())] or stretches[:1]
    blocks = sorted(draw(st.lists(st.integers(0, 2), min_size=len(kept), max_size=len(kept))))
    targets = draw(st.lists(st.integers(0, n_units - 1), min_size=1, unique=True).map(sorted))
    shape = (draw(st.integers(0, 4)), draw(st.integers(0, 3)), draw(st.booleans()))
    return counts, before, kept, blocks, targets, shape, draw(st.integers(0, 2**16))


@settings(max_examples=150, deadline=None)
@given(small_cases())
def test_sweep_equals_its_twin_on_any_small_recording(small):
    counts, before, stretches, block_of, targets, (n_coupling, n_traces, fit_leak), seed = small
    bins, units = np.nonzero(counts)
    active, first = np.unique(bins, return_index=True)
    rows = np.array(stretches, dtype=np.int64) - before
    data = SweepData(
        bin_width=BIN_S,
        n_units=counts.shape[1],
        targets=np.array(targets, dtype=np.int64),
        active_bin=active - before,
        active_first=np.append(first, bins.size).astype(np.int64),
        event_unit=units.astype(np.int64),
        event_count=counts[bins, units].astype(np.float64),
        stretches=rows,
        log_factorials=0.0,
        counts=np.zeros(len(targets), dtype=np.int64),
    )
    lengths = np.bincount(block_of, weights=rows[:, 1] - rows[:, 0], minlength=3).astype(np.int64)
    blocks = TimeBlocks(np.ascontiguousarray(np.column_stack([rows, block_of])), lengths)
    rng = np.random.default_rng(seed)
    weight = rng.exponential(size=3)
    point = random_point(rng, data, n_coupling, n_traces, fit_leak)
    got = evaluate(data, point, blocks=blocks, block_weight=weight, threads=1)
    assert_agree(got, evaluate_plainly(data, point, blocks, weight), sizes(data, point, blocks, weight))


def test_without_derivatives_the_log_likelihood_is_the_same_and_nothing_else_is_made():
    case = make_case(1, 20, 3, 2)
    full = evaluate(case.data, case.point, blocks=case.blocks)
    bare = evaluate(case.data, case.point, blocks=case.blocks, derivatives=False)
    np.testing.assert_allclose(bare.log_likelihood, full.log_likelihood, rtol=1e-13)
    assert [getattr(bare, name).size for name in SUMS[1:]] == [0, 0, 0, 0]


def test_blocks_and_weights_only_split_and_weigh():
    """Score and log-likelihood add up over blocks whatever the weights; the information is a weighted sum of them."""
    case = make_case(2, 9, 2, 2)
    one = evaluate(case.data, case.point)
    cut = evaluate(case.data, case.point, blocks=case.blocks, block_weight=case.weight)
    size = sizes(case.data, case.point, whole(case.data), np.ones(1))
    assert np.max(np.abs(cut.score.sum(axis=0) - one.score[0]) / size.score[0]) < 1e-13
    np.testing.assert_allclose(cut.log_likelihood.sum(axis=0), one.log_likelihood[0], rtol=1e-13)
    parts = []
    for b in range(case.blocks.n_blocks):
        weight = np.zeros(case.blocks.n_blocks)
        weight[b] = 1.0
        alone = evaluate(case.data, case.point, blocks=case.blocks, block_weight=weight)
        np.testing.assert_array_equal(alone.score, cut.score)
        parts.append(alone.shared_shared)
    np.testing.assert_allclose(cut.shared_shared, np.tensordot(case.weight, parts, axes=1), rtol=1e-11, atol=1e-11)
    np.testing.assert_allclose(one.shared_shared, np.sum(parts, axis=0), rtol=1e-11, atol=1e-11)


def test_information_by_parts_is_that_of_each_part_alone():
    case = make_case(2, 9, 2, 2)
    slot = np.arange(case.blocks.n_blocks) // 2
    kept = evaluate(
        case.data, case.point, blocks=case.blocks, block_weight=case.weight, information_slot=slot, threads=2
    )
    assert len(kept.shared_shared) == slot[-1] + 1 > 1
    for part in range(slot[-1] + 1):
        alone = evaluate(case.data, case.point, blocks=case.blocks, block_weight=np.where(slot == part, case.weight, 0))
        for name in ("own_own", "own_shared", "shared_shared"):
            np.testing.assert_array_equal(getattr(kept, name)[part], getattr(alone, name))
        np.testing.assert_array_equal(kept.score, alone.score)


@pytest.mark.parametrize("n_units", [5, 16, 33, 130])
def test_the_number_of_threads_changes_no_bit(n_units):
    case = make_case(3, n_units, 4, 2, windows=((0.0, 1.0), (1.5, 2.5)))
    runs = [
        evaluate(case.data, case.point, blocks=case.blocks, block_weight=case.weight, threads=t) for t in (1, 2, 3, 8)
    ]
    for other in runs[1:]:
        for name in SUMS:
            np.testing.assert_array_equal(getattr(other, name), getattr(runs[0], name), err_msg=name)
    read_off = [compensate(case.data, case.point, threads=t) for t in (1, 2, 3, 8)]
    for other in read_off[1:]:
        for f in dataclasses.fields(other):
            np.testing.assert_array_equal(getattr(other, f.name), getattr(read_off[0], f.name), err_msg=f.name)
    rates = [expected_counts(case.data, case.point, 20, 50, threads=t) for t in (1, 2, 3, 8)]
    for other in rates[1:]:
        np.testing.assert_array_equal(other, rates[0])


@pytest.mark.parametrize("n", [1, 7, 8, 9, 15, 16, 17, 47, 48, 49, 96, 97, 258, 1000])
def test_lane_blocks_cover_the_targets_once_and_in_order(n):
    blocks = lane_blocks(n)
    assert [i for part in blocks for i in range(part.start, part.stop)] == list(range(n))
    assert all(part.start % 8 == 0 for part in blocks)  # whole vector registers, but for the last
    assert len(blocks) == 1 if n < 16 else len(blocks) >= 2


def test_a_predictor_past_all_bounds_gives_infinities_and_no_nan():
    """A failed step of an optimiser must be seen as one: exp(900) is cut at exp(700), and the objective is hopeless."""
    case = make_case(4, 3, 1, 0)
    point = dataclasses.replace(case.point, baseline=np.array([900.0, 1.0, 1.0]))
    got = evaluate(case.data, point)
    assert got.log_likelihood[0, 0] < -1e300
    assert not np.isnan(got.log_likelihood).any()
    assert not np.isnan(got.own_own).any()


def test_inputs_stay_as_they_were():
    case = make_case(6, 8, 2, 1)
    given = (case.point.tables, case.point.baseline, case.point.coefficient, case.weight)
    kept = [np.array(a) for a in given]
    evaluate(case.data, case.point, blocks=case.blocks, block_weight=case.weight)
    for before, now in zip(kept, given, strict=True):
        np.testing.assert_array_equal(before, now)
