"""Whatever stands in the files, reading ends with a survey or with named problems."""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from jointmap.errors import LogFormatError
from jointmap.ingest.read import read_survey
from jointmap.ingest.summary import summarise, summary_lines

FLAT = {
    "survey.toml": (
        '[survey]\nformat = 1\ndimension = 2\ncrs = "EPSG:4979"\n'
        'site_origin = [53.0, -4.0, 100.0]\n[datum]\nkind = "control"\n'
        '[robots.heron]\nodometry = "o.csv"\nsightings = "s.csv"\nencounters = "e.csv"\n'
        'fixes = "f.csv"\nantenna = [0.1, 0.0, 0.3]\n[robots.heron.clock]\noffset_s = 0.1\n'
        "[robots.heron.sensors.front]\nbody_T_sensor = [0.1, 0.0, 0.0]\nsigma_range_m = 0.1\n"
        '[robots.otter]\nodometry = ["p.csv", "q.csv"]\n'
    ),
    "o.csv": "t_s,x_m,y_m,yaw_rad,sigma_x_m\n0,0,0,0,0.1\n1,1,0,0.1,0.1\n2,2,0,0.2,\n",
    "p.csv": "t_s,vx_mps,vy_mps,wz_radps\n0,1,0,0.1\n1,1,,0.1\n",
    "q.csv": "t_ns,vx_mps,wz_radps\n2000000000,1,0.1\n3000000000,1,0.1\n",
    "s.csv": (
        "t_s,sensor,landmark,range_m,bearing_rad,x_m,y_m,yaw_rad,sigma_range_m,"
        "cov_x_x,cov_x_y,cov_y_y\n0,front,a,2,0.1,,,,0.1,,,\n1,front,a,,0.5,,,,,,,\n"
        "1,front,b,,,1,2,0.3,,0.1,0.01,0.1\n"
    ),
    "e.csv": "t_s,sensor,robot,range_m,bearing_rad\n1,front,otter,2,0.1\n",
    "f.csv": "t_s,lat_deg,lon_deg,height_m,sigma_x_m\n1,53,-4,100,0.5\n",
    "closures.csv": (
        "robot_a,t_a_s,robot_b,t_b_s,x_m,y_m,yaw_rad,sigma_x_m,sigma_y_m,sigma_yaw_rad\n"
        "heron,1,otter,2,0,0,0.1,0.1,0.1,0.1\n"
    ),
    "associations.csv": "robot,label,landmark,t_from_s,t_to_s\nheron,a,A,,1\nheron,a,B,1.5,\n",
    "control_points.csv": "landmark,x_m,y_m,sigma_x_m,sigma_y_m\nA,1,2,0.1,0.1\nA,1,2,0.1,0.1\n",
    "edits.toml": (
        '[[mask]]\nrobot = "heron"\nsensor = "front"\nt_from_s = 1.0\n'
        '[[fix_sigma]]\nrobot = "heron"\nsensor = "front"\nname = "range_m"\nvalue = 0.1\n'
    ),
}
SPATIAL = {
    "survey.toml": (
        "[survey]\nformat = 1\ndimension = 3\n"
        '[robots.swift]\nodometry = "o.csv"\nsightings = "s.csv"\nfixes = "f.csv"\n'
        "[robots.swift.sensors.belly]\nbody_T_sensor = [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 1.0]\n"
    ),
    "o.csv": (
        "t_s,x_m,y_m,z_m,qx,qy,qz,qw,acc_cov_x_x,acc_cov_x_y\n"
        "0,0,0,0,0,0,0,1,0.1,0\n1,1,0,0,0,0,0.6,0.8,,\n"
    ),
    "s.csv": (
        "t_s,sensor,landmark,range_m,bearing_rad,elevation_rad,qx,qy,qz,qw,sigma_rx_rad\n"
        "0,belly,a,2,0.1,0.2,0,0,0,1,0.1\n1,belly,a,,0.5,0.1,,,,,\n"
    ),
    "f.csv": "t_s,x_m,y_m,z_m\n1,53,-4,100\n",
    "control_points.csv": "landmark,x_m,y_m,z_m,sigma_x_m,sigma_y_m,sigma_z_m\na,1,2,3,1,1,1\n",
}
JUNK = st.sampled_from(
    ["", "nan", "inf", "-1", "0", "1e308", "1e-320", "x", '"', "é", ",", "\n", "\x00", "#", "[",
     "]", "=", "heron", "front", "t_s", "x_m", "9" * 30, " ", "../x", "true", "3", "otter", "a/b"]
)  # fmt: skip


@pytest.mark.parametrize("files", [FLAT, SPATIAL], ids=["2-D", "3-D"])
def test_the_files_are_good(tmp_path: Path, files: dict[str, str]) -> None:
    for name, text in files.items():
        (tmp_path / name).write_text(text)
    assert read_survey(tmp_path).robots


@st.composite
def spoilt(draw: st.DrawFn) -> dict[str, bytes]:
    """One of the two surveys with some pieces of text replaced, doubled, or whole files gone."""
    files = {k: v.encode() for k, v in draw(st.sampled_from([FLAT, SPATIAL])).items()}
    for _ in range(draw(st.integers(1, 4))):
        name = draw(st.sampled_from(sorted(files)))
        text = files[name]
        start = draw(st.integers(0, len(text)))
        end = draw(st.integers(start, min(len(text), start + 8)))
        piece = draw(JUNK).encode() if draw(st.booleans()) else draw(st.binary(max_size=3))
        files[name] = text[:start] + piece + text[end:]
        if draw(st.integers(0, 9)) == 0:
            del files[name]
        if not files:
            break
    return files


@settings(max_examples=150, deadline=None)
@given(spoilt())
def test_reading_never_fails_otherwise(files: dict[str, bytes]) -> None:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for key, data in files.items():
            (folder / key).write_bytes(data)
        try:
            survey = read_survey(folder)
        except LogFormatError as error:
            assert any(not p.mended for p in error.problems)
            assert all(p.message and p.mend and p.path for p in error.problems)
            return
    assert all(p.mended for p in survey.problems)
    assert summary_lines(summarise(survey))
    for log in survey.robots.values():
        assert (np.diff(log.odometry.t_s) > 0.0).all()
