"""Time of look-ups at a thousand and a hundred thousand patches, of ghost cells and of the gas pass."""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pytest

from cubeforge.gas.model import GasModel, StoredField
from cubeforge.mesh.ghosts import GhostFiller
from cubeforge.mesh.hierarchy import Hierarchy, build_hierarchy
from cubeforge.mesh.leaves import leaf_cells, leaf_mask
from cubeforge.mesh.overlap import BoxIndex, SkyIndex


def two_levels(n: int, size: int = 16) -> Hierarchy:
    """``n**3`` patches on each of two levels, the finer ones in the middle."""
    lo = size * np.stack(np.meshgrid(*[np.arange(n)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    shape = np.full_like(lo, size)
    return build_hierarchy(
        (0, 0, 0), (1, 1, 1), (n * size,) * 3, [2], [(lo, shape), (lo + n * size // 2, shape)]
    )


HIERARCHIES = {1_000: two_levels(8), 100_000: two_levels(37)}


def best(call: Callable[[], object], rounds: int = 7, loops: int = 300) -> float:
    """Seconds of one call: the least of several rounds."""
    call()
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        for _ in range(loops):
            call()
        times.append((time.perf_counter() - start) / loops)
    return min(times)


def sky(count: int, image: int) -> SkyIndex:
    rng = np.random.default_rng(3)
    lo = rng.uniform(0, image, size=(count, 2))
    return SkyIndex(lo, lo + rng.uniform(4, 20, size=(count, 2)), bin=64, image=(image, image))


@pytest.mark.parametrize("patches", HIERARCHIES)
def test_box_look_up(benchmark, patches):
    hierarchy = HIERARCHIES[patches]
    index = BoxIndex(hierarchy)
    lo = hierarchy.lo[-1] - 9
    found = benchmark(index.overlapping, 1, lo, lo + 18)
    assert len(found) == 8


@pytest.mark.parametrize("patches", HIERARCHIES)
def test_building_the_box_index(benchmark, patches):
    assert benchmark.pedantic(BoxIndex, (HIERARCHIES[patches],), rounds=3).nbytes < 60 * patches


@pytest.mark.parametrize("patches", HIERARCHIES)
def test_leaf_cells(benchmark, patches):
    hierarchy = HIERARCHIES[patches]
    n = len(hierarchy.lo) // 2 * 16**3
    assert benchmark.pedantic(leaf_cells, (hierarchy,), rounds=3, warmup_rounds=1) == 2 * n - n // 8


@pytest.mark.parametrize("patches", HIERARCHIES)
def test_ghost_cells(benchmark, patches):
    hierarchy = HIERARCHIES[patches]
    data = {"v": np.ones((16, 16, 16))}

    def read(patch, fields, box=None):
        (a, b, c), (d, e, f) = box or ((0, 0, 0), (16, 16, 16))
        return {name: data[name][a:d, b:e, c:f] for name in fields}

    middle = int(hierarchy.first[1]) + len(hierarchy.lo) // 4
    found = benchmark(GhostFiller(hierarchy, read).fill, middle, ("v",))
    assert (found["v"] == 1).all()


@pytest.mark.parametrize("count", [10_000, 1_000_000])
def test_building_the_sky_index(benchmark, count):
    # as many rectangles per tile in both
    index = benchmark.pedantic(sky, (count, 64 * int(0.1 * count**0.5)), rounds=3, warmup_rounds=1)
    assert index.counts().sum() > count


def test_gas_pass(benchmark):
    rng = np.random.default_rng(0)
    names = ("rho", "T", "vx", "vy", "vz")
    raw = {name: rng.uniform(1, 2, size=(64, 64, 64)).astype(np.float32) for name in names}
    motion = StoredField("vx", 1e5), StoredField("vy", 1e5), StoredField("vz", 1e5)
    state = benchmark(GasModel(StoredField("rho", 1e-20), StoredField("T"), motion).state, raw)
    assert state.mended_cells == 0


def test_look_ups_take_no_longer_among_many_patches():
    # the bins are searched by bisection, so 100 times the patches may cost a few steps more, not 100 times
    times = []
    for hierarchy in HIERARCHIES.values():
        index = BoxIndex(hierarchy)
        lo = hierarchy.lo[-1] - 9
        times.append(best(lambda index=index, lo=lo: index.overlapping(1, lo, lo + 18)))
    assert times[1] < 3 * times[0]
    masks = []
    for hierarchy in HIERARCHIES.values():
        middle = hierarchy.domain[0] // 2
        patch = int(BoxIndex(hierarchy).overlapping(0, middle, middle + 1)[0])
        assert not leaf_mask(hierarchy, patch).any()
        masks.append(best(lambda h=hierarchy, p=patch: leaf_mask(h, p), loops=100))
    assert masks[1] < 3 * masks[0]
    small, large = (sky(count, 64 * int(0.1 * count**0.5)) for count in (10_000, 1_000_000))
    looks = [best(lambda s=s: s.patches_in(64, 128, 64, 128)) for s in (small, large)]
    assert looks[1] < 3 * looks[0]
