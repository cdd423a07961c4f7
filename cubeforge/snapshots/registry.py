"""Which reader opens what: one line a format."""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from cubeforge.errors import SnapshotError
from cubeforge.snapshots.amrex import AmrexSnapshot
from cubeforge.snapshots.amrex_header import TITLE
from cubeforge.snapshots.base import Snapshot


@dataclass(frozen=True)
class Format:
    """One file layout.

    Attributes
    ----------
    name : str
        For people.
    sign : str
        What it is recognised by, for people.
    recognises : callable
        Looks at the files as briefly as it can.
    reader : callable
        Opens the snapshot.
    """

    name: str
    sign: str
    recognises: Callable[[Path], bool]
    reader: Callable[[Path], Snapshot]


def _is_amrex(path: Path) -> bool:
    try:
        with (path / "Header").open("rb") as file:
            return bool(TITLE.match(file.readline(200).decode("ascii", errors="replace").strip()))
    except (FileNotFoundError, NotADirectoryError, IsADirectoryError):
        return False


FORMATS: tuple[Format, ...] = (
    Format(
        AmrexSnapshot.format_name,
        'a folder with a file "Header" whose first line ends in "-V1.1"',
        _is_amrex,
        AmrexSnapshot,
    ),
)


def open_snapshot(path: str | os.PathLike[str]) -> Snapshot:
    """Open an AMR output of any known format.

    Raises
    ------
    SnapshotError
        Nothing there, or nothing that a reader recognises; the message says what was looked for.
    """
    place = Path(path)
    try:
        if not place.exists():
            raise SnapshotError(f"{place}: there is no such file or folder")
        for known in FORMATS:
            if known.recognises(place):
                return known.reader(place)
        looked_for = "; ".join(f"{known.name}: {known.sign}" for known in FORMATS)
        raise SnapshotError(f"{place} is no snapshot that can be read ({looked_for}){_hint(place)}")
    except PermissionError as error:
        raise SnapshotError(f"{error.filename}: permission denied") from None


def _hint(place: Path) -> str:
    """Where the user may have meant: one step down, or one up."""
    if place.is_file():
        near = [place.parent]
    else:
        near = sorted(child for child in place.iterdir() if child.is_dir())[:1000]
    found = [child for child in near if any(known.recognises(child) for known in FORMATS)]
    if not found:
        return ""
    more = f" and {len(found) - 3} more" if len(found) > 3 else ""
    return "; did you mean " + ", ".join(str(child) for child in found[:3]) + more + "?"
