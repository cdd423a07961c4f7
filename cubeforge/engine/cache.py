"""The patch cache of a worker process: least recently used goes first, one load per missing patch."""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable
from concurrent.futures import Future

import numpy as np
import numpy.typing as npt

Patch = npt.NDArray[np.float32]


class PatchCache:
    """Optical patches by id, bounded by bytes; shared by the threads of a worker.

    Parameters
    ----------
    load : callable
        Makes a patch; called once for a missing patch, however many threads ask for it meanwhile.
    limit : int
        Bytes to keep. Patches that callers still hold are theirs and don't count.
    """

    def __init__(self, load: Callable[[int], Patch], limit: int) -> None:
        self._load = load
        self._limit = limit
        self._lock = threading.Lock()
        self._kept: OrderedDict[int, Patch] = OrderedDict()
        self._coming: dict[int, Future[Patch]] = {}
        self.size = 0
        self.hits = 0
        self.loads = 0

    def get(self, patch: int) -> Patch:
        """The patch, from memory or loaded now. An error of the load reaches every thread that waits for it."""
        with self._lock:
            kept = self._kept.get(patch)
            if kept is not None:
                self._kept.move_to_end(patch)
                self.hits += 1
                return kept
            coming = self._coming.get(patch)
            mine = coming is None
            if coming is None:
                coming = self._coming[patch] = Future()
                self.loads += 1
        if not mine:
            return coming.result()
        try:
            loaded = self._load(patch)
        except BaseException as error:
            with self._lock:
                del self._coming[patch]
            coming.set_exception(error)
            raise
        with self._lock:
            del self._coming[patch]
            self._keep(patch, loaded)
        coming.set_result(loaded)
        return loaded

    def _keep(self, patch: int, loaded: Patch) -> None:
        """Make room first: not even for a moment is there more than the limit."""
        while self.size + loaded.nbytes > self._limit and self._kept:
            _, old = self._kept.popitem(last=False)
            self.size -= old.nbytes
        if loaded.nbytes <= self._limit:
            self._kept[patch] = loaded
            self.size += loaded.nbytes
