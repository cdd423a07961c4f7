"""The walls of the house: a room imports only from the rooms above it, and each library stays in its rooms."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent / "cubeforge"
ROOMS = (
    "quantities", "job", "mesh", "snapshots", "molecules", "gas", "excitation", "transfer", "cube", "engine",
    "observe", "report",
)  # fmt: skip
GROUND = ("errors", "_version", "kernel_cache")
"""Under every room."""
ROOF = ("__init__", "cli", "demo", "terminal", "terminal_pages")
"""On top of every room."""
LIBRARIES = {
    "numba": lambda file: "kernels" in file.name or file.name in ("pointers.py", "vectors.py"),
    "llvmlite": lambda file: file.name == "vectors.py",
    "zarr": lambda file: file.parent.name == "cube",
    "numcodecs": lambda file: file.parent.name == "cube",
    "dask": lambda file: file.parent.name == "engine",
    "distributed": lambda file: file.parent.name == "engine",
    "matplotlib": lambda file: file.parent.name == "report",
    "click": lambda file: file.name == "cli.py",
    "rich": lambda file: file.name == "terminal.py",
    "pydantic": lambda file: file.parent.name == "job",
    "astropy": lambda file: file.name in ("quantities.py", "fits.py", "wcs.py"),
}


def files() -> list[Path]:
    found = sorted(PACKAGE.rglob("*.py"))
    assert len(found) > 50
    return found


def imported(file: Path) -> Iterator[str]:
    """Modules that a file imports, wherever in it."""
    for node in ast.walk(ast.parse(file.read_text())):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{file}: relative import"
            module = node.module or ""
            yield from (
                (f"cubeforge.{alias.name}" for alias in node.names) if module == "cubeforge" else (module,)
            )


def room_of(file: Path) -> str:
    parts = file.relative_to(PACKAGE).with_suffix("").parts
    return parts[0]


@pytest.mark.parametrize("file", files(), ids=lambda file: str(file.relative_to(PACKAGE)))
def test_imports_go_down(file: Path) -> None:
    room = room_of(file)
    if room in ROOF:
        return
    allowed = {*GROUND, *ROOMS[: ROOMS.index(room) + 1]} if room in ROOMS else set(GROUND)
    for module in imported(file):
        if module.split(".")[0] == "cubeforge":
            inner = module.split(".")[1] if "." in module else "__init__"
            assert inner in allowed, f"{room} imports {module}"


@pytest.mark.parametrize("file", files(), ids=lambda file: str(file.relative_to(PACKAGE)))
def test_libraries_stay_in_their_rooms(file: Path) -> None:
    for module in imported(file):
        permits = LIBRARIES.get(module.split(".")[0])
        if permits is not None:
            assert permits(file), f"{file.name} imports {module}"


@pytest.mark.parametrize("file", files(), ids=lambda file: str(file.relative_to(PACKAGE)))
def test_files_stay_short(file: Path) -> None:
    assert len(file.read_text().splitlines()) <= 400


def test_the_top_level_is_tidy() -> None:
    allowed = {"README.md", "DEVELOPERS.md", "CHANGELOG.md", "LICENSE", "pyproject.toml", "cubeforge", "deploy",
               "tests", "configs"}  # fmt: skip
    tracked = {path.name for path in PACKAGE.parent.iterdir() if not path.name.startswith(".")}
    assert tracked - {"build", "dist", "cubeforge_amr.egg-info"} <= allowed
