"""Random hierarchies for property tests, and what they look like flattened to the finest cells."""

from __future__ import annotations

import numpy as np
from hypothesis import strategies as st

from cubeforge.mesh.hierarchy import Hierarchy, build_hierarchy


def _boxes(draw: st.DrawFn, domain: np.ndarray, most: int, longest: int) -> list[tuple[list[int], list[int]]]:
    """Draw disjoint boxes inside `domain`."""
    taken = np.zeros(tuple(domain), dtype=bool)
    boxes = []
    for _ in range(draw(st.integers(0, most))):
        lo = [draw(st.integers(0, int(n) - 1)) for n in domain]
        shape = [draw(st.integers(1, min(longest, int(n) - at))) for n, at in zip(domain, lo, strict=True)]
        part = taken[tuple(slice(at, at + n) for at, n in zip(lo, shape, strict=True))]
        if not part.any():
            part[...] = True
            boxes.append((lo, shape))
    return boxes


@st.composite
def hierarchies(draw: st.DrawFn, tiled: bool = False) -> Hierarchy:
    """Up to three levels, any ratio per axis from 1 to 4, patches neither nested nor aligned, gaps allowed.

    With `tiled` the patches of level 0 fill the domain.
    """
    domain = np.array([draw(st.integers(2, 5)) for _ in range(3)])
    ratios = [
        [draw(st.sampled_from((1, 2, 2, 3, 4))) for _ in range(3)] for _ in range(draw(st.integers(0, 2)))
    ]
    cut = draw(st.integers(1, int(domain[0])))
    whole = [([0, 0, 0], [cut, *domain[1:]]), ([cut, 0, 0], [domain[0] - cut, *domain[1:]])]
    levels = [[box for box in whole if box[1][0] > 0]]
    if not tiled:
        drawn = _boxes(draw, domain, 3, 5)
        levels = [drawn or [([0, 0, 0], [1, 1, 1])]]
    for ratio in np.cumprod(np.array(ratios, dtype=int).reshape(-1, 3), axis=0):
        levels.append(_boxes(draw, domain * ratio, 4, 6))
    boxes = [(np.array([b[0] for b in level]), np.array([b[1] for b in level])) for level in levels]
    return build_hierarchy((0.0, 0.0, 0.0), (1.0, 2.0, 0.5), domain.tolist(), ratios, boxes)


def flatten(hierarchy: Hierarchy) -> np.ndarray:
    """Patch that holds at each finest cell (-1: none), by painting coarse to fine."""
    owner = np.full(tuple(hierarchy.domain[-1]), -1)
    low, high = hierarchy.edges()
    for patch in range(hierarchy.patches):
        owner[tuple(slice(a, b) for a, b in zip(low[patch], high[patch], strict=True))] = patch
    return owner


def in_cells(hierarchy: Hierarchy, level: int, flags: np.ndarray) -> np.ndarray:
    """Mean of a finest-cell array over each cell of `level`."""
    sx, sy, sz = hierarchy.scale[level]
    nx, ny, nz = hierarchy.domain[level]
    return flags.reshape(nx, sx, ny, sy, nz, sz).mean(axis=(1, 3, 5))
