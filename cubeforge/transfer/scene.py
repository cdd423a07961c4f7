"""The scene: what a view sees of a hierarchy, as the flat arrays that the march takes."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cubeforge.errors import PlanError
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.mesh.leaves import leaf_counts
from cubeforge.transfer.view import View, footprints, select_patches

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Region:
    """What part of space is rendered, in the snapshot's length unit; all of the domain by default.

    Attributes
    ----------
    lo, hi : ndarray, shape (3,), or None
        Corners of a box. Along a periodic axis it may reach beyond the domain.
    centre : ndarray, shape (3,), or None
    radius : float
        A sphere; infinity for none.
    periodic : tuple of 3 bools
        Axes along which the domain repeats.
    """

    lo: FloatArray | None = None
    hi: FloatArray | None = None
    centre: FloatArray | None = None
    radius: float = np.inf
    periodic: tuple[bool, bool, bool] = (False, False, False)

    def bounds(self, hierarchy: Hierarchy) -> tuple[FloatArray, FloatArray]:
        """Corners of the smallest box that holds the region; beyond the domain only where it repeats.

        Raises
        ------
        PlanError
            The region and the domain have no volume in common.
        """
        domain_lo, domain_hi = hierarchy.origin, hierarchy.origin + hierarchy.extent
        lo, hi = np.full(3, -np.inf), np.full(3, np.inf)
        if self.lo is not None and self.hi is not None:
            lo, hi = np.maximum(lo, self.lo), np.minimum(hi, self.hi)
        if self.centre is not None:
            lo, hi = np.maximum(lo, self.centre - self.radius), np.minimum(hi, self.centre + self.radius)
        free = np.asarray(self.periodic)
        lo = np.where(np.isinf(lo) | ~free, np.maximum(lo, domain_lo), lo)
        hi = np.where(np.isinf(hi) | ~free, np.minimum(hi, domain_hi), hi)
        if np.any(lo >= hi):
            axis = "xyz"[int(np.argmax(lo >= hi))]
            raise PlanError(
                f"region: nothing of the snapshot is inside it along {axis}; the domain reaches from "
                f"{domain_lo.tolist()} to {domain_hi.tolist()} in the snapshot's length unit"
            )
        return lo, hi


@dataclass(frozen=True)
class Scene:
    """Patches in view, and rays, in finest units (see `Hierarchy`); depth counts in `unit`.

    Attributes
    ----------
    unit : float
        Unit of depth: the side of a level-0 cell along x, in the snapshot's length unit.
    start, step_x, step_y : ndarray, shape (3,)
        Corner of pixel (0, 0) at depth 0, and steps to the next pixel, in finest units.
    direction : ndarray, shape (3,)
        Finest units per unit of depth.
    box, sphere, cell : ndarray, shapes (2, 3), (4,), (3,)
        The region and the size of a finest unit; see `ray_kernels.clip_to_region`.
    scale : ndarray, shape (levels, 3), int64
    patch : ndarray, shape (n,), int64
        The snapshot's patch behind each entry; a patch of a periodic domain may have several.
    lo, hi : ndarray, shape (n, 3), int64
        Corners in the level's index space, images shifted.
    level : ndarray, shape (n,), int32
        Ascending.
    rect : ndarray, shape (n, 4)
        Sky rectangle in pixels: x low, x high, y low, y high.
    """

    unit: float
    start: FloatArray
    step_x: FloatArray
    step_y: FloatArray
    direction: FloatArray
    box: FloatArray
    sphere: FloatArray
    cell: FloatArray
    scale: npt.NDArray[np.int64]
    patch: npt.NDArray[np.int64]
    lo: npt.NDArray[np.int64]
    hi: npt.NDArray[np.int64]
    level: npt.NDArray[np.int32]
    rect: FloatArray

    @property
    def longest(self) -> int:
        """Bound on the crossings of one ray in one patch."""
        return int((self.hi - self.lo).sum(axis=1).max(initial=0)) + 1


def _images(hierarchy: Hierarchy, region: Region, lo: FloatArray, hi: FloatArray) -> list[tuple[int, ...]]:
    """Whole-domain shifts, in domains per axis, whose copies can reach into the region."""
    first = np.floor((lo - hierarchy.origin) / hierarchy.extent + 1e-12).astype(int)
    last = np.ceil((hi - hierarchy.origin) / hierarchy.extent - 1e-12).astype(int)
    ranges = [
        range(a, max(b, a + 1)) if repeats else range(1)
        for a, b, repeats in zip(first, last, region.periodic, strict=True)
    ]
    return list(itertools.product(*ranges))


def build_scene(hierarchy: Hierarchy, view: View, region: Region) -> Scene:
    """Find the patches in view and write rays and patches in finest units.

    Patches that finer ones cover wholly are left out: no ray meets a cell of theirs.

    Raises
    ------
    PlanError
        The region is empty, or the view looks past it.
    """
    region_lo, region_hi = region.bounds(hierarchy)
    finest = hierarchy.finest_cell
    edge_lo, edge_hi = hierarchy.edges()
    seen = leaf_counts(hierarchy) > 0
    picked = []
    for image in _images(hierarchy, region, region_lo, region_hi):
        shift = np.asarray(image) * hierarchy.domain[-1].astype(np.int64)
        lo = hierarchy.origin + (edge_lo + shift) * finest
        hi = hierarchy.origin + (edge_hi + shift) * finest
        rect, _ = footprints(view, np.maximum(lo, region_lo), np.minimum(hi, region_hi))
        inside = seen & np.all((lo < region_hi) & (hi > region_lo), axis=1) & select_patches(rect, view)
        chosen = np.flatnonzero(inside)
        shift_cells = np.asarray(image) * hierarchy.domain.astype(np.int64)
        picked.append((chosen, shift_cells[hierarchy.level[chosen]], rect[chosen]))
    patch = np.concatenate([p for p, _, _ in picked])
    if len(patch) == 0:
        raise PlanError(
            f"view: it looks past the snapshot; its centre {view.centre.tolist()} and size {view.nx} x {view.ny} "
            f"pixels of {view.pixel:.4g} see nothing of {region_lo.tolist()} to {region_hi.tolist()} (in the "
            "snapshot's length unit)"
        )
    order = np.lexsort((patch, hierarchy.level[patch]))
    shift = np.concatenate([s for _, s, _ in picked])[order]
    rect = np.concatenate([r for _, _, r in picked])[order]
    patch = patch[order]
    unit = float(hierarchy.cell_size[0, 0])
    centre = hierarchy.origin if region.centre is None else region.centre
    return Scene(
        unit=unit,
        start=(view.corner() - hierarchy.origin) / finest,
        step_x=view.right * view.pixel / finest,
        step_y=view.up * view.pixel / finest,
        direction=view.toward * unit / finest,
        box=np.stack([(region_lo - hierarchy.origin) / finest, (region_hi - hierarchy.origin) / finest]),
        sphere=np.append((centre - hierarchy.origin) / finest, region.radius / unit),
        cell=finest / unit,
        scale=hierarchy.scale,
        patch=patch.astype(np.int64),
        lo=hierarchy.lo[patch] + shift,
        hi=hierarchy.hi[patch] + shift,
        level=hierarchy.level[patch],
        rect=rect,
    )
