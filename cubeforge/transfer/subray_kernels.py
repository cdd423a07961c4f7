"""Sub-rays: a pixel cut into squares, small ones only in front of small cells, with a ray through each.

The rays of a block of pixels come in an order of their own: along a Z through the pixels, through the squares of each
pixel's lattice row by row, and along a Z through the quarters of a square. Which squares are cut depends on absolute
pixels and on the patches behind them alone, so that packets, and the bytes of a cube, don't depend on tiles.
"""

from __future__ import annotations

from typing import Any

from numba import njit

from cubeforge.transfer.vectors import LANES

_opts = {"nogil": True, "cache": True, "error_model": "numpy"}
Array = Any

PACKET_SIDE = 4
"""Pixels a side of the blocks whose rays make up packets."""
EDGE = 1e-6
"""Pixels by which a patch must reach into a square: patches beside it touch it within rounding."""
GUARD = 1.001e-9
"""What `view.footprints` widens rectangles by, relative to their far edge."""
OUTWARD = 0.5 / 3.0**0.5 - 0.25
"""What the rays of four quarters are moved from the quarters' middles, away from each other, in sides of the square
that was cut: to the points of the Gauss-Legendre rule of two points an axis (Abramowitz & Stegun 1964, table 25.4),
whose weights are equal. So the mean of a square that varies smoothly is right to fourth order, not second, and squares
of different sizes side by side leave no error where the sizes change."""
SQUARE = 4
"""Numbers of a square that waits: its column and row among squares of its size in the pixel, how often it was cut, and
whether it will be cut again."""


@njit(**_opts)
def reaches_into(low: float, high: float, start: float, side: float) -> bool:
    """Whether the interval low..high, along one axis of the sky, reaches inside start..start + side."""
    edge = EDGE + GUARD * max(abs(low), abs(high))
    return high - edge > start and low + edge < start + side


@njit(**_opts)
def must_cut(x: int, y: int, i: int, j: int, cuts: int, lattice: int, least: int, most: int, limit: Array, rect: Array,
             level: Array, candidates: Array, n_candidates: int) -> bool:  # fmt: skip
    """Whether a square of pixel (x, y), in column i and row j of those of its size, is too large; see `list_rays`."""
    if cuts < least or cuts >= most:
        return cuts < least
    side = 1.0 / (lattice << cuts)
    # The one ray of a whole pixel is a rule of second order, beside four that are of fourth: it may stand for less.
    allowed = side if cuts > 0 else 2.0 * side
    for c in range(n_candidates - 1, -1, -1):
        p = candidates[c]
        if limit[level[p]] >= allowed:
            # The candidates ascend in level: all others have larger cells.
            return False
        if reaches_into(rect[p, 0], rect[p, 1], x + i * side, side) and reaches_into(
            rect[p, 2], rect[p, 3], y + j * side, side
        ):
            return True
    return False


@njit(**_opts)
def pixel_of_block(index: int) -> tuple[int, int]:
    """Column and row of a pixel of a block, counted along a Z."""
    return (index & 1) | ((index >> 1) & 2), ((index >> 1) & 1) | ((index >> 2) & 2)


