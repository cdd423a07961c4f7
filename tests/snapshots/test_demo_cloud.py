"""The demonstration cloud: physical values, nesting, consistent levels, the same for the same seed."""

from itertools import pairwise

import numpy as np
import pytest
from astropy import units as u

from cubeforge.errors import SnapshotError
from cubeforge.mesh.leaves import leaf_mask
from cubeforge.snapshots import open_snapshot
from cubeforge.snapshots.demo import FIELDS, demo_snapshot, write_demo_snapshot
from cubeforge.snapshots.demo_cloud import GRID, make_cloud

H2_MASS = 2.8 * 1.6735e-24
"""Gas mass per H2 in g (Kauffmann et al. 2008, appendix A; hydrogen atom 1.6735e-24 g)."""


@pytest.fixture(scope="module")
def cloud():
    return demo_snapshot()


def weights_and(snapshot, fields):
    mesh = snapshot.hierarchy
    out = {field: [] for field in fields}
    volume = []
    for patch in range(mesh.patches):
        mask = leaf_mask(mesh, patch)
        for field, cells in snapshot.read(patch, fields).items():
            out[field].append(cells[mask])
        volume.append(np.full(mask.sum(), mesh.cell_size[mesh.level[patch]].prod()))
    return np.concatenate(volume), {field: np.concatenate(parts) for field, parts in out.items()}


def test_physical_values(cloud):
    mesh = cloud.hierarchy
    np.testing.assert_allclose(mesh.extent, (2 * u.pc).to_value(u.cm), rtol=1e-12)
    volume, gas = weights_and(cloud, FIELDS)
    number = gas["density"] / H2_MASS
    mean = np.average(number, weights=volume)
    assert 1e2 < mean < 1e3
    assert 5e5 < number.max() < 2e6
    assert gas["temperature"].min() >= 10.0
    assert gas["temperature"].max() <= 40.0
    # Colder where denser.
    assert np.all(np.diff(gas["temperature"][np.argsort(number)]) <= 1e-9 * 40)
    square = sum(gas[f"{axis}_velocity"] ** 2 for axis in "xyz")
    assert np.sqrt(np.average(square, weights=volume)) == pytest.approx(1e5, rel=0.2)


def test_core_collapses_and_rotates(cloud):
    mesh = cloud.hierarchy
    pc = (1 * u.pc).to_value(u.cm)
    mass = flux = spin = 0.0
    centre = (np.array([0.62, 0.43, 0.55]) - 0.5) * 2 * pc
    for patch in range(*mesh.first[-2:]):
        index = [mesh.lo[patch, a] + np.arange(mesh.shape[patch, a]) + 0.5 for a in range(3)]
        place = [mesh.origin[a] + index[a] * mesh.cell_size[-1, a] - centre[a] for a in range(3)]
        x = np.stack(np.meshgrid(*place, indexing="ij"))
        radius = np.sqrt((x**2).sum(axis=0))
        cells = cloud.read(patch, FIELDS)
        v = np.stack([cells[f"{axis}_velocity"] for axis in "xyz"])
        weight = cells["density"] * (radius < 0.1 * pc)
        mass += weight.sum()
        flux += (weight * (x * v).sum(axis=0) / radius).sum()
        spin += (weight * np.cross(x, v, axis=0) / radius).sum(axis=(1, 2, 3))
    assert -0.8e5 < flux / mass < -0.2e5
    turn = spin / mass
    assert 0.3e5 < np.linalg.norm(turn) < 1e5
    assert np.dot(turn, [0.45, -0.30, 0.841]) / np.linalg.norm(turn) > 0.9


def test_turbulence_is_free_of_divergence():
    velocity = make_cloud(7).velocity
    k = np.fft.fftfreq(GRID, 1 / GRID)
    modes = np.fft.fftn(velocity, axes=(1, 2, 3))
    along = k[:, None, None] * modes[0] + k[:, None] * modes[1] + k * modes[2]
    total = np.sqrt((k[:, None, None] ** 2 + k[:, None] ** 2 + k**2) * (np.abs(modes) ** 2).sum(axis=0))
    assert np.sqrt((np.abs(along) ** 2).sum()) < 1e-9 * np.sqrt((total**2).sum())


