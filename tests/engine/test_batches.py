"""Batches of tiles, and the order in which tiles are handed out."""

from __future__ import annotations

import numpy as np
import pytest

from cubeforge.cube.ledger import TileRecord
from cubeforge.engine.batches import LARGEST, SECONDS, Batches
from cubeforge.engine.order import z_order


def records(count: int, seconds: float) -> list[TileRecord]:
    return [TileRecord(tile, 0, 0.0, seconds) for tile in range(count)]


def drain(batches: Batches, slots: int) -> list[list[int]]:
    out = []
    while batch := batches.take(slots):
        out.append(batch)
    return out


@pytest.mark.parametrize("slots", [1, 3, 64])
@pytest.mark.parametrize("seconds", [1e-9, 0.01, 100.0])
def test_every_tile_once_in_order(slots: int, seconds: float):
    tiles = list(range(100, 2100))
    batches = Batches(tiles)
    first = batches.take(slots)
    batches.learn(records(len(first), seconds))
    assert [tile for batch in [first, *drain(batches, slots)] for tile in batch] == tiles
    assert batches.take(slots) == []


def test_one_tile_at_a_time_before_anything_is_known():
    batches = Batches(range(1000))
    assert [len(batches.take(2)) for _ in range(5)] == [1] * 5


def test_a_batch_is_a_second_or_two_of_work():
    batches = Batches(range(100_000))
    batches.learn(records(4, 0.1))
    assert len(batches.take(2)) == SECONDS / 0.1
    # Half of the tiles take 0.1 s, half 0.3 s: 0.2 s on average.
    batches.learn(records(4, 0.3))
    assert len(batches.take(2)) == SECONDS / 0.2


def test_slow_tiles_go_one_by_one_and_fast_ones_not_without_bound():
    slow, fast = Batches(range(100_000)), Batches(range(100_000))
    slow.learn(records(1, 1000.0))
    fast.learn(records(1, 0.0))
    assert len(slow.take(1)) == 1
    assert len(fast.take(1)) == LARGEST


def test_the_last_batches_are_small():
    batches = Batches(range(1000))
    batches.learn(records(10, 1e-6))
    sizes = [len(batch) for batch in drain(batches, 4)]
    assert sizes == sorted(sizes, reverse=True)
    # No more than a sixteenth of what is left: four slots, four batches each.
    assert sizes[0] == -(-1000 // 16)
    assert sizes[-16:] == [1] * 16


def test_no_tiles():
    assert Batches([]).take(3) == []


def test_z_order_by_hand():
    # The curve of Morton (1966): a Z of Zs, x fastest.
    assert z_order(4, 4).tolist() == [0, 1, 4, 5, 2, 3, 6, 7, 8, 9, 12, 13, 10, 11, 14, 15]
    assert z_order(1, 5).tolist() == [0, 1, 2, 3, 4]
    assert z_order(5, 1).tolist() == [0, 1, 2, 3, 4]


@pytest.mark.parametrize(("rows", "columns"), [(1, 1), (3, 7), (64, 33), (2, 1000)])
def test_z_order_has_every_tile_once(rows: int, columns: int):
    assert sorted(z_order(rows, columns).tolist()) == list(range(rows * columns))


def test_z_order_keeps_neighbours_together():
    row, column = np.divmod(z_order(64, 64), 64)
    # Any aligned run of 4^k tiles fills a square: 64 tiles span 8 x 8.
    for part_row, part_column in zip(row.reshape(-1, 64), column.reshape(-1, 64), strict=True):
        assert np.ptp(part_row) == np.ptp(part_column) == 7


def test_z_order_of_a_large_grid_interleaves_all_bits():
    # 2^20 tiles along a row: the bit of weight 2^19 is still there.
    order = z_order(1, 2**20)
    np.testing.assert_array_equal(order, np.arange(2**20))
