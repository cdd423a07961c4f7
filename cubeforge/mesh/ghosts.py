"""Ghost cells: one layer around a patch, for slopes, from whatever surrounds it.

A ghost cell takes the value that the patch's level has there:

* stored in a patch of the same level and not covered: that value;
* covered by finer patches (any number of levels finer): the mean of their leaf cells, by mass;
* else interpolated from the next coarser level, along each axis with a monotonised central slope from the
  coarser cell and its two neighbours; what the coarser level has there is found by these same rules. Edges
  and corners follow from the same sum of three slopes;
* outside the domain: the nearest cell in it (zero gradient), or the periodic image;
* where no patch of any level is: the nearest cell of the patch itself (zero gradient). A gap beside a coarser
  cell counts as equal to that cell.

A cell of one level that a finer patch covers in part keeps its stored value; one that is not stored gets the
mean of the finer leaf cells and the interpolated rest, each by its volume. So the value at a cell depends on
the snapshot alone, not on the patch that asks.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from cubeforge.mesh.ghost_kernels import copy_outwards, deposit, finish, interpolate, place
from cubeforge.mesh.ghost_plan import Part, Planner, Window
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.mesh.reading import Box, Read

FloatArray = npt.NDArray[np.float64]


class GhostFiller:
    """Fills ghost cells, and the covered cells beside leaf cells, of one patch after another.

    Parameters
    ----------
    hierarchy : Hierarchy
    read : callable
        ``read(patch, fields, box) -> {field: array}``, as a snapshot's; it is asked for the whole patch and
        for the parts of its neighbours that `needs` lists.
    periodic : (bool, bool, bool)
        Axes along which the domain repeats itself.
    weight : str, optional
        Field that weights means of finer cells (the mass density); it is itself averaged by volume. Without
        it every mean is by volume.
    per_volume : sequence of str
        Further fields that are amounts per volume (momentum, pressure, energy): averaged by volume, too.
    whole : bool
        Fill every ghost cell, edges and corners included, and every covered cell. Else only those that share
        a face with a leaf cell; the other ghost cells take the value of the nearest cell of the patch, the
        other covered cells keep what is stored.
    """

    def __init__(
        self,
        hierarchy: Hierarchy,
        read: Read,
        *,
        periodic: tuple[bool, bool, bool] = (False, False, False),
        weight: str | None = None,
        per_volume: Sequence[str] = (),
        whole: bool = False,
    ) -> None:
        self._planner = Planner(hierarchy, periodic, whole)
        self._read = read
        self._weight = weight
        self._per_volume = frozenset(per_volume) | ({weight} if weight is not None else set())

    def needs(self, patch: int) -> list[tuple[int, Box]]:
        """Parts that `fill` reads besides the patch itself: (patch, box), in the order of reading.

        No data are read. A part is listed once for each use. Where finer cells are averaged, the weight is
        read along with the fields.
        """
        parts = self._planner.around(patch).parts()
        return [(part.patch, part.box) for part in parts if part.patch != patch]

    def fill(self, patch: int, fields: Sequence[str]) -> dict[str, FloatArray]:
        """Cells of `patch` within one layer of ghost cells: field -> array (nx + 2, ny + 2, nz + 2), float64.

        Covered cells of the patch that share a face with a leaf cell hold the mean of the finer cells.
        """
        names = list(dict.fromkeys(fields))
        window = self._planner.around(patch)
        rows = names
        if window.averages and self._weight is not None and not self._per_volume.issuperset(names):
            rows = list(dict.fromkeys([*names, self._weight]))
        values = np.empty((len(rows), *window.stored.shape))
        stored = self._read(patch, rows)
        for row, name in enumerate(rows):
            values[row, 1:-1, 1:-1, 1:-1] = stored[name]
        # No copy: the cells of the patch that change are covered ones, which no mean and no value uses.
        home = patch, values[:, 1:-1, 1:-1, 1:-1]
        known = _Evaluation(self._read, rows, self._rows_to_weigh(rows), home).evaluate(window, values)
        known[1:-1, 1:-1, 1:-1] = True
        inside = self._planner.clip(window.level, window.lo, window.lo + window.stored.shape)
        copy_outwards(values, known, np.array([*zip(*inside, strict=True)], dtype=np.int64).ravel())
        return {name: values[row] for row, name in enumerate(names)}

    def _rows_to_weigh(self, rows: list[str]) -> tuple[int, npt.NDArray[np.bool_]]:
        weight = rows.index(self._weight) if self._weight is not None and self._weight in rows else -1
        return weight, np.array([name in self._per_volume for name in rows], dtype=bool)


class _Evaluation:
    """Values of windows for one patch, whose own data are at hand."""

    def __init__(
        self,
        read: Read,
        rows: list[str],
        weighing: tuple[int, npt.NDArray[np.bool_]],
        home: tuple[int, FloatArray],
    ) -> None:
        self._read = read
        self._rows = rows
        self._weight, self._plain = weighing
        self._home, self._home_data = home

    def evaluate(self, window: Window, values: FloatArray) -> npt.NDArray[np.bool_]:
        """Write the planned cells of `values` (rows, nx, ny, nz); returns which of them have a value."""
        known = window.stored.copy()
        for part in window.own:
            place(self._data(part), window.stored, part.at, values)
        if window.coarse is not None:
            coarse = np.zeros((len(values), *window.coarse.stored.shape))
            coarse_known = self.evaluate(window.coarse, coarse)
            coarser = coarse, coarse_known, window.coarse.lo
            interpolate(window.missing, window.lo, window.ratio, *coarser, values, known)
        if window.fine:
            self._average(window, values, known)
        return known

    def _data(self, part: Part) -> FloatArray:
        (x0, y0, z0), (x1, y1, z1) = part.box
        if part.patch == self._home:
            return np.ascontiguousarray(self._home_data[:, x0:x1, y0:y1, z0:z1])
        found = self._read(part.patch, self._rows, part.box)
        return np.array([found[name] for name in self._rows], dtype=np.float64)

    def _average(self, window: Window, values: FloatArray, known: npt.NDArray[np.bool_]) -> None:
        slot = np.full(known.shape, -1, dtype=np.int32)
        count = int(np.count_nonzero(window.under))
        slot[window.under] = np.arange(count, dtype=np.int32)
        sums = (np.zeros(count), np.zeros(count), *(np.zeros((count, len(values))) for _ in range(3)))
        for part in window.fine:
            deposit(self._data(part), self._weight, part.open_part, part.at, part.ratio, slot, *sums)
        finish(slot, self._weight, self._plain, window.open_part, *sums, values, known)