def test_levels_nest_and_do_not_overlap(cloud):
    mesh = cloud.hierarchy
    assert mesh.levels == 4
    assert mesh.shape.max() <= 16
    there = []
    for level in range(mesh.levels):
        count = np.zeros(tuple(mesh.domain[level]), dtype=np.int8)
        for patch in range(mesh.first[level], mesh.first[level + 1]):
            count[tuple(slice(a, b) for a, b in zip(mesh.lo[patch], mesh.hi[patch], strict=True))] += 1
        assert count.max() == 1
        there.append(count > 0)
    assert there[0].all()
    for coarse, fine in pairwise(there):
        covered = np.argwhere(fine.reshape(*(n for m in coarse.shape for n in (m, 2))).any(axis=(1, 3, 5)))
        # Every neighbour of a covered cell, diagonals too, exists on the coarse level.
        padded = np.pad(coarse, 1, constant_values=True)
        for shift in np.ndindex(3, 3, 3):
            assert padded[tuple((covered + shift).T)].all()


def test_covered_cells_hold_the_mean_by_mass(cloud):
    mesh = cloud.hierarchy
    checked = 0
    for level in range(mesh.levels - 1):
        fine = np.full((len(FIELDS), *mesh.domain[level + 1]), np.nan)
        for patch in range(mesh.first[level + 1], mesh.first[level + 2]):
            part = tuple(slice(a, b) for a, b in zip(mesh.lo[patch], mesh.hi[patch], strict=True))
            cells = cloud.read(patch, FIELDS)
            density = cells["density"]
            fine[(slice(None), *part)] = [density, *(cells[f] * density for f in FIELDS[1:])]
        nx, ny, nz = mesh.domain[level]
        mean = fine.reshape(-1, nx, 2, ny, 2, nz, 2).mean(axis=(2, 4, 6))
        for patch in range(mesh.first[level], mesh.first[level + 1]):
            part = tuple(slice(a, b) for a, b in zip(mesh.lo[patch], mesh.hi[patch], strict=True))
            wanted = mean[(slice(None), *part)]
            covered = np.isfinite(wanted[0])
            checked += covered.sum()
            cells = cloud.read(patch, FIELDS)
            np.testing.assert_allclose(cells["density"][covered], wanted[0][covered], rtol=1e-12)
            for field, product in zip(FIELDS[1:], wanted[1:], strict=True):
                momentum = (cells[field] * cells["density"])[covered]
                scale = np.abs(momentum).max(initial=0.0)
                np.testing.assert_allclose(momentum, product[covered], rtol=1e-9, atol=1e-12 * scale)
    assert checked > 10_000


def test_written_and_repeated(tmp_path):
    place = write_demo_snapshot(tmp_path / "cloud", base=16, levels=2, seed=3)
    snapshot = open_snapshot(place)
    snapshot.check_files()
    again = demo_snapshot(base=16, levels=2, seed=3)
    assert again.identity == demo_snapshot(base=16, levels=2, seed=3).identity
    assert again.identity != demo_snapshot(base=16, levels=2, seed=4).identity
    assert snapshot.hierarchy.patches == again.hierarchy.patches
    for field in FIELDS:
        np.testing.assert_array_equal(
            snapshot.read(3, [field])[field], again.read(3, [field])[field].astype(np.float32)
        )


def test_default_size(cloud):
    # Single precision, five fields: what the default plotfile takes.
    assert cloud.hierarchy.cells().sum() * 4 * len(FIELDS) < 60e6


@pytest.mark.parametrize("choice", [{"base": 24}, {"base": 8}, {"levels": 0}])
def test_refuses(choice):
    with pytest.raises(SnapshotError, match="a demo of base"):
        demo_snapshot(**choice)
