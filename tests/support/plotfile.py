"""A naive reader of AMReX plotfiles that flattens them to the finest uniform grid, in float64.

Written from the framework's file layout alone; reads everything at once and trusts the file.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

_BOX = re.compile(r"\(\((-?\d+),(-?\d+),(-?\d+)\) \((-?\d+),(-?\d+),(-?\d+)\) \((\d),(\d),(\d)\)\)")


@dataclass
class FlatGrid:
    """Fields on the finest level's cells; `lo` and `cell` in the file's length unit, arrays x, y, z."""

    lo: np.ndarray
    cell: np.ndarray
    fields: dict[str, np.ndarray]
    level: np.ndarray
    """Level that each value comes from."""


def read_flat(path: Path | str) -> FlatGrid:
    """Paint every level's boxes over the coarser ones."""
    path = Path(path)
    rows = (path / "Header").read_text().split("\n")
    count = int(rows[1])
    names = [row.strip() for row in rows[2 : 2 + count]]
    rest = rows[2 + count :]
    finest = int(rest[2])
    lo, hi = (np.array(row.split(), dtype=float) for row in rest[3:5])
    domains = [np.array(box, dtype=int) for box in _BOX.findall(rest[6])]
    sizes = [box[3:6] - box[:3] + 1 for box in domains]
    fields = {name: np.full(tuple(sizes[finest]), np.nan) for name in names}
    source = np.full(tuple(sizes[finest]), -1)
    for level in range(finest + 1):
        ratio = sizes[finest] // sizes[level]
        for box, values in _boxes(path / f"Level_{level}", names):
            first = (box[:3] - domains[level][:3]) * ratio
            last = (box[3:6] + 1 - domains[level][:3]) * ratio
            where = tuple(slice(a, b) for a, b in zip(first, last, strict=True))
            source[where] = level
            for name, array in values.items():
                for axis in range(3):
                    array = array.repeat(ratio[axis], axis=axis)
                fields[name][where] = array
    return FlatGrid(lo, (hi - lo) / sizes[finest], fields, source)


def _boxes(folder: Path, names: list[str]):
    text = (folder / "Cell_H").read_text()
    boxes = [np.array(found, dtype=int) for found in _BOX.findall(text)]
    places = re.findall(r"FabOnDisk: (\S+) (\d+)", text)
    for box, (file, offset) in zip(boxes, places, strict=True):
        with (folder / file).open("rb") as data:
            data.seek(int(offset))
            header = data.readline().decode()
            bits = int(re.findall(r"\(\d+, \((\d+)", header)[0])
            order = re.findall(r"\(\d+, \(([\d ]+)\)\)", header)[-1].split()
            kind = np.dtype(f"{'>' if order[0] == '1' else '<'}f{bits // 8}")
            stored = np.array(_BOX.findall(header)[0], dtype=int)
            shape = stored[3:6] - stored[:3] + 1
            total = len(names) * int(shape.prod())
            numbers = np.frombuffer(data.read(total * kind.itemsize), dtype=kind).astype(np.float64)
        numbers = numbers.reshape(len(names), *shape[::-1]).transpose(0, 3, 2, 1)
        inner = tuple(slice(a - s, b - s + 1) for a, b, s in zip(box[:3], box[3:6], stored[:3], strict=True))
        yield box, {name: numbers[index][inner] for index, name in enumerate(names)}
