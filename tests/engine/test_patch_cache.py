"""The patch cache: what it keeps, what it loads, and what many threads see."""

from __future__ import annotations

import threading
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

from cubeforge.engine.cache import Patch, PatchCache
from cubeforge.errors import SnapshotError


class Loader:
    """Makes patches of 4 * (10 + id) bytes and remembers which."""

    def __init__(self) -> None:
        self.loaded: list[int] = []

    def __call__(self, patch: int) -> Patch:
        self.loaded.append(patch)
        return np.full(10 + patch, patch, dtype=np.float32)


def test_least_recently_used_goes_first():
    loader = Loader()
    # Patches 0, 1, 2 are of 40, 44 and 48 bytes: two of them fit, three don't.
    cache = PatchCache(loader, 100)
    cache.get(0)
    cache.get(1)
    assert cache.size == 84
    cache.get(0)
    cache.get(2)
    assert cache.size == 40 + 48
    cache.get(0)
    assert loader.loaded == [0, 1, 2]
    cache.get(1)
    assert loader.loaded == [0, 1, 2, 1]
    # 0 was used after 2.
    assert cache.size == 40 + 44
    cache.get(0)
    assert loader.loaded == [0, 1, 2, 1]
    assert (cache.loads, cache.hits) == (4, 3)


def test_bytes_count_and_not_patches():
    loader = Loader()
    cache = PatchCache(loader, 40 * 10)
    for patch in (0, 0, 90, 0):
        cache.get(patch)
    # Patch 90 takes all 400 bytes by itself: everything else has to go.
    assert loader.loaded == [0, 90, 0]
    assert cache.size == 40


def test_what_does_not_fit_is_given_and_not_kept():
    loader = Loader()
    cache = PatchCache(loader, 39)
    assert cache.get(0).nbytes == 40
    assert cache.size == 0
    cache.get(0)
    assert loader.loaded == [0, 0]


def test_patch_in_use_outlives_its_place():
    cache = PatchCache(Loader(), 50)
    held = cache.get(0)
    cache.get(1)
    np.testing.assert_array_equal(held, np.zeros(10, dtype=np.float32))


def test_one_load_for_many_threads():
    entered, go = threading.Event(), threading.Event()
    loads = []

    def load(patch: int) -> Patch:
        loads.append(patch)
        entered.set()
        assert go.wait(10)
        return np.zeros(4, dtype=np.float32)

    cache = PatchCache(load, 1000)
    with ThreadPoolExecutor(16) as threads:
        results = [threads.submit(cache.get, 7) for _ in range(16)]
        assert entered.wait(10)
        # Another patch does not wait for this one.
        go_on = threading.Timer(0.05, go.set)
        go_on.start()
        patches = [each.result(10) for each in results]
    assert loads == [7]
    assert all(patch is patches[0] for patch in patches)
    assert cache.size == 16


def test_other_patches_do_not_wait():
    go = threading.Event()

    def load(patch: int) -> Patch:
        if patch == 0:
            assert go.wait(10)
        return np.full(1, patch, dtype=np.float32)

    cache = PatchCache(load, 1000)
    with ThreadPoolExecutor(2) as threads:
        slow = threads.submit(cache.get, 0)
        assert threads.submit(cache.get, 1).result(5)[0] == 1
        assert not slow.done()
        go.set()
        assert slow.result(5)[0] == 0


def test_error_reaches_all_who_wait_and_is_not_kept():
    entered, go = threading.Event(), threading.Event()
    loads = []

    def load(patch: int) -> Patch:
        loads.append(patch)
        if len(loads) > 1:
            return np.zeros(4, dtype=np.float32)
        entered.set()
        assert go.wait(10)
        raise SnapshotError("file.dat: truncated")

    cache = PatchCache(load, 1000)
    with ThreadPoolExecutor(8) as threads:
        first = threads.submit(cache.get, 3)
        assert entered.wait(10)
        others = [threads.submit(cache.get, 3) for _ in range(7)]
        threading.Timer(0.2, go.set).start()
        for each in (first, *others):
            with pytest.raises(SnapshotError, match="truncated"):
                each.result(10)
    assert loads == [3]
    # The file has been mended: the next one to ask gets the patch.
    assert cache.get(3).nbytes == 16
    assert loads == [3, 3]
    assert cache.size == 16


def test_many_threads_and_patches():
    rng = np.random.default_rng(1)
    lock = threading.Lock()
    under_way: set[int] = set()

    def load(patch: int) -> Patch:
        with lock:
            assert patch not in under_way, "two loads of one patch at once"
            under_way.add(patch)
        values = np.full(25, patch, dtype=np.float32)
        with lock:
            under_way.remove(patch)
        return values

    cache = PatchCache(load, 2000)
    orders = rng.integers(0, 60, (8, 500))

    def work(order: np.ndarray) -> None:
        for patch in order:
            assert cache.get(int(patch))[0] == patch
            assert cache.size <= 2000

    with ThreadPoolExecutor(8) as threads:
        for each in [threads.submit(work, order) for order in orders]:
            each.result(30)
    assert cache.size == 2000
    assert cache.loads + cache.hits <= 8 * 500
    assert cache.loads >= 60
