"""General tools open the store without knowing us."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
import zarr


def test_plain_zarr(filled: Callable[..., Any]) -> None:
    """Warnings are errors here: the ledger, too, must look like a member of the hierarchy."""
    made = filled()
    group = zarr.open_group(made.cube.path, mode="r")
    members = dict(group.members())
    assert set(members) == {"intensity", "maps", "velocity", "x", "y", "ledger"}
    intensity = group["intensity"]
    assert intensity.metadata.dimension_names == ("spectral", "y", "x")
    assert intensity.attrs["units"] == "K"
    assert intensity.chunks == (7, 16, 32)
    assert intensity.shards is None
    assert np.array_equal(intensity[:], made.intensity)
    assert np.array_equal(group["maps"][:], made.maps)
    assert group["maps"].attrs["names"] == ["column", "peak_depth"]


def test_axes(filled: Callable[..., Any]) -> None:
    made = filled()
    group = zarr.open_group(made.cube.path, mode="r")
    np.testing.assert_allclose(group["velocity"][:], made.cube.spec.velocities / 1e5)
    assert group["velocity"].attrs["units"] == "km/s"
    # 206264.806 arcseconds in a radian.
    pixel = 2.5e-5 * 206264.806
    np.testing.assert_allclose(group["x"][:], (np.arange(70) - 34.5) * pixel, rtol=1e-8)
    np.testing.assert_allclose(group["y"][:], (np.arange(45) - 22.0) * pixel, rtol=1e-8, atol=1e-12)
    assert group["x"].attrs["units"] == "arcsec"


def test_xarray(filled: Callable[..., Any]) -> None:
    xarray = pytest.importorskip("xarray", reason="xarray is not installed; it is no dependency")
    made = filled()
    data = xarray.open_zarr(made.cube.path, chunks=None, consolidated=False)
    assert data["intensity"].dims == ("spectral", "y", "x")
    assert set(data["intensity"].coords) == {"velocity", "x", "y"}
    assert np.array_equal(data["intensity"].values, made.intensity)
    assert data["intensity"].attrs["units"] == "K"
