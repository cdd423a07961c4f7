"""Patches on demand: read, ghost-filled where slopes are wanted, and turned into their optical form."""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.engine.cache import Patch
from cubeforge.engine.setup import Setup
from cubeforge.gas.model import Constant, GasState, Source, StoredField
from cubeforge.mesh.ghosts import GhostFiller
from cubeforge.mesh.leaves import leaf_mask
from cubeforge.quantities import K_B
from cubeforge.snapshots.base import Box
from cubeforge.transfer.optical import LineCells, pack_cells, velocity_slopes

Raw = dict[str, npt.NDArray[np.floating[Any]]]
FloatArray = npt.NDArray[np.float64]

PATCH_STATISTICS = ("mended_cells", "narrow_cells", "read_bytes", "cell_emission", "cell_emission_limited")
"""What is counted when a patch is made: cells mended, lines narrower than planned for, bytes read, and the thin
emission of leaf cells, all of it and from cells where the slope limiter acted."""


class RawCache:
    """Stored arrays of whole patches, least recently used gone first, so that neighbours don't read them again.

    Patches that no ray meets are read only in the parts that are asked for.

    Parameters
    ----------
    setup : Setup
    limit : int
        Bytes to keep.
    """

    def __init__(self, setup: Setup, limit: int) -> None:
        self._snapshot = setup.snapshot
        self._fields = setup.gas.required_fields()
        self._limit = limit
        self._in_view = np.zeros(setup.hierarchy.patches, dtype=bool)
        self._in_view[setup.scene.patch] = True
        self._lock = threading.Lock()
        self._kept: OrderedDict[int, Raw] = OrderedDict()
        self._size = 0
        self._counted = threading.local()

    def read(self, patch: int, fields: Sequence[str], box: Box | None = None) -> Raw:
        """As a snapshot's `read`."""
        with self._lock:
            kept = self._kept.get(patch)
            if kept is not None:
                self._kept.move_to_end(patch)
        if kept is None:
            if box is not None and not self._in_view[patch]:
                part = self._snapshot.read(patch, fields, box)
                self._count(sum(array.nbytes for array in part.values()))
                return part
            kept = self._snapshot.read(patch, self._fields)
            self._count(int(self._snapshot.read_bytes(np.array([patch]), self._fields)[0]))
            self._keep(patch, kept)
        if box is None:
            return {name: kept[name] for name in fields}
        (x0, y0, z0), (x1, y1, z1) = box
        return {name: kept[name][x0:x1, y0:y1, z0:z1] for name in fields}

    def _keep(self, patch: int, arrays: Raw) -> None:
        with self._lock:
            if patch not in self._kept:
                self._kept[patch] = arrays
                self._size += sum(array.nbytes for array in arrays.values())
            while self._size > self._limit and self._kept:
                _, old = self._kept.popitem(last=False)
                self._size -= sum(array.nbytes for array in old.values())

    def _count(self, size: int) -> None:
        self._counted.bytes = getattr(self._counted, "bytes", 0) + size

    def take_count(self) -> int:
        """Bytes that this thread has read since the last call."""
        size = getattr(self._counted, "bytes", 0)
        self._counted.bytes = 0
        return int(size)


class PatchMaker:
    """Makes optical patches of one setup; safe from several threads.

    Parameters
    ----------
    setup : Setup
    systemic : float
        Velocity added to the gas, cm/s.
    raw_limit : int
        Bytes of stored arrays to keep for neighbours.
    """

    def __init__(self, setup: Setup, systemic: float, raw_limit: int) -> None:
        self._setup = setup
        self._systemic = systemic
        self._raw = RawCache(setup, raw_limit)
        gas = setup.gas
        self._fields = gas.required_fields()
        self._thermal = 2.0 * K_B / setup.molecule.mass
        motion = gas.velocity if gas.velocity is not None else gas.momentum
        assert motion is not None
        self._motion: tuple[Source, ...] = motion
        volume = [gas.density, *(motion if gas.velocity is None else ())]
        self._filler = GhostFiller(
            setup.hierarchy,
            self._raw.read,
            periodic=setup.region.periodic,
            weight=gas.density.name if isinstance(gas.density, StoredField) else None,
            per_volume=[source.name for source in volume if isinstance(source, StoredField)],
        )

    def make(self, patch: int) -> tuple[Patch, npt.NDArray[np.float64]]:
        """Read a patch and turn it into what the march needs; also counts, see `PATCH_STATISTICS`.

        Raises
        ------
        SnapshotError, GasError, ExcitationError
            The patch cannot be read or used; the message names it.
        """
        setup = self._setup
        where = setup.where(patch)
        leaf = leaf_mask(setup.hierarchy, patch)
        state = setup.gas.state(self._raw.read(patch, self._fields), leaf, where)
        kappa, emis = setup.excitation.coefficients(state.n_molecule, state.temperature)
        velocity = self._along(state.velocity) + self._systemic
        slopes = None
        if setup.job.march.reconstruction == "linear":
            slopes = velocity_slopes(self._with_ghosts(patch, state), setup.job.march.limiter)
        line = LineCells(kappa, emis, state.temperature, self._thermal, setup.gas.microturbulence_b**2)
        cells, found = pack_cells(
            state.density, velocity, slopes, [line], setup.band, setup.unit_cm, narrowest=setup.narrowest, leaf=leaf
        )  # fmt: skip
        volume = float(np.prod(setup.hierarchy.cell_size[setup.hierarchy.level[patch]]))
        emission = (found.emission * volume, found.emission_limited * volume)
        counts = (state.mended_cells, found.narrow, self._raw.take_count(), *emission)
        return cells, np.array(counts, dtype=np.float64)

    def _along(self, velocity: Sequence[FloatArray]) -> FloatArray:
        """Part along the line of sight."""
        toward = self._setup.view.toward
        return np.asarray(sum(toward[axis] * velocity[axis] for axis in range(3) if toward[axis] != 0.0))

    def _with_ghosts(self, patch: int, state: GasState) -> FloatArray:
        """Line-of-sight velocity with one layer of ghost cells, cm/s; leaf cells as in `state`."""
        gas = self._setup.gas
        toward = self._setup.view.toward
        used = [self._motion[axis] for axis in range(3) if toward[axis] != 0.0]
        names = [source.name for source in used if isinstance(source, StoredField)]
        if gas.velocity is None and isinstance(gas.density, StoredField):
            names.append(gas.density.name)
        filled = self._filler.fill(patch, names) if names else {}
        shape = tuple(n + 2 for n in state.density.shape)
        out = np.zeros(shape)
        for axis in range(3):
            if toward[axis] != 0.0:
                out += toward[axis] * _values(self._motion[axis], filled, shape)
        if gas.velocity is None:
            density = _values(gas.density, filled, shape)
            out = np.divide(out, density, out=np.zeros(shape), where=density > 0.0)
        # Cells that were mended have no velocity of their own.
        return np.nan_to_num(out, copy=False, nan=0.0, posinf=0.0, neginf=0.0)


def _values(source: Source, filled: dict[str, FloatArray], shape: tuple[int, ...]) -> FloatArray:
    if isinstance(source, Constant):
        return np.full(shape, source.value)
    return filled[source.name] * source.factor
