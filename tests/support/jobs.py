"""Jobs for tests, as the nested dictionaries that a job file holds."""

from __future__ import annotations

from typing import Any

DEFAULTS: dict[str, dict[str, Any]] = {
    "snapshot": {
        "path": "memory",
        "units": {"length": "1 pc", "density": "1 g/cm3", "velocity": "1 km/s", "temperature": "1 K"},
    },
    "gas": {
        "density": "density",
        "temperature": "15 K",
        "velocity": ["0 km/s", "0 km/s", "0 km/s"],
        "microturbulence": {"b": "0.3 km/s"},
    },
    "line": {"molecule": "CO", "transition": "1-0", "abundance": 1e-4},
    "view": {"toward": "-z", "distance": "140 pc", "pixel": "1 pc"},
    "channels": {"first": "-2 km/s", "last": "2 km/s", "width": "0.1 km/s", "sampling": "centre"},
    "rays": {"per_side": 1},
    "march": {"reconstruction": "constant"},
    "output": {"cube": "unused.zarr", "tile": 16},
}
"""Snapshots of pc, g/cm3, km/s and K; one ray through the middle of each pixel; values at channel centres."""

FLOW = ["x_velocity", "y_velocity", "z_velocity"]
"""Velocity fields of the test snapshots."""

TINY_UNITS = {"length": "1 pc", "density": "1e-20 g/cm3", "velocity": "1 km/s", "temperature": "1 K"}
"""What the code units of the real data are taken to be."""


def make_job(**sections: dict[str, Any] | None) -> dict[str, Any]:
    """`DEFAULTS` with keys replaced section by section; a key given as None is left out."""
    job: dict[str, Any] = {}
    for name in {**DEFAULTS, **sections}:
        merged = {**DEFAULTS.get(name, {}), **(sections.get(name) or {})}
        job[name] = {key: value for key, value in merged.items() if value is not None}
    return job


def channel_centres(job: dict[str, Any]) -> list[float]:
    """Channel centres in km/s, read off the job's own numbers."""
    first, last, width = (float(job["channels"][key].split()[0]) for key in ("first", "last", "width"))
    return [first + width * k for k in range(round((last - first) / width) + 1)]
