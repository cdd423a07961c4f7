"""What tiles count about velocity slopes, against sums by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest
from support.grids import grid_snapshot
from support.jobs import make_job
from support.physics import CO, KM_S, PARSEC
from support.sweeps import excess, opacity_of

from cubeforge.engine.setup import build_setup
from cubeforge.engine.worker import TILE_STATISTICS, TileWorker
from cubeforge.job import parse_job

KELVIN = 15.0
WIDTH = float(CO.width(KELVIN, 0.3 * KM_S)) / KM_S
"""km/s."""
WEIGHTS = 1e-22 * 2.0 ** np.arange(8)
"""Densities such that a sum tells which cells are in it."""


def statistics(job: dict, snapshot) -> dict[str, float]:
    """Over all tiles."""
    setup = build_setup(parse_job(job), snapshot)
    worker = TileWorker(setup)
    total = sum(np.array(worker.render(tile).statistics) for tile in range(worker.plan.tiles))
    return dict(zip(TILE_STATISTICS, total.tolist(), strict=True))


def cells_in(share: float) -> list[int]:
    """Cells of `WEIGHTS` whose part of the whole is `share`."""
    number = share * (2**8 - 1)
    assert number == pytest.approx(round(number), abs=1e-3)
    return [cell for cell in range(8) if round(number) >> cell & 1]


def row_job(co_file: str, **march) -> dict:
    return make_job(
        gas={"velocity": ["speed", "0 km/s", "0 km/s"]},
        line={"molecule": co_file},
        view={"toward": "+x", "size": [1, 1]},
        channels={"first": "-14 km/s", "last": "14 km/s"},
        march={"reconstruction": "linear", **march},
    )


def row(speed):
    """Eight cells along x."""
    fields = {"density": WEIGHTS[:, None, None], "speed": np.asarray(speed, dtype=float)[:, None, None]}
    return grid_snapshot(fields, (1.0, 1.0, 1.0))


LIMITED = [
    # An even slope is limited nowhere but at the domain's edges, where the step outwards is 0.
    ("monotonised central", [0, 1, 2, 3, 4, 5, 6, 7], [0, 7]),
    # Flat cells beside a jump; the two beside it have steps of 0 and 1.
    ("monotonised central", [0, 0, 0, 0, 1, 1, 1, 1], [3, 4]),
    # Steps of 1 and 2: the mean, 1.5, is below twice the smaller. Of 1 and 4: 2.5 is not.
    ("monotonised central", [0, 0, 1, 3, 5, 6, 10, 10], [1, 5, 6]),
    ("minmod", [0, 0, 1, 3, 5, 6, 10, 10], [1, 2, 4, 5, 6]),
    # At the tip of a sawtooth of even steps the mean step is 0, as the slope is; of steps 2 and -1 it is not.
    ("monotonised central", [0, 0, 1, 2, 1, 0, 0, 0], [1, 5]),
    ("monotonised central", [0, 0, 2, 4, 3, 2, 2, 2], [1, 3, 5]),
]


@pytest.mark.parametrize(("limiter", "speed", "limited"), LIMITED)
def test_emission_of_limited_cells(co_file: str, limiter: str, speed, limited: list[int]):
    found = statistics(row_job(co_file, limiter=limiter), row(speed))
    assert cells_in(found["cell_emission_limited"] / found["cell_emission"]) == limited
    # Volume, times opacity (1/s) times the brightness of opaque gas.
    emitted = float(opacity_of(WEIGHTS.sum(), KELVIN)) / PARSEC * excess(KELVIN)
    assert found["cell_emission"] == pytest.approx(emitted, rel=1e-6)


def test_nothing_is_limited_without_slopes(co_file: str):
    found = statistics(row_job(co_file, reconstruction="constant"), row([0, 0, 1, 3, 5, 6, 10, 10]))
    assert found["cell_emission"] > 0.0
    assert found["cell_emission_limited"] == 0.0
    assert found["emission_steep"] == 0.0


@pytest.mark.parametrize("slant", [0.0, 0.75])
def test_emission_of_steep_crossings(co_file: str, slant: float):
    # Steps, in line widths, from cell to cell; a cell's change is the mean of two or twice the smaller.
    steps = np.array([0.0, 0.8, 1.0, 1.3, 2.2, 0.4, 0.2, 0.0])
    speed = np.cumsum(steps) * WIDTH
    # By hand:       edge  .8&1. 1&1.3 1.3&2.2 2.2&.4 .4&.2 .2&0 edge (cell i has steps i and i + 1)
    change = np.array([0.0, 0.9, 1.15, 1.75, 0.8, 0.3, 0.0, 0.0])
    # A ray at an angle to x sees v_x less cos, changing over the whole cell it crosses from face to face along x.
    job = row_job(co_file)
    cosine = 1.0 / math.hypot(1.0, slant)
    job["view"].update(toward=[1.0, slant, 0.0], pixel="0.01 pc")
    # Cells wide enough along y for no face there to cut a crossing.
    fields = {"density": WEIGHTS[:, None, None], "speed": speed[:, None, None]}
    found = statistics(job, grid_snapshot(fields, (1.0, 100.0, 1.0)))
    steep = np.flatnonzero(change * cosine > 1.0).tolist()
    assert cells_in(found["emission_steep"] / found["emission"]) == steep
    # Emission is summed over rays (one), in kelvins times channels of 0.1 km/s.
    wanted = float(opacity_of(WEIGHTS.sum(), KELVIN)) / cosine * excess(KELVIN) / (0.1 * KM_S)
    assert found["emission"] == pytest.approx(wanted, rel=1e-5)
