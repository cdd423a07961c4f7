"""Plotfiles that are damaged, foreign or incomplete: each must be refused, saying where and why."""

import re
import shutil

import numpy as np
import pytest

from cubeforge.errors import SnapshotError
from cubeforge.mesh.hierarchy import build_hierarchy
from cubeforge.snapshots.amrex import AmrexSnapshot
from cubeforge.snapshots.amrex_write import write_amrex


def make(path, version=1):
    boxes = [([(0, 0, 0), (4, 0, 0)], [(4, 4, 4), (4, 4, 4)]), ([(2, 2, 2)], [(4, 4, 4)])]
    mesh = build_hierarchy((0, 0, 0), (0.5, 0.5, 0.5), (8, 4, 4), [(2, 2, 2)], boxes)
    data = [{"density": np.full(s, 1.5), "Temp": np.full(s, 10.0)} for s in mesh.shape]
    write_amrex(path, mesh, ["density", "Temp"], data, version=version)


@pytest.fixture
def plot(tmp_path):
    make(tmp_path / "plot")
    return tmp_path / "plot"


def change(path, old, new, count=1):
    raw = path.read_bytes()
    assert old in raw
    path.write_bytes(raw.replace(old, new, count))


def refuse(plot, *words):
    with pytest.raises(SnapshotError) as caught:
        AmrexSnapshot(plot)
    for word in words:
        assert word in str(caught.value)


HEADER = [
    (b"HyperCLaw-V1.1", b"something else", "Header, line 1: found", "kind of file"),
    (b"\n2\ndensity", b"\ntwo\ndensity", "line 2", "the number of components"),
    (b"\n2\ndensity", b"\n0\ndensity", "line 2", "the number of components"),
    (b"\nTemp\n", b"\ndensity\n", 'two components are called "density"'),
    (b"Temp\n3\n", b"Temp\n2\n", "2 dimensions; only 3"),
    (b"Temp\n3\n", b"Temp\n3D\n", "line 5", "number of dimensions"),
    (b"\n0.0\n1\n", b"\nnan\n1\n", "line 6", "the time"),
    (b"\n0.0 0.0 0.0\n", b"\n0.0 0.0\n", "line 8", "low corner"),
    (b"((0,0,0) (15,7,7) (0,0,0))", b"", "line 11", "domains of 2 levels"),
    (b"((0,0,0) (15,7,7) (0,0,0))", b"((0,0,0) (15,7,7) (1,1,1))", "nodal"),
    (b"((0,0,0) (15,7,7) (0,0,0))", b"((0,0,0) (14,7,7) (0,0,0))", "level 1's domain", "whole numbers"),
    (b"((0,0,0) (15,7,7) (0,0,0))", b"((1,0,0) (16,7,7) (0,0,0))", "level 1's domain", "whole numbers"),
    (b"((0,0,0) (15,7,7) (0,0,0))", b"((0,0,0) (3000000000,7,7) (0,0,0))", "beyond 2^31"),
    (b"\n0.5 0.5 0.5\n", b"\n0.6 0.5 0.5\n", "cell sizes", "don't fit"),
    (b"\n0.25 0.25 0.25\n0\n0", b"\n0.25 0.25 0.25\n1\n0", "not Cartesian"),
    (b"\n0 2 0.0\n", b"\n0 two 0.0\n", '"0 <boxes> <time>"'),
    (b"Level_1/Cell\n", b"", "ends after line 30, where the path of level 1's data was expected"),
    (b"Level_1/Cell\n", b"../Cell\n", "the path of level 1's data"),
]


@pytest.mark.parametrize(("old", "new", "words"), [(o, n, w) for o, n, *w in HEADER])
def test_header(plot, old, new, words):
    change(plot / "Header", old, new)
    refuse(plot, str(plot / "Header"), *words)


def test_header_cut_short_anywhere(plot):
    raw = (plot / "Header").read_bytes()
    for keep in range(len(raw) - len("Level_1/Cell\n")):
        (plot / "Header").write_bytes(raw[:keep])
        refuse(plot, "Header")


