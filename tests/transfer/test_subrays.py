"""Where sub-rays go: squares that tile every pixel, small ones in front of small cells and nowhere else."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from support.jobs import FLOW, TINY_UNITS, make_job
from support.rendering import render_image

from cubeforge.transfer.subray_kernels import SQUARE, list_rays
from cubeforge.transfer.subrays import Sampling, adaptive_sampling, fixed_sampling
from cubeforge.transfer.vectors import LANES

WHOLE = (0, 4, 0, 4)


@dataclass
class Rays:
    """Rays of a block: places, shares (n, 2), pixels (n, 2), and the side and low corner of each one's square."""

    places: np.ndarray
    pixels: np.ndarray
    shares: np.ndarray

    @property
    def side(self) -> np.ndarray:
        return np.sqrt(self.shares[:, 0])

    @property
    def corner(self) -> np.ndarray:
        return np.floor(self.places / self.side[:, None]) * self.side[:, None]


def rays_of(sampling: Sampling, rect=(), level=(), block=WHOLE) -> Rays:
    """List the rays of a block, packet by packet."""
    rect = np.array(rect, dtype=float).reshape(-1, 4)
    level = np.array(level, dtype=np.int32)
    cursor, stack = np.zeros(4, np.int64), np.full((3 * sampling.most + 4, SQUARE), -1, np.int64)
    candidates = np.arange(len(rect), dtype=np.int32)
    parts = []
    while True:
        out = np.full((LANES, 2), np.nan), np.full((LANES, 2), -1), np.full((LANES, 2), np.nan)
        n = list_rays(np.array(block), sampling.lattice, sampling.least, sampling.most, sampling.limit, rect, level,
                      candidates, len(rect), cursor, stack, *out)  # fmt: skip
        if n == 0:
            return Rays(*(np.concatenate(each) for each in zip(*parts, strict=True)))
        # Packets are full, but for the last.
        assert not parts or len(parts[-1][0]) == LANES
        parts.append(tuple(each[:n] for each in out))


def small_behind(x: float, y: float, side: float, allowed: float, rect, level, cells, spacing: float) -> bool:
    """Whether a square has a patch behind it with cells that want squares smaller than `allowed`; by the definition."""
    return any(
        spacing * cells[lev] < allowed * (1.0 - 1e-6)
        and a < x + side - 1e-5 and b > x + 1e-5 and c < y + side - 1e-5 and d > y + 1e-5
        for (a, b, c, d), lev in zip(rect, level, strict=True)
    )  # fmt: skip


# Edges of pixels and of their parts, and others that are clearly beside them.
edges = st.integers(-16, 80).map(lambda n: n / 16) | st.integers(-1000, 5000).map(lambda n: n / 1000)
boxes = st.tuples(edges, edges, edges, edges).filter(
    lambda e: abs(e[0] - e[1]) > 1e-3 and abs(e[2] - e[3]) > 1e-3
)


@st.composite
def skies(draw):
    """Patches of up to five levels behind a block of 4 x 4 pixels, and how to sample them."""
    count = draw(st.integers(0, 6))
    level = sorted(draw(st.lists(st.integers(0, 4), min_size=count, max_size=count)))
    rect = [
        (min(a, b), max(a, b), min(c, d), max(c, d)) for a, b, c, d in (draw(boxes) for _ in range(count))
    ]
    coarsest = draw(st.sampled_from([0.3, 1.0, 4.0, 5.0]))
    cells = coarsest / np.cumprod([1, *draw(st.lists(st.sampled_from([2, 4]), min_size=4, max_size=4))])
    spacing = draw(st.sampled_from([1.0, 0.5, 0.3]))
    sampling = adaptive_sampling(cells, spacing, 2 ** draw(st.integers(0, 5)), draw(st.booleans()))
    return rect, level, cells, spacing, sampling


@settings(deadline=None, max_examples=60)
@given(sky=skies())
def test_squares_tile_their_pixels_and_are_as_small_as_wanted(sky):
    rect, level, cells, spacing, sampling = sky
    rays = rays_of(sampling, rect, level)
    finest = 2**sampling.most
    cover = np.zeros((4 * finest, 4 * finest), dtype=int)
    np.testing.assert_array_equal(np.floor(rays.places).astype(int), rays.pixels)
    for (x, y), side in zip(rays.corner, rays.side, strict=True):
        i, j, n = (int(round(value * finest)) for value in (x, y, side))
        cover[i : i + n, j : j + n] += 1
        cuts = int(round(-np.log2(side)))
        assert sampling.least <= cuts <= sampling.most
        if cuts < sampling.most:
            assert not small_behind(x, y, side, side if cuts else 2.0 * side, rect, level, cells, spacing)
        # Its parent was cut for a reason of its own, or for the sake of one of the parent's siblings.
        if cuts > sampling.least:
            above = 2.0 * side if cuts == 1 else 4.0 * side
            x0, y0 = np.floor(np.array([x, y]) / above) * above
            wide = 2.0 * above if cuts == 1 else 0.5 * above
            assert small_behind(x0, y0, above, wide, rect, level, cells, spacing)
    assert (cover == 1).all()


