"""One picture of a cube, for a person: integrated intensity, velocity, column, spectrum, channel maps."""

from __future__ import annotations

import io
import math
import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import LogNorm, Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from cubeforge._version import VERSION
from cubeforge.cube.durable import disk_errors, make_folders, replacing, sweep_beside, write_all
from cubeforge.cube.store import open_cube
from cubeforge.cube.tiles import Cube
from cubeforge.errors import CubeError
from cubeforge.observe.maps import CubeSummary, summarise
from cubeforge.quantities import KM_S
from cubeforge.report import scales
from cubeforge.report.scales import Image, Scale

COLUMN_MAP = "column"
"""Name of the by-product that is drawn as the mass column."""
DPI = 130
SMALL, MEDIUM, LARGE = 8.0, 9.5, 14.0

# Inches.
_WIDTH, _LEFT, _RIGHT = 12.0, 0.85, 0.25
_HEAD, _FOOT = 1.15, 0.2
_MAP_MOST, _MAP_LEAST = 3.6, 0.9
_BAR, _BAR_GAP, _BAR_WORDS = 0.13, 0.08, 0.9
_SPECTRUM = 1.7
_STRIP_MOST, _STRIP_GAP, _STRIP_WORDS, _PITCH_LEAST = 2.0, 0.07, 0.25, 1.0
_ACROSS = 9


def quicklook(
    cube: Cube | str | Path,
    path: str | Path,
    *,
    channels: Sequence[int] | None = None,
    max_side: int = 1000,
) -> CubeSummary:
    """Draw a cube into a PNG file, which appears whole or not at all; an older one is replaced.

    The same cube gives the same picture with the same versions of the libraries.

    Parameters
    ----------
    cube : Cube or path
        May be unfinished: what is missing is hatched, and the picture says so.
    path : path
        Ending in ".png".
    channels : sequence of int, optional
        Channels to map; see `cubeforge.observe.maps.summarise`, also for `max_side`.

    Returns
    -------
    CubeSummary
        What was drawn.

    Raises
    ------
    CubeError
        `path` does not end in ".png" or is a folder; otherwise as `summarise`.
    EngineError
        The picture cannot be written.
    """
    path = Path(os.path.abspath(path))
    if path.suffix.lower() != ".png" or path.is_dir():
        raise CubeError(f"{path}: a quick look is a PNG file; wanted a name that ends in .png")
    if not isinstance(cube, Cube):
        cube = open_cube(cube)
    summary = summarise(cube, channels=channels, max_side=max_side)
    _write(path, draw(summary, cube.path.name))
    return summary


def draw(summary: CubeSummary, name: str) -> Figure:
    """Figure of a summarised cube called `name`; its axes are labelled with what they show.

    The labels (matplotlib's, not drawn) are "moment0", "moment1", "column" (or "peak", when the cube has no
    such map), "spectrum" and "channel-<number>"; those of the colour bars end in "-bar".
    """
    layout = _Layout.of(summary)
    figure = Figure(figsize=(_WIDTH, layout.height), dpi=DPI, facecolor="white")
    FigureCanvasAgg(figure)
    canvas = _Canvas(figure, layout, _Sky.of(summary))
    _draw_words(canvas, summary, name)
    _draw_maps(canvas, summary)
    _draw_spectrum(canvas, summary)
    _draw_strip(canvas, summary)
    return figure


def _write(path: Path, figure: Figure) -> None:
    """Save `figure` as PNG beside `path`, and give it that name when it is durable."""
    buffer = io.BytesIO()
    figure.savefig(buffer, format="png", dpi=DPI, metadata={"Software": f"cubeforge {VERSION}"})
    data = buffer.getvalue()
    with disk_errors(path, len(data)):
        make_folders(path.parent)
        sweep_beside(path)
        with replacing(path) as file:
            write_all(file, data)


