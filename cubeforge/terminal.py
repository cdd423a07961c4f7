"""What the command line shows on a terminal, or in the log of a batch job: tables on stdout, progress on stderr."""

from __future__ import annotations

import math
import os
import sys
import time
from collections.abc import Callable, Sequence
from types import TracebackType
from typing import TYPE_CHECKING, Any, Protocol, Self, TextIO

if TYPE_CHECKING:
    from rich.console import Console

INTERVAL = 30.0
"""Seconds between lines of progress where there is no terminal."""


class TileProgress(Protocol):
    """How far a render is; `cubeforge.engine.render.Progress` is one."""

    @property
    def done(self) -> int:
        """Finished tiles, those of earlier runs included."""

    @property
    def total(self) -> int:
        """Tiles of the cube."""

    @property
    def begun(self) -> int:
        """Tiles that were finished before this run."""

    @property
    def seconds(self) -> float:
        """Time that this run took so far."""

    @property
    def rate(self) -> float:
        """Tiles a second in this run; 0 when unknown."""

    @property
    def seconds_left(self) -> float:
        """Estimate; infinity when unknown."""


def table(
    title: str, rows: Sequence[Sequence[str]], *, headings: Sequence[str] = (), console: Console | None = None
) -> None:
    """Print a table on stdout; nothing in it is read as markup, and in a log nothing is folded.

    Parameters
    ----------
    title : str
    rows : sequence of sequences of str
        All of one length.
    headings : sequence of str
        Of the columns; none by default.
    console : rich Console, optional
        Where to print instead.
    """
    if not rows or not _on_terminal(console, sys.stdout):
        # Rich shows not even the title of a table without rows.
        _write_line(console, _plain_table(title, [headings, *rows] if headings else rows), sys.stdout)
        return
    # Rich takes about 0.1 s to import: only where it is used.
    from rich import box
    from rich.table import Table
    from rich.text import Text

    drawn = Table(title=Text(title, style="bold"), title_justify="left", box=box.SIMPLE_HEAD)
    drawn.show_header = bool(headings)
    for index in range(len(headings) or max(map(len, rows), default=0)):
        heading = headings[index] if headings else ""
        drawn.add_column(Text(heading), style="" if index else "cyan", overflow="fold")
    for row in rows:
        drawn.add_row(*map(Text, row))
    _console(console, sys.stdout).print(drawn)


def _plain_table(title: str, rows: Sequence[Sequence[str]]) -> str:
    """Title and rows as lines, columns aligned."""
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    lines = ["  ".join(map(str.ljust, row, widths)).rstrip() for row in rows]
    return "\n".join([title, *(f"  {line}" for line in lines)])


class ProgressLine:
    """Shows the progress of a render while its block runs: ``with ProgressLine() as line: line.update(...)``.

    On a terminal a bar, tiles, rate and time left, redrawn in place. Elsewhere one plain line at the first
    update, then at most one an interval, and a last one, which also says when the block was left early; a
    line is only written when there is news. `update` may be called from any one thread.

    Parameters
    ----------
    quiet : bool
        Show nothing.
    interval : float
        Seconds between plain lines.
    console : rich Console, optional
        Where to write instead of stderr.
    clock : callable
        Seconds that only grow.
    """

    def __init__(
        self,
        *,
        quiet: bool = False,
        interval: float = INTERVAL,
        console: Console | None = None,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._quiet, self._interval, self._console, self._clock = quiet, interval, console, clock
        self._last: TileProgress | None = None
        self._shown = -math.inf
        self._bar: Any = None

    def __enter__(self) -> Self:
        if not self._quiet and _on_terminal(self._console, sys.stderr):
            self._bar = _bar(self._console)
        return self

    def update(self, progress: TileProgress) -> None:
        """Show `progress`, now or when it is due."""
        self._last = progress
        if self._quiet:
            return
        if self._bar is not None:
            self._bar.start()
            task = self._bar.task_ids[0]
            self._bar.update(task, completed=progress.done, total=progress.total, **_words(progress))
        elif self._clock() - self._shown >= self._interval:
            self._shown = self._clock()
            _write_line(self._console, describe(progress), sys.stderr)

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._bar is not None:
            self._bar.stop()
        elif self._last is not None and not self._quiet:
            complete = kind is None and self._last.done >= self._last.total
            end = f"{'finished' if complete else 'stopped'} after {duration(self._last.seconds)}"
            _write_line(self._console, f"{describe(self._last, left=False)}, {end}", sys.stderr)


def describe(progress: TileProgress, *, left: bool = True) -> str:
    """``"120 of 400 tiles (30 %), 2.5 tiles/s, 1 min 52 s left"``."""
    share = math.floor(100 * progress.done / progress.total) if progress.total else 100
    words = _words(progress)
    tiles = f"{progress.done} of {progress.total} tiles ({share} %)"
    return ", ".join(part for part in (tiles, words["rate"], words["left"] if left else "") if part)


def _words(progress: TileProgress) -> dict[str, str]:
    known = progress.rate > 0.0
    return {
        "rate": f"{progress.rate:.3g} tiles/s" if known else "",
        "left": f"{duration(progress.seconds_left)} left" if known and progress.done < progress.total else "",
    }


def duration(seconds: float) -> str:
    """Time in its two largest units: ``duration(3725) == "1 h 2 min"``; "unknown time" when infinite."""
    if not math.isfinite(seconds):
        return "unknown time"
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    minutes = round(seconds / 60)
    if minutes < 24 * 60:
        return f"{minutes // 60} h {minutes % 60} min"
    hours = round(seconds / 3600)
    return f"{hours // 24} d {hours % 24} h"


def _bar(console: Console | None) -> Any:
    """A bar that is not on the screen yet."""
    # Rich's progress takes about 0.2 s to import: only where it is used.
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn

    bar = Progress(
        TextColumn("tiles"),
        BarColumn(bar_width=None),
        MofNCompleteColumn(),
        TextColumn("{task.fields[rate]}"),
        TextColumn("{task.fields[left]}"),
        console=_console(console, sys.stderr),
        # Stdout may be a file that somebody reads: rich would send what is printed there to stderr.
        redirect_stdout=False,
        expand=True,
    )
    bar.add_task("", total=None, rate="", left="")
    return bar


def _on_terminal(console: Console | None, stream: TextIO) -> bool:
    """Whether what is written appears on a terminal that can redraw a line."""
    if console is not None:
        return console.is_terminal and not console.is_dumb_terminal
    return stream.isatty() and os.environ.get("TERM", "") not in ("", "dumb", "unknown")


def _console(console: Console | None, stream: TextIO) -> Console:
    if console is not None:
        return console
    from rich.console import Console as RichConsole

    return RichConsole(file=stream, highlight=False)


def _write_line(console: Console | None, text: str, stream: TextIO) -> None:
    """Write plain text at once; a batch job's log is looked at while it grows."""
    file = stream if console is None else console.file
    file.write(text + "\n")
    file.flush()


__all__ = ["INTERVAL", "ProgressLine", "TileProgress", "describe", "duration", "table"]