@settings(deadline=None, max_examples=30)
@given(sky=skies())
def test_shares_of_each_pixel(sky):
    rect, level, _, _, sampling = sky
    rays = rays_of(sampling, rect, level)
    for pixel in np.ndindex(4, 4):
        of_pixel = (rays.pixels == pixel).all(axis=1)
        area, signed = rays.shares[of_pixel].T
        assert area.sum() == 1.0
        if len(area) > 1:
            # Two sets of half the area each, with the pixel's centre in common: half their difference has no weight.
            assert signed[signed > 0.0].sum() == pytest.approx(0.5, rel=1e-12)
            assert signed.sum() == pytest.approx(0.0, abs=1e-15)
            np.testing.assert_allclose(signed @ rays.places[of_pixel], 0.0, atol=1e-14)


@settings(deadline=None, max_examples=30)
@given(sky=skies(), powers=st.tuples(st.integers(0, 3), st.integers(0, 3)))
def test_means_of_cubics_are_exact_where_a_pixel_is_cut(sky, powers):
    # The rule of two Gauss-Legendre points is exact for polynomials of third degree (Abramowitz & Stegun 1964, 25.4).
    rect, level, _, _, sampling = sky
    rays = rays_of(sampling, rect, level)
    p, q = powers
    for x, y in np.ndindex(4, 4):
        of_pixel = (rays.pixels == (x, y)).all(axis=1)
        if of_pixel.sum() > 1:
            found = rays.shares[of_pixel, 0] @ np.prod(rays.places[of_pixel] ** powers, axis=1)
            wanted = (
                ((x + 1) ** (p + 1) - x ** (p + 1))
                * ((y + 1) ** (q + 1) - y ** (q + 1))
                / ((p + 1) * (q + 1))
            )
            assert found == pytest.approx(wanted, rel=1e-12)


@settings(deadline=None, max_examples=60)
@given(sky=skies(), place=st.tuples(st.floats(0.0, 4.0), st.floats(0.0, 4.0)))
def test_every_cubic_cell_is_met(sky, place):
    # A cube's shadow holds a disc of half its side, wherever one looks from; half a cell is the default spacing.
    rect, level, cells, _, _ = sky
    rays = rays_of(adaptive_sampling(cells, 0.5, 64, False), rect, level)
    for (a, b, c, d), lev in zip(rect, level, strict=True):
        radius = 0.5 * cells[lev]
        x, y = np.clip(place, (a, c), (b, d))
        if (
            x - radius >= 0.0
            and x + radius <= 4.0
            and y - radius >= 0.0
            and y + radius <= 4.0
            and radius > 1 / 64
        ):
            assert np.hypot(rays.places[:, 0] - x, rays.places[:, 1] - y).min() < radius


def test_a_corner_of_fine_cells_costs_few_rays():
    # Six levels under a corner: a four of squares of each size but the last has one member that is cut on, and the
    # other three are cut once: 12 rays at each of five sizes, and 4 of the smallest.
    cells = 2.0 ** np.arange(1, -6, -1)
    rays = rays_of(adaptive_sampling(cells, 0.5, 64, False), [(-9, 9, -9, 9), (2.0, 2.01, 1.0, 1.01)], [0, 6])
    in_pixel = (rays.pixels == (2, 1)).all(axis=1)
    assert in_pixel.sum() == 5 * 12 + 4
    assert rays.side[in_pixel].min() == 1 / 64
    others = rays.side[~in_pixel]
    assert len(others) == 15 * 4
    assert (others == 0.5).all()


@pytest.mark.parametrize("far", [0.0, 4096.0])
def test_a_patch_beside_a_pixel_does_not_count(far: float):
    # Rectangles come 1e-9 of their far edge wider than they are (`view.footprints`).
    guard = 1e-9 * (far + 2.0)
    rect = [(far + 1.0 - guard, far + 2.0 + guard, far + 1.0 - guard, far + 2.0 + guard)]
    block = (int(far), int(far) + 4, int(far), int(far) + 4)
    rays = rays_of(adaptive_sampling(np.array([0.5]), 0.5, 64, False), rect, [0], block)
    assert len(rays.places) == 15 + 16
    assert ((rays.side == 0.25) == (rays.pixels == (far + 1, far + 1)).all(axis=1)).all()


