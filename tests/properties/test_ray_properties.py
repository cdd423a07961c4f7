"""Rays through random hierarchies, gaps and all, against painting the finest cells and sorting every face."""

from __future__ import annotations

import numpy as np
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from mesh_strategies import hierarchies
from support.jobs import make_job

from cubeforge.engine.cache import PatchCache
from cubeforge.engine.plan import make_plan
from cubeforge.engine.setup import build_setup
from cubeforge.engine.worker import TileWorker
from cubeforge.errors import PlanError
from cubeforge.job import parse_job
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.snapshots.memory import MemorySnapshot
from cubeforge.transfer.optical import LineCells, pack_cells
from cubeforge.transfer.reference import crossings, march
from cubeforge.transfer.scene import Region, Scene, build_scene
from cubeforge.transfer.view import View, sky_basis

DIRECTIONS = st.one_of(
    st.sampled_from(
        [(1, 0, 0), (0, -1, 0), (0, 0, 1), (1, 1, 0), (0, 2, -1), (1, 1, 1), (-1, 2, 1), (3, -1, -2)]
    ),
    st.tuples(*[st.floats(-1.0, 1.0).filter(lambda v: abs(v) > 1e-3)] * 3),
)


def painted(hierarchy: Hierarchy) -> tuple[np.ndarray, np.ndarray]:
    """Patch and flat cell of the patch behind every finest cell, -1 where there is none; coarse to fine."""
    finest = hierarchy.domain[-1].astype(int)
    patch, cell = np.full(tuple(finest), -1), np.full(tuple(finest), -1)
    for number in range(hierarchy.patches):
        per = np.array(finest // hierarchy.domain[hierarchy.level[number]])
        lo, shape = hierarchy.lo[number].astype(int), hierarchy.shape[number].astype(int)
        cells = np.arange(shape.prod()).reshape(shape, order="F")
        for axis in range(3):
            cells = cells.repeat(per[axis], axis=axis)
        where = tuple(slice(a, b) for a, b in zip(lo * per, (lo + shape) * per, strict=True))
        patch[where], cell[where] = number, cells
    return patch, cell


def brute_pieces(scene: Scene, origin: np.ndarray, shape: tuple[int, ...]):
    """Depths of all faces of finest cells sorted, and the finest cell in the middle of each piece between two."""
    cuts = [np.zeros(0)]
    near, far = -np.inf, np.inf
    for axis in range(3):
        d = scene.direction[axis]
        if d == 0.0:
            if not 0.0 <= origin[axis] < shape[axis]:
                return np.zeros(0), np.zeros(0), np.zeros((0, 3), dtype=int)
            continue
        faces = (np.arange(shape[axis] + 1) - origin[axis]) / d
        near, far = max(near, faces.min()), min(far, faces.max())
        cuts.append(faces)
    cuts = np.sort(np.concatenate(cuts))
    cuts = cuts[(cuts >= near) & (cuts <= far)]
    if len(cuts) < 2:
        return np.zeros(0), np.zeros(0), np.zeros((0, 3), dtype=int)
    middle = 0.5 * (cuts[1:] + cuts[:-1])
    index = np.floor(origin + middle[:, np.newaxis] * scene.direction).astype(int)
    index = np.clip(index, 0, np.array(shape) - 1)
    return cuts[:-1], cuts[1:], index


def scene_of(hierarchy: Hierarchy, toward, north, pixel: float) -> Scene:
    """What a view of 7 x 7 pixels around the middle of the domain sees; such a view of gaps alone is no example."""
    n, right, up = sky_basis(np.array(toward, dtype=float), np.array(north, dtype=float))
    view = View(n, right, up, hierarchy.centre, pixel, 7, 7)
    try:
        return build_scene(hierarchy, view, Region())
    except PlanError as error:
        assume("past the snapshot" not in str(error))
        raise


Step = tuple[int, int, float]
"""Patch, flat cell in the patch, length."""


def joined(steps: list[Step]) -> list[Step]:
    """Neighbouring steps in the same cell as one; steps as short as rounding left out."""
    out: list[Step] = []
    for patch, cell, length in steps:
        if length < 1e-9:
            continue
        if out and out[-1][:2] == (patch, cell):
            length += out.pop()[2]
        out.append((patch, cell, length))
    return out


@st.composite
def scenes(draw: st.DrawFn):
    """A hierarchy, a view of it, and places of rays in the image; on faces and through corners among others."""
    hierarchy = draw(hierarchies(tiled=draw(st.booleans())))
    toward = draw(DIRECTIONS)
    north = draw(st.sampled_from([(0.0, 0.0, 1.0), (0.0, 1.0, 0.0), (1.0, 0.0, 0.0), (0.3, 0.5, -0.8)]))
    assume(np.linalg.norm(np.cross(toward, north)) > 0.05)
    pixel = draw(st.sampled_from([0.25, 0.5, 1.0, 1.37]))
    places = draw(st.lists(st.tuples(*[st.integers(0, 28).map(lambda v: v / 4)] * 2), min_size=1, max_size=4))
    places += draw(st.lists(st.tuples(*[st.floats(0.0, 7.0)] * 2), max_size=3))
    return hierarchy, toward, north, pixel, places


@given(scenes())
@settings(max_examples=150, deadline=None)
def test_crossings_fill_the_union_of_boxes_and_the_finest_wins(scene_and_rays):
    hierarchy, toward, north, pixel, places = scene_and_rays
    scene = scene_of(hierarchy, toward, north, pixel)
    patch_at, cell_at = painted(hierarchy)
    for x, y in places:
        origin = scene.start + x * scene.step_x + y * scene.step_y
        start, stop, index = brute_pieces(scene, origin, patch_at.shape)
        patch, cell = patch_at[tuple(index.T)], cell_at[tuple(index.T)]
        held = patch >= 0
        wanted = list(
            zip(patch[held].tolist(), cell[held].tolist(), (stop - start)[held].tolist(), strict=True)
        )
        found = [
            (int(scene.patch[entry]), int(cell), float(length))
            for entry, cells, lengths in crossings(scene, x, y)
            for cell, length in zip(cells, lengths, strict=True)
        ]
        assert all(length > 0.0 for _, _, length in found)
        chord = sum(length for _, _, length in wanted)
        assert abs(sum(length for _, _, length in found) - chord) < 1e-9 * (1.0 + chord)
        found, wanted = joined(found), joined(wanted)
        assert [step[:2] for step in found] == [step[:2] for step in wanted]
        lengths = [[step[2] for step in steps] for steps in (found, wanted)]
        np.testing.assert_allclose(*lengths, rtol=0.0, atol=1e-8)


DEPTHS = {"thin": (-9.0, -4.0), "mixed": (-8.0, 1.0), "thick": (-1.0, 3.5), "empty": (-6.0, 0.0),
          "inverted": (-6.0, -1.5)}  # fmt: skip
"""Powers of ten of a cell's depth. Half of the cells are transparent in `empty`, amplify in `inverted`."""


def random_worker(hierarchy: Hierarchy, toward, north, depth: str, sampling: str, seed: int) -> TileWorker:
    """A tile worker whose optical patches hold random numbers instead of gas."""
    snapshot = MemorySnapshot(hierarchy, [{"density": np.ones(tuple(n))} for n in hierarchy.shape])
    job = make_job(
        view={"toward": list(toward), "north": list(north), "pixel": "0.83 pc", "size": [9, 6]},
        channels={"first": "-2.5 km/s", "last": "2.5 km/s", "width": "0.1 km/s", "sampling": sampling},
        rays={"per_side": 2 if sampling == "mean" else 1},
        output={"tile": 64},
    )
    setup = build_setup(parse_job(job), snapshot)
    worker = TileWorker(setup, make_plan(setup))

    def fill(patch: int) -> np.ndarray:
        rng = np.random.default_rng((seed, patch))
        shape = tuple(int(n) for n in hierarchy.shape[patch])
        b = 1e5 * rng.uniform(0.31, 0.9, shape)
        kappa = 10.0 ** rng.uniform(*DEPTHS[depth], shape) * b * np.sqrt(np.pi) / setup.unit_cm
        chosen = rng.random(shape) < 0.5
        emis = kappa * rng.uniform(-0.5, 20.0, shape)
        if depth == "empty":
            kappa, emis = (
                np.where(chosen, 0.0, kappa),
                np.where(chosen & (rng.random(shape) < 0.5), 0.0, emis),
            )
        if depth == "inverted":
            kappa = np.where(chosen, -kappa, kappa)
        velocity = 1e5 * rng.normal(0.0, 0.8, shape)
        line = LineCells(kappa, emis, b**2, thermal=1.0, turbulence=0.0)
        return pack_cells(rng.random(shape), velocity, None, [line], setup.band, setup.unit_cm)[0]

    worker.cache = PatchCache(fill, 2**40)
    return worker


@given(scenes(), st.sampled_from(sorted(DEPTHS)), st.sampled_from(["centre", "mean"]), st.integers(0, 2**31))
@settings(max_examples=60, deadline=None)
def test_the_fast_march_is_the_slow_one(scene_and_rays, depth: str, sampling: str, seed: int):
    hierarchy, toward, north, _, _ = scene_and_rays
    try:
        worker = random_worker(hierarchy, toward, north, depth, sampling, seed)
    except PlanError as error:
        assume("past the snapshot" not in str(error))
        raise
    setup = worker.setup
    image = worker.render(0).image
    side = 2 if sampling == "mean" else 1
    wanted = np.zeros(image.shape)
    for y in range(image.shape[1]):
        for x in range(image.shape[2]):
            for sub in range(side * side):
                at = x + (sub % side + 0.5) / side, y + (sub // side + 0.5) / side
                wanted[:, y, x] += (
                    march(setup.scene, setup.band, worker.cache.get, *at, np.zeros(1)) / side**2
                )
    peak = np.abs(wanted).max()
    assert np.all(np.isfinite(image))
    np.testing.assert_allclose(image, wanted, rtol=0.0, atol=1e-5 * peak + 1e-30)
