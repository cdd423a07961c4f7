"""Ctrl-C at a moment that other people's code can stand."""

from __future__ import annotations

import contextlib
import signal
import threading
from collections.abc import Iterator
from multiprocessing import resource_tracker

_INTERRUPT = {signal.SIGINT}


@contextlib.contextmanager
def hold_interrupts() -> Iterator[None]:
    """Put SIGINT off to the end of the block, and make the threads and processes that start in it deaf to it.

    dask's cluster, interrupted while it starts or closes, fails in ways of its own. And Ctrl-C goes to every process of
    a terminal's job, while only the one that looks after the others should act on it: a signal that is blocked stays so
    in what is started meanwhile, and in what that starts later.

    Raises
    ------
    KeyboardInterrupt
        At the end, when the signal came meanwhile.
    """
    before = signal.getsignal(signal.SIGINT)
    if threading.current_thread() is not threading.main_thread() or before in (signal.SIG_IGN, None):
        yield
        return
    # Python starts this helper before the first process that it spawns, and unblocks the signal when it has.
    resource_tracker.ensure_running()
    came = threading.Event()
    # Both are needed: another thread, not of the block, may take the signal on the main thread's behalf.
    signal.signal(signal.SIGINT, lambda *_: came.set())
    mask = signal.pthread_sigmask(signal.SIG_BLOCK, _INTERRUPT)
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, mask)
        signal.signal(signal.SIGINT, before)
        # Whatever else went wrong in the block, went wrong because of it.
        if came.is_set():
            raise KeyboardInterrupt


@contextlib.contextmanager
def stop_on_sigterm() -> Iterator[None]:
    """Let SIGTERM, with which batch systems end jobs, stop the block as Ctrl-C does; in the main thread only."""
    before = signal.signal(signal.SIGTERM, lambda *_: signal.raise_signal(signal.SIGINT))
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)
