"""The picture of a cube: that it is there, holds what it says, and never overlaps itself."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.image import imread

import cubeforge.report.quicklook as room
from cubeforge.cube.store import Cube
from cubeforge.errors import CubeError, EngineError
from cubeforge.observe.maps import summarise
from cubeforge.report.quicklook import DPI, draw, quicklook

Store = Callable[..., Cube]
COLUMN = ("column", "g cm-2")


def core(channels: int = 20, ny: int = 32, nx: int = 32) -> tuple[Any, Any]:
    """A rotating core in kelvins and its mass column."""
    y, x = np.mgrid[:ny, :nx]
    y, x = (y - 0.5 * ny) / ny, (x - 0.4 * nx) / nx
    column = 3e-3 * np.exp(-8.0 * (x**2 + y**2))
    velocity = -2.0 + 0.05 * (channels - 1) + 1.5 * x
    offsets = (-2.0 + 0.1 * np.arange(channels))[:, None, None] - velocity
    return 4e3 * column * np.exp(-0.5 * (offsets / 0.3) ** 2), column


def rendered(summary: Any, name: str = "cloud.zarr") -> tuple[Any, Any, dict[str, Any]]:
    """Figure, its pixels (rows, columns, RGBA), and its axes by label."""
    figure = draw(summary, name)
    figure.canvas.draw()
    axes: dict[str, Any] = {each.get_label(): each for each in figure.axes}
    return figure, np.asarray(figure.canvas.buffer_rgba()), axes


def inside(pixels: Any, axes: Any) -> Any:
    """The part of the picture that is inside `axes`, without the frame: (rows, columns, RGB)."""
    box = axes.get_window_extent()
    rows = slice(int(len(pixels) - box.y1) + 3, int(len(pixels) - box.y0) - 3)
    return pixels[rows, int(box.x0) + 3 : int(box.x1) - 3, :3].astype(float)


def test_the_file_and_every_panel_of_it(store_cube: Store, tmp_path: Path) -> None:
    lines, column = core()
    cube = store_cube(lines, maps={COLUMN: column})
    summary = quicklook(cube.path, tmp_path / "new folder" / "look.png")
    picture = imread(tmp_path / "new folder" / "look.png")
    figure, pixels, axes = rendered(summary, cube.path.name)
    width, height = figure.canvas.get_width_height()
    assert width == 12 * DPI
    assert picture.shape == (height, width, 4)
    np.testing.assert_array_equal(np.round(picture * 255), pixels)
    channels = [f"channel-{channel}" for channel in summary.channels]
    bars = ["moment0-bar", "moment1-bar", "column-bar", "channels-bar"]
    assert set(axes) == {"moment0", "moment1", "column", "spectrum", *channels, *bars}
    for label, each in axes.items():
        assert inside(pixels, each).std(axis=(0, 1)).max() > 5.0, label
    assert 6 <= len(channels) <= 9
    assert [path.name for path in (tmp_path / "new folder").iterdir()] == ["look.png"]


def test_north_is_up_and_east_is_left(store_cube: Store) -> None:
    lines = np.zeros((3, 40, 40))
    # Pixel x grows to the west: 5 is in the east. One bright square in the north-east.
    lines[:, 30:, :10] = 1.0
    _, pixels, axes = rendered(summarise(store_cube(lines)))
    panel = inside(pixels, axes["moment0"]).sum(axis=2)
    half_y, half_x = len(panel) // 2, panel.shape[1] // 2
    quarters = {
        (up, left): panel[:half_y] if up else panel[half_y:] for up, left in itertools.product((1, 0), (1, 0))
    }
    means = {key: (part[:, :half_x] if key[1] else part[:, half_x:]).mean() for key, part in quarters.items()}
    assert max(means, key=lambda key: means[key]) == (1, 1)
    east_left, east_right = axes["moment0"].get_xlim()
    assert east_left == -east_right > 0
    # 40 pixels of 1e-5 rad are 82.5 arcsec: in arcsec, half of it each way.
    assert east_left == pytest.approx(20e-5 * 206264.806, rel=1e-6)
    assert axes["moment0"].get_xlabel() == "east (arcsec)"
    assert axes["moment0"].get_ylabel() == "north (arcsec)"


def test_what_is_written_on_it(store_cube: Store) -> None:
    lines, column = core()
    background = 3.4e8
    lines = background + 1e6 * lines
    cube = store_cube(lines, maps={COLUMN: column}, unit="Jy/sr", absolute=True, skip={3})
    figure, _, axes = rendered(summarise(cube, channels=[4, 9]), "my cloud")
    words = " ".join(text.get_text() for text in figure.texts)
    for wanted in (
        "13CO 1-0",
        "my cloud",
        "110.201 GHz",
        "32 × 32 pixels of 2.06 arcsec",
        "20 channels of 0.1 km/s",
        "68.5°, +26.2°",
        "above the background of 2.725 K (subtracted here)",
        "unfinished: 3 of 4 tiles are done",
    ):
        assert wanted in words
    # A dollar in a name is a dollar.
    assert not any(text.get_parse_math() for text in figure.texts)
    assert axes["moment0-bar"].get_ylabel() == "10⁶ Jy/sr km/s"
    assert axes["moment1-bar"].get_ylabel() == "km/s"
    assert axes["column-bar"].get_ylabel() == "g cm⁻²"
    assert axes["column-bar"].get_yscale() == "log"
    # Channel 4 of a band from -2 km/s in steps of 0.1 km/s.
    assert axes["channel-4"].get_title() == "−1.60 km/s"
    assert axes["channel-9"].get_title() == "−1.10 km/s"


def test_channel_maps_share_one_scale(store_cube: Store) -> None:
    lines = np.zeros((3, 8, 8))
    lines[0], lines[1], lines[2] = 1.0, 2.0, 4.0
    _, pixels, axes = rendered(summarise(store_cube(lines)))
    limits = {axes[f"channel-{channel}"].images[0].get_clim() for channel in range(3)}
    assert limits == {(0.0, 4.0)}
    colours = [inside(pixels, axes[f"channel-{channel}"]).mean() for channel in range(3)]
    assert len(set(np.round(colours))) == 3


def test_unfinished_tiles_are_hatched_and_the_rest_is_not(store_cube: Store, tmp_path: Path) -> None:
    lines, column = core()
    cube = store_cube(lines, maps={COLUMN: column}, skip={1})
    summary = quicklook(cube, tmp_path / "look.png")
    _, pixels, axes = rendered(summary)
    for label in ("moment0", "moment1", "column", f"channel-{summary.channels[0]}"):
        panel = inside(pixels, axes[label])
        half_y, half_x = len(panel) // 2, panel.shape[1] // 2
        # Tile 1 is the south-west quarter: below, right. Hatching is grey.
        missing = panel[half_y + 2 :, half_x + 2 :]
        assert np.ptp(missing, axis=2).max() == 0.0
        assert missing.std() > 5.0
        assert np.ptp(panel[: half_y - 2], axis=2).max() > 20.0


def test_nothing_finished_is_all_hatched(store_cube: Store, tmp_path: Path) -> None:
    summary = quicklook(store_cube(np.ones((5, 4, 4)), skip={0}), tmp_path / "look.png")
    _, pixels, axes = rendered(summary)
    assert not any(label.endswith("-bar") for label in axes)
    assert np.ptp(inside(pixels, axes["moment0"]), axis=2).max() == 0.0


def test_pixels_without_clear_emission_are_white_not_hatched(store_cube: Store) -> None:
    _, pixels, axes = rendered(summarise(store_cube(-np.ones((5, 4, 4)))))
    assert np.all(inside(pixels, axes["moment1"]) == 255.0)


CASES: dict[str, dict[str, Any]] = {
    "one pixel, one channel": {"shape": (1, 1, 1)},
    "one channel": {"shape": (1, 30, 40)},
    "one pixel": {"shape": (50, 1, 1)},
    "wide": {"shape": (12, 3, 400)},
    "tall": {"shape": (30, 400, 3)},
    "many channels mapped": {"shape": (40, 20, 20), "channels": range(0, 40, 2)},
    "no channel mapped": {"shape": (5, 20, 20), "channels": []},
    "zeros": {"scale": 0.0},
    "absorption": {"scale": -1.0},
    "tiny": {"scale": 1e-30},
    "huge": {"scale": 1e30},
    "degrees": {"pixel_rad": 3e-3},
    "far pixels": {"pixel_rad": 1e-9},
    "far velocities": {"velocity_start": -3.12345e8, "velocity_width": 7.7e2},
    "averaged, absolute": {"absolute": True, "max_side": 7, "unit": "Jy/pixel"},
    "long name": {"name": "a very long name of a cube " * 9},
    "odd name": {"name": "nébuleuse $x^2$ 雲\n\ttab.zarr", "molecule": "H$2", "line": "1_0,1-0_0,0 F=1-0"},
    "bad pixels": {"bad": True, "skip": {0}},
    "no names": {"molecule": "", "line": ""},
}


def parts(axes: Any) -> list[tuple[str, Any]]:
    """What `axes` put on paper, and where: frame, title, labels, the tick labels that are in view."""
    found = [("frame", axes.get_window_extent())]
    texts = [axes.title, axes._left_title, axes.xaxis.label, axes.yaxis.label]
    for axis in (axes.xaxis, axes.yaxis):
        texts.append(axis.get_offset_text())
        low, high = sorted(axis.get_view_interval())
        for tick in [*axis.get_major_ticks(), *axis.get_minor_ticks()]:
            if low <= tick.get_loc() <= high:
                texts += [tick.label1, tick.label2]
    found += [(text.get_text(), text.get_window_extent()) for text in texts if text.get_visible()]
    return [(f"{axes.get_label()}: {name}", box) for name, box in found if name and box.width]


@pytest.mark.parametrize("case", CASES)
def test_nothing_overlaps_or_leaves_the_page(store_cube: Store, case: str) -> None:
    changes = dict(CASES[case])
    lines, column = core(*changes.pop("shape", (20, 32, 32)))
    lines *= changes.pop("scale", 1.0)
    if changes.pop("bad", False):
        lines[0, :, 20] = np.nan
    name = changes.pop("name", "cloud.zarr")
    wishes = {key: changes.pop(key) for key in ("channels", "max_side") if key in changes}
    cube = store_cube(lines, maps={COLUMN: column} if len(case) % 2 else {}, **changes)
    figure = draw(summarise(cube, **wishes), name)
    figure.draw_without_rendering()
    places = [part for each in figure.axes for part in parts(each)]
    places += [(text.get_text(), text.get_window_extent()) for text in figure.texts if text.get_text()]
    page = figure.bbox
    for label, box in places:
        assert 0.0 <= box.x0 < box.x1 <= page.x1, label
        assert 0.0 <= box.y0 < box.y1 <= page.y1, label
    for (label, box), (other, near) in itertools.combinations(places, 2):
        apart = box.x1 < near.x0 or near.x1 < box.x0 or box.y1 < near.y0 or near.y1 < box.y0
        assert apart, f"{label} on {other}"


def test_large_cubes_are_averaged(store_cube: Store, tmp_path: Path) -> None:
    lines, column = core(3, 200, 300)
    cube = store_cube(lines, maps={COLUMN: column}, tile=(64, 64))
    summary = quicklook(cube, tmp_path / "look.png", max_side=100)
    assert summary.moment0.shape == (67, 100)
    words = " ".join(text.get_text() for text in draw(summary, "x").texts)
    assert "300 × 200 pixels of 2.06 arcsec (drawn 3 × 3 as one)" in words


def test_same_cube_same_bytes_and_no_global_state(store_cube: Store, tmp_path: Path) -> None:
    before = dict(mpl.rcParams)
    cube = store_cube(core()[0])
    for name in ("a.png", "b.png"):
        quicklook(cube, tmp_path / name)
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()
    assert dict(mpl.rcParams) == before


def test_an_old_picture_stays_when_the_new_one_fails(
    store_cube: Store, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    cube = store_cube(core()[0])
    target = tmp_path / "pictures" / "look.png"
    target.parent.mkdir()
    target.write_bytes(b"old")

    def full(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(room, "write_all", full)
    with pytest.raises(EngineError, match="the disk is full"):
        quicklook(cube, target)
    assert [(path.name, path.read_bytes()) for path in target.parent.iterdir()] == [("look.png", b"old")]
    monkeypatch.undo()
    quicklook(cube, target)
    assert target.read_bytes().startswith(b"\x89PNG")


@pytest.mark.parametrize("name", ["look.pdf", "look", "folder.png"])
def test_names_that_are_not_of_a_picture(store_cube: Store, tmp_path: Path, name: str) -> None:
    (tmp_path / "folder.png").mkdir()
    with pytest.raises(CubeError, match=r"ends in \.png"):
        quicklook(store_cube(np.ones((1, 1, 1))), tmp_path / name)
