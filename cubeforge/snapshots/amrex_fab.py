"""How AMReX lays real numbers on disk, and the line of text before each version-1 record (a "FAB")."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError

_TRIPLE = r"\((-?\d+),(-?\d+),(-?\d+)\)"
BOX = rf"\({_TRIPLE} {_TRIPLE} {_TRIPLE}\)"
"""First cell, last cell (inclusive) and type of a box, nine groups."""
_REAL = re.compile(r"\(\((\d+), \(([\d ]+)\)\),\((\d+), \(([\d ]+)\)\)\)")
_FAB = re.compile(rf"FAB ({_REAL.pattern})({BOX}) (\d+)")

_IEEE = {4: (32, 8, 23, 0, 1, 9, 0, 127), 8: (64, 11, 52, 0, 1, 12, 0, 1023)}
"""Bytes -> the eight numbers that stand for the IEEE 754 format (bits, exponent, mantissa, ...)."""

FAB_LIMIT = 256
"""No line before a record is longer than this many bytes."""


def _byte_orders(size: int) -> dict[str, list[int]]:
    rank = list(range(1, size + 1))
    return {"<": rank[::-1], ">": rank, "swapped": [n for low in rank[::2] for n in (low + 1, low)]}


@dataclass(frozen=True)
class RealFormat:
    """How a real number lies on disk.

    Attributes
    ----------
    size : int
        Bytes, 4 or 8.
    order : str
        ``"<"``, ``">"``, or ``"swapped"`` (big-endian with the bytes of each pair exchanged).
    """

    size: int
    order: str

    def decode(self, raw: npt.NDArray[np.uint8]) -> npt.NDArray[np.floating]:
        """Turn bytes into numbers in the byte order of `order`; a view where the order allows."""
        if self.order == "swapped":
            pairs = np.ascontiguousarray(raw.reshape(-1, 2)[:, ::-1])
            return pairs.reshape(-1).view(f">f{self.size}")
        return raw.view(f"{self.order}f{self.size}")

    def encode(self, numbers: npt.NDArray[np.floating]) -> bytes:
        """Turn numbers into bytes, the inverse of `decode`."""
        order = ">" if self.order == "swapped" else self.order
        raw = numbers.astype(f"{order}f{self.size}").tobytes()
        if self.order == "swapped":
            return np.frombuffer(raw, dtype=np.uint8).reshape(-1, 2)[:, ::-1].tobytes()
        return raw

    @property
    def text(self) -> str:
        """The format as AMReX writes it."""
        numbers = " ".join(str(number) for number in _IEEE[self.size])
        order = " ".join(str(number) for number in _byte_orders(self.size)[self.order])
        return f"((8, ({numbers})),({self.size}, ({order})))"


@dataclass(frozen=True)
class FabLine:
    """The line of text before each record of a version-1 file; `lo` and `hi` include ghost cells."""

    real: RealFormat
    lo: tuple[int, ...]
    hi: tuple[int, ...]
    components: int
    length: int


def parse_real_format(text: str, where: str) -> RealFormat:
    """Read ``((8, (64 11 52 0 1 12 0 1023)),(8, (8 7 6 5 4 3 2 1)))``.

    Raises
    ------
    SnapshotError
        Not such a descriptor, or a format or byte order other than IEEE 754 in one of three orders.
    """
    match = _REAL.fullmatch(text.strip())
    if not match:
        raise SnapshotError(
            f'{where}: found "{text.strip()[:80]}", expected the description of a real number'
        )
    numbers = tuple(int(word) for word in match[2].split())
    order = [int(word) for word in match[4].split()]
    size = next((size for size, known in _IEEE.items() if known == numbers), None)
    if size is None or int(match[1]) != len(numbers) or int(match[3]) != len(order):
        raise SnapshotError(f"{where}: reals in the format {numbers}; only IEEE 32 and 64 bit can be read")
    for name, known_order in _byte_orders(size).items():
        if order == known_order:
            return RealFormat(size, name)
    raise SnapshotError(f"{where}: reals of {size} bytes in the order {order}, which is not known")


def parse_fab_line(raw: bytes, where: str) -> FabLine:
    """Read the line of text that `raw` begins with.

    Raises
    ------
    SnapshotError
        No such line.
    """
    end = raw.find(b"\n")
    text = raw[: end if end >= 0 else 80].decode("ascii", errors="replace")
    match = _FAB.fullmatch(text.rstrip()) if end >= 0 else None
    if not match:
        raise SnapshotError(f'{where}: found "{text[:60]}", expected a line that begins with "FAB (("')
    cells = tuple(int(number) for number in match.groups()[6:15])
    if any(cells[6:]):
        raise SnapshotError(f"{where}: box {match[6]} is not of cells; nodal data cannot be read")
    return FabLine(parse_real_format(match[1], where), cells[:3], cells[3:6], int(match[16]), end + 1)


def box_text(lo: Sequence[int], hi: Sequence[int]) -> str:
    """A box of cells as AMReX writes it, `hi` inclusive."""
    return f"(({lo[0]},{lo[1]},{lo[2]}) ({hi[0]},{hi[1]},{hi[2]}) (0,0,0))"


def fab_line_text(real: RealFormat, lo: Sequence[int], hi: Sequence[int], components: int) -> str:
    """The line before a version-1 record, newline included."""
    return f"FAB {real.text}{box_text(lo, hi)} {components}\n"
