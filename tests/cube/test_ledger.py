"""The ledger: nothing acknowledged is lost, nothing damaged counts."""

from __future__ import annotations

import os
import subprocess
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cubeforge.cube.ledger import LedgerWriter, TileRecord, read_ledger, record_dtype
from cubeforge.cube.verify import verify
from cubeforge.errors import CubeError

RECORD = 8 * 4 + 2 * 8 + 4


def _records(tiles: range, checksum: int = 2**63 + 5, finished: float = 1.5e9) -> list[TileRecord]:
    return [TileRecord(tile, checksum + tile, finished + tile, 0.25, (tile / 3, -1.0)) for tile in tiles]


def _write(folder: Path, tiles: range, **keywords: Any) -> Path:
    with LedgerWriter(folder, "run", ("peak", "column")) as ledger:
        ledger.append(_records(tiles, **keywords))
        return ledger.path


def test_records_come_back(tmp_path: Path) -> None:
    _write(tmp_path, range(10, 20))
    _write(tmp_path, range(5))
    state = read_ledger(tmp_path)
    assert state.tiles.tolist() == [*range(5), *range(10, 20)]
    assert state.records["checksum"].tolist() == [2**63 + 5 + tile for tile in state.tiles.tolist()]
    assert state.records["peak"].tolist() == [tile / 3 for tile in state.tiles.tolist()]
    assert state.statistics == ("peak", "column")
    assert np.flatnonzero(state.done(20)).tolist() == state.tiles.tolist()
    assert (state.problems, state.torn_bytes, len(state.conflicts)) == ((), 0, 0)


def test_empty(tmp_path: Path) -> None:
    for folder in (tmp_path, tmp_path / "missing"):
        state = read_ledger(folder)
        assert len(state.tiles) == 0
        assert not state.done(4).any()


def test_cut_at_every_byte(tmp_path: Path) -> None:
    data = _write(tmp_path / ".", range(4)).read_bytes()
    body = len(data) - 4 * RECORD
    for file in tmp_path.iterdir():
        file.unlink()
    torn = tmp_path / "torn.tiles"
    for length in range(len(data) + 1):
        torn.write_bytes(data[:length])
        state = read_ledger(tmp_path)
        whole = max(0, length - body) // RECORD
        assert state.tiles.tolist() == list(range(whole))
        assert state.problems == ()
        assert state.torn_bytes == (length if length < body else length - body - whole * RECORD)


def test_zeros_at_the_end_are_torn(tmp_path: Path) -> None:
    path = _write(tmp_path, range(4))
    path.write_bytes(path.read_bytes() + bytes(2 * RECORD + 3))
    state = read_ledger(tmp_path)
    assert state.tiles.tolist() == [0, 1, 2, 3]
    assert state.torn_bytes == 2 * RECORD + 3


def test_every_flipped_bit_is_noticed(tmp_path: Path) -> None:
    path = _write(tmp_path, range(3))
    data = path.read_bytes()
    start = len(data) - 2 * RECORD
    for byte in range(RECORD):
        for bit in range(8):
            damaged = bytearray(data)
            damaged[start + byte] ^= 1 << bit
            path.write_bytes(damaged)
            state = read_ledger(tmp_path)
            assert state.tiles.tolist() == [0, 2]
            assert len(state.problems) == 1
            assert "1 of 3 records are damaged, the first is record 1" in state.problems[0]


@pytest.mark.parametrize(
    "line", [b"{", b"\xff\xfe", b"null", b'{"ledger": 99}', b'{"ledger": 1, "statistics": 3}']
)
def test_damaged_first_line_is_reported(tmp_path: Path, line: bytes) -> None:
    path = _write(tmp_path, range(3))
    _write(tmp_path, range(7, 9))
    path.write_bytes(line + b"\n" + path.read_bytes().partition(b"\n")[2])
    state = read_ledger(tmp_path)
    assert state.tiles.tolist() == [7, 8]
    assert "first line is damaged" in state.problems[0]


def test_the_last_record_wins_and_conflicts_are_named(tmp_path: Path) -> None:
    _write(tmp_path, range(4), finished=2e9)
    _write(tmp_path, range(2, 6), finished=1e9)
    assert len(read_ledger(tmp_path).conflicts) == 0
    _write(tmp_path, range(3, 4), checksum=77, finished=3e9)
    state = read_ledger(tmp_path)
    assert state.tiles.tolist() == list(range(6))
    assert state.records["finished"].tolist() == [2e9, 2e9 + 1, 2e9 + 2, 3e9 + 3, 1e9 + 4, 1e9 + 5]
    assert state.conflicts.tolist() == [3]
    assert state.records["checksum"][3] == 80


