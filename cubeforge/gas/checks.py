"""Bad values among leaf cells: found, named, and either refused or mended and counted."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cubeforge.errors import GasError

BoolArray = npt.NDArray[np.bool_]
FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class BadCells:
    """Leaf cells with one kind of bad value.

    Attributes
    ----------
    field : stored field, or fields, the value comes from.
    reason : "not finite", "negative" or "not positive".
    count : leaf cells.
    first : index of the first of them, from the patch's own corner.
    value : what was found there, in cgs.
    """

    field: str
    reason: str
    count: int
    first: tuple[int, ...]
    value: float

    def __str__(self) -> str:
        cells = "leaf cell" if self.count == 1 else "leaf cells"
        return (
            f"{self.field} is {self.reason} in {self.count} {cells}, first at {self.first} ({self.value:g})"
        )


def find_bad(
    quantities: list[tuple[str, FloatArray, str]], leaf: BoolArray | None
) -> tuple[tuple[BadCells, ...], BoolArray]:
    """List what is wrong with each quantity, and where anything is.

    Parameters
    ----------
    quantities : list of (name, values, limit)
        What is bad besides values that are not finite: "negative" ones, those "not positive", or "" for none.
    leaf : ndarray of bool, optional
        Cells that count; by default all.

    Returns
    -------
    findings : tuple of BadCells
    bad : ndarray of bool
        Cells in which something is bad, covered cells included.
    """
    findings = []
    bad = np.zeros(quantities[0][1].shape, dtype=bool)
    for name, values, limit in quantities:
        strange = ~np.isfinite(values)
        wrong = [("not finite", strange)]
        if limit:
            low = values < 0.0 if limit == "negative" else values <= 0.0
            wrong.append((limit, ~strange & low))
        for reason, where in wrong:
            bad |= where
            counted = where if leaf is None else where & leaf
            count = int(np.count_nonzero(counted))
            if count:
                first = np.unravel_index(int(np.argmax(counted)), counted.shape)
                at = tuple(int(i) for i in first)
                findings.append(BadCells(name, reason, count, at, float(values[at])))
    return tuple(findings), bad


def refuse(findings: tuple[BadCells, ...], where: str) -> None:
    """Raise GasError that lists the findings."""
    place = f"{where}: " if where else ""
    raise GasError(
        place
        + "; ".join(str(finding) for finding in findings)
        + ". Wanted finite values, a density of 0 or more and a temperature above 0 in every leaf cell; "
        'bad_cells = "clear" makes such cells transparent and counts them'
    )
