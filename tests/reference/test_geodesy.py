"""Geographic positions to the site frame, against published numbers."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyproj
import pytest

from jointmap.ingest.geodesy import ellipsoid_of, to_site
from jointmap.ingest.read import read_survey

#: IOGP Guidance Note 7-2, examples of methods 9602 and 9836 (WGS 84): a point, the topocentric
#: origin, and the point's topocentric coordinates U, V, W.
POINT = (53 + 48 / 60 + 33.820 / 3600, 2 + 7 / 60 + 46.380 / 3600, 73.0)
ORIGIN = (55.0, 5.0, 200.0)
UVW = (-189013.869, -128642.040, -4220.171)
#: Half a unit of the last printed digit, and as much for the rounding of the printed origin.
PRINTED = 1e-3


def test_topocentric_example() -> None:
    wgs84 = ellipsoid_of("EPSG:4979")
    np.testing.assert_allclose(to_site(np.array([POINT]), ORIGIN, wgs84), [UVW], atol=PRINTED)


def _folder(tmp_path: Path, dimension: int, origin: str, fixes: str) -> Path:
    pose = (
        "x_m,y_m,yaw_rad\n0,0,0,0\n"
        if dimension == 2
        else "x_m,y_m,z_m,qx,qy,qz,qw\n0,0,0,0,0,0,0,1\n"
    )
    (tmp_path / "odometry.csv").write_text("t_s," + pose)
    (tmp_path / "fixes.csv").write_text("t_s,lat_deg,lon_deg,height_m\n" + fixes)
    (tmp_path / "survey.toml").write_text(
        f'[survey]\nformat = 1\ndimension = {dimension}\ncrs = "EPSG:4979"\n{origin}'
        '[robots.swift]\nodometry = "odometry.csv"\nfixes = "fixes.csv"\n'
    )
    return tmp_path


@pytest.mark.parametrize("dimension", [2, 3])
def test_fixes_about_a_stated_origin(tmp_path: Path, dimension: int) -> None:
    fixes = ",".join(["0.0", *(repr(v) for v in POINT)]) + "\n"
    folder = _folder(tmp_path, dimension, "site_origin = [55.0, 5.0, 200.0]\n", fixes)
    survey = read_survey(folder)
    assert survey.geodetic_origin == ORIGIN
    found = survey.robots["swift"].fixes
    assert found is not None
    np.testing.assert_allclose(found.position, [UVW[:dimension]], atol=PRINTED)


def test_origin_is_the_earliest_fix(tmp_path: Path) -> None:
    fixes = "2.0,53.001,-4.0,210.0\n1.0,53.0,-4.0,200.0\n"
    survey = read_survey(_folder(tmp_path, 3, "", fixes))
    assert survey.geodetic_origin == (53.0, -4.0, 200.0)
    found = survey.robots["swift"].fixes
    assert found is not None
    np.testing.assert_allclose(found.position[0], [0.0, 0.0, 0.0], atol=1e-8)
    # Geodesic length of 0.001 degrees of the meridian, by an independent solver.
    length = pyproj.Geod(ellps="WGS84").inv(-4.0, 53.0, -4.0, 53.001)[2]
    # At 200 m above the ellipsoid the same angle is longer by h/R; 1 mm covers the chord.
    assert found.position[1, 1] == pytest.approx(length * (1 + 205 / 6.376e6), abs=1e-3)


def test_ellipsoid_of_wgs84() -> None:
    # Defining parameters a = 6378137 m, 1/f = 298.257223563; derived b = 6356752.314245 m
    # (NGA.STND.0036).
    shape = ellipsoid_of("EPSG:4979")
    assert shape.a == 6378137.0
    assert shape.b == pytest.approx(6356752.314245, abs=5e-7)


def test_other_geographic_systems_have_their_own_ellipsoid() -> None:
    # ETRS89 in three dimensions: GRS 80, b = 6356752.314140 m.
    assert ellipsoid_of("EPSG:4937").b == pytest.approx(6356752.314140, abs=5e-7)


@pytest.mark.parametrize(
    ("start", "length"),
    # Length of one degree of latitude on WGS 84 by the meridian arc.
    [(0.0, 110574.3886), (44.5, 111131.7777)],
)
def test_a_degree_of_latitude(start: float, length: float) -> None:
    wgs84 = ellipsoid_of("EPSG:4979")
    lat = start + np.arange(1000) / 1000
    north = sum(
        float(to_site(np.array([[a + 0.001, 7.0, 0.0]]), (a, 7.0, 0.0), wgs84)[0, 1])
        for a in lat.tolist()
    )
    # The tangent plane shortens each step s = 111 m by s^3 / 6R^2, 6e-6 m in all.
    assert north == pytest.approx(length, abs=6e-5)


def test_a_degree_of_the_equator() -> None:
    wgs84 = ellipsoid_of("EPSG:4979")
    east = to_site(np.array([[0.0, 0.5, 0.0]]), (0.0, 0.0, 0.0), wgs84)[0, 0]
    # a sin(0.5 deg), and one degree is 111319.4908 m of arc.
    arc = 2 * 6378137.0 * np.arcsin(east / 6378137.0)
    assert arc == pytest.approx(111319.4908, abs=5e-5)


def test_the_site_frame_is_a_plane() -> None:
    # A point about 1 km north at the same height lies 7.8 cm below the plane.
    lon, lat, _ = pyproj.Geod(ellps="WGS84").fwd(-4.0, 53.0, 0.0, 1000.0)
    up = to_site(np.array([[lat, lon, 0.0]]), (53.0, -4.0, 0.0), ellipsoid_of("EPSG:4979"))[0, 2]
    assert up == pytest.approx(-0.0784, abs=1e-4)
