"""What the writer writes, the reader reads: versions, precisions, byte orders, ghosts, origins, files."""

import os
import pickle
import threading
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from cubeforge.errors import SnapshotError
from cubeforge.mesh.hierarchy import build_hierarchy
from cubeforge.snapshots import Snapshot, open_snapshot
from cubeforge.snapshots.amrex import AmrexSnapshot
from cubeforge.snapshots.amrex_write import write_amrex

FIELDS = ("density", "Temp", "x_velocity", "a name with spaces")


def mesh_of_three_levels():
    """Unequal cells, a non-cubic domain, a ratio per axis, several patches a level."""
    boxes = [
        ([(0, 0, 0), (12, 0, 0)], [(12, 6, 8), (8, 6, 8)]),
        ([(2, 4, 6), (6, 4, 6), (30, 0, 0)], [(4, 4, 2), (2, 4, 2), (10, 6, 8)]),
        ([(12, 8, 6)], [(8, 4, 2)]),
    ]
    return build_hierarchy((-1.0, 2.0, 0.3), (0.5, 0.25, 0.1), (20, 6, 8), [(2, 2, 2), (4, 2, 1)], boxes)


def arrays(mesh, seed=5):
    rng = np.random.default_rng(seed)
    return [{field: rng.normal(size=shape) for field in FIELDS} for shape in mesh.shape]


def write(path, **choices):
    mesh = mesh_of_three_levels()
    write_amrex(path, mesh, FIELDS, arrays(mesh), **choices)
    return AmrexSnapshot(path)


CHOICES = st.fixed_dictionaries(
    {
        "version": st.sampled_from([1, 2, 3, 4]),
        "real": st.sampled_from(["f4", "f8"]),
        "byteorder": st.sampled_from(["<", ">", "swapped"]),
        "ghost": st.integers(0, 3),
        "files": st.integers(1, 4),
        "index_origin": st.tuples(*[st.integers(-1000, 1000)] * 3),
    }
)


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(choices=CHOICES, data=st.data())
def test_round_trip(tmp_path_factory, choices, data):
    snapshot = write(tmp_path_factory.mktemp("out") / "plot", **choices, time=1.25)
    wanted_mesh = mesh_of_three_levels()
    mesh = snapshot.hierarchy
    for name in ("ratio", "domain", "level", "lo", "shape"):
        np.testing.assert_array_equal(getattr(mesh, name), getattr(wanted_mesh, name))
    np.testing.assert_array_equal(mesh.origin, wanted_mesh.origin)
    np.testing.assert_allclose(mesh.cell_size, wanted_mesh.cell_size, rtol=1e-14)
    assert (snapshot.fields, snapshot.time) == (FIELDS, 1.25)
    snapshot.check_files()
    assert len(snapshot.data_files) == sum(min(choices["files"], n) for n in (2, 3, 1))
    original = arrays(mesh)
    fields = data.draw(st.lists(st.sampled_from(FIELDS), unique=True, min_size=1))
    for patch in range(mesh.patches):
        lo = [data.draw(st.integers(0, int(n) - 1)) for n in mesh.shape[patch]]
        hi = [data.draw(st.integers(a + 1, int(n))) for a, n in zip(lo, mesh.shape[patch], strict=True)]
        part = tuple(slice(a, b) for a, b in zip(lo, hi, strict=True))
        whole, piece = snapshot.read(patch, fields), snapshot.read(patch, fields, (tuple(lo), tuple(hi)))
        assert list(whole) == list(piece) == fields
        for field in fields:
            stored = original[patch][field].astype(choices["real"])
            assert whole[field].dtype == stored.dtype
            assert whole[field].dtype.isnative
            np.testing.assert_array_equal(whole[field], stored)
            np.testing.assert_array_equal(piece[field], stored[part])


@pytest.mark.parametrize("version", [1, 2, 3, 4])
def test_bounds(tmp_path, version):
    snapshot = write(tmp_path / "plot", version=version, ghost=1)
    if version == 2:
        assert snapshot.bounds("Temp") is None
        return
    values = arrays(snapshot.hierarchy)
    for level, (first, last) in enumerate([(0, 2), (2, 5), (5, 6)]):
        found = [cells["Temp"] for cells in values[first:last]]
        wanted = [min(a.min() for a in found), max(a.max() for a in found)]
        assert snapshot.bounds("Temp")[level].tolist() == wanted


