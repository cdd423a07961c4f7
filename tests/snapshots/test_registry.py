"""The reader is picked by looking at the files."""

import pytest

from cubeforge.errors import SnapshotError
from cubeforge.mesh.hierarchy import build_hierarchy
from cubeforge.snapshots import Snapshot, open_snapshot
from cubeforge.snapshots.amrex import AmrexSnapshot
from cubeforge.snapshots.amrex_write import write_amrex


@pytest.fixture
def plot(tmp_path):
    mesh = build_hierarchy((0, 0, 0), (1, 1, 1), (2, 2, 2), [], [([(0, 0, 0)], [(2, 2, 2)])])
    write_amrex(tmp_path / "out00010", mesh, ["density"], [{"density": [[[1.0] * 2] * 2] * 2}])
    return tmp_path / "out00010"


def test_plotfile(plot):
    snapshot = open_snapshot(str(plot))
    assert isinstance(snapshot, AmrexSnapshot)
    assert isinstance(snapshot, Snapshot)
    assert snapshot.format_name == "AMReX plotfile"


def test_other_word_in_the_title(plot):
    (plot / "Header").write_text((plot / "Header").read_text().replace("HyperCLaw", "Whatever", 1))
    assert open_snapshot(plot).fields == ("density",)


def test_nothing_there(tmp_path):
    with pytest.raises(SnapshotError, match="no such file or folder"):
        open_snapshot(tmp_path / "missing")


def test_unknown_says_what_was_looked_for(tmp_path):
    (tmp_path / "Header").write_text("a letter head\n")
    with pytest.raises(SnapshotError, match='AMReX plotfile: a folder with a file "Header"') as caught:
        open_snapshot(tmp_path)
    assert "did you mean" not in str(caught.value)


@pytest.mark.parametrize("given", [".", "out00010/Header"])
def test_near_miss_names_the_snapshot(plot, given):
    with pytest.raises(SnapshotError, match=r"did you mean .*out00010\?"):
        open_snapshot(plot.parent / given)
