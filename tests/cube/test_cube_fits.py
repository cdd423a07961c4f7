"""FITS files, read by astropy, CFITSIO's verifier and spectral-cube."""

from __future__ import annotations

import shutil
import subprocess
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy import units as u
from astropy.io import fits
from astropy.io.fits.hdu.base import _ValidHDU

from cubeforge.cube import checksums
from cubeforge.cube import fits as cube_fits
from cubeforge.cube.fits import export_fits, export_map
from cubeforge.cube.process import machine
from cubeforge.errors import CubeError, EngineError


def _check(path: Path) -> None:
    """Both checksums (astropy warns, and warnings are errors) and the standard's rules."""
    with fits.open(path, checksum=True) as file:
        file.verify("exception")
        for hdu in file:
            assert hdu.verify_checksum() == 1
            assert hdu.verify_datasum() == 1


def test_pixels_come_back(filled: Callable[..., Any], tmp_path: Path) -> None:
    made = filled()
    export_fits(made.cube, tmp_path / "c.fits")
    _check(tmp_path / "c.fits")
    with fits.open(tmp_path / "c.fits") as file:
        assert len(file) == 1
        assert file[0].data.dtype == ">f4"
        assert file[0].data.astype("<f4").tobytes() == made.intensity.tobytes()
    assert not list(tmp_path.glob(".*"))


@pytest.mark.parametrize("limit", [1, 70 * 16 * 4 * 3, 10**9])
def test_the_buffer_does_not_matter(filled: Callable[..., Any], tmp_path: Path, limit: int) -> None:
    made = filled()
    seen: list[tuple[int, int]] = []
    export_fits(made.cube, tmp_path / "a.fits", maps=True)
    export_fits(
        made.cube,
        tmp_path / "b.fits",
        maps=True,
        buffer_limit=limit,
        progress=lambda *step: seen.append(step),
    )
    assert (tmp_path / "a.fits").read_bytes() == (tmp_path / "b.fits").read_bytes()
    assert seen == [(done, 27) for done in range(1, 28)]


def test_maps(filled: Callable[..., Any], tmp_path: Path) -> None:
    made = filled()
    export_fits(made.cube, tmp_path / "c.fits", maps=True)
    export_map(made.cube, "peak_depth", tmp_path / "m.fits")
    _check(tmp_path / "c.fits")
    _check(tmp_path / "m.fits")
    with fits.open(tmp_path / "c.fits") as file:
        assert [hdu.name for hdu in file] == ["PRIMARY", "column", "peak_depth"]
        assert file["column"].header["BUNIT"] == "g cm-2"
        for index in range(2):
            assert np.array_equal(file[1 + index].data, made.maps[index])
    with fits.open(tmp_path / "m.fits") as file:
        assert file[0].data.shape == (45, 70)
        assert np.array_equal(file[0].data, made.maps[1])


@pytest.mark.skipif(shutil.which("fitsverify") is None, reason="needs fitsverify (Debian package fitsverify)")
@pytest.mark.parametrize("unit", ["K", "Jy/sr", "Jy/pixel"])
def test_fitsverify(filled: Callable[..., Any], tmp_path: Path, unit: str) -> None:
    history = ("caf\u00e9", "x" * 300, "one 'quoted' word")
    cube = filled(unit=unit, history=history, skip=(3,)).cube
    export_fits(cube, tmp_path / "c.fits", maps=True, partial=True)
    export_map(cube, "column", tmp_path / "m.fits", partial=True)
    for name in ("c.fits", "m.fits"):
        done = subprocess.run(
            ["fitsverify", str(tmp_path / name)], check=False, capture_output=True, text=True
        )
        assert "0 warning(s) and 0 error(s)" in done.stdout, done.stdout
        assert done.returncode == 0


@pytest.mark.filterwarnings("ignore::DeprecationWarning", "ignore::FutureWarning")
def test_spectral_cube_opens_it(filled: Callable[..., Any], tmp_path: Path) -> None:
    with warnings.catch_warnings():
        # What the reader's own dependencies warn of at import is not ours.
        warnings.simplefilter("ignore")
        from spectral_cube import SpectralCube
    made = filled()
    export_fits(made.cube, tmp_path / "c.fits")
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", message=".*[Bb]eam.*")
        read = SpectralCube.read(tmp_path / "c.fits")
    assert read.unit == u.K
    assert read.shape == made.cube.spec.shape
    assert read.velocity_convention is u.doppler_radio
    np.testing.assert_allclose(read.spectral_axis.to_value(u.cm / u.s), made.cube.spec.velocities, rtol=1e-12)
    frequency = read.with_spectral_unit(u.Hz).spectral_axis.to_value(u.Hz)
    # Radio convention, by hand.
    wanted = made.cube.spec.rest_frequency * (1 - made.cube.spec.velocities / 299792.458e5)
    np.testing.assert_allclose(np.sort(frequency), np.sort(wanted), rtol=1e-12)
    assert np.array_equal(read.unmasked_data[:].value, made.intensity)