@pytest.mark.parametrize("version", [1, 4])
@pytest.mark.parametrize(
    ("shape", "parts"),
    [
        pytest.param((130, 3, 70), 3 * 2, id="pieces read by planes"),
        pytest.param((700, 3, 5), 11, id="pieces so far apart that they are read by rows"),
    ],
)
def test_long_boxes_are_cut(tmp_path, version, shape, parts):
    nx, ny, nz = shape
    boxes = [([(0, 0, 0), (nx, 0, 0)], [shape, (10, ny, nz)])]
    mesh = build_hierarchy((0, 0, 0), (1, 1, 1), (nx + 10, ny, nz), [], boxes)
    rng = np.random.default_rng(1)
    data = [{"density": rng.random(s), "Temp": rng.random(s)} for s in mesh.shape]
    write_amrex(tmp_path / "plot", mesh, ["density", "Temp"], data, ghost=2, version=version)
    snapshot = open_snapshot(tmp_path / "plot")
    cut = snapshot.hierarchy
    assert cut.patches == parts + (2 if nz > 64 else 1)
    assert cut.shape.max() <= 64
    for field in ("density", "Temp"):
        together = np.full((nx + 10, ny, nz), np.nan)
        for patch in range(cut.patches):
            part = tuple(slice(a, b) for a, b in zip(cut.lo[patch], cut.hi[patch], strict=True))
            together[part] = snapshot.read(patch, ["density", "Temp"])[field]
        np.testing.assert_array_equal(together[:nx], data[0][field])
        np.testing.assert_array_equal(together[nx:], data[1][field])


@pytest.fixture
def counted(monkeypatch):
    """Bytes asked of the disk, per call."""
    calls = []
    plain = os.pread

    def pread(descriptor, count, offset):
        calls.append(count)
        return plain(descriptor, count, offset)

    monkeypatch.setattr(os, "pread", pread)
    return calls


@pytest.mark.parametrize("version", [1, 3])
@pytest.mark.parametrize("ghost", [0, 2])
def test_read_takes_the_bytes_it_announces(tmp_path, counted, version, ghost):
    boxes = [([(0, 0, 0), (48, 0, 0)], [(48, 40, 40), (80, 40, 40)])]
    mesh = build_hierarchy((0, 0, 0), (1, 1, 1), (128, 40, 40), [], boxes)
    data = [{name: np.zeros(s) for name in "abcd"} for s in mesh.shape]
    write_amrex(tmp_path / "plot", mesh, "abcd", data, version=version, ghost=ghost)
    snapshot = open_snapshot(tmp_path / "plot")
    patches = np.arange(snapshot.hierarchy.patches)
    for fields in (["a"], ["a", "b"], ["d", "a"], ["a", "b", "c", "d"]):
        announced = snapshot.read_bytes(patches, fields)
        for patch in patches:
            counted.clear()
            cells = snapshot.read(patch, fields)
            assert sum(counted) == announced[patch]
            needed = sum(array.nbytes for array in cells.values())
            if ghost == 0 and patch == 0:
                assert announced[patch] == needed + (256 if version == 1 else 0)
                # Neighbouring fields come in one go.
                assert len(counted) == (version == 1) + (2 if fields == ["d", "a"] else 1)


def test_part_of_a_patch_is_not_read_whole(tmp_path, counted):
    mesh = build_hierarchy((0, 0, 0), (1, 1, 1), (64, 64, 64), [], [([(0, 0, 0)], [(64, 64, 64)])])
    write_amrex(tmp_path / "plot", mesh, ["density"], [{"density": np.zeros((64, 64, 64))}], version=3)
    snapshot = open_snapshot(tmp_path / "plot")
    for box, most in (
        (((0, 0, 63), (64, 64, 64)), 64 * 64 * 8),
        (((0, 63, 0), (64, 64, 64)), 64 * 64 * 8),
        # Across x every row holds one wanted cell in 512 bytes: the pages between are read along.
        (((63, 0, 0), (64, 64, 64)), 64**3 * 8),
    ):
        counted.clear()
        snapshot.read(0, ["density"], box)
        assert sum(counted) <= most


