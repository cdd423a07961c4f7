"""Creating a cube on disk, and opening it: the layout of the zarr group."""

from __future__ import annotations

import json
import os
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from zarr.codecs import BloscCodec

from cubeforge.cube.durable import (
    STAGING,
    Staging,
    beside,
    disk_errors,
    fsync_folder,
    make_folders,
    sweep_beside,
)
from cubeforge.cube.process import new_run_id
from cubeforge.cube.spec import RADIAN, CubeSpec
from cubeforge.cube.tiles import INTENSITY, LEDGER, MAPS, Cube, DurableStore
from cubeforge.errors import CubeError, CubeforgeError

__all__ = ["Cube", "create_cube", "open_cube"]

ATTRIBUTE = "cubeforge"
"""Attribute of the group that holds our own description of the cube."""
LAYOUT = 1
"""Version of the layout on disk."""


def create_cube(path: Path | str, spec: CubeSpec) -> None:
    """Create an empty cube at `path`, all at once: it is built beside `path` and renamed.

    A process that is killed here leaves nothing at `path`; the next `create_cube` on the same machine
    removes what it left beside.

    Raises
    ------
    CubeError
        The spec cannot be stored, or something is at `path` already (an empty folder is taken).
    EngineError
        The file system refuses.
    """
    spec.validate()
    path = Path(os.path.abspath(path))
    _refuse_existing(path)
    with disk_errors(path, 0):
        make_folders(path.parent)
        sweep_beside(path)
        building = beside(path)
        try:
            _build(building, spec)
            try:
                os.rename(building, path)
            except OSError:
                # Somebody else was faster; any other reason is told by the error itself.
                _refuse_existing(path)
                raise
        except BaseException:
            shutil.rmtree(building, ignore_errors=True)
            raise
        fsync_folder(path.parent)


def _refuse_existing(path: Path) -> None:
    if not path.exists() and not path.is_symlink():
        return
    if path.is_dir() and not any(path.iterdir()):
        return
    try:
        open_cube(path)
    except CubeforgeError as error:
        raise CubeError(
            f"{path}: something is there already, and a cube cannot be resumed from it; nothing was touched. "
            f"Choose another path, or move it away. ({error})"
        ) from None
    raise CubeError(f"{path}: a cube is there already; resume it, or choose another path")


def _build(folder: Path, spec: CubeSpec) -> None:
    make_folders(folder / LEDGER)
    staging = Staging(folder / LEDGER, "creation", create=True)
    store = DurableStore(folder, staging=staging)
    described = {"layout": LAYOUT, "spec": json.loads(spec.to_json())}
    group = zarr.create_group(store, zarr_format=3, attributes={ATTRIBUTE: described})
    # The ledger is a group of its own so that general tools, which list the members, know what it is.
    group.create_group(LEDGER, attributes={"long_name": "record of the tiles that are done"})
    _build_axes(group, spec)
    _, ny, nx = spec.shape
    sky = {"coordinates": "velocity"}
    _build_array(group, INTENSITY, spec.shape, spec.tile, "<f4", "spectral", _describe(spec) | sky)
    if spec.maps:
        names, units = [name for name, _ in spec.maps], [unit for _, unit in spec.maps]
        attributes = {"names": names, "map_units": units, "long_name": "by-products, one image each"}
        _build_array(group, MAPS, (len(spec.maps), ny, nx), spec.tile, "<f8", "map", attributes)
    # Made here once: a worker that made a folder for its neighbours as well would have to flush it for them.
    for name in (INTENSITY, MAPS)[: 2 if spec.maps else 1]:
        for row in range(spec.tile_grid[0]):
            (folder / name / "c" / "0" / str(row)).mkdir(parents=True)
        for level in (folder / name, folder / name / "c", folder / name / "c" / "0"):
            fsync_folder(level)
    shutil.rmtree(folder / LEDGER / f"{STAGING}creation")
    fsync_folder(folder)


