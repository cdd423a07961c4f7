"""Boxes in space and rectangles on the sky: edges, messages, memory."""

from __future__ import annotations

import gc

import numpy as np
import pytest

from cubeforge.errors import PlanError
from cubeforge.mesh import overlap
from cubeforge.mesh.hierarchy import Hierarchy, build_hierarchy
from cubeforge.mesh.overlap import BoxIndex, SkyIndex, box_index


def grid(n: int, size: int) -> Hierarchy:
    lo = size * np.stack(np.meshgrid(*[np.arange(n)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    return build_hierarchy((0, 0, 0), (1, 1, 1), (n * size,) * 3, [], [(lo, np.full_like(lo, size))])


def test_boxes_that_only_touch_do_not_overlap():
    index = BoxIndex(grid(4, 8))
    assert index.overlapping(0, (8, 8, 8), (16, 16, 16)).tolist() == [21]
    assert index.overlapping(0, (7, 8, 8), (8, 16, 16)).tolist() == [5]
    assert len(index.overlapping(0, (7, 7, 7), (17, 17, 17))) == 27
    assert index.finer(0, (0, 0, 0), (32, 32, 32)).size == 0


def test_a_big_patch_among_small_ones_does_not_blow_up_the_index():
    small = np.stack(np.meshgrid(*[np.arange(10)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    lo = np.concatenate([small, [[0, 0, 16]]])
    shape = np.concatenate([np.ones_like(small), [[512, 512, 512]]])
    hierarchy = build_hierarchy((0, 0, 0), (1, 1, 1), (1024,) * 3, [], [(lo, shape)])
    index = BoxIndex(hierarchy)
    assert index.nbytes < 200 * len(lo)
    assert index.overlapping(0, (300, 300, 300), (301, 301, 301)).tolist() == [1000]
    assert index.overlapping(0, (3, 4, 5), (4, 5, 6)).tolist() == [345]


def test_index_is_built_once_and_goes_with_its_hierarchy():
    hierarchy = grid(2, 4)
    assert box_index(hierarchy) is box_index(hierarchy)
    key = id(hierarchy)
    assert key in overlap._known
    del hierarchy
    gc.collect()
    assert key not in overlap._known


def test_sky_rectangle_is_closed_and_pixels_are_half_open():
    index = SkyIndex([[2.0, 2.0]], [[4.0, 4.0]], bin=4, image=(16, 16))
    assert index.patches_in(4, 8, 2, 3).tolist() == [0]
    assert index.patches_in(5, 8, 2, 3).tolist() == []
    assert index.patches_in(0, 2, 0, 16).tolist() == []
    assert index.patches_in(0, 3, 0, 16).tolist() == [0]
    assert index.counts()[:2, :2].tolist() == [[1, 1], [1, 1]]


def test_sky_edges_just_below_a_tile_are_not_rounded_across_it():
    below = np.nextafter(3.0 * 7, 0.0)
    index = SkyIndex([[below, 0.0]], [[below, 1.0]], bin=7, image=(70, 70))
    assert index.counts()[0].tolist() == [0, 0, 1, 0, 0, 0, 0, 0, 0, 0]
    assert index.patches_in(14, 21, 0, 7).tolist() == [0]


def test_sky_memory_does_not_grow_with_the_area_of_rectangles():
    n = 1000
    wide = SkyIndex(np.zeros((n, 2)), np.full((n, 2), 8191.0), bin=64, image=(8192, 8192))
    narrow = SkyIndex(np.zeros((n, 2)), np.full((n, 2), 1.0), bin=64, image=(8192, 8192))
    assert wide.nbytes < 1.5 * narrow.nbytes
    assert wide.counts().sum() == n * 128 * 128


@pytest.mark.parametrize(
    ("lo", "hi", "bin", "words"),
    [
        ([[0.0, np.nan]], [[1.0, 1.0]], 4, "patch 0"),
        ([[2.0, 0.0]], [[1.0, 1.0]], 4, "patch 0"),
        ([[0.0, 0.0]], [[1.0, 1.0]], 0, "at least 1 pixel"),
    ],
)
def test_sky_index_refuses_nonsense(lo: list, hi: list, bin: int, words: str):
    with pytest.raises(PlanError, match=words):
        SkyIndex(lo, hi, bin)
