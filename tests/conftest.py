"""Fixtures that tests of several folders share."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

#: Where the real five-robot run is looked for when the environment does not say.
_BESIDE = Path(__file__).parents[2] / "shared" / "data" / "mrclam6"


@pytest.fixture(scope="session")
def real_run() -> Path:
    """Folder of the real run (Leung et al. 2011), or a skip that says how to provide it."""
    folder = Path(os.environ.get("JOINTMAP_DATA", _BESIDE))
    if not (folder / "Barcodes.dat").is_file():
        pytest.skip("the real run is not here: set JOINTMAP_DATA to its folder")
    return folder
