"""The text file `Header` of an AMReX plotfile: from bytes to a frozen dataclass. Opens no file."""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError
from cubeforge.snapshots._lines import Lines
from cubeforge.snapshots.amrex_fab import BOX

IntArray = npt.NDArray[np.int64]
FloatArray = npt.NDArray[np.float64]

TITLE = re.compile(r"\S+-V1\.\d+$")
"""The first line; the word in front varies."""


@dataclass(frozen=True)
class PlotHeader:
    """What `Header` says.

    Attributes
    ----------
    fields : tuple of str
        Names of the components, in the order stored.
    time : float
        Simulation time.
    low, high : ndarray, shape (3,), float64
        Physical corners of the domain.
    domain_lo, domain_hi : ndarray, shape (levels, 3), int64
        First and last (inclusive) cell of the domain in each level's own index space.
    grids : tuple of int
        Number of boxes on each level.
    paths : tuple of str
        Each level's data, such as ``Level_0/Cell``, relative to the plotfile.
    """

    fields: tuple[str, ...]
    time: float
    low: FloatArray
    high: FloatArray
    domain_lo: IntArray
    domain_hi: IntArray
    grids: tuple[int, ...]
    paths: tuple[str, ...]

    @property
    def ratio(self) -> IntArray:
        """Refinement ratio of each level to the one below, shape (levels, 3); 1 for level 0."""
        size = self.domain_hi - self.domain_lo + 1
        return np.concatenate([np.ones((1, 3), dtype=np.int64), size[1:] // size[:-1]])


def parse_header(raw: bytes, name: str) -> PlotHeader:
    """Read `Header`.

    Parameters
    ----------
    raw : bytes
        The file's contents.
    name : str
        The file, for messages.

    Raises
    ------
    SnapshotError
        Malformed (file, line and what was expected), not 3-D, not Cartesian, nodal, or levels that
        don't refine each other by whole numbers.
    """
    lines = Lines(raw, name)
    title = lines.take("the kind of file, such as HyperCLaw-V1.1")
    if not TITLE.match(title):
        raise lines.wrong(title, "the kind of file, such as HyperCLaw-V1.1")
    count = lines.integer("the number of components", least=1)
    fields = tuple(lines.take(f"the name of component {i + 1} of {count}") for i in range(count))
    if len(set(fields)) < count:
        twice = next(field for field in fields if fields.count(field) > 1)
        raise SnapshotError(f'{name}: two components are called "{twice}"')
    dimension = lines.integer("the number of dimensions", least=1)
    if dimension != 3:
        raise SnapshotError(f"{name}: a plotfile of {dimension} dimensions; only 3 can be rendered")
    (time,) = lines.numbers(1, "the time")
    levels = lines.integer("the finest level") + 1
    low = np.array(lines.numbers(3, "the low corner of the domain"))
    high = np.array(lines.numbers(3, "the high corner of the domain"))
    lines.take("the refinement ratios")
    domain = _domains(lines, levels)
    lines.take("the step of each level")
    cell_sizes = [lines.numbers(3, f"the cell size of level {level}") for level in range(levels)]
    if lines.integer("the coordinate system (0 for Cartesian)") != 0:
        raise SnapshotError(
            f"{name}, line {lines.number}: coordinates are not Cartesian (0); they cannot be read"
        )
    lines.take("the width of the boundary data")
    grids, paths = zip(*(_level_summary(lines, level) for level in range(levels)), strict=True)
    header = PlotHeader(fields, time, low, high, domain[:, 0], domain[:, 1], grids, paths)
    _check_levels(header, np.array(cell_sizes), name)
    return header


def _domains(lines: Lines, levels: int) -> IntArray:
    wanted = f"the domains of {levels} levels, each as ((lo) (hi) (0,0,0))"
    line = lines.take(wanted)
    numbers = [[int(word) for word in match.groups()] for match in re.finditer(BOX, line)]
    if len(numbers) < levels:
        raise lines.wrong(line, wanted)
    boxes = np.array(numbers[:levels], dtype=np.int64).reshape(levels, 3, 3)
    if np.any(boxes[:, 2] != 0):
        raise SnapshotError(f"{lines.name}, line {lines.number}: the domain is not one of cells; nodal data")
    if np.any(boxes[:, 1] < boxes[:, 0]):
        raise lines.wrong(line, "domains whose high corner is not below the low one")
    if np.any(np.abs(boxes) > np.iinfo(np.int32).max):
        raise SnapshotError(f"{lines.name}, line {lines.number}: cells beyond 2^31 cannot be indexed")
    return boxes[:, :2]


def _level_summary(lines: Lines, level: int) -> tuple[int, str]:
    wanted = f'"{level} <boxes> <time>" for level {level}'
    line = lines.take(wanted)
    words = line.split()
    if len(words) < 2 or words[0] != str(level) or not words[1].isdigit() or int(words[1]) == 0:
        raise lines.wrong(line, wanted)
    lines.take(f"the step of level {level}")
    lines.block(3 * int(words[1]), f"box edges of level {level}")
    path = lines.take(f"the path of level {level}'s data")
    parts = path.split("/")
    if len(parts) < 2 or ".." in parts or path.startswith("/") or " " in path:
        raise lines.wrong(path, f"the path of level {level}'s data, such as Level_{level}/Cell")
    return int(words[1]), path


def _check_levels(header: PlotHeader, cell_sizes: FloatArray, name: str) -> None:
    size = header.domain_hi - header.domain_lo + 1
    for level in range(1, len(size)):
        ratio = size[level] // size[level - 1]
        fits = (ratio * size[level - 1] == size[level]) & (ratio >= 1)
        if not np.all(fits & (ratio * header.domain_lo[level - 1] == header.domain_lo[level])):
            raise SnapshotError(
                f"{name}: level {level}'s domain, cells {header.domain_lo[level].tolist()} to "
                f"{header.domain_hi[level].tolist()}, is no refinement by whole numbers of level "
                f"{level - 1}'s, cells {header.domain_lo[level - 1].tolist()} to "
                f"{header.domain_hi[level - 1].tolist()}"
            )
    expected = (header.high - header.low) / size
    # Header may be written with as few as six digits.
    if np.any(header.high <= header.low) or not np.allclose(cell_sizes, expected, rtol=1e-4, atol=0.0):
        raise SnapshotError(
            f"{name}: cell sizes {cell_sizes.tolist()} don't fit a domain from {header.low.tolist()} to "
            f"{header.high.tolist()}"
        )
