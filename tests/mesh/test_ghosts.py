"""Ghost cells of fields that are known everywhere: constants and linear functions, and means done by hand."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from cubeforge.mesh.ghosts import GhostFiller
from cubeforge.mesh.hierarchy import Hierarchy, build_hierarchy
from cubeforge.mesh.leaves import leaf_mask

Fields = dict[str, Callable[..., np.ndarray]]


def centres(hierarchy: Hierarchy, patch: int, rim: int = 0) -> tuple[np.ndarray, ...]:
    """Physical cell centres of a patch with `rim` cells more on each side."""
    level = hierarchy.level[patch]
    axes = [
        hierarchy.origin[a]
        + (np.arange(-rim, hierarchy.shape[patch, a] + rim) + hierarchy.lo[patch, a] + 0.5)
        * hierarchy.cell_size[level, a]
        for a in range(3)
    ]
    return tuple(np.meshgrid(*axes, indexing="ij"))


class Stored:
    """Fields given as functions of position, stored on every patch; counts the cells it hands out."""

    def __init__(self, hierarchy: Hierarchy, fields: Fields) -> None:
        self.data = [
            {
                name: f(*centres(hierarchy, patch)) * np.ones(tuple(hierarchy.shape[patch]))
                for name, f in fields.items()
            }
            for patch in range(hierarchy.patches)
        ]
        self.cells = 0

    def __call__(self, patch, fields, box=None):
        low, high = box or ((0, 0, 0), self.data[patch][fields[0]].shape)
        part = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
        found = {name: self.data[patch][name][part] for name in fields}
        self.cells += found[fields[0]].size
        return found


def linear(x, y, z):
    return 100.0 + 3.0 * x - 2.0 * y + 0.7 * z


WHOLE = ([[0, 0, 0]], [[16, 16, 16]])
NESTED = build_hierarchy(
    (-3.0, 1.0, 10.0),
    (1.0, 0.5, 2.0),
    (16, 16, 16),
    [2, (4, 2, 1)],
    [
        WHOLE,
        ([[8, 8, 8], [16, 8, 8]], [[8, 16, 16], [8, 16, 16]]),
        ([[48, 24, 12], [64, 24, 12]], [[16, 24, 8], [16, 24, 8]]),
    ],
)
"""A whole coarse level, two siblings in its middle, two much finer siblings in the middle of those."""
UNNESTED = build_hierarchy(
    (0.0, 0.0, 0.0),
    (1.0, 1.0, 1.0),
    (16, 16, 16),
    [2, 4],
    [WHOLE, ([], []), ([[48, 48, 48]], [[24, 32, 16]])],
)
"""A patch straight inside another one two levels coarser."""


@pytest.mark.parametrize("whole", [False, True])
@pytest.mark.parametrize("hierarchy", [NESTED, UNNESTED], ids=["nested", "two levels apart"])
def test_linear_function_is_exact_across_siblings_finer_and_coarser_neighbours(hierarchy, whole):
    stored = Stored(hierarchy, {"f": linear})
    truth = [linear(*centres(hierarchy, patch, rim=1)) for patch in range(hierarchy.patches)]
    for patch, data in enumerate(stored.data):
        data["f"][~leaf_mask(hierarchy, patch)] = -1e30  # stale values under finer patches
    filler = GhostFiller(hierarchy, stored, whole=whole)
    for patch in range(1, hierarchy.patches):
        found = filler.fill(patch, ["f"])["f"]
        if whole:
            np.testing.assert_allclose(found, truth[patch], rtol=1e-12)
            continue
        leaf = np.pad(leaf_mask(hierarchy, patch), 1)
        np.testing.assert_allclose(found[leaf], truth[patch][leaf], rtol=1e-12)
        for axis in range(3):
            for step in (-1, 1):
                beside = np.roll(leaf, step, axis)
                np.testing.assert_allclose(found[beside], truth[patch][beside], rtol=1e-12)


def test_stale_covered_cells_beside_leaves_are_replaced():
    stored = Stored(NESTED, {"f": linear})
    stored.data[0]["f"][4:12, 4:12, 4:12] = 1e30
    found = GhostFiller(NESTED, stored).fill(0, ["f"])["f"][1:-1, 1:-1, 1:-1]
    truth = linear(*centres(NESTED, 0))
    rim = np.ones((8, 8, 8), dtype=bool)
    rim[1:-1, 1:-1, 1:-1] = False
    np.testing.assert_allclose(found[4:12, 4:12, 4:12][rim], truth[4:12, 4:12, 4:12][rim], rtol=1e-12)
    assert (found[4:12, 4:12, 4:12][~rim] == 1e30).all()  # no slope needs them
    whole = GhostFiller(NESTED, stored, whole=True).fill(0, ["f"])["f"][1:-1, 1:-1, 1:-1]
    np.testing.assert_allclose(whole, truth, rtol=1e-12)


def test_covered_cells_may_hold_anything_even_in_the_weight():
    fields = {
        "v": lambda x, y, z: np.sin(3 * x * y * z),
        "rho": lambda x, y, z: np.exp(np.sin(7 * x * y + z)),
    }
    clean, dirty = Stored(NESTED, fields), Stored(NESTED, fields)
    for patch, data in enumerate(dirty.data):
        for values in data.values():
            values[~leaf_mask(NESTED, patch)] = np.nan
    for patch in range(NESTED.patches):
        wanted = GhostFiller(NESTED, clean, weight="rho", whole=True).fill(patch, ["v", "rho"])
        found = GhostFiller(NESTED, dirty, weight="rho", whole=True).fill(patch, ["v", "rho"])
        for name, values in wanted.items():
            np.testing.assert_array_equal(found[name], values)


@pytest.mark.parametrize("periodic", [(False, False, False), (True, True, True)])
def test_constants_come_out_bit_for_bit(periodic):
    stored = Stored(NESTED, {"f": lambda x, y, z: 0.1, "rho": lambda x, y, z: np.exp(np.sin(7 * x * y + z))})
    filler = GhostFiller(NESTED, stored, periodic=periodic, weight="rho", whole=True)
    for patch in range(NESTED.patches):
        assert (filler.fill(patch, ["f"])["f"] == 0.1).all()


def test_mean_of_finer_cells_is_by_mass_and_density_by_volume():
    # a coarse cell over two fine ones (ratio 2 along x only): masses 1 and 3, velocities 10 and 20
    hierarchy = build_hierarchy(
        (0, 0, 0), (1, 1, 1), (2, 1, 1), [(2, 1, 1)], [([[0, 0, 0]], [[2, 1, 1]]), ([[2, 0, 0]], [[2, 1, 1]])]
    )
    stored = Stored(
        hierarchy, {"rho": lambda x, y, z: 0 * x, "v": lambda x, y, z: 0 * x, "p": lambda x, y, z: 0 * x}
    )
    stored.data[1] = {
        "rho": np.array([1.0, 3.0]).reshape(2, 1, 1),
        "v": np.array([10.0, 20.0]).reshape(2, 1, 1),
        "p": np.array([10.0, 60.0]).reshape(2, 1, 1),
    }
    found = GhostFiller(hierarchy, stored, weight="rho", per_volume=("p",)).fill(0, ("rho", "v", "p"))
    assert found["v"][2, 1, 1] == pytest.approx((1 * 10 + 3 * 20) / 4, rel=1e-15)
    assert found["rho"][2, 1, 1] == pytest.approx(2.0, rel=1e-15)
    assert found["p"][2, 1, 1] == pytest.approx(35.0, rel=1e-15)
    by_volume = GhostFiller(hierarchy, stored).fill(0, ("v",))
    assert by_volume["v"][2, 1, 1] == pytest.approx(15.0, rel=1e-15)
    stored.data[1]["rho"][...] = 0.0
    empty = GhostFiller(hierarchy, stored, weight="rho").fill(0, ("v",))
    assert empty["v"][2, 1, 1] == pytest.approx(15.0, rel=1e-15)


def test_edges_of_the_domain():
    hierarchy = build_hierarchy((0, 0, 0), (1, 1, 1), (4, 4, 4), [], [([[0, 0, 0]], [[4, 4, 4]])])
    stored = Stored(hierarchy, {"f": lambda x, y, z: x + 10 * y + 100 * z})
    inside = stored.data[0]["f"]
    zero_gradient = GhostFiller(hierarchy, stored, whole=True).fill(0, ["f"])["f"]
    np.testing.assert_array_equal(zero_gradient, np.pad(inside, 1, mode="edge"))
    wrapped = GhostFiller(hierarchy, stored, periodic=(True, True, True), whole=True).fill(0, ["f"])["f"]
    np.testing.assert_array_equal(wrapped, np.pad(inside, 1, mode="wrap"))
    mixed = GhostFiller(hierarchy, stored, periodic=(True, False, True), whole=True).fill(0, ["f"])["f"]
    wanted = np.pad(
        np.pad(inside, ((1, 1), (0, 0), (1, 1)), mode="wrap"), ((0, 0), (1, 1), (0, 0)), mode="edge"
    )
    np.testing.assert_array_equal(mixed, wanted)


def test_interpolation_keeps_within_its_neighbours_at_a_jump_and_positive_on_a_cliff():
    hierarchy = build_hierarchy(
        (0, 0, 0), (1, 1, 1), (16, 16, 16), [4], [WHOLE, ([[16, 16, 16]], [[16, 16, 16]])]
    )
    cliff = Stored(hierarchy, {"f": lambda x, y, z: 10.0 ** -(x + y + z)})
    found = GhostFiller(hierarchy, cliff, whole=True).fill(1, ["f"])["f"]
    assert (found > 0).all()
    jump = Stored(hierarchy, {"f": lambda x, y, z: np.where(x < 4.0, 1.0, 5.0)})
    found = GhostFiller(hierarchy, jump, whole=True).fill(1, ["f"])["f"]
    assert set(np.unique(found)) == {1.0, 5.0}


def test_second_order_from_the_coarser_level():
    # halving the cells must divide the error of interpolated ghost cells of a smooth field by about 4
    errors = []
    for n in (16, 32):
        hierarchy = build_hierarchy(
            (0, 0, 0),
            (16 / n,) * 3,
            (n, n, n),
            [2],
            [([[0, 0, 0]], [[n, n, n]]), ([[n // 2] * 3], [[n] * 3])],
        )

        def smooth(x, y, z):
            return 2 * x + y - z + np.sin(0.3 * x) * np.cos(0.2 * y)

        found = GhostFiller(hierarchy, Stored(hierarchy, {"f": smooth})).fill(1, ["f"])["f"]
        truth = smooth(*centres(hierarchy, 1, rim=1))
        errors.append(np.abs(found - truth)[0, 1:-1, 1:-1].max())
    assert 3.3 < errors[0] / errors[1] < 4.7


def test_only_thin_layers_are_read_and_needs_says_which():
    lo = 16 * np.stack(np.meshgrid(*[np.arange(3)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    hierarchy = build_hierarchy((0, 0, 0), (1, 1, 1), (48,) * 3, [], [(lo, np.full_like(lo, 16))])
    stored = Stored(hierarchy, {"f": linear})
    filler = GhostFiller(hierarchy, stored)
    filler.fill(13, ["f"])
    assert stored.cells == 16**3 + 6 * 16**2
    parts = filler.needs(13)
    assert len(parts) == 6
    assert sum(int(np.prod(np.subtract(box[1], box[0]))) for _, box in parts) == 6 * 16**2
    # beside a coarser level: two layers of coarse cells around, not the whole patch
    nested = build_hierarchy(
        (0, 0, 0), (1, 1, 1), (64,) * 3, [2], [([[0] * 3], [[64] * 3]), ([[32] * 3], [[64] * 3])]
    )
    cells = sum(int(np.prod(np.subtract(box[1], box[0]))) for _, box in GhostFiller(nested, stored).needs(1))
    assert cells <= 6 * 2 * 34**2


def test_ghosts_do_not_depend_on_how_the_level_is_cut_into_patches():
    def cut(boxes):
        return build_hierarchy((0, 0, 0), (1, 1, 1), (16,) * 3, [2], [WHOLE, boxes])

    def noise(x, y, z):
        return np.sin(12.9898 * x + 78.233 * y + 37.719 * z) * 43758.5453 % 1.0

    fields = {"v": noise, "rho": lambda x, y, z: 0.1 + noise(z, x, y)}
    one = cut(([[8, 8, 8]], [[16, 16, 16]]))
    two = cut(([[8, 8, 8], [16, 8, 8]], [[8, 16, 16], [8, 16, 16]]))
    whole = GhostFiller(one, Stored(one, fields), weight="rho", whole=True).fill(1, ["v", "rho"])
    filler = GhostFiller(two, Stored(two, fields), weight="rho", whole=True)
    for name, array in whole.items():
        np.testing.assert_array_equal(filler.fill(1, ["v", "rho"])[name], array[:10])
        np.testing.assert_array_equal(filler.fill(2, ["v", "rho"])[name], array[8:])
    coarse = GhostFiller(one, Stored(one, fields), weight="rho").fill(0, ["v"])["v"]
    np.testing.assert_allclose(
        GhostFiller(two, Stored(two, fields), weight="rho").fill(0, ["v"])["v"], coarse, rtol=1e-14
    )
