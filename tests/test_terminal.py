"""Tables and progress, on terminals and in logs."""

from __future__ import annotations

import math
import subprocess
import sys
from dataclasses import dataclass
from io import StringIO

import pytest
from rich.console import Console

from cubeforge import terminal
from cubeforge.terminal import ProgressLine, describe, duration, table


@dataclass(frozen=True)
class Tiles:
    """Progress as the engine tells it."""

    done: int
    total: int = 400
    begun: int = 20
    seconds: float = 40.0

    @property
    def rate(self) -> float:
        return (self.done - self.begun) / self.seconds if self.seconds > 0.0 else 0.0

    @property
    def seconds_left(self) -> float:
        return (self.total - self.done) / self.rate if self.rate > 0.0 else math.inf


def screen(*, is_terminal: bool, width: int = 100) -> tuple[Console, StringIO]:
    written = StringIO()
    return Console(file=written, force_terminal=is_terminal, width=width, _environ={"TERM": "xterm"}), written


class Clock:
    def __init__(self) -> None:
        self.now = 1000.0

    def __call__(self) -> float:
        return self.now


def test_description() -> None:
    # (120 - 20) tiles in 40 s; 280 left at 2.5 a second: 112 s.
    assert describe(Tiles(120)) == "120 of 400 tiles (30 %), 2.5 tiles/s, 1 min 52 s left"
    assert describe(Tiles(20, seconds=0.0)) == "20 of 400 tiles (5 %)"
    assert describe(Tiles(400)) == "400 of 400 tiles (100 %), 9.5 tiles/s"
    # Not 100 % before it is.
    assert describe(Tiles(9999, total=10000)).startswith("9999 of 10000 tiles (99 %)")
    assert describe(Tiles(0, total=0, begun=0)) == "0 of 0 tiles (100 %)"


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0.0, "0 s"),
        (59.4, "59 s"),
        (59.6, "1 min 0 s"),
        (3599.7, "1 h 0 min"),
        (3725.0, "1 h 2 min"),
        (86399.0, "1 d 0 h"),
        (200000.0, "2 d 8 h"),
        (math.inf, "unknown time"),
        (math.nan, "unknown time"),
    ],
)
def test_durations(seconds: float, text: str) -> None:
    assert duration(seconds) == text


def test_log_gets_a_line_an_interval_and_a_last_one() -> None:
    console, written = screen(is_terminal=False, width=20)
    clock = Clock()
    with ProgressLine(console=console, clock=clock, interval=30.0) as line:
        for elapsed in range(0, 95, 5):
            clock.now = 1000.0 + elapsed
            line.update(Tiles(20 + elapsed, total=110, seconds=float(elapsed)))
    assert written.getvalue().splitlines() == [
        "20 of 110 tiles (18 %)",
        "50 of 110 tiles (45 %), 1 tiles/s, 1 min 0 s left",
        "80 of 110 tiles (72 %), 1 tiles/s, 30 s left",
        "110 of 110 tiles (100 %), 1 tiles/s",
        "110 of 110 tiles (100 %), 1 tiles/s, finished after 1 min 30 s",
    ]


def test_log_says_when_it_ends_early() -> None:
    console, written = screen(is_terminal=False)

    def interrupted() -> None:
        with ProgressLine(console=console) as line:
            line.update(Tiles(120))
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        interrupted()
    assert written.getvalue().splitlines()[-1] == "120 of 400 tiles (30 %), 2.5 tiles/s, stopped after 40 s"


def test_bar_on_a_terminal() -> None:
    console, written = screen(is_terminal=True)
    with ProgressLine(console=console) as line:
        line.update(Tiles(20, seconds=0.0))
        line.update(Tiles(120))
    last = written.getvalue().split("\r")[-1]
    for wanted in ("tiles", "120/400", "2.5 tiles/s", "1 min 52 s left", "━"):
        assert wanted in last
    # Redrawn in place: the cursor is hidden meanwhile, and shown again.
    assert written.getvalue().index("\x1b[?25l") < written.getvalue().index("\x1b[?25h")


def test_bar_fits_a_narrow_terminal() -> None:
    console, written = screen(is_terminal=True, width=60)
    with ProgressLine(console=console) as line:
        line.update(Tiles(120))
    assert "120/400" in written.getvalue()
    assert "2.5 tiles/s" in written.getvalue()
    assert "1 min 52 s left" in written.getvalue()


@pytest.mark.parametrize("is_terminal", [True, False])
def test_quiet_and_unused_lines_show_nothing(is_terminal: bool) -> None:
    console, written = screen(is_terminal=is_terminal)
    with ProgressLine(quiet=True, console=console) as line:
        line.update(Tiles(120))
    with ProgressLine(console=console):
        pass
    assert written.getvalue() == ""


@pytest.mark.parametrize("is_terminal", [True, False])
def test_tables_show_everything_as_it_is(is_terminal: bool) -> None:
    console, written = screen(is_terminal=is_terminal, width=60)
    rows = [("tiles", "400 [64 x 64]"), ("unit", "[bold]K[/bold] :smile:"), ("memory", "2.0 GiB")]
    table("The [plan]", rows, headings=("what", "how much"), console=console)
    text = written.getvalue()
    for wanted in ("The [plan]", "what", "how much", *(word for row in rows for word in row)):
        assert wanted in text


def test_tables_in_a_log_are_aligned_and_not_folded() -> None:
    console, written = screen(is_terminal=False, width=20)
    table("Plan", [("tiles", "400"), ("snapshot", "/scratch/" + "x" * 80)], console=console)
    assert written.getvalue().splitlines() == [
        "Plan",
        "  tiles     400",
        "  snapshot  /scratch/" + "x" * 80,
    ]


def test_tables_without_rows() -> None:
    for is_terminal in (True, False):
        console, written = screen(is_terminal=is_terminal)
        table("Nothing", [], console=console)
        assert "Nothing" in written.getvalue()


def test_tables_go_to_stdout_and_progress_to_stderr(capsys: pytest.CaptureFixture[str]) -> None:
    table("Plan", [("tiles", "400")])
    with ProgressLine() as line:
        line.update(Tiles(120))
    captured = capsys.readouterr()
    assert captured.out == "Plan\n  tiles  400\n"
    assert captured.err.startswith("120 of 400 tiles (30 %)")


def test_results_printed_beside_a_bar_stay_on_stdout(capsys: pytest.CaptureFixture[str]) -> None:
    console, written = screen(is_terminal=True)
    with ProgressLine(console=console) as line:
        line.update(Tiles(120))
        print("result")
    assert capsys.readouterr().out == "result\n"
    assert "result" not in written.getvalue()


def test_dumb_terminals_get_plain_lines(monkeypatch: pytest.MonkeyPatch) -> None:
    written = StringIO()
    monkeypatch.setattr(written, "isatty", lambda: True, raising=False)
    monkeypatch.setattr(terminal.sys, "stderr", written)
    monkeypatch.setenv("TERM", "dumb")
    with ProgressLine() as line:
        line.update(Tiles(120))
    assert "\x1b" not in written.getvalue()
    assert written.getvalue().count("\n") == 2


def test_a_log_does_not_pay_for_rich() -> None:
    program = (
        "import sys; from cubeforge.terminal import ProgressLine, table\n"
        "table('Plan', [('tiles', '400')])\n"
        "with ProgressLine(): pass\n"
        "sys.exit(any(name.split('.')[0] == 'rich' for name in sys.modules))"
    )
    assert subprocess.run([sys.executable, "-c", program], stderr=subprocess.PIPE).returncode == 0
