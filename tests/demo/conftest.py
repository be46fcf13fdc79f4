"""One small Marram volume for all tests of this room: in memory, and written to a folder."""

from __future__ import annotations

from pathlib import Path

import pytest
from small_volume import SCALE, SEED

from tilemap.demo.marram import Volume, invent, make


@pytest.fixture(scope="session")
def volume() -> Volume:
    return invent(SEED, SCALE)


@pytest.fixture(scope="session")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder in which the volume of :func:`volume` has been made."""
    path = tmp_path_factory.mktemp("marram")
    make(path, SEED, scale=SCALE)
    return path
