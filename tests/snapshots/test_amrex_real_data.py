"""Output of the AMReX framework's compressible-hydro example against figures of the framework's own tools.

`tests/data/tiny` and its figures travel with the project. Larger outputs (64-bit, big-endian, a ratio of 4)
are read where the environment variable CUBEFORGE_REAL_DATA names their folder. The figures (integrals over
leaf cells, extrema over leaf cells, boxes per level) were printed with 17 digits by the framework's tools.
"""

import os
import re
from pathlib import Path

import numpy as np
import pytest

from cubeforge.mesh.leaves import leaf_mask
from cubeforge.snapshots import open_snapshot

DATA = Path(__file__).parent.parent / "data"
LARGER = os.environ.get("CUBEFORGE_REAL_DATA")
PLACES = [pytest.param(DATA / "tiny", id="tiny")] + [
    pytest.param(
        Path(LARGER or "") / name,
        id=name,
        marks=pytest.mark.skipif(LARGER is None, reason="CUBEFORGE_REAL_DATA is not set"),
    )
    for name in ("small", "small_f32", "small_be32", "ratio4")
]
PRECISION = {"tiny": "<f4", "small": "<f8", "small_f32": "<f4", "small_be32": ">f4", "ratio4": "<f8"}


def figures(place, kind):
    # The 32-bit versions of `small` have no figures of their own.
    return (place.parent / f"{place.name.split('_')[0]}.{kind}.txt").read_text()


def brute_leaves(mesh):
    """A leaf mask for each patch from dense arrays of whole levels, finest first."""
    there = [np.zeros(tuple(n), dtype=bool) for n in mesh.domain]
    for level, lo, hi in zip(mesh.level, mesh.lo, mesh.hi, strict=True):
        there[level][lo[0] : hi[0], lo[1] : hi[1], lo[2] : hi[2]] = True
    covered = [np.zeros(t.shape, dtype=bool) for t in there]
    for level in range(mesh.levels - 1, 0, -1):
        filled = there[level] | covered[level]
        (nx, ny, nz), (rx, ry, rz) = mesh.domain[level - 1], mesh.ratio[level]
        covered[level - 1] = filled.reshape(nx, rx, ny, ry, nz, rz).any(axis=(1, 3, 5))
    return [
        ~covered[level][lo[0] : hi[0], lo[1] : hi[1], lo[2] : hi[2]]
        for level, lo, hi in zip(mesh.level, mesh.lo, mesh.hi, strict=True)
    ]


def leaf_values(snapshot):
    """Every leaf cell's values and volume: field -> (n,), and (n,)."""
    mesh = snapshot.hierarchy
    values = {field: [] for field in snapshot.fields}
    volumes = []
    for patch, mask in enumerate(brute_leaves(mesh)):
        np.testing.assert_array_equal(leaf_mask(mesh, patch), mask)
        cells = snapshot.read(patch, snapshot.fields)
        for field in snapshot.fields:
            values[field].append(cells[field][mask])
        volumes.append(np.full(mask.sum(), mesh.cell_size[mesh.level[patch]].prod()))
    return {field: np.concatenate(parts) for field, parts in values.items()}, np.concatenate(volumes)


