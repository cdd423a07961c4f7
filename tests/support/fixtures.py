"""Fixtures on data that tests of several rooms share; `tests/conftest.py` makes them known."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from support.physics import CO

TINY = Path(__file__).parent.parent / "data" / "tiny"


@pytest.fixture(scope="session")
def tiny_snapshot() -> Path:
    """A small plotfile written by the AMReX framework itself: three levels, float32."""
    return TINY


@pytest.fixture(scope="session")
def real_data() -> Path:
    """A folder of larger plotfiles (`small`, `ratio4`), named by CUBEFORGE_REAL_DATA."""
    given = os.environ.get("CUBEFORGE_REAL_DATA")
    if not given:
        pytest.skip("CUBEFORGE_REAL_DATA does not name a folder of plotfiles")
    return Path(given)


@pytest.fixture(scope="session")
def co_file(tmp_path_factory: pytest.TempPathFactory) -> str:
    """The tests' own CO (`support.physics.CO`) as a level-data file."""
    return CO.write(tmp_path_factory.mktemp("molecule") / "co.dat")
