"""Three blobs: where they are seen, and at what velocity, derived by hand for each orientation.

Blobs at (pc), moving at (km/s):   A ( 3.5,  1.5, -2.5), ( 4,  1, -2)
                                   B (-1.5,  4.5,  0.5), (-3,  2,  5)
                                   C (-4.5, -2.5,  3.5), ( 0, -6,  3)

Common practice: north is up and east is left; position angles run from north through east; what recedes has a positive
velocity.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import SkyCoord
from astropy.io import fits
from astropy.wcs import WCS
from support.grids import grid_snapshot
from support.jobs import FLOW, make_job
from support.rendering import render_image

from cubeforge.cube.fits import export_fits
from cubeforge.cube.store import open_cube
from cubeforge.engine.render import render
from cubeforge.job import parse_job
from cubeforge.snapshots.amrex_write import write_amrex

SIDE = 12
PLACES = np.array([(3.5, 1.5, -2.5), (-1.5, 4.5, 0.5), (-4.5, -2.5, 3.5)])
MOTIONS = np.array([(4.0, 1.0, -2.0), (-3.0, 2.0, 5.0), (0.0, -6.0, 3.0)])
MASSES = (1.0, 2.0, 1.0)

HALF = math.sqrt(0.5)
VIEWS = {
    # From above, y up: x is to the right, which is west. Gas that sinks recedes.
    "-z": ({"toward": "-z"}, [(3.5, 1.5, 2.0), (-1.5, 4.5, -5.0), (-4.5, -2.5, -3.0)]),
    # From below, y up: x is to the left, which is east.
    "+z": ({"toward": "+z"}, [(-3.5, 1.5, -2.0), (1.5, 4.5, 5.0), (4.5, -2.5, 3.0)]),
    # Facing +x with z up: y is to the left.
    "+x": ({"toward": "+x"}, [(-1.5, -2.5, 4.0), (-4.5, 0.5, -3.0), (2.5, 3.5, 0.0)]),
    # Facing -y with z up: x is to the left.
    "-y": ({"toward": "-y"}, [(-3.5, -2.5, -1.0), (1.5, 0.5, -2.0), (4.5, 3.5, 6.0)]),
    # The first view with y at position angle 90 degrees: y points east (left), so x points north.
    "turned": (
        {"toward": "-z", "position_angle": "90 deg"},
        [(-1.5, 3.5, 2.0), (-4.5, -1.5, -5.0), (2.5, -4.5, -3.0)],
    ),
    # From above, -x up: the first view turned clockwise by a quarter, so y is to the right.
    "own north": (
        {"toward": "-z", "north": [-1, 0, 0]},
        [(1.5, -3.5, 2.0), (4.5, 1.5, -5.0), (-2.5, 4.5, -3.0)],
    ),
    # Facing (1, 1, 0) with z up: (1, -1, 0) is to the right. Offsets (x - y)/sqrt(2), velocities (vx + vy)/sqrt(2).
    "diagonal": (
        {"toward": [1, 1, 0]},
        [(2 * HALF, -2.5, 5 * HALF), (-6 * HALF, 0.5, -HALF), (-2 * HALF, 3.5, -6 * HALF)],
    ),
}
"""For each view: offsets to the west and north in pc and velocity in km/s, of A, B and C."""

WIDTH = 0.25


def blobs():
    shape = (SIDE, SIDE, SIDE)
    fields = {name: np.zeros(shape) for name in FLOW} | {"density": np.full(shape, 1e-32)}
    for place, motion, mass in zip(PLACES, MOTIONS, MASSES, strict=True):
        cell = tuple(np.floor(place + SIDE / 2).astype(int))
        fields["density"][cell] = mass * 1e-24
        for axis in range(3):
            fields[FLOW[axis]][cell] = motion[axis]
    return grid_snapshot(fields, (1.0, 1.0, 1.0), (-SIDE / 2,) * 3)


def blob_job(view: dict, **changes: dict) -> dict:
    return make_job(
        gas={"velocity": FLOW},
        view={"pixel": "1 pc", "size": [SIDE, SIDE], "distance": "1 kpc", **view},
        channels={
            "first": "-8 km/s",
            "last": "8 km/s",
            "width": f"{WIDTH} km/s",
            **changes.pop("channels", {}),
        },
        **changes,
    )


def peaks(image: np.ndarray, count: int = 3) -> list[tuple[int, int, int]]:
    """The brightest places (channel, y, x), each at least 2 km/s or 3 pixels from a brighter one."""
    left = np.array(image, dtype=float)
    found = []
    where = np.indices(left.shape)
    for _ in range(count):
        assert left.max() > 0.0, "fewer blobs are seen than there are"
        place = np.unravel_index(np.argmax(left), left.shape)
        far = [abs(where[axis] - place[axis]) for axis in range(3)]
        left[(far[0] < 2.0 / WIDTH) & (far[1] < 3) & (far[2] < 3)] = 0.0
        found.append(tuple(int(index) for index in place))
    return found


def voxels(seen) -> list[tuple[int, int, int]]:
    """The channel, row and column that hold given offsets and velocities."""
    return [
        (round((v + 8.0) / WIDTH), math.floor(north + SIDE / 2), math.floor(west + SIDE / 2))
        for west, north, v in seen
    ]


@pytest.mark.parametrize("name", VIEWS)
def test_blobs_in_the_array(name: str):
    view, seen = VIEWS[name]
    image, maps, _ = render_image(blob_job(view), blobs())
    assert sorted(peaks(image)) == sorted(voxels(seen))
    rows = sorted(np.argwhere(maps[0] > 0.6 * 1e-24 * 3e18).tolist())
    assert set(map(tuple, rows)) >= {(y, x) for _, y, x in voxels(seen)}


@pytest.mark.parametrize("name", VIEWS)
def test_blobs_through_the_fits_header(name: str, tmp_path: Path):
    view, seen = VIEWS[name]
    snapshot = blobs()
    path = tmp_path / "blobs"
    data = [snapshot.read(patch, snapshot.fields) for patch in range(snapshot.hierarchy.patches)]
    write_amrex(path, snapshot.hierarchy, snapshot.fields, data)
    job = blob_job(
        {**view, "sky": {"longitude": "80 deg", "latitude": "25 deg"}},
        output={"cube": str(tmp_path / "blobs.zarr"), "tile": 8},
    )
    job["snapshot"] = {**job["snapshot"], "path": str(path)}
    render(parse_job(job), workers=0)
    export_fits(open_cube(tmp_path / "blobs.zarr"), tmp_path / "blobs.fits")
    with fits.open(tmp_path / "blobs.fits") as file:
        image, wcs = file[0].data, WCS(file[0].header)
    assert [kind.split("-")[0] for kind in wcs.wcs.ctype] == ["RA", "DEC", "VRAD"]
    centre = SkyCoord(80.0 * u.deg, 25.0 * u.deg, frame="icrs")
    found = [wcs.wcs_pix2world([place[::-1]], 0)[0] for place in peaks(image)]
    for west, north, velocity in seen:
        # East of north: position angle atan2(east, north) from the centre, at the angle arctan(offset / distance).
        angle = math.atan2(-west, north) * u.rad
        target = centre.directional_offset_by(angle, math.atan(math.hypot(west, north) / 1000.0) * u.rad)
        ra, dec, speed = min(found, key=lambda world: abs(world[2] - 1000.0 * velocity))
        miss = SkyCoord(ra * u.deg, dec * u.deg).separation(target).to_value(u.rad) * 1000.0
        assert miss < (1e-3 if name != "diagonal" else 0.5)
        assert abs(speed - 1000.0 * velocity) <= 0.5 * 1000.0 * WIDTH
        # In words: a larger right ascension is further east, a larger declination further north.
        assert np.sign(ra - 80.0) == -np.sign(west)
        assert np.sign(dec - 25.0) == np.sign(north)


def test_systemic_velocity_as_a_number():
    _, seen = VIEWS["-z"]
    image, _, _ = render_image(blob_job({"toward": "-z"}, channels={"systemic": "1.5 km/s"}), blobs())
    assert sorted(peaks(image)) == sorted(voxels([(x, y, v + 1.5) for x, y, v in seen]))


def test_systemic_velocity_from_the_mass_weighted_mean():
    # Masses 1, 2, 1 recede at 2, -5, -3 km/s: (2 - 10 - 3) / 4 = -2.75 km/s is taken out.
    _, seen = VIEWS["-z"]
    image, _, _ = render_image(blob_job({"toward": "-z"}, channels={"systemic": "mean"}), blobs())
    assert sorted(peaks(image)) == sorted(voxels([(x, y, v + 2.75) for x, y, v in seen]))


def test_a_pixel_as_an_angle():
    # 1 pc at 1 kpc is one thousandth of a radian.
    _, seen = VIEWS["-z"]
    image, _, _ = render_image(blob_job({"toward": "-z", "pixel": "0.001 rad"}), blobs())
    assert sorted(peaks(image)) == sorted(voxels(seen))


def test_the_centre_of_the_image_can_be_elsewhere():
    # The middle of the image looks at (1, -2): everything is seen 1 pc further east and 2 pc further north.
    _, seen = VIEWS["-z"]
    view = {"toward": "-z", "centre": ["1 pc", "-2 pc", "7 pc"], "size": [SIDE, SIDE + 4]}
    image, _, _ = render_image(blob_job(view), blobs())
    moved = voxels([(x - 1.0, y + 2.0, v) for x, y, v in seen])
    assert sorted(peaks(image)) == sorted((channel, y + 2, x) for channel, y, x in moved)
