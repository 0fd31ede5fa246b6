"""Which components each observation row has, and the rows of each combination as arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.ingest.survey import SIGMA_COLUMNS, VALUE_COLUMNS, Observations

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_POINT = ("bearing_rad", "elevation_rad", "range_m", "x_m", "y_m", "z_m")
#: Place of each Cartesian component in the table order of a full covariance.
_TABLE_ORDER = {"x_m": 0, "y_m": 1, "z_m": 2}


@dataclass(frozen=True)
class ObservedRows:
    """Rows of one sensor with one set of components; arrays as in ``Block``."""

    sensor: str
    components: tuple[str, ...]
    rows: Ints
    obs: Floats
    sigma: Floats
    covariance: Floats | None


@dataclass(frozen=True)
class Parts:
    """All usable rows by combination, and the mask of rows that observe nothing."""

    parts: list[ObservedRows]
    empty: Bools


def split_by_components(table: Observations, usable: Bools, dimension: int, kind: str) -> Parts:
    """Group rows (n,) by sensor and by which components they carry.

    A row with position and orientation becomes one relative pose; range, bearing and elevation
    are turned into the position with their covariance when an orientation comes with them. An
    orientation without a full position is left aside, since the position alone decides.
    """
    value = table.value
    seen = np.isfinite(value)
    point = seen[:, : len(_POINT)].copy()
    if dimension == 2:
        point[:, [1, 5]] = False
    turned = seen[:, 6] if dimension == 2 else seen[:, 7:11].all(axis=1)
    cartesian: Bools = np.asarray(
        point[:, 3:5].all(axis=1) & (point[:, 5] if dimension == 3 else True)
    )
    polar: Bools = np.asarray(
        point[:, [0, 2]].all(axis=1) & (point[:, 1] if dimension == 3 else True)
    )
    pose = usable & turned & (cartesian | polar)
    rest = usable & ~pose
    # Cartesian and polar forms of one row say the same thing twice; the Cartesian one is kept.
    both = cartesian & polar
    point[both, :3] = False
    code = point @ (1 << np.arange(len(_POINT)))
    parts = []
    for sensor in np.unique(table.sensor[usable]):
        mine = table.sensor == sensor
        name = table.sensors[sensor]
        rows = np.flatnonzero(mine & pose)
        if len(rows):
            parts.append(_pose_rows(table, rows, name, dimension, cartesian))
        for pattern in np.unique(code[mine & rest]):
            if pattern == 0:
                continue
            rows = np.flatnonzero(mine & rest & (code == pattern))
            parts.append(_point_rows(table, rows, name, int(pattern)))
    return Parts(parts, rest & (code == 0))


def _point_rows(table: Observations, rows: Ints, sensor: str, pattern: int) -> ObservedRows:
    columns = [i for i in range(len(_POINT)) if pattern >> i & 1]
    names = tuple(_POINT[i] for i in columns)
    covariance = None
    if table.cov is not None and all(n in _TABLE_ORDER for n in names):
        place = np.array([_TABLE_ORDER[n] for n in names])
        covariance = table.cov[rows][:, place[:, None], place[None, :]]
        covariance = covariance if np.isfinite(covariance).any() else None
    return ObservedRows(
        sensor,
        names,
        rows,
        table.value[rows][:, [VALUE_COLUMNS.index(n) for n in names]],
        table.sigma[rows][:, [SIGMA_COLUMNS.index(n) for n in names]],
        covariance,
    )


def _pose_rows(
    table: Observations, rows: Ints, sensor: str, dimension: int, cartesian: Bools
) -> ObservedRows:
    group = frames.group(dimension)
    value, sigma = table.value[rows], table.sigma[rows]
    xyz = value[:, 3 : 3 + dimension]
    polar = ~cartesian[rows]
    xyz = np.where(polar[:, None], _from_polar(value, dimension), xyz)
    turn = value[:, 6:7] if dimension == 2 else value[:, 7:11]
    obs = group.from_rows(np.concatenate([xyz, turn], axis=1))
    wanted = ("x_m", "y_m", "rz_rad") if dimension == 2 else (
        "x_m", "y_m", "z_m", "rx_rad", "ry_rad", "rz_rad"
    )  # fmt: skip
    spread = sigma[:, [SIGMA_COLUMNS.index(n) for n in wanted]]
    full = np.full((len(rows), group.dof, group.dof), np.nan)
    stated = np.isfinite(spread).all(axis=1)
    full[stated] = (spread[stated, :, None] * np.eye(group.dof)) ** 2
    if table.cov is not None:
        own = np.isfinite(table.cov[rows]).all(axis=(1, 2))
        full[own] = table.cov[rows][own]
    return ObservedRows(
        sensor,
        ("pose",),
        rows,
        obs,
        np.full((len(rows), group.dof), np.nan),
        group.covariance_from_table(obs, full),
    )


def _from_polar(value: Floats, dimension: int) -> Floats:
    bearing, elevation, distance = value[:, 0], value[:, 1], value[:, 2]
    if dimension == 2:
        return np.stack([distance * np.cos(bearing), distance * np.sin(bearing)], axis=1)
    flat = distance * np.cos(elevation)
    return np.stack(
        [flat * np.cos(bearing), flat * np.sin(bearing), distance * np.sin(elevation)], axis=1
    )
