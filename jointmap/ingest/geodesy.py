"""Geographic coordinates to a local east, north, up frame about an origin.

The site frame is topocentric (EPSG method 9836: geocentric coordinates seen from a point of the
ellipsoid, axes east, north and up there). It is a plane in space, not a curved surface: a point at
the origin's height and a distance d away has an up of about -d^2 / 2R (7.8 cm at 1 km).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyproj
from pyproj.exceptions import CRSError

from jointmap.ingest.survey import Floats

WGS84 = "EPSG:4979"


@dataclass(frozen=True)
class Ellipsoid:
    """Semi-axes in metres."""

    a: float
    b: float


def ellipsoid_of(crs: str) -> Ellipsoid:
    """The ellipsoid of a geographic 3-D coordinate reference system.

    Raises
    ------
    ValueError
        Not known, or of another kind; the message says what to write instead.
    """
    try:
        found = pyproj.CRS.from_user_input(crs)
    except CRSError:
        raise ValueError(f"{crs!r} is no coordinate reference system that is known") from None
    if not found.is_geographic or len(found.axis_info) != 3 or found.ellipsoid is None:
        kind = f"{found.type_name} with {len(found.axis_info)} axes"
        raise ValueError(f"{crs!r} ({found.name}) is a {kind}, not geographic with three axes")
    if any(axis.unit_name != "degree" for axis in found.axis_info[:2]):
        raise ValueError(f"{crs!r} ({found.name}) does not count in degrees")
    shape = found.ellipsoid
    return Ellipsoid(float(shape.semi_major_metre), float(shape.semi_minor_metre))


def to_site(geodetic: Floats, origin: tuple[float, float, float], ellipsoid: Ellipsoid) -> Floats:
    """East, north and up of geodetic positions.

    Parameters
    ----------
    geodetic : (n, 3) float
        Latitude and longitude (degrees), ellipsoidal height (m).
    origin : tuple of float
        The same of the site frame's origin.
    ellipsoid : Ellipsoid
        Of both.

    Returns
    -------
    (n, 3) float
        East, north, up (m) in the topocentric frame of the origin.

    References
    ----------
    IOGP Guidance Note 7-2, methods 9602 (geographic to geocentric) and 9836 (geocentric to
    topocentric).
    """
    shape = f"+a={ellipsoid.a!r} +b={ellipsoid.b!r}"
    lat, lon, height = origin
    step = pyproj.Transformer.from_pipeline(
        "+proj=pipeline +step +proj=unitconvert +xy_in=deg +xy_out=rad "
        f"+step +proj=cart {shape} "
        f"+step +proj=topocentric {shape} +lat_0={lat!r} +lon_0={lon!r} +h_0={height!r}"
    )
    east, north, up = step.transform(geodetic[:, 1], geodetic[:, 0], geodetic[:, 2])
    return np.column_stack([east, north, up])
