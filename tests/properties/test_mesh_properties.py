"""Look-ups and leaf masks against painting every patch on the finest grid."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mesh_strategies import flatten, hierarchies, in_cells

from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.mesh.leaves import leaf_cells, leaf_counts, leaf_mask, open_fraction, total
from cubeforge.mesh.overlap import BoxIndex, SkyIndex


@given(hierarchies(), st.data())
@settings(max_examples=150, deadline=None)
def test_box_index_finds_what_comparing_with_every_patch_finds(hierarchy: Hierarchy, data: st.DataObject):
    level = data.draw(st.integers(0, hierarchy.levels - 1))
    lo = np.array([data.draw(st.integers(-2, int(n) + 1)) for n in hierarchy.domain[level]])
    hi = lo + [data.draw(st.integers(1, 8)) for _ in range(3)]
    index = BoxIndex(hierarchy)
    scale = hierarchy.scale[level]
    low, high = hierarchy.edges()
    meets = np.all((low < hi * scale) & (high > lo * scale), axis=1)
    np.testing.assert_array_equal(
        index.overlapping(level, lo, hi), np.flatnonzero(meets & (hierarchy.level == level))
    )
    np.testing.assert_array_equal(
        index.finer(level, lo, hi), np.flatnonzero(meets & (hierarchy.level > level))
    )


@given(st.integers(0, 2**32 - 1), st.integers(1, 400))
@settings(max_examples=60, deadline=None)
def test_box_index_with_many_patches(seed: int, count: int):
    # many boxes that may overlap and differ in size, so that bins hold several and boxes lie in several bins
    rng = np.random.default_rng(seed)
    domain = rng.integers(1, 200, size=3)
    lo = rng.integers(0, domain, size=(count, 3))
    shape = np.minimum(rng.integers(1, 1 + rng.integers(1, 65), size=(count, 3)), domain - lo)
    one = np.ones((1, 3))
    hierarchy = Hierarchy(
        origin=np.zeros(3),
        cell_size=one,
        ratio=one.astype(np.int32),
        domain=domain[None].astype(np.int32),
        level=np.zeros(count, np.int32),
        lo=lo.astype(np.int32),
        shape=shape.astype(np.int32),
    )
    index = BoxIndex(hierarchy)
    for _ in range(5):
        box_lo = rng.integers(-5, domain + 5)
        box_hi = box_lo + rng.integers(1, 120, size=3)
        meets = np.all((lo < box_hi) & (lo + shape > box_lo), axis=1)
        np.testing.assert_array_equal(index.overlapping(0, box_lo, box_hi), np.flatnonzero(meets))


@given(hierarchies())
@settings(max_examples=150, deadline=None)
def test_leaf_masks_agree_with_the_finest_grid(hierarchy: Hierarchy):
    owner = flatten(hierarchy)
    counted = 0
    for patch in range(hierarchy.patches):
        level = int(hierarchy.level[patch])
        lo, hi = hierarchy.lo[patch], hierarchy.hi[patch]
        part = tuple(slice(a, b) for a, b in zip(lo, hi, strict=True))
        shown = in_cells(hierarchy, level, owner == patch)[part]
        np.testing.assert_array_equal(leaf_mask(hierarchy, patch), shown > 0)
        fraction = open_fraction(hierarchy, level, lo, hi)
        np.testing.assert_allclose(np.ones(shown.shape) if fraction is None else fraction, shown, rtol=1e-12)
        assert leaf_counts(hierarchy)[patch] == np.count_nonzero(shown)
        counted += np.count_nonzero(shown)
    assert leaf_cells(hierarchy) == counted


@given(hierarchies(), st.integers(0, 2**32 - 1))
@settings(max_examples=100, deadline=None)
def test_total_is_the_sum_over_the_finest_grid(hierarchy: Hierarchy, seed: int):
    rng = np.random.default_rng(seed)
    stored = [rng.uniform(0.5, 2.0, size=tuple(shape)) for shape in hierarchy.shape]
    painted = np.zeros(tuple(hierarchy.domain[-1]))
    low, high = hierarchy.edges()
    for patch, values in enumerate(stored):
        for axis, n in enumerate(hierarchy.scale[hierarchy.level[patch]]):
            values = np.repeat(values, n, axis=axis)
        painted[tuple(slice(a, b) for a, b in zip(low[patch], high[patch], strict=True))] = values
    for patch, values in enumerate(stored):
        values[~leaf_mask(hierarchy, patch)] = np.nan  # covered cells must not enter
    found = total(hierarchy, lambda patch, fields, box=None: {"rho": stored[patch]}, "rho")
    assert found == pytest.approx(painted.sum() * hierarchy.finest_cell.prod(), rel=1e-12)


@given(st.integers(0, 2**32 - 1), st.integers(0, 300), st.tuples(st.integers(1, 9), st.integers(1, 9)))
@settings(max_examples=150, deadline=None)
def test_sky_index_finds_what_comparing_with_every_rectangle_finds(
    seed: int, count: int, bin: tuple[int, int]
):
    rng = np.random.default_rng(seed)
    image = rng.integers(1, 70, size=2)
    lo = rng.uniform(-20, image + 10, size=(count, 2))
    hi = lo + rng.choice([0.0, 0.4, 3.0, 30.0, 200.0], size=(count, 2)) * rng.uniform(size=(count, 2))
    on_edges = (
        rng.uniform(size=count) < 0.3
    )  # whole numbers: corners exactly on the edges of pixels and tiles
    lo[on_edges], hi[on_edges] = np.floor(lo[on_edges]), np.ceil(hi[on_edges])
    index = SkyIndex(lo, hi, bin, image=(int(image[0]), int(image[1])))

    def brute(x0: int, x1: int, y0: int, y1: int) -> np.ndarray:
        x1, y1 = min(x1, image[0]), min(y1, image[1])
        return np.flatnonzero((lo[:, 0] < x1) & (hi[:, 0] >= x0) & (lo[:, 1] < y1) & (hi[:, 1] >= y0))

    for _ in range(10):
        x0, y0 = (int(i) for i in rng.integers(0, image))
        x1, y1 = x0 + int(rng.integers(1, 40)), y0 + int(rng.integers(1, 40))
        np.testing.assert_array_equal(index.patches_in(x0, x1, y0, y1), brute(x0, x1, y0, y1))
    counts = index.counts()
    assert counts.shape == (-(-image[1] // bin[1]), -(-image[0] // bin[0]))
    for j, i in np.ndindex(counts.shape):
        tile = (i * bin[0], (i + 1) * bin[0], j * bin[1], (j + 1) * bin[1])
        assert counts[j, i] == len(brute(*tile)) == len(index.patches_in(*tile))
