"""Files that are whole or absent, whatever stops the program or the machine.

A file is written into the run's staging folder, flushed to the device, and renamed to its final name; then
the folder that holds the name is flushed. Temporary files live in one folder a run and not beside their
targets: what a dead run left is found without walking a million chunks, and moving that folder away stops
workers that outlived their run.
"""

from __future__ import annotations

import contextlib
import errno
import glob
import logging
import os
import shutil
import uuid
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from cubeforge.cube.process import alive, machine, started
from cubeforge.errors import CubeError, EngineError
from cubeforge.quantities import show_bytes

log = logging.getLogger(__name__)

STAGING = "partial-"
"""Staging folders are called this and the run's id."""

_FULL = {
    errno.ENOSPC: "the disk is full",
    errno.EDQUOT: "the disk quota is used up",
    errno.EFBIG: "files may not be that large",
}


@contextlib.contextmanager
def disk_errors(path: Path | str, needed: int) -> Iterator[None]:
    """Turn an OSError while writing `needed` bytes for `path` into an EngineError that says what to do."""
    try:
        yield
    except OSError as error:
        if error.errno not in _FULL:
            raise EngineError(f"{path}: cannot be written ({error.strerror or error})") from error
        raise EngineError(
            f"{path}: {_FULL[error.errno]}; {show_bytes(needed)} were to be written, "
            f"{_free(Path(path))} are free there. Nothing half-written was kept: make room and start again"
        ) from error


def _free(path: Path) -> str:
    for folder in path.parents:
        with contextlib.suppress(OSError):
            return show_bytes(shutil.disk_usage(folder).free)
    return "an unknown number of bytes"


def fsync_folder(folder: Path | str) -> None:
    """Make the names in `folder` durable."""
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    except OSError as error:
        # Some network and user-space file systems have no fsync for folders and say so.
        if error.errno not in (errno.EINVAL, errno.ENOTSUP):
            raise
        log.warning("%s: this file system cannot flush a folder; names may be lost in a power cut", folder)
    finally:
        os.close(descriptor)


def make_folders(folder: Path) -> None:
    """Create `folder` and the missing ones above it, each durably."""
    missing = []
    while not folder.is_dir():
        missing.append(folder)
        folder = folder.parent
    for each in reversed(missing):
        each.mkdir(exist_ok=True)
        fsync_folder(each.parent)


def write_all(descriptor: int, data: Any, offset: int | None = None) -> None:
    """Write all bytes of `data`, a C-contiguous buffer, at `offset` or where the file stands."""
    view = memoryview(data).cast("B")
    while view:
        if offset is None:
            count = os.write(descriptor, view)
        else:
            count = os.pwrite(descriptor, view, offset)
            offset += count
        view = view[count:]


def beside(path: Path) -> Path:
    """Hidden name next to `path` that says which process is making it."""
    pid = os.getpid()
    return _beside(path, f"{pid}.{started(pid)}.{uuid.uuid4().hex[:8]}")


def _beside(path: Path, who: str) -> Path:
    return path.parent / f".{path.name}.{machine()}.{who}.new"


def sweep_beside(path: Path) -> None:
    """Remove files and folders that dead processes of this machine left `beside` `path`.

    Those of other machines stay: whether their process lives cannot be told from here.
    """
    for left in path.parent.glob(_beside(Path(glob.escape(str(path))), "*").name):
        *_, pid, since, _, _ = left.name.split(".")
        if pid.isdigit() and not alive(int(pid), since):
            if left.is_dir():
                shutil.rmtree(left, ignore_errors=True)
            else:
                left.unlink(missing_ok=True)


@contextlib.contextmanager
def replacing(path: Path) -> Iterator[int]:
    """Descriptor of a file that takes the name `path`, durably, when the block ends without an error."""
    temporary = beside(path)
    file = os.open(temporary, os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o666)
    try:
        try:
            yield file
            os.fsync(file)
        finally:
            os.close(file)
        os.replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    fsync_folder(path.parent)


class Staging:
    """The folder in which one run writes files before they get their names.

    Parameters
    ----------
    folder : Path
        Where staging folders lie; on the file system of the targets.
    run : str
        Id of the run.
    create : bool
        Whether to make the staging folder when it is missing. A run that holds a lease has it made by the
        lease, and its absence then means that another run took the cube over.
    """

    def __init__(self, folder: Path, run: str, *, create: bool) -> None:
        self.run = run
        self.folder = folder / f"{STAGING}{run}"
        self.create = create

    def write(self, path: Path, data: Any) -> None:
        """Put `data` under the name `path`, replacing what was there; durable on return.

        Raises
        ------
        EngineError
            Disk full or another refusal of the file system. `path` is then as before.
        CubeError
            The run has lost the cube to another one.
        """
        view = memoryview(data).cast("B")
        with disk_errors(path, view.nbytes):
            temporary, descriptor = self._open()
            try:
                try:
                    write_all(descriptor, view)
                    os.fsync(descriptor)
                finally:
                    os.close(descriptor)
                self._rename(temporary, path)
            except BaseException:
                temporary.unlink(missing_ok=True)
                raise
            fsync_folder(path.parent)

    def _open(self) -> tuple[Path, int]:
        temporary = self.folder / uuid.uuid4().hex
        flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC
        try:
            return temporary, os.open(temporary, flags, 0o666)
        except FileNotFoundError:
            if not self.create:
                raise self._lost() from None
        make_folders(self.folder)
        return temporary, os.open(temporary, flags, 0o666)

    def _rename(self, temporary: Path, path: Path) -> None:
        try:
            os.replace(temporary, path)
        except FileNotFoundError:
            if not self.folder.is_dir():
                raise self._lost() from None
            make_folders(path.parent)
            os.replace(temporary, path)

    def _lost(self) -> CubeError:
        return CubeError(
            f"{self.folder.parent.parent}: run {self.run} does not hold this cube (any more); it has ended, "
            "or another run took over after its beat stopped. Tiles written so far are kept"
        )


def sweep(folder: Path, run: str) -> int:
    """Remove what the dead run `run` left in its staging folder; number of files removed.

    The folder is moved away first, so that a writer that outlived its run cannot rename a file from it.
    """
    gone = folder / f"swept-{run}-{uuid.uuid4().hex[:8]}"
    try:
        os.rename(folder / f"{STAGING}{run}", gone)
    except FileNotFoundError:
        return 0
    count = sum(1 for _ in gone.iterdir())
    shutil.rmtree(gone, ignore_errors=True)
    return count


def sweep_moved(folder: Path) -> None:
    """Remove staging folders that a sweep moved away and was then stopped before it emptied them."""
    for gone in folder.glob("swept-*"):
        shutil.rmtree(gone, ignore_errors=True)
