"""A small good survey on disk, of which tests change one thing."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import pytest

from jointmap.errors import LogFormatError, LogProblem
from jointmap.ingest.read import read_survey

TOML = """\
[survey]
format = 1
name = "gallery 7"
dimension = 2
[robots.heron]
odometry = "heron/odometry.csv"
sightings = "heron/sightings.csv"
encounters = "heron/encounters.csv"
[robots.heron.sensors.front]
body_T_sensor = [0.1, 0.0, 0.0]
sigma_range_m = 0.1
[robots.otter]
odometry = "otter/odometry.csv"
sightings = "otter/sightings.csv"
[robots.otter.sensors.mast]
body_T_sensor = [0.0, 0.0, 0.0]
"""
HERON = "t_s,x_m,y_m,yaw_rad\n" + "".join(f"{i}.0,{i * 0.5},0.0,0.0\n" for i in range(10))
OTTER = "t_s,vx_mps,wz_radps\n" + "".join(f"{i}.0,0.5,0.1\n" for i in range(10))
SIGHTINGS = """\
t_s,sensor,landmark,range_m,bearing_rad
1.0,front,plate-017,2.0,0.5
2.0,front,plate-017,1.5,0.6
2.0,front,plate-018,3.0,-0.2
"""
OTTER_SIGHTINGS = """\
t_s,sensor,landmark,range_m,bearing_rad
1.5,mast,plate-017,2.5,-0.5
3.0,mast,plate-019,1.0,0.1
"""
ENCOUNTERS = "t_s,sensor,robot,range_m,bearing_rad\n4.0,front,otter,2.0,0.1\n"
FILES: dict[str, str | bytes] = {
    "survey.toml": TOML,
    "heron/odometry.csv": HERON,
    "heron/sightings.csv": SIGHTINGS,
    "heron/encounters.csv": ENCOUNTERS,
    "otter/odometry.csv": OTTER,
    "otter/sightings.csv": OTTER_SIGHTINGS,
}

TOML_3D = """\
[survey]
format = 1
dimension = 3
gravity_aligned = true
[robots.swift]
odometry = "odometry.csv"
sightings = "sightings.csv"
[robots.swift.sensors.belly]
body_T_sensor = [0.0, 0.0, -0.1, 0.0, 0.0, 0.0, 1.0]
"""
SWIFT = "t_s,x_m,y_m,z_m,qx,qy,qz,qw\n" + "".join(
    f"{i}.0,{i * 0.5},0.0,2.0,0.0,0.0,0.6,0.8\n" for i in range(10)
)
FILES_3D: dict[str, str | bytes] = {
    "survey.toml": TOML_3D,
    "odometry.csv": SWIFT,
    "sightings.csv": "t_s,sensor,landmark,x_m,y_m,z_m\n1.0,belly,plate-001,1.0,2.0,3.0\n",
}


def write(folder: Path, files: Mapping[str, str | bytes]) -> Path:
    """Write files (text or bytes by relative name) and return the folder."""
    for name, content in files.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return folder


def good(folder: Path, **changes: str | bytes) -> Path:
    """The small survey with some files replaced; ``__`` in a keyword stands for ``/``, ``_csv``
    for ``.csv`` and ``_toml`` for ``.toml``."""
    return write(folder, {**FILES, **_named(changes)})


def good_3d(folder: Path, **changes: str | bytes) -> Path:
    """The same in three dimensions, with one robot."""
    return write(folder, {**FILES_3D, **_named(changes)})


def _named(changes: Mapping[str, str | bytes]) -> dict[str, str | bytes]:
    def name(key: str) -> str:
        for ending in ("csv", "toml", "parquet"):
            key = key.replace(f"_{ending}", f".{ending}")
        return key.replace("__", "/")

    return {name(k): v for k, v in changes.items()}


def refused(folder: Path) -> list[LogProblem]:
    """The unmended problems of a survey that has to be refused."""
    with pytest.raises(LogFormatError) as caught:
        read_survey(folder)
    return [p for p in caught.value.problems if not p.mended]


def one_refused(folder: Path) -> LogProblem:
    """The only unmended problem."""
    problems = refused(folder)
    assert len(problems) == 1, [str(p) for p in problems]
    return problems[0]


def mended(folder: Path, path: str, text: str) -> LogProblem:
    """The one mended problem of a file whose message holds the text; the survey is read."""
    found = [p for p in read_survey(folder).problems if p.path == path and text in p.message]
    assert len(found) == 1, [str(p) for p in read_survey(folder).problems]
    assert found[0].mended
    return found[0]
