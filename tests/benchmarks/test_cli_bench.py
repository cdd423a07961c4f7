"""How long people wait for help."""

from __future__ import annotations

from typing import Any

from support.renders import cli


def test_help(benchmark: Any):
    # Wanted: under half a second on an idle machine.
    result = benchmark.pedantic(cli, ("--help",), rounds=5, warmup_rounds=1)
    assert result.returncode == 0