def _build_array(
    group: zarr.Group,
    name: str,
    shape: tuple[int, int, int],
    tile: tuple[int, int],
    dtype: str,
    first: str,
    attributes: dict[str, Any],
) -> None:
    group.create_array(
        name,
        shape=shape,
        chunks=(shape[0], *tile),
        dtype=dtype,
        fill_value=float("nan"),
        compressors=BloscCodec(typesize=int(dtype[-1]), cname="lz4", clevel=5, shuffle="shuffle"),
        dimension_names=(first, "y", "x"),
        attributes=attributes,
    )


def _build_axes(group: zarr.Group, spec: CubeSpec) -> None:
    arcsec = RADIAN * 3600
    axes = {
        "velocity": ("spectral", spec.velocities / 1e5, "km/s", "radio velocity, channel centre"),
        "y": ("y", spec.offsets(1) * arcsec, "arcsec", "offset to the north, pixel centre"),
        "x": ("x", spec.offsets(2) * arcsec, "arcsec", "offset to the west, pixel centre"),
    }
    for name, (dimension, values, unit, text) in axes.items():
        array = group.create_array(
            name,
            shape=values.shape,
            chunks=values.shape,
            dtype="<f8",
            compressors=None,
            fill_value=float("nan"),
            dimension_names=(dimension,),
            attributes={"units": unit, "long_name": text},
        )
        array[:] = values


def _describe(spec: CubeSpec) -> dict[str, Any]:
    background = "with the background" if spec.absolute else "above the background"
    return {
        "units": spec.unit,
        "long_name": f"{spec.molecule} {spec.line} intensity {background}".strip(),
        "rest_frequency": spec.rest_frequency,
        "rest_frequency_units": "Hz",
    }


def open_cube(path: Path | str, *, run: str | None = None) -> Cube:
    """Open a cube for reading and, on behalf of a run, for writing.

    Parameters
    ----------
    path : path
    run : str, optional
        Id of the run that holds the lease: writes stop with an error once it has lost it. Without, the
        cube can be written only while nobody else takes a lease on it.

    Raises
    ------
    CubeError
        Nothing is there, it is not a cube, it is damaged, or another version wrote it.
    """
    path = Path(os.path.abspath(path))
    spec = _read_spec(path)
    staging = Staging(path / LEDGER, run or new_run_id(), create=run is None)
    group = zarr.open_group(DurableStore(path, staging=staging), mode="r+", zarr_format=3)
    intensity = _member(path, group, INTENSITY, spec.shape, spec.tile, "float32")
    maps = None
    if spec.maps:
        maps = _member(path, group, MAPS, (len(spec.maps), *spec.shape[1:]), spec.tile, "float64")
    return Cube(path, spec, intensity, maps)


def _read_spec(path: Path) -> CubeSpec:
    try:
        attributes = json.loads((path / "zarr.json").read_bytes())["attributes"]
        described = attributes[ATTRIBUTE]
        layout, spec = described["layout"], described["spec"]
    except (FileNotFoundError, NotADirectoryError):
        found = "is not a cube (it has no zarr.json)" if path.exists() else "does not exist"
        raise CubeError(f"{path}: {found}; wanted the path of a cube") from None
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise CubeError(f"{path}: is not a cube of ours, or its zarr.json is damaged ({error})") from None
    if layout != LAYOUT:
        raise CubeError(f"{path}: the cube has layout {layout}; this version reads layout {LAYOUT}")
    return CubeSpec.from_json(json.dumps(spec), where=str(path))


def _member(
    path: Path,
    group: zarr.Group,
    name: str,
    shape: tuple[int, int, int],
    tile: tuple[int, int],
    dtype: str,
) -> zarr.Array[Any]:
    try:
        array = group[name]
    except (KeyError, ValueError) as error:
        raise CubeError(f"{path}: the array {name} is missing or damaged ({error})") from None
    wanted = (shape, (shape[0], *tile), np.dtype(dtype))
    found = (array.shape, array.chunks, array.dtype) if isinstance(array, zarr.Array) else None
    if not isinstance(array, zarr.Array) or found != wanted or array.shards is not None:
        # A chunk that is not one tile would be written by two workers at once, and lose one's work.
        raise CubeError(f"{path}: {name} has shape, chunks and type {found}; wanted {wanted}, not sharded")
    # Otherwise a tile that equals the fill value is not stored, and looks as if it were missing.
    return array.with_config({"write_empty_chunks": True})
