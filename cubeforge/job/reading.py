"""The job as a whole, and reading it: errors name the key, what was found and what would do."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from pydantic import Field, ValidationError

from cubeforge.errors import JobError, nearest
from cubeforge.job.sections import (
    ChannelSection,
    GasSection,
    LineSection,
    MarchSection,
    OutputSection,
    RaySection,
    RegionSection,
    SnapshotSection,
    ViewSection,
)
from cubeforge.job.values import Section


class Job(Section):
    """One render. `folder` is where relative paths start; `raw` is what the file says, for other processes."""

    snapshot: SnapshotSection
    gas: GasSection
    line: LineSection
    view: ViewSection
    channels: ChannelSection
    output: OutputSection
    region: RegionSection = RegionSection()
    rays: RaySection = RaySection()
    march: MarchSection = MarchSection()
    folder: str = Field(default=".", exclude=True)
    raw: dict[str, Any] = Field(default_factory=dict, exclude=True)

    def resolve(self, path: str) -> Path:
        """A path of the job file, relative to the file's own folder."""
        return (Path(self.folder) / Path(path).expanduser()).resolve()

    @property
    def snapshot_path(self) -> Path:
        """Where the snapshot is."""
        return self.resolve(self.snapshot.path)

    @property
    def cube_path(self) -> Path:
        """Where the cube goes."""
        return self.resolve(self.output.cube)


def _known_keys(location: tuple[Any, ...]) -> list[str]:
    """Keys that the section at `location` takes."""
    model: Any = Job
    for part in location:
        field = model.model_fields.get(part) if hasattr(model, "model_fields") else None
        if field is None:
            return []
        inner = [
            a
            for a in (field.annotation, *getattr(field.annotation, "__args__", ()))
            if hasattr(a, "model_fields")
        ]
        if not inner:
            return []
        model = inner[0]
    return [name for name in model.model_fields if name not in ("folder", "raw")]


def _sentence(error: Any, source: str) -> str:
    location = tuple(
        part
        for part in error["loc"]
        if not (isinstance(part, str) and part.startswith(("function-", "literal[")))
    )
    key = ".".join(str(part) for part in location)
    found = error.get("input")
    match error["type"]:
        case "extra_forbidden":
            known = _known_keys(location[:-1])
            return f"{source}: unknown key {key!r}; {nearest(str(location[-1]), known)}"
        case "missing":
            return f"{source}: {key} is missing"
        case "value_error":
            return f"{source}: {key}: {error['ctx']['error']}"
        case "literal_error":
            return f"{source}: {key}: {found!r} is not one of {error['ctx']['expected']}"
        case _:
            return f"{source}: {key}: {error['msg'][0].lower() + error['msg'][1:]}, found {found!r}"


def parse_job(data: dict[str, Any], *, folder: str | Path = ".", source: str = "job") -> Job:
    """Validate a job given as nested dictionaries, as TOML gives them.

    Raises
    ------
    JobError
        One line for each thing that is wrong.
    """
    for reserved in ("folder", "raw"):
        if reserved in data:
            raise JobError(f"{source}: unknown key {reserved!r}; {nearest(reserved, _known_keys(()))}")
    try:
        return Job.model_validate({**data, "folder": str(folder), "raw": data})
    except ValidationError as error:
        lines = dict.fromkeys(_sentence(e, source) for e in error.errors())
        raise JobError("\n".join(lines)) from None


def load_job(path: str | Path) -> Job:
    """Read a job file.

    Raises
    ------
    JobError
        The file is missing, is not TOML, or says something that cannot be used.
    """
    path = Path(path)
    try:
        with path.open("rb") as file:
            data = tomllib.load(file)
    except FileNotFoundError:
        raise JobError(f"{path}: there is no such job file") from None
    except IsADirectoryError:
        raise JobError(f"{path}: is a folder; a job file (TOML) is wanted") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise JobError(f"{path}: not a TOML file: {error}") from None
    return parse_job(data, folder=path.resolve().parent, source=str(path))
