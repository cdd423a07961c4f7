"""From a job to the objects that a render is made of; metadata only, no field data are read."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from cubeforge.errors import JobError, nearest
from cubeforge.excitation.base import Excitation
from cubeforge.excitation.lte import LteExcitation
from cubeforge.gas.model import Constant, GasModel, Source, StoredField, microturbulence_b
from cubeforge.job import FieldOrConstant, Job
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.mesh.overlap import SkyIndex
from cubeforge.molecules import Line, Molecule, get_molecule
from cubeforge.quantities import parse
from cubeforge.snapshots import open_snapshot
from cubeforge.snapshots.base import Snapshot
from cubeforge.transfer.channels import Band, make_band
from cubeforge.transfer.march_kernels import BLOCK
from cubeforge.transfer.scene import Region, Scene, build_scene
from cubeforge.transfer.view import View, covering_size, sky_basis

COLDEST = 2.725
"""Temperature (K) that bounds line widths from below when the snapshot stores no usable minimum."""


@dataclass(frozen=True)
class Setup:
    """Everything that a tile needs, made once per process.

    Attributes
    ----------
    job : Job
    snapshot : Snapshot
    length_cm : float
        The snapshot's length unit in cm.
    gas : GasModel
    molecule : Molecule
    line : Line
    excitation : Excitation
    band : Band
    view : View
    region : Region
    scene : Scene
    narrowest : float
        Lower bound on the line width b (cm/s) that the band was made for.
    caveats : tuple of str
        What the user should know before trusting the cube.
    """

    job: Job
    snapshot: Snapshot
    length_cm: float
    gas: GasModel
    molecule: Molecule
    line: Line
    excitation: Excitation
    band: Band
    view: View
    region: Region
    scene: Scene
    narrowest: float
    caveats: tuple[str, ...]

    @property
    def hierarchy(self) -> Hierarchy:
        """The snapshot's hierarchy."""
        return self.snapshot.hierarchy

    def where(self, patch: int) -> str:
        """Name of a patch for messages."""
        hierarchy = self.hierarchy
        return (
            f"{self.snapshot.path}: level {hierarchy.level[patch]}, patch {patch} "
            f"(first cell {hierarchy.lo[patch].tolist()})"
        )

    @property
    def tile(self) -> int:
        """Side of a tile in pixels; no larger than it takes to hold the image."""
        whole = -(-max(self.view.nx, self.view.ny) // BLOCK) * BLOCK
        return min(self.job.output.tile, whole)

    @cached_property
    def sky(self) -> SkyIndex:
        """Entries of the scene by their place on the sky."""
        rect = self.scene.rect
        return SkyIndex(rect[:, ::2], rect[:, 1::2], self.tile, (self.view.nx, self.view.ny))

    @cached_property
    def home_tile(self) -> npt.NDArray[np.int64]:
        """First tile that each patch is behind, shape (patches,): where what is found in a patch is counted, once."""
        rows, columns = -(-self.view.ny // self.tile), -(-self.view.nx // self.tile)
        low = np.clip(np.floor(self.scene.rect[:, ::2]), 0, (self.view.nx - 1, self.view.ny - 1)).astype(
            np.int64
        )
        column, row = (low // self.tile).T
        home = np.full(self.hierarchy.patches, rows * columns, dtype=np.int64)
        np.minimum.at(home, self.scene.patch, row * columns + column)
        return home

    @cached_property
    def unit_cm(self) -> float:
        """The scene's unit of depth in cm."""
        return self.scene.unit * self.length_cm

    @cached_property
    def level_cell(self) -> npt.NDArray[np.float64]:
        """Smallest side of a cell of each level, in the snapshot's length unit."""
        return np.asarray(self.hierarchy.cell_size.min(axis=1))


def _unit(job: Job, snapshot: Snapshot, kind: str, name: str, field: str | None, needed_by: str) -> float:
    """Internal units per stored unit: from the job, else stated by the format, else an error."""
    given = getattr(job.snapshot.units, name)
    if given is not None:
        return float(given)
    units = job.snapshot.units
    if name == "momentum" and units.density is not None and units.velocity is not None:
        return units.density * units.velocity
    if name == "pressure" and units.density is not None and units.velocity is not None:
        return units.density * units.velocity**2
    stated = snapshot.units.get(field or name) or snapshot.units.get(name)
    if stated is not None:
        return parse(f"1 {stated}", kind, where=f"{snapshot.path}: unit of {field or name}")
    raise JobError(
        f"snapshot.units.{name} is missing: {needed_by} needs it, and {snapshot.format_name} files state no "
        f'units; say what one stored unit is, such as {name} = "1 {_CGS[name]}" for data in cgs'
    )


_CGS = {
    "length": "cm",
    "density": "g/cm3",
    "velocity": "cm/s",
    "temperature": "K",
    "momentum": "g/(cm2 s)",
    "pressure": "dyn/cm2",
}
_KINDS = {name: name for name in _CGS} | {"momentum": "momentum density"}


def _source(job: Job, snapshot: Snapshot, given: FieldOrConstant, name: str, key: str) -> Source:
    if given.field is None:
        return Constant(float(given.constant or 0.0))
    if given.field not in snapshot.fields:
        raise JobError(
            f"gas.{key}: the snapshot has no field {given.field!r}; {nearest(given.field, snapshot.fields)}"
        )
    factor = _unit(job, snapshot, _KINDS[name], name, given.field, f"gas.{key} = {given.field!r}")
    return StoredField(given.field, factor)


def build_gas(job: Job, snapshot: Snapshot) -> GasModel:
    """Say which stored field is what, with factors to cgs.

    Raises
    ------
    JobError
        A field that the snapshot lacks (with those there are), or a unit that nobody stated.
    """
    gas = job.gas
    width = gas.microturbulence

    def vector(
        given: tuple[FieldOrConstant, FieldOrConstant, FieldOrConstant] | None, name: str
    ) -> tuple[Source, Source, Source] | None:
        if given is None:
            return None
        x, y, z = (_source(job, snapshot, each, name, f"{name}[{axis}]") for axis, each in enumerate(given))
        return x, y, z

    return GasModel(
        density=_source(job, snapshot, gas.density, "density", "density"),
        temperature=None
        if gas.temperature is None
        else _source(job, snapshot, gas.temperature, "temperature", "temperature"),
        pressure=None
        if gas.pressure is None
        else _source(job, snapshot, gas.pressure, "pressure", "pressure"),
        velocity=vector(gas.velocity, "velocity"),
        momentum=vector(gas.momentum, "momentum"),
        hydrogen_fraction=gas.hydrogen_fraction,
        mean_molecular_weight=gas.mean_molecular_weight,
        microturbulence_b=0.0
        if width is None
        else microturbulence_b(sigma=width.sigma, b=width.b, fwhm=width.fwhm),
        abundance=job.line.abundance,
        bad_cells=gas.bad_cells,
    )


def temperature_range(gas: GasModel, snapshot: Snapshot) -> tuple[float, float]:
    """Bounds on the gas temperature (K) as far as the snapshot's metadata tell; `COLDEST` and inf otherwise."""
    if isinstance(gas.temperature, Constant):
        return gas.temperature.value, gas.temperature.value
    if isinstance(gas.temperature, StoredField):
        stored = snapshot.bounds(gas.temperature.name)
        if stored is not None and np.all(np.isfinite(stored)) and stored.min() > 0.0:
            # Values stored with 32 bits may lie slightly outside bounds taken in 64.
            return float(stored.min()) * gas.temperature.factor * (1.0 - 1e-6), float(
                stored.max()
            ) * gas.temperature.factor * (1.0 + 1e-6)
    return COLDEST, np.inf


def build_view(job: Job, hierarchy: Hierarchy, region: Region, length_cm: float) -> View:
    """Orientation and pixel grid in the snapshot's own space."""
    section = job.view
    toward, right, up = sky_basis(
        np.array(section.toward), np.array(section.north_or_default), section.position_angle
    )
    pixel = section.pixel_length / length_cm
    lo, hi = region.bounds(hierarchy)
    size = section.size or covering_size((right, up), hi - lo, pixel)
    centre = 0.5 * (lo + hi) if section.centre is None else np.array(section.centre) / length_cm
    return View(toward, right, up, centre, pixel, size[0], size[1])


def build_region(job: Job, length_cm: float) -> Region:
    """The crop and the periodic axes in the snapshot's length unit."""
    section = job.region
    box, sphere = section.box, section.sphere
    return Region(
        lo=None if box is None else np.array(box.lo) / length_cm,
        hi=None if box is None else np.array(box.hi) / length_cm,
        centre=None if sphere is None else np.array(sphere.centre) / length_cm,
        radius=np.inf if sphere is None else sphere.radius / length_cm,
        periodic=("x" in section.periodic, "y" in section.periodic, "z" in section.periodic),
    )


def build_setup(job: Job, snapshot: Snapshot | None = None) -> Setup:
    """Open the snapshot and make every object that a render takes.

    Parameters
    ----------
    job : Job
    snapshot : Snapshot, optional
        Instead of the one on disk that the job names.

    Raises
    ------
    CubeforgeError
        Anything in the job that cannot work with this snapshot.
    """
    if snapshot is None:
        snapshot = open_snapshot(job.snapshot_path)
    hierarchy = snapshot.hierarchy
    length_cm = _unit(job, snapshot, "length", "length", None, "every position")
    gas = build_gas(job, snapshot)
    molecule = get_molecule(job.line.molecule, job.folder)
    line = molecule.transition(job.line.transition)
    excitation = LteExcitation(molecule, line, job.line.background)
    region = build_region(job, length_cm)
    view = build_view(job, hierarchy, region, length_cm)
    scene = build_scene(hierarchy, view, region)
    coldest, hottest = temperature_range(gas, snapshot)
    narrowest = float(gas.line_width(np.array(coldest), molecule.mass))
    channels = job.channels
    band = make_band(
        channels.first,
        channels.width,
        channels.count,
        sampling=channels.sampling,
        narrowest=narrowest,
        most_crossings=int(hierarchy.domain[-1].astype(np.int64).sum()),
    )
    caveats = excitation.caveats(coldest, hottest if np.isfinite(hottest) else coldest)
    return Setup(
        job, snapshot, length_cm, gas, molecule, line, excitation, band, view, region, scene, narrowest,
        tuple(caveats),
    )  # fmt: skip