@pytest.mark.parametrize("place", PLACES)
def test_totals_extrema_and_boxes(place):
    snapshot = open_snapshot(place)
    snapshot.check_files()
    values, volumes = leaf_values(snapshot)
    # Exactly the printed numbers where the figures belong to these very bytes, else to single rounding.
    exact = "_" not in place.name
    rounding = 1e-13 if exact else 2e-7
    totals = re.findall(r"integral of (\S+) = (\S+)", figures(place, "totals"))
    assert [name for name, _ in totals] == list(snapshot.fields)
    for name, printed in totals:
        terms = values[name].astype(np.float64) * volumes
        # Summation order differs, so a sum that nearly cancels is compared on the scale of its terms.
        assert terms.sum() == pytest.approx(float(printed), rel=0, abs=rounding * np.abs(terms).sum())
    extrema = re.findall(r"^ (\S+) +(-?\d\S+) +(-?\d\S+)$", figures(place, "extrema"), flags=re.M)
    assert [name for name, *_ in extrema] == list(snapshot.fields)
    for name, low, high in extrema:
        found = [float(values[name].min()), float(values[name].max())]
        if exact:
            assert [f"{value:.17g}" for value in found] == [low, high]
        else:
            np.testing.assert_allclose(found, [float(low), float(high)], rtol=2e-7)
    boxes = re.findall(r"level +\d+: number of boxes = +(\d+), volume = +([\d.]+)%", figures(place, "boxes"))
    mesh = snapshot.hierarchy
    assert np.diff(mesh.first).tolist() == [int(count) for count, _ in boxes]
    for level, (_, percent) in enumerate(boxes):
        first, last = mesh.first[level : level + 2]
        part = mesh.cells(slice(first, last)).sum() / mesh.domain[level].astype(float).prod()
        assert f"{100 * part:.2f}" == percent


@pytest.mark.parametrize("place", PLACES)
def test_stored_bounds_hold_every_cell(place):
    snapshot = open_snapshot(place)
    mesh = snapshot.hierarchy
    lowest = {field: np.full(mesh.levels, np.inf) for field in snapshot.fields}
    highest = {field: np.full(mesh.levels, -np.inf) for field in snapshot.fields}
    for patch, level in enumerate(mesh.level):
        for field, cells in snapshot.read(patch, snapshot.fields).items():
            assert cells.dtype == np.dtype(PRECISION[place.name]).newbyteorder("=")
            lowest[field][level] = min(lowest[field][level], cells.min())
            highest[field][level] = max(highest[field][level], cells.max())
    for field in snapshot.fields:
        bounds = snapshot.bounds(field)
        assert np.all(bounds[:, 0] <= lowest[field])
        assert np.all(bounds[:, 1] >= highest[field])
        # And they are no wider than a rounding or two.
        np.testing.assert_allclose(bounds[:, 0], lowest[field], rtol=4e-7)
        np.testing.assert_allclose(bounds[:, 1], highest[field], rtol=4e-7)


@pytest.mark.skipif(LARGER is None, reason="CUBEFORGE_REAL_DATA is not set")
def test_ratio_and_corner_of_the_ratio_4_output():
    # Figures from its description: 24x32x16 cells from (-0.7, 0.3, 1.1) to (0.5, 1.9, 1.9), ratios 2 and 4.
    mesh = open_snapshot(Path(LARGER) / "ratio4").hierarchy
    assert mesh.domain[0].tolist() == [24, 32, 16]
    assert mesh.ratio.tolist() == [[1, 1, 1], [2, 2, 2], [4, 4, 4]]
    np.testing.assert_allclose(mesh.origin, [-0.7, 0.3, 1.1], rtol=1e-15)
    np.testing.assert_allclose(mesh.origin + mesh.extent, [0.5, 1.9, 1.9], rtol=1e-15)
    np.testing.assert_allclose(mesh.cell_size[2], 0.00625, rtol=1e-14)


@pytest.mark.skipif(LARGER is None, reason="CUBEFORGE_REAL_DATA is not set")
def test_32_bit_outputs_are_the_64_bit_one_rounded():
    full, near, down = (open_snapshot(Path(LARGER) / name) for name in ("small", "small_f32", "small_be32"))
    for patch in range(full.hierarchy.patches):
        wanted = full.read(patch, full.fields)
        nearest, truncated = near.read(patch, full.fields), down.read(patch, full.fields)
        for field, cells in wanted.items():
            np.testing.assert_array_equal(nearest[field], cells.astype(np.float32))
            # The framework drops the bits that don't fit: towards zero, by less than one float32 step.
            away = np.abs(cells) - np.abs(truncated[field].astype(np.float64))
            assert np.all((away >= 0) & (away < np.spacing(np.abs(truncated[field]))))