def test_callable_data_and_identity(tmp_path):
    mesh = mesh_of_three_levels()
    data = arrays(mesh)
    asked = []

    def make(patch):
        asked.append(patch)
        return data[patch]

    write_amrex(tmp_path / "one", mesh, FIELDS, make)
    assert asked == list(range(mesh.patches))
    write_amrex(tmp_path / "two", mesh, FIELDS, data)
    one, two = AmrexSnapshot(tmp_path / "one"), AmrexSnapshot(tmp_path / "two")
    assert one.identity == two.identity
    os.utime(tmp_path / "two" / "Header", (0, 0))
    assert AmrexSnapshot(tmp_path / "two").identity == one.identity
    with (tmp_path / "two" / "Level_1" / "Cell_D_00000").open("ab") as file:
        file.write(b"x")
    assert AmrexSnapshot(tmp_path / "two").identity != one.identity
    data[0]["Temp"] = data[0]["Temp"] * 2
    write_amrex(tmp_path / "three", mesh, FIELDS, data)
    assert AmrexSnapshot(tmp_path / "three").identity != one.identity


def test_pickle_and_protocol(tmp_path):
    snapshot = write(tmp_path / "plot")
    assert isinstance(snapshot, Snapshot)
    copy = pickle.loads(pickle.dumps(snapshot))
    assert len(pickle.dumps(snapshot)) < 500
    np.testing.assert_array_equal(copy.read(2, ["Temp"])["Temp"], snapshot.read(2, ["Temp"])["Temp"])


def test_many_threads_and_few_open_files(tmp_path, monkeypatch):
    monkeypatch.setattr("cubeforge.snapshots._files.OpenFiles.__init__.__defaults__", (1,))
    snapshot = write(tmp_path / "plot", files=3, real="f4", byteorder=">")
    original = arrays(snapshot.hierarchy)
    start = threading.Barrier(8)

    def work(seed):
        start.wait()
        for patch in np.random.default_rng(seed).integers(0, snapshot.hierarchy.patches, 100):
            for field, cells in snapshot.read(patch, FIELDS[:2]).items():
                np.testing.assert_array_equal(cells, original[patch][field].astype("f4"))

    before = len(os.listdir("/proc/self/fd"))
    with ThreadPoolExecutor(8) as pool:
        list(pool.map(work, range(8)))
    assert len(os.listdir("/proc/self/fd")) <= before + 1


def test_writer_refuses(tmp_path):
    mesh = mesh_of_three_levels()
    data = arrays(mesh)
    (tmp_path / "there").mkdir()
    with pytest.raises(SnapshotError, match="exists already"):
        write_amrex(tmp_path / "there", mesh, FIELDS, data)
    with pytest.raises(SnapshotError, match="no such folder"):
        write_amrex(tmp_path / "no" / "where", mesh, FIELDS, data)
    for choice, words in (
        ({"real": "f2"}, 'real is "f2"'),
        ({"byteorder": "="}, 'byteorder is "="'),
        ({"version": 5}, "version is 5"),
        ({"files": 0}, "cannot write 0 files"),
        ({"ghost": -1}, "-1 ghost layers"),
    ):
        with pytest.raises(SnapshotError, match=words):
            write_amrex(tmp_path / "plot", mesh, FIELDS, data, **choice)
    with pytest.raises(SnapshotError, match="different names"):
        write_amrex(tmp_path / "plot", mesh, ["Temp", "Temp"], data)
    with pytest.raises(SnapshotError, match='lack field "Tmp"'):
        write_amrex(tmp_path / "plot", mesh, ["Tmp"], data)
    data[3]["Temp"] = data[3]["Temp"] * 1e300
    with pytest.raises(SnapshotError, match=r'patch 3, field "Temp": .* does not fit into 32 bits'):
        write_amrex(tmp_path / "plot", mesh, FIELDS, data, real="f4")
    data[3]["Temp"] = data[3]["Temp"][1:]
    with pytest.raises(SnapshotError, match="wanted"):
        write_amrex(tmp_path / "plot", mesh, FIELDS, data)
    assert sorted(os.listdir(tmp_path)) == ["there"]


def test_half_written_plotfile_is_never_there(tmp_path):
    mesh = mesh_of_three_levels()
    data = arrays(mesh)

    def make(patch):
        assert not (tmp_path / "plot").exists()
        if patch == 4:
            raise KeyboardInterrupt
        return data[patch]

    with pytest.raises(KeyboardInterrupt):
        write_amrex(tmp_path / "plot", mesh, FIELDS, make)
    assert os.listdir(tmp_path) == []
