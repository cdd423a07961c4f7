"""What can go wrong, in words for the person at the keyboard.

A message says what is wrong, where, what was found and what would do. The command line prints it as one
line and exits with `exit_status`.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class CubeforgeError(Exception):
    """Root of every error that cubeforge raises on purpose."""

    exit_status = 2


class JobError(CubeforgeError):
    """The job file, or a value in it, cannot be used."""


class SnapshotError(CubeforgeError):
    """The snapshot on disk is incomplete, damaged or lacks what was asked for."""


class MoleculeError(CubeforgeError):
    """Molecular data are missing, malformed or don't reach where they are needed."""


class GasError(CubeforgeError):
    """Stored fields cannot be turned into a physical state of the gas."""


class PlanError(CubeforgeError):
    """The render, as planned, cannot work (memory, alignment, an empty view)."""


class CubeError(CubeforgeError):
    """The cube on disk is damaged, belongs to another plan, or is not finished."""


class EngineError(CubeforgeError):
    """The render stopped for a reason outside the job file (workers, disk); it can be resumed."""

    exit_status = 3


def nearest(found: str, known: Iterable[str]) -> str:
    """Phrase that helps after a misspelt name: the closest known one, or the whole list.

    >>> nearest("densty", ["density", "Temp"])
    'did you mean "density"?'
    """
    names = [str(name) for name in known]
    lowered = {name.lower(): name for name in names}
    close = difflib.get_close_matches(found.lower(), list(lowered), n=1, cutoff=0.6)
    if close:
        return f'did you mean "{lowered[close[0]]}"?'
    return "known: " + (", ".join(names) if names else "none")