def test_files_with_other_statistics(tmp_path: Path) -> None:
    _write(tmp_path, range(2))
    with LedgerWriter(tmp_path, "run", ("depth", "peak")) as ledger:
        ledger.append([TileRecord(5, 0, 0.0, 0.0, (8.0, 9.0))])
    state = read_ledger(tmp_path)
    assert sorted(state.statistics) == ["column", "depth", "peak"]
    np.testing.assert_array_equal(state.records["depth"], [np.nan, np.nan, 8.0])
    np.testing.assert_array_equal(state.records["peak"], [0.0, 1 / 3, 9.0])


def test_tiles_of_another_cube_are_refused(tmp_path: Path) -> None:
    _write(tmp_path, range(4))
    with pytest.raises(CubeError, match="names tiles 0 to 3; the cube has 0 to 2"):
        read_ledger(tmp_path).done(3)


def test_wrong_use_is_refused(tmp_path: Path) -> None:
    with pytest.raises(CubeError, match="repeat a name"):
        LedgerWriter(tmp_path, "run", ("tile",))
    ledger = LedgerWriter(tmp_path, "run", ("peak",))
    with pytest.raises(CubeError, match="tile 3 has 0 statistics; wanted 1: peak"):
        ledger.append([TileRecord(3, 0, 0.0, 0.0)])
    ledger.append([])
    ledger.close()
    ledger.close()
    with pytest.raises(CubeError, match="closed"):
        ledger.append([TileRecord(3, 0, 0.0, 0.0, (1.0,))])
    assert record_dtype(("peak",)).itemsize == RECORD - 4 - 8


def test_one_flush_a_batch(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with LedgerWriter(tmp_path, "run", ("peak", "column")) as ledger:
        calls: list[int] = []
        fsync = os.fsync
        monkeypatch.setattr(os, "fsync", lambda file: (calls.append(file), fsync(file))[1])
        ledger.append(_records(range(1000)))
        assert len(calls) == 1


def test_threads_share_a_writer(tmp_path: Path) -> None:
    with LedgerWriter(tmp_path, "run", ("peak", "column")) as ledger:

        def work(first: int) -> None:
            for start in range(first, first + 200, 10):
                ledger.append(_records(range(start, start + 10)))

        threads = [threading.Thread(target=work, args=(first,)) for first in range(0, 1600, 200)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
    state = read_ledger(tmp_path)
    assert state.done(1600).all()
    assert state.problems == ()


def test_processes_write_while_another_reads(tmp_path: Path) -> None:
    script = (
        "import sys\n"
        "from cubeforge.cube.ledger import LedgerWriter, TileRecord\n"
        "with LedgerWriter(sys.argv[1], 'run') as ledger:\n"
        "    for tile in range(int(sys.argv[2]), int(sys.argv[2]) + 300):\n"
        "        ledger.append([TileRecord(tile, tile, 0.0, 0.0)])\n"
    )
    writers = [
        subprocess.Popen([sys.executable, "-c", script, str(tmp_path), str(first)]) for first in (0, 300, 600)
    ]
    seen = 0
    while any(writer.poll() is None for writer in writers):
        state = read_ledger(tmp_path)
        assert state.problems == ()
        assert len(state.tiles) >= seen
        seen = len(state.tiles)
    assert all(writer.wait() == 0 for writer in writers)
    assert read_ledger(tmp_path).done(900).all()
    assert len(list(tmp_path.iterdir())) == 3


# -- verification -------------------------------------------------------------------------------------------


def test_a_sound_cube_verifies(filled: Callable[..., Any]) -> None:
    cube = filled(skip=(2,)).cube
    outcome = verify(cube)
    assert outcome.sound
    assert outcome.checked == 8
    assert verify(cube, sample=3).checked == 3
    assert verify(cube, [0, 1]).checked == 2
    with pytest.raises(CubeError, match="1 tiles are not done, such as tile 2"):
        verify(cube, [1, 2])


def test_missing_changed_and_undecodable_tiles_are_found(filled: Callable[..., Any]) -> None:
    made = filled()
    cube = made.cube
    cube.object_path("maps", 1).unlink()
    cube.object_path("intensity", 3).write_bytes(b"garbage")
    here = (slice(None), *cube.spec.tile_slices(5))
    maps = made.maps[here].copy()
    maps[1, 2, 3] = np.nextafter(maps[1, 2, 3], 9)
    cube.write_tile(5, made.intensity[here], maps)
    outcome = verify(cube)
    assert outcome.missing == (1,)
    assert [tile for tile, _ in outcome.damaged] == [3, 5]
    assert "cannot be decoded" in outcome.damaged[0][1]
    assert "recorded as" in outcome.damaged[1][1]
    assert not outcome.sound
