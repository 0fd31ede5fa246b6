"""Fixtures that tests of several folders share."""

from __future__ import annotations

import os
import shutil
from pathlib import Path
from typing import Any

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


@pytest.fixture(scope="session")
def real_survey(real_run: Path, tmp_path_factory: pytest.TempPathFactory) -> Any:
    """The real run as a survey, imported without the files of its motion capture."""
    import jointmap
    from jointmap.ingest.mrclam import import_mrclam

    work = tmp_path_factory.mktemp("real")
    shutil.copytree(real_run, work / "logs", ignore=shutil.ignore_patterns("*Groundtruth*"))
    import_mrclam(work / "logs", work / "survey")
    return jointmap.read_survey(work / "survey")


@pytest.fixture(scope="session")
def real_reference(real_survey: Any) -> Any:
    """Its reference under default settings; fused once for all tests."""
    import jointmap

    return jointmap.fuse(real_survey)