@njit(**_opts)
def next_square(block: Array, lattice: int, least: int, most: int, limit: Array, rect: Array, level: Array,
                candidates: Array, n_candidates: int, cursor: Array, stack: Array) -> bool:  # fmt: skip
    """Put the next square of the pixels' lattices on the empty stack; False when there are no more."""
    squares = lattice * lattice
    while cursor[0] < PACKET_SIDE * PACKET_SIDE * squares:
        column, row = pixel_of_block(cursor[0] // squares)
        x, y = block[0] + column, block[2] + row
        i, j = cursor[0] % squares % lattice, cursor[0] % squares // lattice
        cursor[0] += 1
        if x < block[1] and y < block[3]:
            cut = must_cut(x, y, i, j, 0, lattice, least, most, limit, rect, level, candidates, n_candidates)
            stack[0, 0], stack[0, 1], stack[0, 2], stack[0, 3] = i, j, 0, cut
            cursor[1], cursor[2], cursor[3] = 1, x, y
            return True
    return False


@njit(**_opts)
def cut_square(lattice: int, least: int, most: int, limit: Array, rect: Array, level: Array, candidates: Array,
               n_candidates: int, cursor: Array, stack: Array) -> None:  # fmt: skip
    """Put the quarters of the square that was just taken off the stack there, the first on top."""
    top, x, y = cursor[1], cursor[2], cursor[3]
    i, j, cuts = 2 * stack[top, 0], 2 * stack[top, 1], stack[top, 2] + 1
    any_cut = False
    for place in range(4):
        column, row = i + ((3 - place) & 1), j + ((3 - place) >> 1)
        cut = must_cut(
            x, y, column, row, cuts, lattice, least, most, limit, rect, level, candidates, n_candidates
        )
        any_cut |= cut
        into = stack[top + place]
        into[0], into[1], into[2], into[3] = column, row, cuts, cut
    if any_cut:
        # The rays of four equal squares are placed as one rule; three would not make one.
        stack[top : top + 4, 3] = 1
    cursor[1] = top + 4


@njit(**_opts)
def list_rays(block: Array, lattice: int, least: int, most: int, limit: Array, rect: Array, level: Array,
              candidates: Array, n_candidates: int, cursor: Array, stack: Array, places: Array, pixels: Array,
              shares: Array) -> int:  # fmt: skip
    """List the next rays of a block, as many as a packet holds.

    Every pixel is cut into ``lattice * lattice`` squares. A square is cut into four while its side exceeds the
    `limit` of a level with a patch behind the square (half the limit if it was not cut before), from `least` to `most`
    times; where one of the four is cut again,
    so are its siblings, once. So the squares that remain are whole lattices or fours of equal size.

    Parameters
    ----------
    block : int64, shape (4,)
        Pixels ``x0, x1, y0, y1``, half open; x0 and y0 are multiples of PACKET_SIDE, and the block is no larger.
    lattice, least, most : int
    limit : float64, shape (levels,)
        Largest side, in pixels, of a square before cells of each level; does not rise with level.
    rect, level
        See `march_kernels.march_tile`.
    candidates : int32
        Patches behind the block, ascending in level; the first `n_candidates`.
    cursor : int64, shape (4,), changed
        Where the list is: zeros at the start of a block.
    stack : int64, shape (3 * most + 4, SQUARE), scratch
        Squares that wait; to be left alone within a block.
    places : float64, shape (LANES, 2), out
        Where on the sky each ray is, in pixels.
    pixels : int64, shape (LANES, 2), out
        Column and row of the pixel that it belongs to.
    shares : float64, shape (LANES, 2), out
        Its weight in the pixel's mean, which is its square's area; and in half the difference of the means of two sets
        of rays, the dark and the light squares of chessboards of squares of each size (no such sets in a pixel with a
        single ray). Both sets have the pixel's centre, so that a gradient across it makes no difference.

    Returns
    -------
    int
        Number of rays listed; 0 at the end of the block.
    """
    n = 0
    while n < LANES:
        if cursor[1] == 0 and not next_square(block, lattice, least, most, limit, rect, level, candidates,
                                              n_candidates, cursor, stack):  # fmt: skip
            break
        cursor[1] -= 1
        i, j, cuts, cut = stack[cursor[1]]
        if cut:
            cut_square(lattice, least, most, limit, rect, level, candidates, n_candidates, cursor, stack)
            continue
        count = lattice << cuts
        outward = 2.0 * OUTWARD if cuts > 0 else 0.0
        places[n, 0] = cursor[2] + (i + 0.5 + (outward if i & 1 else -outward)) / count
        places[n, 1] = cursor[3] + (j + 0.5 + (outward if j & 1 else -outward)) / count
        pixels[n, 0], pixels[n, 1] = cursor[2], cursor[3]
        light = (i + j) & 1
        # An odd lattice has one dark square more than light ones; quarters are always two and two.
        dark_squares = (count * count + 1) // 2
        of_set = (count * count - dark_squares if light else dark_squares) / (count * count)
        shares[n, 0] = 1.0 / (count * count)
        shares[n, 1] = (-0.5 if light else 0.5) * shares[n, 0] / of_set
        n += 1
    return n
