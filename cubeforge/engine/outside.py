"""How much of the line's emission the channels miss: kept with the cube, so that whoever takes it later is told."""

from __future__ import annotations

import json
from pathlib import Path

from cubeforge.cube.durable import Staging
from cubeforge.cube.ledger import read_ledger
from cubeforge.cube.store import Cube
from cubeforge.errors import CubeError

ALLOWED = "allowed.json"
"""File beside the ledger with what the job of the last run allows."""


def totals(cube: Cube) -> dict[str, float]:
    """Sums of the tile statistics that the ledger holds."""
    state = read_ledger(cube.ledger)
    return {name: float(state.records[name].sum()) for name in state.statistics}


def outside_share(sums: dict[str, float]) -> float:
    """Share of the thin emission outside the channels, from `totals`; 0 for a cube without that statistic."""
    return sums["emission_outside"] / sums["emission"] if sums.get("emission") else 0.0


def allow_outside(ledger: Path, run: str, share: float) -> None:
    """Record, durably, the share that the job allows, on behalf of the run that holds the lease.

    Raises
    ------
    EngineError
        The disk is full, or refuses.
    """
    text = json.dumps({"channels.outside": share})
    Staging(ledger, run, create=False).write(ledger / ALLOWED, text.encode())


def check_outside(cube: Cube) -> None:
    """Refuse a cube whose channels miss more of the line's emission than its job allows.

    Raises
    ------
    CubeError
        With the share, the limit and what would do.
    """
    try:
        allowed = float(json.loads((cube.ledger / ALLOWED).read_text())["channels.outside"])
    except FileNotFoundError:
        # Not written by a render: the tiles are the caller's own.
        return
    outside = outside_share(totals(cube))
    if outside > allowed:
        raise CubeError(
            f"{cube.path}: {100 * outside:.2g} % of the line's emission lies outside the channels, over the "
            f"{100 * allowed:g} % that the job allows; a wider range from channels.first to channels.last, or another "
            "channels.systemic, makes a cube that holds it; a higher channels.outside accepts this one as it is"
        )