# -- unfinished, damaged, in the way ------------------------------------------------------------------------


def test_an_unfinished_cube_is_refused(filled: Callable[..., Any], tmp_path: Path) -> None:
    made = filled(skip=(1, 8))
    with pytest.raises(CubeError, match="2 of 9 tiles are not done; resume the render"):
        export_fits(made.cube, tmp_path / "c.fits")
    assert not (tmp_path / "c.fits").exists()
    export_fits(made.cube, tmp_path / "c.fits", partial=True, maps=True)
    _check(tmp_path / "c.fits")
    wanted, column = made.intensity.copy(), made.maps[0].copy()
    for tile in (1, 8):
        here = made.cube.spec.tile_slices(tile)
        wanted[(slice(None), *here)] = np.nan
        column[here] = np.nan
    with fits.open(tmp_path / "c.fits") as file:
        assert np.array_equal(file[0].data, wanted, equal_nan=True)
        assert np.array_equal(file[1].data, column, equal_nan=True)


def test_a_tile_without_its_object_is_not_done(filled: Callable[..., Any], tmp_path: Path) -> None:
    cube = filled().cube
    cube.object_path("maps", 4).unlink()
    with pytest.raises(CubeError, match="1 of 9 tiles"):
        export_fits(cube, tmp_path / "c.fits")


@pytest.mark.parametrize("array", ["intensity", "maps"])
def test_a_changed_tile_is_not_exported(filled: Callable[..., Any], tmp_path: Path, array: str) -> None:
    made = filled()
    here = (slice(None), *made.cube.spec.tile_slices(4))
    intensity, maps = made.intensity[here].copy(), made.maps[here].copy()
    (intensity if array == "intensity" else maps)[1, 2, 3] += 1
    made.cube.write_tile(4, intensity, maps)
    with pytest.raises(CubeError, match=f"{array}/c/0/1/1: tile 4 has the checksum .* recorded as"):
        export_fits(made.cube, tmp_path / "c.fits", maps=True)
    assert not list(tmp_path.glob("*.fits"))
    assert not list(tmp_path.glob(".*"))


def test_an_existing_file_stays(filled: Callable[..., Any], tmp_path: Path) -> None:
    made = filled()
    path = tmp_path / "c.fits"
    path.write_text("older")
    with pytest.raises(CubeError, match="exists already"):
        export_fits(made.cube, path)
    assert path.read_text() == "older"
    export_fits(made.cube, path, overwrite=True)
    _check(path)
    with pytest.raises(CubeError, match="exists already"):
        export_fits(made.cube, made.cube.path, overwrite=True)


def test_full_disk_keeps_the_old_file(
    filled: Callable[..., Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    made = filled()
    path = tmp_path / "c.fits"
    path.write_text("older")

    def full(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(cube_fits, "write_all", full)
    with pytest.raises(EngineError, match=r"c.fits: the disk is full; .* KiB were to be written"):
        export_fits(made.cube, path, overwrite=True)
    assert path.read_text() == "older"
    assert not list(tmp_path.glob(".*"))


def test_what_a_killed_export_left_is_removed(filled: Callable[..., Any], tmp_path: Path) -> None:
    made = filled()
    left = tmp_path / f".c.fits.{machine()}.1.0.0123abcd.new"
    left.write_text("half a cube")
    elsewhere = tmp_path / ".c.fits.node17-00000000.1.0.0123abcd.new"
    elsewhere.write_text("may be in work")
    export_fits(made.cube, tmp_path / "c.fits")
    assert not left.exists()
    assert elsewhere.exists()


# -- checksums ----------------------------------------------------------------------------------------------


def test_encoding_against_the_standard() -> None:
    """Example of the FITS Standard 4.0, appendix J.2 (from memory): 868229149 -> hcHjjc9ghcEghc9g."""
    assert checksums.encode(868229149) == "hcHjjc9ghcEghc9g"


def test_sums_and_encoding_against_astropy() -> None:
    rng = np.random.default_rng(11)
    reference = _ValidHDU()
    for dtype in ("f4", "f8"):
        for _ in range(50):
            values = rng.integers(0, 256, 2880, dtype="u1").view(dtype)
            stored = values.astype(values.dtype.newbyteorder(">")).view("u1")
            wanted = int(reference._compute_checksum(stored))
            assert checksums.sum_words(values) in (wanted, wanted or 0xFFFFFFFF)
            assert checksums.sum_bytes(stored.tobytes()) == checksums.sum_words(values)
    for total in [0, 1, 0xFFFFFFFF, *rng.integers(0, 2**32, 500).tolist()]:
        assert checksums.encode(total) == reference._char_encode(0xFFFFFFFF - total)
