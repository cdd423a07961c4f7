"""Leaf masks and totals of hierarchies small enough to count by hand."""

from __future__ import annotations

import numpy as np
import pytest

from cubeforge.errors import SnapshotError
from cubeforge.mesh.hierarchy import build_hierarchy
from cubeforge.mesh.leaves import check_disjoint, leaf_cells, leaf_mask, open_fraction, total

WHOLE = ([[0, 0, 0]], [[8, 8, 8]])


def test_aligned_patch_covers_its_cells():
    hierarchy = build_hierarchy((0, 0, 0), (1, 1, 1), (8, 8, 8), [2], [WHOLE, ([[4, 4, 4]], [[4, 6, 8]])])
    mask = leaf_mask(hierarchy, 0)
    assert mask.shape == (8, 8, 8)
    assert not mask[2:4, 2:5, 2:6].any()
    assert mask.sum() == 512 - 2 * 3 * 4
    assert leaf_mask(hierarchy, 1).all()
    assert leaf_cells(hierarchy) == 512 - 24 + 192


def test_patch_two_levels_finer_without_one_between():
    hierarchy = build_hierarchy(
        (0, 0, 0), (1, 1, 1), (8, 8, 8), [2, 4], [WHOLE, ([], []), ([[8, 0, 0]], [[8, 8, 8]])]
    )
    assert np.argwhere(~leaf_mask(hierarchy, 0)).tolist() == [[1, 0, 0]]


def test_cell_covered_in_part_stays_a_leaf_with_the_open_part_of_its_volume():
    hierarchy = build_hierarchy((0, 0, 0), (1, 1, 1), (8, 8, 8), [2], [WHOLE, ([[3, 4, 4]], [[3, 2, 2]])])
    assert leaf_mask(hierarchy, 0).sum() == 511
    fraction = open_fraction(hierarchy, 0, (1, 2, 2), (4, 3, 3))
    assert fraction is not None
    assert fraction.ravel().tolist() == [0.5, 0.0, 1.0]


def test_cell_covered_by_two_patches_together():
    boxes = ([[2, 0, 0], [3, 0, 0]], [[1, 2, 2], [1, 2, 2]])
    hierarchy = build_hierarchy((0, 0, 0), (1, 1, 1), (8, 8, 8), [2], [WHOLE, boxes])
    assert np.argwhere(~leaf_mask(hierarchy, 0)).tolist() == [[1, 0, 0]]


def test_total_of_ones_is_the_volume_whatever_covered_cells_hold():
    hierarchy = build_hierarchy(
        (5, 5, 5), (2, 1, 3), (8, 8, 8), [(2, 4, 1)], [WHOLE, ([[3, 4, 4]], [[3, 5, 2]])]
    )
    stored = [np.where(leaf_mask(hierarchy, p), 1.0, np.inf) for p in range(2)]
    found = total(hierarchy, lambda patch, fields, box=None: {"one": stored[patch]}, "one")
    assert found == pytest.approx(512 * 6, rel=1e-14)


def test_overlapping_siblings_are_refused_by_name():
    boxes = ([[0, 0, 0], [3, 3, 3]], [[4, 4, 4], [4, 4, 4]])
    hierarchy = build_hierarchy((0, 0, 0), (1, 1, 1), (8, 8, 8), [2], [WHOLE, boxes])
    with pytest.raises(SnapshotError, match=r"patches 1 and 2 of level 1 both hold the cells \[3, 3, 3\] to"):
        check_disjoint(hierarchy)
    check_disjoint(build_hierarchy((0, 0, 0), (1, 1, 1), (8, 8, 8), [], [WHOLE]))
