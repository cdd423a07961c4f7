"""Synthetic spectral-line cubes from block-structured AMR simulations of molecular clouds.

>>> import cubeforge
>>> outcome = cubeforge.render("job.toml", workers=2)     # doctest: +SKIP
>>> cubeforge.export_fits(cubeforge.open_cube(outcome.cube), "cube.fits")     # doctest: +SKIP
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from cubeforge._version import VERSION as __version__
from cubeforge.errors import CubeforgeError
from cubeforge.kernel_cache import use_own_cache

use_own_cache()

if TYPE_CHECKING:
    from cubeforge.cube.fits import export_fits
    from cubeforge.cube.store import open_cube
    from cubeforge.engine.plan import make_plan
    from cubeforge.engine.render import render
    from cubeforge.engine.setup import build_setup
    from cubeforge.job import Job, load_job, parse_job
    from cubeforge.report.quicklook import quicklook
    from cubeforge.snapshots import open_snapshot

# Loaded on first use: numba, dask and astropy take seconds that `cubeforge --help` should not.
_HOMES = {
    "Job": "cubeforge.job",
    "build_setup": "cubeforge.engine.setup",
    "export_fits": "cubeforge.cube.fits",
    "load_job": "cubeforge.job",
    "make_plan": "cubeforge.engine.plan",
    "open_cube": "cubeforge.cube.store",
    "open_snapshot": "cubeforge.snapshots",
    "parse_job": "cubeforge.job",
    "quicklook": "cubeforge.report.quicklook",
    "render": "cubeforge.engine.render",
}

__all__ = [
    "CubeforgeError",
    "Job",
    "__version__",
    "build_setup",
    "export_fits",
    "load_job",
    "make_plan",
    "open_cube",
    "open_snapshot",
    "parse_job",
    "quicklook",
    "render",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'cubeforge' has no attribute {name!r}")
    return getattr(importlib.import_module(_HOMES[name]), name)
