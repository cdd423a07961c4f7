"""Where compiled kernels are kept between runs.

numba looks at a kernel's own file to see whether its compiled form is out of date, not at the kernels that it calls:
after a change in one of those it would go on running the old code. So the folder is named by a hash of all files
that have to do with numba.
"""

from __future__ import annotations

import hashlib
import os
import tempfile
from pathlib import Path

ROOMS = ("mesh", "gas", "excitation", "transfer")
"""Folders of the package that hold kernels."""


def kernel_hash() -> str:
    """Hash of the source files that mention numba, in the rooms that hold kernels."""
    digest = hashlib.sha256()
    package = Path(__file__).parent
    for room in ROOMS:
        for file in sorted((package / room).glob("*.py")):
            content = file.read_bytes()
            if b"numba" in content:
                digest.update(file.name.encode() + b"\0" + content)
    return digest.hexdigest()[:16]


def _home() -> Path:
    """A folder of this user's that can be written to."""
    given = os.environ.get("XDG_CACHE_HOME")
    for base in (Path(given) if given else Path.home() / ".cache", Path(tempfile.gettempdir())):
        place = base / (f"cubeforge-{os.getuid()}" if base == Path(tempfile.gettempdir()) else "cubeforge")
        try:
            place.mkdir(parents=True, exist_ok=True)
        except OSError:
            continue
        if os.access(place, os.W_OK) and place.stat().st_uid == os.getuid():
            return place
    raise OSError(
        f"no folder to keep compiled kernels in: neither {Path.home() / '.cache'} nor the temporary folder"
    )


def use_own_cache() -> None:
    """Point numba at the folder, unless NUMBA_CACHE_DIR says another; before numba is imported."""
    if "NUMBA_CACHE_DIR" not in os.environ:
        os.environ["NUMBA_CACHE_DIR"] = str(_home() / f"kernels-{kernel_hash()}")