CELL_H = [
    (b"1\n1\n2\n0\n(2", b"5\n1\n2\n0\n(2", "version 5"),
    (b"1\n1\n2\n0\n(2", b"1\n1\n3\n0\n(2", "3 components where Header names 2"),
    (b"1\n1\n2\n0\n(2", b"1\n1\n2\n(1,1)\n(2", "line 4", "ghost layers"),
    (b"((4,0,0) (7,3,3) (0,0,0))", b"((4,0,0) (7,3) (0,0,0))", "line 7", "a box, such as"),
    (b"((4,0,0) (7,3,3) (0,0,0))", b"((4,0,0) (7,3,3) (1,1,1))", "line 7", "nodes or faces"),
    (b"((4,0,0) (7,3,3) (0,0,0))", b"((4,0,0) (3,3,3) (0,0,0))", "line 7", "ends before it begins"),
    (b"((4,0,0) (7,3,3) (0,0,0))", b"((4,0,0) (9999999999,3,3) (0,0,0))", "beyond 2^31"),
    (b"((4,0,0) (7,3,3) (0,0,0))", b"((6,0,0) (9,3,3) (0,0,0))", "outside their level's domain"),
    (b"(2 0", b"(3 0", "line 8", "a box, such as"),
    (b")\n2\n", b")\n3\n", "the number of boxes once more, 2"),
    (b"FabOnDisk: Cell_D_00000 0", b"FabOnDisk: Cell_D_00000", "line 10", "<byte offset>"),
    (b"FabOnDisk: Cell_D_00000 0", b"FabOnDisk: Not Saved -1", "not saved"),
    (b"FabOnDisk: Cell_D_00000 0", b"FabOnDisk: ../Cell_D_00000 0", "outside the level's folder"),
]


@pytest.mark.parametrize(("old", "new", "words"), [(o, n, w) for o, n, *w in CELL_H])
def test_level_header(plot, old, new, words):
    change(plot / "Level_0" / "Cell_H", old, new)
    refuse(plot, *words)


def test_boxes_that_header_does_not_promise(plot):
    change(plot / "Header", b"\n0 2 0.0\n0\n0.0 2.0\n0.0 2.0\n0.0 2.0\n", b"\n0 1 0.0\n0\n")
    refuse(plot, "2 boxes where Header promises 1")


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (b"2,2\n", b"2,3\n", 'expected "2,2" before the minima'),
        (b"1.50000000000000000e+00,", b"", "2 minima"),
        (b"1.50000000000000000e+00,", b"one,", 'found "one", expected a number'),
    ],
)
def test_malformed_minima(plot, old, new, words):
    change(plot / "Level_0" / "Cell_H", old, new)
    snapshot = AmrexSnapshot(plot)
    with pytest.raises(SnapshotError, match=re.escape(words)):
        snapshot.bounds("density")
    assert snapshot.read(0, ["density"])["density"].max() == 1.5


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (b"(64 11 52 0 1 12 0 1023)", b"(64 15 48 0 1 12 0 1023)", "only IEEE 32 and 64 bit"),
        (b"(8 7 6 5 4 3 2 1)", b"(8 7 6 5 4 3 1 2)", "which is not known"),
        (b"((8, (64", b"(8, (64", "the description of a real number"),
    ],
)
def test_unknown_reals(tmp_path, old, new, words):
    make(tmp_path / "plot", version=3)
    change(tmp_path / "plot" / "Level_0" / "Cell_H", old, new)
    refuse(tmp_path / "plot", words)


@pytest.mark.parametrize("name", ["Header", "Level_1/Cell_H"])
def test_missing_metadata(plot, name):
    (plot / name).unlink()
    refuse(plot, str(plot / name), "is missing")


def test_missing_level(plot):
    shutil.rmtree(plot / "Level_1")
    refuse(plot, str(plot / "Level_1" / "Cell_H"), "is missing")


