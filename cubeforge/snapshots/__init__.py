"""Snapshots on disk and in memory: a hierarchy, and the cells of a patch when asked for."""

from cubeforge.snapshots.base import Box, Snapshot
from cubeforge.snapshots.memory import MemorySnapshot
from cubeforge.snapshots.registry import open_snapshot

__all__ = ["Box", "MemorySnapshot", "Snapshot", "open_snapshot"]
