"""The velocity added to the gas: a number of the job's, or what brings the mass-weighted mean to zero."""

from __future__ import annotations

import math

import numpy as np

from cubeforge.engine.setup import Setup
from cubeforge.mesh.leaves import leaf_mask


def systemic_velocity(setup: Setup) -> float:
    """Velocity to add along the line of sight, cm/s.

    For ``systemic = "mean"`` all leaf cells in the view's patches are read once; sums are exact (`math.fsum`), so
    that a resumed render finds the same number to the last bit.
    """
    given = setup.job.channels.systemic
    if given != "mean":
        return float(given)
    masses, momenta = [], []
    fields = setup.gas.required_fields()
    for patch in np.unique(setup.scene.patch):
        leaf = leaf_mask(setup.hierarchy, int(patch))
        state = setup.gas.state(setup.snapshot.read(int(patch), fields), leaf, setup.where(int(patch)))
        volume = float(np.prod(setup.hierarchy.cell_size[setup.hierarchy.level[patch]]))
        mass = np.where(leaf, state.density, 0.0) * volume
        toward = setup.view.toward
        along = sum(toward[axis] * state.velocity[axis] for axis in range(3))
        masses.append(float(mass.sum()))
        momenta.append(float((mass * along).sum()))
    total = math.fsum(masses)
    return -math.fsum(momenta) / total if total > 0.0 else 0.0
