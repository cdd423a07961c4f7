"""What this machine has to give."""

from __future__ import annotations

from pathlib import Path

import psutil

CONTROL_GROUP = (Path("/sys/fs/cgroup/memory.max"), Path("/sys/fs/cgroup/memory/memory.limit_in_bytes"))
"""Files in which Linux keeps a container's limit (versions 2 and 1 of control groups)."""


def free_memory() -> int:
    """Bytes of memory that this machine can give without swapping, or this container if that is less."""
    limits = [int(psutil.virtual_memory().available)]
    for file in CONTROL_GROUP:
        try:
            limits.append(int(file.read_text()))
        except (OSError, ValueError):
            # No such file, or "max": no limit.
            continue
    return min(limits)