@dataclass(frozen=True)
class _Sky:
    """Axes of the images: offsets from the centre, north up and east left."""

    unit: str
    extent: tuple[float, float, float, float]
    east: tuple[float, float]
    north: tuple[float, float]
    true_shape: bool

    @classmethod
    def of(cls, summary: CubeSummary) -> _Sky:
        _, ny, nx = summary.spec.shape
        pixel = summary.spec.pixel_rad
        unit, size = scales.sky_unit(max(ny, nx) * pixel)
        side = pixel / size
        east, south = 0.5 * nx * side, -0.5 * ny * side
        my, mx = summary.moment0.shape
        # Blocks at the western and northern edges reach beyond the image; the limits cut them.
        extent = (east, east - mx * summary.block * side, south, south + my * summary.block * side)
        return cls(unit, extent, (east, -east), (south, -south), ny / nx == _shape_drawn(summary))


def _shape_drawn(summary: CubeSummary) -> float:
    """Height over width of the images on paper: the true one, unless it is extreme."""
    _, ny, nx = summary.spec.shape
    return min(max(ny / nx, 1 / 3), 4.0)


@dataclass(frozen=True)
class _Layout:
    """Places on the page, in inches from its top left corner."""

    maps: tuple[str, ...]
    map_size: tuple[float, float]
    strip_size: tuple[float, float]
    strip_pitch: float
    strip_across: int
    strip_rows: int
    map_top: float
    spectrum_top: float
    strip_top: float
    height: float

    @classmethod
    def of(cls, summary: CubeSummary) -> _Layout:
        shape = _shape_drawn(summary)
        maps = ("moment0", "moment1", COLUMN_MAP if COLUMN_MAP in summary.maps else "peak")
        cell = (_WIDTH - _LEFT - _RIGHT) / 3
        width = max(min(cell - _BAR - _BAR_GAP - _BAR_WORDS, _MAP_MOST / shape), _MAP_LEAST)
        count = len(summary.channels)
        across = min(count, _ACROSS)
        rows = -(-count // across) if count else 0
        room = (_WIDTH - _LEFT - _RIGHT - _BAR - _BAR_WORDS) / max(across, 1) - _STRIP_GAP
        strip = min(room, _STRIP_MOST / shape, _STRIP_MOST)
        spectrum_top = _HEAD + width * shape + 0.9
        strip_top = spectrum_top + _SPECTRUM + 0.85
        height = strip_top + rows * (strip * shape + _STRIP_WORDS) + _FOOT
        return cls(
            maps=maps,
            map_size=(width, width * shape),
            strip_size=(strip, strip * shape),
            strip_pitch=max(strip + _STRIP_GAP, _PITCH_LEAST),
            strip_across=across,
            strip_rows=rows,
            map_top=_HEAD,
            spectrum_top=spectrum_top,
            strip_top=strip_top,
            height=height,
        )


@dataclass(frozen=True)
class _Canvas:
    figure: Figure
    layout: _Layout
    sky: _Sky

    def axes(self, label: str, left: float, top: float, width: float, height: float) -> Any:
        """Axes at a place given in inches."""
        page = self.layout.height
        place = (left / _WIDTH, 1.0 - (top + height) / page, width / _WIDTH, height / page)
        axes = self.figure.add_axes(place, label=label)
        axes.tick_params(labelsize=SMALL)
        return axes

    def image(self, axes: Any, values: Image, scale: Scale) -> Any:
        """Draw a map into `axes`; what is missing is hatched."""
        axes.patch.set(facecolor="0.93", edgecolor="0.72", hatch="////", linewidth=0.0)
        drawn = axes.imshow(
            np.ma.array(values / scale.factor, mask=~np.isfinite(values)),
            norm=scale.norm,
            cmap=scale.colours,
            extent=self.sky.extent,
            origin="lower",
            aspect="auto",
        )
        axes.set(xlim=self.sky.east, ylim=self.sky.north)
        return drawn

    def bar(
        self, label: str, left: float, top: float, height: float, drawn: Any, scale: Scale, unit: str
    ) -> None:
        """Colour bar of `drawn`, at a place given in inches; none where there is nothing to read off it."""
        if drawn.get_array().mask.all():
            return
        axes = self.axes(label, left, top, _BAR, height)
        bar = self.figure.colorbar(drawn, cax=axes, extend=scale.extend, extendfrac=0.04)
        bar.ax.tick_params(which="both", labelsize=SMALL)
        if not isinstance(scale.norm, LogNorm):
            bar.ax.ticklabel_format(useOffset=False)
        bar.set_label(scale.label(unit), size=MEDIUM, parse_math=False)


def _draw_words(canvas: _Canvas, summary: CubeSummary, name: str) -> None:
    spec = summary.spec
    _, ny, nx = spec.shape
    height = canvas.layout.height
    line = " ".join(part for part in (spec.molecule, spec.line) if part) or "line"
    title = f"{line}   {scales.printable(name, 70)}"
    unit, size = scales.sky_unit(0.0)
    facts = [
        f"{spec.rest_frequency / 1e9:.6g} GHz",
        f"{nx} × {ny} pixel{_plural(ny * nx)} of {spec.pixel_rad / size:.3g} {unit}",
        f"{spec.shape[0]} channel{_plural(spec.shape[0])} of {spec.velocity_width / KM_S:.3g} km/s",
        f"centre {spec.centre_lon:.5g}°, {spec.centre_lat:+.5g}° (ICRS)",
        f"brightness above the background of {spec.background_K:.4g} K",
    ]
    if spec.absolute:
        facts[-1] += " (subtracted here)"
    if summary.block > 1:
        facts[1] += f" (drawn {summary.block} × {summary.block} as one)"
    left = _LEFT / _WIDTH
    words: dict[str, Any] = {"ha": "left", "va": "top", "parse_math": False}
    canvas.figure.text(left, 1 - 0.15 / height, title, size=LARGE, weight="bold", **words)
    canvas.figure.text(left, 1 - 0.47 / height, "   ·   ".join(facts), size=SMALL, color="0.3", **words)
    alarm = "   ·   ".join(_alarms(summary, canvas.sky))
    canvas.figure.text(left, 1 - 0.64 / height, alarm, size=SMALL, color="firebrick", **words)


def _alarms(summary: CubeSummary, sky: _Sky) -> list[str]:
    """What a reader of the picture must know."""
    alarms = []
    tiles = summary.spec.tiles
    if summary.tiles_done < tiles:
        alarms.append(f"unfinished: {summary.tiles_done} of {tiles} tiles are done; hatched is missing")
    if summary.bad_pixels:
        count = f"{summary.bad_pixels} pixel{_plural(summary.bad_pixels)}"
        alarms.append(f"left out, for values that are not finite: {count}")
    if not sky.true_shape:
        alarms.append("east and north are not drawn to the same scale")
    return alarms


def _draw_maps(canvas: _Canvas, summary: CubeSummary) -> None:
    layout, spec = canvas.layout, summary.spec
    width, height = layout.map_size
    for index, label in enumerate(layout.maps):
        left = _LEFT + index * (_WIDTH - _LEFT - _RIGHT) / 3
        axes = canvas.axes(label, left, layout.map_top, width, height)
        if label == "moment0":
            title, values, unit = "Integrated intensity", summary.moment0, f"{spec.unit} km/s"
            scale = scales.brightness_scale(values)
        elif label == "moment1":
            title, values, unit = "Mean velocity (white: no clear emission)", summary.moment1, "km/s"
            scale = scales.velocity_scale(values, summary.moment0, 0.5 * spec.velocity_width / KM_S)
            _whiten(canvas, axes, summary)
        elif label == "peak":
            title, values, unit = "Peak brightness", summary.peak, spec.unit
            scale = scales.brightness_scale(values)
        else:
            title, values, unit = "Mass column", summary.maps[label], dict(spec.maps)[label]
            scale = scales.column_scale(values)
        drawn = canvas.image(axes, values, scale)
        axes.set_title(title, size=MEDIUM, loc="left")
        _label_sky(axes, canvas.sky, first=index == 0)
        beside_map = left + width + _BAR_GAP
        canvas.bar(f"{label}-bar", beside_map, layout.map_top, height, drawn, scale, unit)


def _whiten(canvas: _Canvas, axes: Any, summary: CubeSummary) -> None:
    """White where there is a spectrum but no velocity, so that hatching means "missing" in every map."""
    there = np.where(summary.pixels > 0, 1.0, np.nan)
    canvas.image(axes, there, Scale(Normalize(0.0, 1.0), "gray"))


def _label_sky(axes: Any, sky: _Sky, *, first: bool) -> None:
    inches = axes.get_window_extent().size / DPI
    for axis, length in zip((axes.xaxis, axes.yaxis), inches, strict=True):
        axis.set_major_locator(MaxNLocator(max(2, min(6, int(length / 0.5)))))
    axes.set_xlabel(f"east ({sky.unit})", size=MEDIUM)
    if first:
        axes.set_ylabel(f"north ({sky.unit})", size=MEDIUM)
    else:
        axes.tick_params(labelleft=False)


def _draw_spectrum(canvas: _Canvas, summary: CubeSummary) -> None:
    spec = summary.spec
    axes = canvas.axes(
        "spectrum", _LEFT, canvas.layout.spectrum_top, _WIDTH - _LEFT - _RIGHT - _BAR_WORDS, _SPECTRUM
    )
    width = spec.velocity_width / KM_S
    edges = (spec.velocity_start / KM_S - 0.5 * width) + width * np.arange(spec.shape[0] + 1)
    known = summary.spectrum[np.isfinite(summary.spectrum)]
    factor = scales.short_factor(float(np.abs(known).max(initial=0.0)))
    for channel in summary.channels:
        axes.axvspan(edges[channel], edges[channel + 1], color="0.88", linewidth=0.8, zorder=0)
    axes.axhline(0.0, color="0.6", linewidth=0.6, zorder=1)
    axes.stairs(summary.spectrum / factor, edges, color="#31688e", linewidth=1.3, baseline=None, zorder=2)
    axes.set_xlim(edges[0], edges[-1])
    axes.ticklabel_format(useOffset=False)
    if not known.any():
        axes.set_ylim(-1.0, 1.0)
    axes.set_title("Mean spectrum of the image (grey: channels mapped below)", size=MEDIUM, loc="left")
    axes.set_xlabel("radio velocity (km/s)", size=MEDIUM)
    power = scales.power_text(round(math.log10(factor)))
    unit = " ".join(part for part in (power, scales.unit_text(spec.unit)) if part)
    axes.set_ylabel(f"mean brightness\n({unit})", size=MEDIUM, parse_math=False)


def _draw_strip(canvas: _Canvas, summary: CubeSummary) -> None:
    if not summary.channels:
        return
    layout, spec = canvas.layout, summary.spec
    width, height = layout.strip_size
    scale = scales.brightness_scale(summary.channel_maps)
    places = scales.decimals(spec.velocity_width / KM_S)
    for index, (channel, values) in enumerate(zip(summary.channels, summary.channel_maps, strict=True)):
        row, column = divmod(index, layout.strip_across)
        left = _LEFT + column * layout.strip_pitch
        top = layout.strip_top + row * (height + _STRIP_WORDS)
        axes = canvas.axes(f"channel-{channel}", left, top, width, height)
        drawn = canvas.image(axes, values, scale)
        axes.tick_params(bottom=False, left=False, labelbottom=False, labelleft=False)
        velocity = spec.velocities[channel] / KM_S
        axes.set_title(_minus(f"{velocity:.{places}f} km/s"), size=SMALL, pad=3.0)
    left = _LEFT + (layout.strip_across - 1) * layout.strip_pitch + width + _STRIP_GAP
    canvas.bar("channels-bar", left, layout.strip_top, height, drawn, scale, spec.unit)


def _plural(count: int) -> str:
    return "" if count == 1 else "s"


def _minus(text: str) -> str:
    return text.replace("-", "−")


__all__ = ["draw", "quicklook"]
