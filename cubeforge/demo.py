"""The demonstration: a snapshot of a turbulent clump with a collapsing, rotating core, and a job file for it."""

from __future__ import annotations

from pathlib import Path

from cubeforge.errors import JobError
from cubeforge.snapshots.demo import write_demo_snapshot

SNAPSHOT = "clump.plotfile"
JOB = "clump.toml"

_JOB = """\
# A render of the demonstration clump: 13CO 1-0, seen from a slanted direction.
# Run it with:  cubeforge render {job}

[snapshot]
path = "{snapshot}"                 # relative to this file

[snapshot.units]                        # what one stored unit is: this snapshot is in cgs
length = "1 cm"
density = "1 g/cm3"
velocity = "1 cm/s"
temperature = "1 K"

[gas]
density = "density"                     # names of stored fields, or constants such as "15 K"
temperature = "temperature"
velocity = ["x_velocity", "y_velocity", "z_velocity"]
microturbulence = {{ sigma = "0.15 km/s" }}

[line]
molecule = "13CO"                       # a built-in rotor, or a data file
transition = "1-0"
abundance = 1.5e-6                      # per H2

[view]
toward = [0.35, -0.25, -0.9]            # direction of looking, from the observer into the cloud
north = "+y"
distance = "140 pc"
pixel = "15 arcsec"
sky = {{ longitude = "66.4 deg", latitude = "26.1 deg" }}

[channels]                              # centres of the first and the last channel
first = "-4 km/s"
last = "4 km/s"
width = "0.1 km/s"
systemic = "mean"                       # the cloud's mass-weighted mean velocity is put at 0

[output]
cube = "clump.zarr"
brightness = "K"
"""


def write_demo(folder: Path, *, seed: int = 7, levels: int = 4) -> Path:
    """Write the demonstration snapshot and its job file into `folder`.

    Returns
    -------
    Path
        The job file.

    Raises
    ------
    JobError
        One of the files is there already.
    """
    job = folder / JOB
    for path in (job, folder / SNAPSHOT):
        if path.exists():
            raise JobError(f"{path}: is there already; choose another folder, or remove it")
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise JobError(f"{folder}: cannot be made ({error.strerror})") from None
    write_demo_snapshot(folder / SNAPSHOT, levels=levels, seed=seed)
    job.write_text(_JOB.format(job=JOB, snapshot=SNAPSHOT))
    return job
