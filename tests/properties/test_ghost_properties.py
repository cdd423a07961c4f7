"""Ghost cells of random hierarchies against the rules applied one cell at a time on the flattened grid."""

from __future__ import annotations

from functools import cache
from itertools import product

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from mesh_strategies import flatten, hierarchies

from cubeforge.mesh.ghosts import GhostFiller
from cubeforge.mesh.hierarchy import Hierarchy


class Slow:
    """Value of a level at a cell, straight from the definition in `cubeforge.mesh.ghosts`."""

    def __init__(
        self, hierarchy: Hierarchy, stored: list[dict[str, np.ndarray]], periodic: tuple[bool, ...]
    ) -> None:
        self.h, self.stored, self.periodic = hierarchy, stored, periodic
        self.owner = flatten(hierarchy)
        self.at = cache(self._at)

    def holder(self, level: int, cell: tuple[int, ...]) -> int | None:
        for patch in range(*self.h.first[level : level + 2]):
            if all(self.h.lo[patch] <= cell) and all(cell < self.h.hi[patch]):
                return patch
        return None

    def into_domain(self, level: int, cell: tuple[int, ...]) -> tuple[int, ...]:
        sizes = self.h.domain[level].tolist()
        return tuple(
            c % n if wraps else min(max(c, 0), n - 1)
            for c, n, wraps in zip(cell, sizes, self.periodic, strict=True)
        )

    def _at(self, level: int, cell: tuple[int, ...]) -> dict[str, float] | None:
        cell = self.into_domain(level, cell)
        scale = self.h.scale[level]
        fine = self.owner[tuple(slice(c * s, (c + 1) * s) for c, s in zip(cell, scale, strict=True))]
        finer = np.isin(fine, np.flatnonzero(self.h.level > level))
        patch = self.holder(level, cell)
        if patch is not None and not finer.all():
            at = tuple(np.array(cell) - self.h.lo[patch])
            return {name: float(values[at]) for name, values in self.stored[patch].items()}
        rest = None if finer.all() or level == 0 else self.from_coarser(level, cell)
        samples = [] if rest is None else [rest] * int((~finer).sum())
        for local in np.argwhere(finer):
            owner = fine[tuple(local)]
            point = np.array(cell) * scale + local
            at = tuple(point // self.h.scale[self.h.level[owner]] - self.h.lo[owner])
            samples.append({name: float(values[at]) for name, values in self.stored[owner].items()})
        if not samples:
            return None
        weights = np.array([sample["rho"] for sample in samples])
        means = {name: float(np.average([s[name] for s in samples], weights=weights)) for name in samples[0]}
        return means | {name: float(np.mean([s[name] for s in samples])) for name in ("rho", "m")}

    def from_coarser(self, level: int, cell: tuple[int, ...]) -> dict[str, float] | None:
        ratio = self.h.ratio[level]
        parent = tuple(int(c) for c in np.array(cell) // ratio)
        centre = self.at(level - 1, parent)
        if centre is None:
            return None
        result = {}
        for name, value in centre.items():
            change, reach, around = 0.0, 0.0, [value]
            for axis in range(3):
                ends = []
                for step in (-1, 1):
                    neighbour = list(parent)
                    neighbour[axis] += step
                    found = self.at(level - 1, tuple(neighbour))
                    ends.append(value if found is None else found[name])
                around += ends
                left, right = value - ends[0], ends[1] - value
                sizes = 2 * abs(left), 2 * abs(right), abs(left + right) / 2
                slope = np.sign(right) * min(sizes) if left * right > 0 else 0.0
                change += slope * ((cell[axis] % ratio[axis] + 0.5) / ratio[axis] - 0.5)
                reach += abs(slope) * (1 - 1 / ratio[axis]) / 2
            room = reach
            if min(around) > 0:
                room = value - min(around) / 4
            elif max(around) < 0:
                room = max(around) / 4 - value
            result[name] = value + (change * room / reach if reach > room else change)
        return result


def compare(hierarchy: Hierarchy, seed: int, periodic: tuple[bool, bool, bool], whole: bool) -> None:
    rng = np.random.default_rng(seed)
    stored = [
        {
            "rho": np.exp(rng.normal(size=tuple(shape))),
            "v": rng.normal(size=tuple(shape)),
            "m": rng.normal(size=tuple(shape)),
        }
        for shape in hierarchy.shape
    ]
    asked: list[tuple[int, object]] = []

    def read(patch, fields, box=None):
        asked.append((patch, box))
        low, high = box or ((0, 0, 0), hierarchy.shape[patch])
        part = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
        return {name: stored[patch][name][part] for name in fields}

    slow = Slow(hierarchy, stored, periodic)
    filler = GhostFiller(hierarchy, read, periodic=periodic, weight="rho", per_volume=("m",), whole=whole)
    for patch in range(hierarchy.patches):
        asked.clear()
        found = filler.fill(patch, ("v", "rho", "m"))
        assert asked == [(patch, None), *filler.needs(patch)]
        level, lo, shape = int(hierarchy.level[patch]), hierarchy.lo[patch], hierarchy.shape[patch]
        leaf = np.zeros(tuple(shape + 2), dtype=bool)
        for cell in product(*map(range, shape)):
            scale = hierarchy.scale[level]
            low = (lo + cell) * scale
            fine = slow.owner[tuple(slice(a, a + s) for a, s in zip(low, scale, strict=True))]
            leaf[tuple(np.add(cell, 1))] = (fine == patch).any()
        for cell in product(*(range(n + 2) for n in shape)):
            nearest = np.clip(cell, 1, shape)
            inside = bool((nearest == cell).all())
            beside = sum(
                leaf[tuple(np.add(cell, step))]
                for step in np.concatenate([np.eye(3, dtype=int), -np.eye(3, dtype=int)])
                if all(0 <= c < n + 2 for c, n in zip(np.add(cell, step), shape, strict=True))
            )
            if leaf[cell] or not (whole or beside):
                wanted = {name: values[tuple(nearest - 1)] for name, values in stored[patch].items()}
                if not leaf[cell] and not inside:
                    continue  # a ghost cell that no slope needs
            else:
                wanted = slow.at(level, tuple(int(c) for c in lo + cell - 1))
                if wanted is None:
                    wanted = {name: found[name][tuple(nearest)] for name in found}
            for name in found:
                np.testing.assert_allclose(found[name][cell], wanted[name], rtol=1e-9, atol=1e-12)


@given(hierarchies(), st.integers(0, 2**32 - 1), st.tuples(*[st.booleans()] * 3), st.booleans())
@settings(max_examples=40, deadline=None)
def test_ghosts_follow_the_rules_with_gaps(hierarchy, seed, periodic, whole):
    compare(hierarchy, seed, periodic, whole)


@given(hierarchies(tiled=True), st.integers(0, 2**32 - 1), st.tuples(*[st.booleans()] * 3), st.booleans())
@settings(max_examples=40, deadline=None)
def test_ghosts_follow_the_rules_on_a_tiled_domain(hierarchy, seed, periodic, whole):
    compare(hierarchy, seed, periodic, whole)