def test_a_cell_as_wide_as_the_square_does_not_cut_it():
    # One third as three tenths and a bit would: a pixel of 0.3 on cells of 0.1 * 3.
    for cell, count in ((0.1 * 3 / 0.3, 4), (0.999 * 0.1 * 3 / 0.3, 16)):
        rays = rays_of(adaptive_sampling(np.array([cell]), 0.5, 64, False), [(0, 1, 0, 1)], [0], (0, 1, 0, 1))
        assert len(rays.places) == count


def test_the_cap():
    rays = rays_of(adaptive_sampling(np.array([1e-3]), 0.5, 8, False), [(-1, 5, -1, 5)], [0])
    assert len(rays.places) == 16 * 8**2


@pytest.mark.parametrize("per_side", [1, 2, 3, 5, 8])
@pytest.mark.parametrize("error", [False, True])
def test_a_fixed_number(per_side: int, error: bool):
    # Whatever is behind, in the order of a Z through the pixels, row by row within each.
    rays = rays_of(fixed_sampling(per_side, np.array([0.01]), error), [(-1, 5, -1, 5)], [0])
    side = 2 if error and per_side == 1 else per_side
    inside = (np.arange(side) + 0.5) / side
    pixels = [(2 * a + c, 2 * b + d) for b in (0, 1) for a in (0, 1) for d in (0, 1) for c in (0, 1)]
    wanted = [(x + i, y + j) for x, y in pixels for j in inside for i in inside]
    np.testing.assert_allclose(rays.places, wanted, rtol=1e-15)
    np.testing.assert_allclose(rays.shares[:, 0], side**-2.0, rtol=1e-15)
    signed = rays.shares[: side**2, 1]
    if side > 1:
        assert signed[signed > 0.0].sum() == pytest.approx(0.5)
        assert signed[signed < 0.0].sum() == pytest.approx(-0.5)
        # A chessboard.
        board = np.sign(signed).reshape(side, side)
        assert (board[1:] != board[:-1]).all()
        assert (board[:, 1:] != board[:, :-1]).all()


def test_quarters_come_along_a_z():
    rays = rays_of(adaptive_sampling(np.array([0.5]), 0.5, 64, False), [(0, 1, 0, 1)], [0], (0, 1, 0, 1))
    quarters = [(0, 0), (1, 0), (0, 1), (1, 1)]
    wanted = [(2 * a + c, 2 * b + d) for a, b in quarters for c, d in quarters]
    np.testing.assert_array_equal(4.0 * rays.corner, wanted)


def test_a_block_at_the_edge_of_the_image():
    block = (8, 10, 4, 7)
    rays = rays_of(adaptive_sampling(np.array([0.5]), 0.5, 64, False), [(9.2, 9.3, 5.2, 5.3)], [0], block)
    assert {tuple(pixel) for pixel in rays.pixels.tolist()} == {(x, y) for x in (8, 9) for y in (4, 5, 6)}
    assert len(rays.places) == 5 + 16


@pytest.mark.parametrize("error", [False, True])
def test_tiles_change_no_bit_of_deep_squares(tiny_snapshot: Path, error: bool):
    # Pixels of 0.09 pc: from one ray to 256 in each (cells are 1/16 to 1/64 pc), packets across pixels.
    images = []
    for tile in (8, 16, 64):
        job = make_job(
            snapshot={"path": str(tiny_snapshot), "units": {**TINY_UNITS, "temperature": "4 K"}},
            gas={"temperature": "Temp", "velocity": FLOW},
            view={
                "toward": [0.6, -0.35, 0.8],
                "position_angle": "20 deg",
                "pixel": "0.09 pc",
                "size": [21, 19],
            },
            channels={"first": "-1 km/s", "last": "1 km/s"},
            rays={"per_side": "auto", "error": error},
            output={"tile": tile},
        )
        images.append(render_image(job)[:2])
    image, maps = images[0]
    assert image.max() > 1.0
    assert len(maps) == (3 if error else 1)
    for again, maps_again in images[1:]:
        np.testing.assert_array_equal(again.view(np.int32), image.view(np.int32))
        np.testing.assert_array_equal(maps_again, maps)
