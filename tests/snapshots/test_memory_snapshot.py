"""Arrays in memory behind the snapshot protocol."""

import pickle

import numpy as np
import pytest

from cubeforge.errors import SnapshotError
from cubeforge.mesh.hierarchy import build_hierarchy
from cubeforge.snapshots.base import Snapshot
from cubeforge.snapshots.memory import MemorySnapshot


def two_levels():
    boxes = [([(0, 0, 0), (4, 0, 0)], [(4, 6, 8), (4, 6, 8)]), ([(2, 4, 6)], [(4, 4, 2)])]
    return build_hierarchy((0.0, 0.0, 0.0), (1.0, 1.0, 1.0), (8, 6, 8), [(2, 2, 2)], boxes)


def arrays(hierarchy, seed=3):
    rng = np.random.default_rng(seed)
    return [{"density": rng.random(s), "speed": rng.random(s, dtype=np.float32)} for s in hierarchy.shape]


@pytest.fixture
def snapshot():
    mesh = two_levels()
    return MemorySnapshot(mesh, arrays(mesh), units={"length": "pc"}, time=2.5)


def test_it_is_a_snapshot(snapshot):
    assert isinstance(snapshot, Snapshot)
    assert snapshot.fields == ("density", "speed")
    assert snapshot.units == {"length": "pc"}
    assert (snapshot.time, snapshot.path) == (2.5, "memory")
    snapshot.check_files()


def test_read_gives_fresh_arrays_of_the_stored_precision(snapshot):
    original = arrays(snapshot.hierarchy)
    cells = snapshot.read(1, ["speed", "density"])
    assert list(cells) == ["speed", "density"]
    assert cells["speed"].dtype == np.float32
    assert cells["density"].flags.f_contiguous
    np.testing.assert_array_equal(cells["density"], original[1]["density"])
    cells["density"][:] = 0
    np.testing.assert_array_equal(snapshot.read(1, ["density"])["density"], original[1]["density"])


def test_read_part_of_a_patch(snapshot):
    part = snapshot.read(0, ["density"], ((1, 0, 7), (3, 6, 8)))["density"]
    np.testing.assert_array_equal(part, arrays(snapshot.hierarchy)[0]["density"][1:3, :, 7:])


def test_bounds_and_bytes(snapshot):
    data = arrays(snapshot.hierarchy)
    low, high = snapshot.bounds("speed")[0]
    assert low == min(d["speed"].min() for d in data[:2])
    assert high == max(d["speed"].max() for d in data[:2])
    assert snapshot.read_bytes(np.array([0, 2]), ["density", "speed"]).tolist() == [192 * 12, 32 * 12]


def test_identity_follows_contents_only(snapshot):
    mesh = two_levels()
    data = arrays(mesh)
    fortran = [
        {k: np.asfortranarray(v).astype(v.dtype.newbyteorder(">")) for k, v in d.items()} for d in data
    ]
    same = MemorySnapshot(mesh, fortran, units={"length": "pc"}, time=2.5, name="another name")
    assert same.identity == snapshot.identity
    assert pickle.loads(pickle.dumps(snapshot)).identity == snapshot.identity
    data[2]["density"][0, 0, 0] = np.nextafter(data[2]["density"][0, 0, 0], 1)
    assert MemorySnapshot(mesh, data, units={"length": "pc"}, time=2.5).identity != snapshot.identity
    assert MemorySnapshot(mesh, arrays(mesh), time=2.5).identity != snapshot.identity


def test_integers_become_floats():
    mesh = build_hierarchy((0, 0, 0), (1, 1, 1), (2, 2, 2), [], [([(0, 0, 0)], [(2, 2, 2)])])
    cells = MemorySnapshot(mesh, [{"n": np.arange(8).reshape(2, 2, 2)}]).read(0, ["n"])
    assert cells["n"].dtype == np.float64
    assert cells["n"][1, 1, 1] == 7.0


def test_bad_data_is_refused():
    mesh = two_levels()
    with pytest.raises(SnapshotError, match="data of 2 patches for a hierarchy of 3"):
        MemorySnapshot(mesh, arrays(mesh)[:2])
    data = arrays(mesh)
    data[1]["density"] = data[1]["density"][:, :, 1:]
    with pytest.raises(SnapshotError, match=r'patch 1, field "density" has shape \(4, 6, 7\)'):
        MemorySnapshot(mesh, data)
    data = arrays(mesh)
    del data[2]["speed"]
    with pytest.raises(SnapshotError, match="patch 2 has the fields"):
        MemorySnapshot(mesh, data)
    with pytest.raises(SnapshotError, match="complex128"):
        MemorySnapshot(mesh, [{"density": d["density"] * 1j} for d in arrays(mesh)])


def test_bad_requests_are_refused(snapshot):
    with pytest.raises(SnapshotError, match='no field "densty"; did you mean "density"'):
        snapshot.read(0, ["densty"])
    with pytest.raises(SnapshotError, match="list of names"):
        snapshot.read(0, "density")
    with pytest.raises(SnapshotError, match="no patch 3: it has 3"):
        snapshot.read(3, ["density"])
    with pytest.raises(SnapshotError, match="no patch -1"):
        snapshot.read(-1, ["density"])
    for box in (((0, 0, 0), (0, 1, 1)), ((0, 0, 0), (5, 1, 1)), ((-1, 0, 0), (2, 2, 2))):
        with pytest.raises(SnapshotError, match="empty or outside the patch"):
            snapshot.read(0, ["density"], box)
