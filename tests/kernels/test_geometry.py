"""Sites, distances and the pairs of the kernel."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from kernelfit.errors import ArgumentError, ModelError
from kernelfit.kernels import pair_geometry, same_site_labels

# the first two share an electrode; the last lies 0.23 µm beside its neighbour, as in a real recording
LINE = np.array([[0.0, 0.0], [0.0, 0.0], [100.0, 0.0], [200.0, 0.0], [200.0, 0.23]])
PAIRS_ON_SITES = {(0, 1), (1, 0), (3, 4), (4, 3)}

# coordinates on a coarse grid, so that shared sites, chains of near positions and equal distances all come up
positions_strategy = st.integers(2, 14).flatmap(
    lambda n: st.integers(1, 3).flatmap(
        lambda m: arrays(np.float64, (n, m), elements=st.integers(0, 12).map(lambda k: 0.4 * k))
    )
)


def pairs(mask):
    return set(zip(*(index.tolist() for index in np.nonzero(mask)), strict=True))


def test_near_positions_are_one_site():
    assert same_site_labels(LINE).tolist() == [0, 0, 1, 2, 2]


def test_a_chain_of_near_positions_is_one_site_and_exactly_1_um_is_not():
    assert same_site_labels(np.array([0.0, 0.9, 1.8, 2.7, 50.0])).tolist() == [0, 0, 0, 0, 1]
    assert same_site_labels(np.array([0.0, 1.0, 2.0])).tolist() == [0, 1, 2]


def test_labels_are_in_order_of_first_appearance():
    assert same_site_labels(np.array([[500.0], [0.0], [500.0], [250.0], [0.0]])).tolist() == [0, 1, 0, 2, 1]


def test_what_is_done_with_pairs_on_one_site():
    excluded, own, inside = (pair_geometry(LINE, same_site=s) for s in ("exclude", "own", "kernel"))
    for geometry in (excluded, own, inside):
        assert pairs(geometry.same_site) == PAIRS_ON_SITES
        assert geometry.reference_um == pytest.approx(100.0, abs=1e-3)
    assert not (excluded.kept & excluded.same_site).any()
    assert not excluded.own_site.any()
    assert (own.kept == excluded.kept).all()
    assert pairs(own.own_site) == PAIRS_ON_SITES
    assert inside.kept.sum() == 20
    np.testing.assert_allclose(inside.distinct_um[:2], [0.0, 0.23], atol=1e-12)
    assert not inside.own_site.any()


def test_the_reference_is_taken_between_sites_at_the_mean_of_their_units():
    # site centres 0, 100.2, 300; nearest neighbours 100.2, 100.2, 199.8; median 100.2
    assert pair_geometry(np.array([0.0, 100.0, 100.4, 300.0])).reference_um == pytest.approx(100.2)


def test_rows_are_targets_and_columns_sources():
    targets = np.array([True, True, False, True, True])
    excluded_pairs = np.zeros((5, 5), dtype=bool)
    excluded_pairs[0, 3] = True
    geometry = pair_geometry(LINE, excluded_pairs=excluded_pairs, targets=targets, same_site="own")
    assert not geometry.kept[2].any()
    assert geometry.kept[[0, 1, 3, 4], 2].all()
    assert not geometry.kept[0, 3]
    assert geometry.kept[3, 0]
    # a pair kept in one direction counts as one pair
    assert geometry.pairs_by_distance["n_pairs"].sum() == 8


def test_what_is_excluded_leaves_the_same_site_coefficient_too():
    excluded_pairs = np.zeros((5, 5), dtype=bool)
    excluded_pairs[0, 1] = excluded_pairs[1, 0] = True
    geometry = pair_geometry(LINE, excluded_pairs=excluded_pairs, same_site="own")
    assert pairs(geometry.own_site) == {(3, 4), (4, 3)}
    assert pairs(geometry.same_site) == PAIRS_ON_SITES


def test_max_distance_keeps_pairs_at_the_limit():
    grid = np.array([[x, y] for x in range(4) for y in range(4)]) * 0.1 * 1000
    geometry = pair_geometry(grid, max_distance_um=100.0)
    assert geometry.distinct_um == pytest.approx([100.0])
    assert geometry.pairs_by_distance["n_pairs"].tolist() == [24]  # 2 x 4 x 3 edges of a 4 x 4 grid
    assert geometry.distance_range.largest_um == pytest.approx(100.0)
    assert geometry.distance_range.n_coordinates == 2


@given(
    positions_strategy,
    st.sampled_from(["exclude", "own", "kernel"]),
    st.one_of(st.none(), st.floats(0.3, 10.0)),
)
def test_invariants(positions, same_site, max_distance_um):
    site = same_site_labels(positions)
    try:
        geometry = pair_geometry(positions, same_site=same_site, max_distance_um=max_distance_um)
    except ModelError as error:
        assert site.max() == 0 or "max_distance" in str(error)  # noqa: PT017 - the refusal is one of two outcomes
        return
    n = len(positions)
    assert not np.diagonal(geometry.kept).any()
    assert not np.diagonal(geometry.same_site).any()
    for matrix in (geometry.distance_um, geometry.kept, geometry.same_site, geometry.distance_index):
        assert matrix.shape == (n, n)
        assert (matrix == matrix.T).all()
    assert (geometry.same_site == ((site[:, None] == site) & ~np.eye(n, dtype=bool))).all()
    if same_site != "kernel":
        assert not (geometry.kept & geometry.same_site).any()
    assert ((geometry.distance_index >= 0) == geometry.kept).all()
    assert (np.diff(geometry.distinct_um) > 1e-6).all()
    reproduced = geometry.distinct_um[geometry.distance_index[geometry.kept]]
    np.testing.assert_allclose(reproduced, geometry.distance_um[geometry.kept], atol=1e-5)
    assert geometry.pairs_by_distance["n_pairs"].sum() * 2 == geometry.kept.sum()
    assert (geometry.pairs_by_distance["n_pairs"] > 0).all()
    assert geometry.reference_um >= 1.0
    if max_distance_um is not None:
        assert geometry.distinct_um[-1] <= max_distance_um + 1e-5


@given(positions_strategy, st.integers(0, 2**32 - 1))
def test_the_order_of_units_does_not_matter(positions, seed):
    order = np.random.default_rng(seed).permutation(len(positions))
    if same_site_labels(positions).max() == 0:
        return
    here, there = pair_geometry(positions), pair_geometry(positions[order])
    assert (there.kept == here.kept[np.ix_(order, order)]).all()
    np.testing.assert_allclose(there.distinct_um, here.distinct_um, atol=1e-9)
    assert there.reference_um == pytest.approx(here.reference_um)


@pytest.mark.parametrize(
    ("call", "kind", "words"),
    [
        (lambda: pair_geometry(LINE[:1]), ModelError, "there is 1 unit"),
        (lambda: pair_geometry(LINE[:0]), ModelError, "there are 0 units"),
        (lambda: pair_geometry(LINE[:2]), ModelError, "All 2 units lie on one site.*length_unit"),
        (lambda: pair_geometry(LINE[:2], same_site="kernel"), ModelError, "one site"),
        (
            lambda: pair_geometry(LINE, max_distance_um=50.0),
            ModelError,
            "max_distance = 50 µm: the smallest distance in the array is 100 µm. Raise",
        ),
        (lambda: pair_geometry(LINE, max_distance_um=-1.0), ArgumentError, "max_distance=-1"),
        (
            lambda: pair_geometry(LINE, targets=np.zeros(5, dtype=bool)),
            ModelError,
            "No pair of units is left",
        ),
        (
            lambda: pair_geometry(LINE, targets=np.ones(4, dtype=bool)),
            ArgumentError,
            r"targets of shape \(4,\)",
        ),
        (
            lambda: pair_geometry(LINE, excluded_pairs=np.ones((5, 5), dtype=bool)),
            ModelError,
            "excluded pairs",
        ),
        (lambda: pair_geometry(LINE, same_site="drop"), ArgumentError, "same_site='drop'"),
        (lambda: pair_geometry(np.zeros((5, 4))), ArgumentError, "1 to 3 coordinates"),
        (lambda: pair_geometry(np.array([0.0, np.nan])), ArgumentError, "unit 1"),
    ],
)
def test_refusals_say_what_and_what_to_do(call, kind, words):
    with pytest.raises(kind, match=words):
        call()
