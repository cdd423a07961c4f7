"""The text file `Cell_H` of one level of an AMReX plotfile: from bytes to a frozen dataclass. Opens no file.

Blocks of one line a box are checked and converted in bulk, since there may be millions of boxes.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError
from cubeforge.snapshots._lines import Lines
from cubeforge.snapshots.amrex_fab import RealFormat, parse_real_format

FloatArray = npt.NDArray[np.float64]

# Possessive (++, *+): nothing to go back to, so a match over a million lines keeps no state.
_CELL = rb"\(-?\d++,-?\d++,-?\d++\)"
_BOX_LINE = re.compile(rb"\(%s %s %s\) *+\n" % (_CELL, _CELL, _CELL))
_PLACE_LINE = re.compile(rb"FabOnDisk: \S++ \d++ *+\n")
_ROWS = 20_000
"""Rows of minima taken at a time, which bounds the memory for their words."""
_TO_SPACES = bytes.maketrans(b"(),\n", b"    ")


@dataclass(frozen=True)
class LevelHeader:
    """What one `Cell_H` says.

    Attributes
    ----------
    version : int
        1 to 4.
    components : int
        Fields stored.
    ghost : tuple of 3 ints
        Layers of ghost cells around each box, per axis.
    lo, hi : ndarray, shape (n, 3), int32
        First and last (inclusive) valid cell of each box.
    files : tuple of str
        Data files, in order of first use.
    file : ndarray, shape (n,), int32
        Index into `files` for each box.
    offset : ndarray, shape (n,), int64
        First byte of each box's record in its file.
    real : RealFormat or None
        None for version 1, where each record says it itself.
    """

    version: int
    components: int
    ghost: tuple[int, int, int]
    lo: npt.NDArray[np.int32]
    hi: npt.NDArray[np.int32]
    files: tuple[str, ...]
    file: npt.NDArray[np.int32]
    offset: npt.NDArray[np.int64]
    real: RealFormat | None


def parse_level(raw: bytes, name: str) -> LevelHeader:
    """Read `Cell_H`, all but the minima and maxima.

    Parameters
    ----------
    raw : bytes
        The file's contents.
    name : str
        The file, for messages.

    Raises
    ------
    SnapshotError
        Malformed (file, line and what was expected), an unknown version, nodal data, or data that the
        file says were not saved.
    """
    return _parse_level(Lines(raw, name), raw)


def parse_bounds(raw: bytes, name: str, component: int) -> tuple[float, float] | None:
    """Minimum and maximum of one component over all boxes in `Cell_H`; None where not stored (version 2).

    Raises
    ------
    SnapshotError
        As `parse_level`, or malformed minima or maxima.
    """
    lines = Lines(raw, name)
    part = _parse_level(lines, raw)
    if part.version == 2:
        return None
    low = _extremes(lines, part, component, "minima")
    high = _extremes(lines, part, component, "maxima")
    return float(np.min(low)), float(np.max(high))


def _parse_level(lines: Lines, raw: bytes) -> LevelHeader:
    version = lines.integer("the version of the layout", least=1)
    if version > 4:
        raise SnapshotError(f"{lines.name}: version {version} of the layout; 1 to 4 can be read")
    lines.integer("how the files were written (0 or 1)")
    components = lines.integer("the number of components", least=1)
    ghost = _ghost(lines)
    lo, hi = _boxes(lines)
    files, file, offset = _places(lines, len(lo))
    real = _real_format(raw, lines.name) if version > 1 else None
    return LevelHeader(version, components, ghost, lo, hi, files, file, offset, real)


def _ghost(lines: Lines) -> tuple[int, int, int]:
    wanted = "the width of the ghost layers, such as 0 or (1,1,1)"
    line = lines.take(wanted)
    if re.fullmatch(r"\d+", line):
        return (int(line),) * 3
    match = re.fullmatch(r"\((\d+),(\d+),(\d+)\)", line)
    if not match:
        raise lines.wrong(line, wanted)
    return int(match[1]), int(match[2]), int(match[3])


def _boxes(lines: Lines) -> tuple[npt.NDArray[np.int32], npt.NDArray[np.int32]]:
    line = lines.take('"(<boxes> 0"')
    match = re.fullmatch(r"\((\d+) \d+", line)
    if not match or int(match[1]) == 0:
        raise lines.wrong(line, '"(<boxes> 0" with at least one box')
    first = lines.number + 1
    count = int(match[1])
    block = lines.block(count, "boxes")
    _check_block(block, _BOX_LINE, lines, first, "a box, such as ((0,0,0) (15,15,15) (0,0,0))")
    numbers = np.fromstring(block.translate(_TO_SPACES), dtype=np.int64, sep=" ").reshape(count, 3, 3)
    if np.any(np.abs(numbers) > np.iinfo(np.int32).max):
        raise SnapshotError(f"{lines.name}: cells beyond 2^31 cannot be indexed")
    nodal = np.any(numbers[:, 2] != 0, axis=1)
    if nodal.any():
        line_number = first + int(np.argmax(nodal))
        raise SnapshotError(
            f"{lines.name}, line {line_number}: a box of nodes or faces, not of cells; cannot be read"
        )
    empty = np.any(numbers[:, 1] < numbers[:, 0], axis=1)
    if empty.any():
        raise SnapshotError(
            f"{lines.name}, line {first + int(np.argmax(empty))}: a box that ends before it begins"
        )
    end = lines.take('")"')
    if end != ")":
        raise lines.wrong(end, f'")" after {count} boxes')
    return numbers[:, 0].astype(np.int32), numbers[:, 1].astype(np.int32)


def _places(lines: Lines, boxes: int) -> tuple[tuple[str, ...], npt.NDArray[np.int32], npt.NDArray[np.int64]]:
    wanted = f"the number of boxes once more, {boxes}"
    line = lines.take(wanted)
    if line != str(boxes):
        raise lines.wrong(line, wanted)
    first = lines.number + 1
    block = lines.block(boxes, "FabOnDisk")
    if b"Not Saved" in block:
        raise SnapshotError(
            f"{lines.name}: its data were not saved (FabOnDisk: Not Saved); only headers are there"
        )
    _check_block(block, _PLACE_LINE, lines, first, '"FabOnDisk: <file> <byte offset>"')
    words = block.split()
    index: dict[bytes, int] = {}
    file = [index.setdefault(word, len(index)) for word in words[1::3]]
    files = tuple(word.decode() for word in index)
    outside = [name for name in files if "/" in name]
    if outside:
        raise SnapshotError(f"{lines.name}: the data file {outside[0]} lies outside the level's folder")
    offset = np.array([int(word) for word in words[2::3]], dtype=np.int64)
    return files, np.array(file, dtype=np.int32), offset


def _check_block(block: bytes, pattern: re.Pattern[bytes], lines: Lines, first: int, wanted: str) -> None:
    if re.fullmatch(rb"(?:%s)*+" % pattern.pattern, block):
        return
    for number, line in enumerate(block.splitlines(keepends=True)):
        if not pattern.fullmatch(line):
            raise lines.wrong(line.decode("utf-8", errors="replace").strip(), wanted, first + number)


def _extremes(lines: Lines, part: LevelHeader, component: int, what: str) -> FloatArray:
    lines.skip_blank()
    rows = 1 if part.version == 4 else len(part.lo)
    if part.version != 4:
        wanted = f'"{rows},{part.components}" before the {what}'
        line = lines.take(wanted)
        if line.rstrip(",") != f"{rows},{part.components}":
            raise lines.wrong(line, wanted)
    row = re.compile(rb"(?:[^,\s]++,){%d} *+\n" % part.components)
    wanted = f"{part.components} {what}, each with a comma after it"
    values = np.empty(rows)
    for begin in range(0, rows, _ROWS):
        first = lines.number + 1
        block = lines.block(min(_ROWS, rows - begin), what)
        _check_block(block, row, lines, first, wanted)
        words = block.translate(None, b" \n").split(b",")[component : -1 : part.components]
        for number, word in enumerate(words):
            try:
                values[begin + number] = float(word)
            except ValueError:
                raise lines.wrong(word.decode(errors="replace"), "a number", first + number) from None
    return values


def _real_format(raw: bytes, name: str) -> RealFormat:
    last = raw.rstrip().rsplit(b"\n", 1)[-1].decode("utf-8", errors="replace")
    return parse_real_format(last, f"{name}, last line")
