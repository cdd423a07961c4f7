"""Levels, transitions, collision rates and partition functions of molecules."""

from __future__ import annotations

from pathlib import Path

from cubeforge.errors import MoleculeError, nearest
from cubeforge.molecules.leveldata import read_leveldata
from cubeforge.molecules.model import CollisionPartner, Line, Molecule, Transitions
from cubeforge.molecules.partition import PartitionTable
from cubeforge.molecules.rotors import ROTORS, build_rotor

__all__ = [
    "ROTORS",
    "CollisionPartner",
    "Line",
    "Molecule",
    "PartitionTable",
    "Transitions",
    "build_rotor",
    "get_molecule",
    "read_leveldata",
]


def get_molecule(name_or_path: str | Path, base_dir: str | Path | None = None) -> Molecule:
    """A built-in linear rotor by name, or a molecule from a data file by path.

    Parameters
    ----------
    name_or_path : str or Path
        "CO", "13CO" ... (upper and lower case matter), or a file in the layout of Schöier et al. 2005. What
        is a name is never looked for on disk: write "./CO" for a file called so.
    base_dir : str or Path, optional
        Folder that a relative path starts from; the working folder without it.

    Raises
    ------
    MoleculeError
        Neither a built-in name nor a file, or a file that cannot be used.
    """
    if str(name_or_path) in ROTORS:
        return build_rotor(str(name_or_path))
    path = Path(base_dir or ".") / Path(name_or_path).expanduser()
    if path.is_file():
        return read_leveldata(path)
    raise MoleculeError(
        f'molecule "{name_or_path}": neither a built-in one nor a file ({path} does not exist); '
        f"of the built-in ones, {nearest(str(name_or_path), ROTORS)}"
    )