@pytest.mark.parametrize("version", [1, 3])
def test_missing_data_file(tmp_path, version):
    make(tmp_path / "plot", version)
    snapshot = AmrexSnapshot(tmp_path / "plot")
    file = tmp_path / "plot" / "Level_1" / "Cell_D_00000"
    file.unlink()
    for action in (snapshot.check_files, lambda: snapshot.read(2, ["Temp"]), lambda: snapshot.identity):
        with pytest.raises(SnapshotError, match=re.escape(f"{file}: the data file is missing")):
            action()
    assert snapshot.read(0, ["Temp"])["Temp"].max() == 10.0


@pytest.mark.parametrize("version", [1, 2, 3, 4])
def test_data_file_one_byte_short(tmp_path, version):
    make(tmp_path / "plot", version)
    file = tmp_path / "plot" / "Level_0" / "Cell_D_00000"
    AmrexSnapshot(tmp_path / "plot").check_files()
    file.write_bytes(file.read_bytes()[:-1])
    snapshot = AmrexSnapshot(tmp_path / "plot")
    for action in (snapshot.check_files, lambda: snapshot.read(1, ["Temp"])):
        with pytest.raises(SnapshotError, match="the data file is truncated") as caught:
            action()
        assert str(file) in str(caught.value)
    assert snapshot.read(1, ["density"])["density"].min() == 1.5


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (b"((4,0,0) (7,3,3) (0,0,0))", b"((4,0,0) (8,3,3) (0,0,0))", "holds cells (4, 0, 0) to (8, 3, 3)"),
        (b"((4,0,0) (7,3,3) (0,0,0)) 2", b"((4,0,0) (7,3,3) (0,0,0)) 3", "holds 3 components"),
        (b"((4,0,0) (7,3,3) (0,0,0))", b"((4,0,0) (7,3,3) (1,0,0))", "nodal data"),
        (b"FAB ((8, (64 11 52 0 1 12 0 1023)),(8, (8 7 6 5 4 3 2 1)))((4", b"FAC ((4", "expected a line"),
        (
            b"(8 7 6 5 4 3 2 1)))((4",
            b"(1 2 3 4 5 6 7 8)))((4",
            "where the level's first record has",
        ),
    ],
)
def test_record_that_contradicts_its_promise(plot, old, new, words):
    change(plot / "Level_0" / "Cell_D_00000", old, new)
    snapshot = AmrexSnapshot(plot)
    assert snapshot.read(0, ["Temp"])["Temp"].max() == 10.0
    with pytest.raises(SnapshotError, match=re.escape(words)) as caught:
        snapshot.read(1, ["Temp"])
    assert "Cell_D_00000, byte " in str(caught.value)


def test_bad_requests(plot):
    snapshot = AmrexSnapshot(plot)
    with pytest.raises(SnapshotError, match='no field "temp"; did you mean "Temp"'):
        snapshot.read(0, ["temp"])
    with pytest.raises(SnapshotError, match="known: density, Temp"):
        snapshot.bounds("pressure")
    with pytest.raises(SnapshotError, match="no field"):
        snapshot.read_bytes(np.array([0]), ["pressure"])
    with pytest.raises(SnapshotError, match="no patch 3"):
        snapshot.read(3, ["Temp"])
    with pytest.raises(SnapshotError, match="outside the patch"):
        snapshot.read(0, ["Temp"], ((0, 0, 0), (5, 4, 4)))


def test_what_header_does_not_name_is_ignored(plot):
    (plot / "particles").mkdir()
    (plot / "particles" / "Header").write_text("nothing to do with cells\n")
    (plot / "Header").write_bytes((plot / "Header").read_bytes() + b"1.0e-6\n1.0e-6\n")
    AmrexSnapshot(plot).check_files()


def test_ghost_width_per_axis(plot):
    # The framework writes one integer where all axes agree and a vector where they don't.
    change(plot / "Level_0" / "Cell_H", b"1\n1\n2\n0\n(2", b"1\n1\n2\n(0,0,0)\n(2")
    assert AmrexSnapshot(plot).read(1, ["Temp"])["Temp"].max() == 10.0
    change(plot / "Level_0" / "Cell_H", b"(0,0,0)\n(2", b"(0,1,0)\n(2")
    with pytest.raises(SnapshotError, match=re.escape("promises (0, -1, 0) to (3, 4, 3)")):
        AmrexSnapshot(plot).read(1, ["Temp"])
