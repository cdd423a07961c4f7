"""Which process, on which machine: what tells a run that is alive from one that died."""

from __future__ import annotations

import contextlib
import hashlib
import os
import socket
import time
import uuid
from functools import cache
from pathlib import Path


@cache
def machine() -> str:
    """Name of this machine and, hashed, of what its process ids count in.

    Two containers may share a host name and both have a process 7: the boot and the namespace of process
    ids tell them apart.
    """
    parts = [socket.gethostname()]
    with contextlib.suppress(OSError):
        parts.append(Path("/proc/sys/kernel/random/boot_id").read_text())
    with contextlib.suppress(OSError):
        parts.append(os.readlink("/proc/self/ns/pid"))
    mark = hashlib.blake2b("|".join(parts).encode(), digest_size=4).hexdigest()
    return f"{socket.gethostname()}-{mark}"


def new_run_id() -> str:
    """Name for one run: unique, and in the order of the runs' starts as far as clocks agree."""
    seconds, micro = divmod(time.time_ns() // 1000, 10**6)
    return time.strftime("%Y%m%dT%H%M%S", time.gmtime(seconds)) + f"{micro:06d}-{uuid.uuid4().hex[:8]}"


def _status(pid: int) -> list[str]:
    """Fields of /proc/<pid>/stat after the program's name; empty where the system doesn't tell."""
    try:
        # The name, in parentheses, may hold anything.
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    except OSError:
        return []


def started(pid: int) -> str:
    """When process `pid` started, in the kernel's ticks; "" where the system doesn't tell.

    Process ids are used again; with the start they are unique until the machine restarts.
    """
    status = _status(pid)
    return status[19] if status else ""


def alive(pid: int, since: str) -> bool:
    """Whether the process `pid` of this machine that started at `since` still runs."""
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        pass
    status = _status(pid)
    # A process that was killed and not yet collected by its parent still answers to signals.
    return started(pid) == since and not (status and status[0] in "ZX")
