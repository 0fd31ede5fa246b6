"""Which components each observation row has, and the rows of each combination as arrays."""

from __future__ import annotations

from collections.abc import Mapping
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


def split_by_components(
    table: Observations,
    usable: Bools,
    dimension: int,
    kind: str,
    given: Mapping[str, Mapping[str, float]] | None = None,
) -> Parts:
    """Group rows (n,) by sensor and by which components they carry.

    ``given``: standard deviations that the survey states for each sensor, by name without prefix.

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
            sigma = (given or {}).get(name, {})
            parts.append(_pose_rows(table, rows, name, dimension, cartesian, sigma))
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
    table: Observations,
    rows: Ints,
    sensor: str,
    dimension: int,
    cartesian: Bools,
    given: Mapping[str, float],
) -> ObservedRows:
    group = frames.group(dimension)
    value = table.value[rows]
    xyz = value[:, 3 : 3 + dimension]
    polar = ~cartesian[rows]
    xyz = np.where(polar[:, None], _from_polar(value, dimension), xyz)
    turn = value[:, 6:7] if dimension == 2 else value[:, 7:11]
    obs = group.from_rows(np.concatenate([xyz, turn], axis=1))
    full = _pose_covariance(table, rows, dimension, polar, given)
    return ObservedRows(
        sensor,
        ("pose",),
        rows,
        obs,
        np.full((len(rows), group.dof), np.nan),
        group.covariance_from_table(obs, full),
    )


def _pose_covariance(
    table: Observations, rows: Ints, dimension: int, polar: Bools, given: Mapping[str, float]
) -> Floats:
    """Stated covariance (n, dof, dof) of relative poses, table order, NaN where not stated.

    A position seen by range and angles gets theirs, to first order; what the row does not state
    of them the sensor does. (A sensor's sigmas of Cartesian rows are terms of the noise model,
    which the data may correct; those of a converted row have no term of their own there.)
    """
    sigma = table.sigma[rows]
    turned = ("rz_rad",) if dimension == 2 else ("rx_rad", "ry_rad", "rz_rad")
    wanted = ("x_m", "y_m", "z_m")[:dimension]
    dof = dimension + len(turned)
    place, turn = np.arange(dimension), np.arange(dimension, dof)
    full = np.zeros((len(rows), dof, dof))
    full[:, place, place] = sigma[:, [SIGMA_COLUMNS.index(n) for n in wanted]] ** 2
    full[:, turn, turn] = sigma[:, [SIGMA_COLUMNS.index(n) for n in turned]] ** 2
    if polar.any():
        angular = np.array([given.get(name, np.nan) for name in turned]) ** 2
        mine = full[polar]
        mine[:, turn, turn] = np.where(
            np.isfinite(mine[:, turn, turn]), mine[:, turn, turn], angular
        )
        mine[:, :dimension, :dimension] = _polar_covariance(
            table.value[rows[polar]], sigma[polar], given, dimension
        )
        full[polar] = mine
    full[~np.isfinite(full).all(axis=(1, 2))] = np.nan
    if table.cov is not None:
        own = np.isfinite(table.cov[rows]).all(axis=(1, 2))
        full[own] = table.cov[rows][own]
    return full


def _polar_covariance(
    value: Floats, sigma: Floats, given: Mapping[str, float], dimension: int
) -> Floats:
    """Covariance (n, d, d) of positions from the sigmas (n, 9) of bearing, elevation and range."""
    b, r = value[:, 0], value[:, 2]
    e = value[:, 1] if dimension == 3 else np.zeros(len(value))
    if "range_m" in given or "range_per_m" in given:
        range_sigma = np.hypot(given.get("range_m", 0.0), given.get("range_per_m", 0.0) * r)
    else:
        range_sigma = np.full(len(value), np.nan)
    model = np.stack(
        [
            np.full(len(value), given.get("bearing_rad", np.nan)),
            np.full(len(value), given.get("elevation_rad", np.nan)),
            range_sigma,
        ],
        axis=1,
    )
    spread = np.where(np.isfinite(sigma[:, :3]), sigma[:, :3], model)
    zero = np.zeros(len(value))
    cb, sb, ce, se = np.cos(b), np.sin(b), np.cos(e), np.sin(e)
    columns = [
        np.stack([-r * ce * sb, r * ce * cb, zero], axis=1),
        np.stack([-r * se * cb, -r * se * sb, r * ce], axis=1),
        np.stack([ce * cb, ce * sb, se], axis=1),
    ]
    used = (0, 2) if dimension == 2 else (0, 1, 2)
    jacobian = np.stack([columns[k][:, :dimension] for k in used], axis=2)
    scaled = jacobian * spread[:, None, list(used)]
    return np.asarray(scaled @ np.swapaxes(scaled, 1, 2))


def _from_polar(value: Floats, dimension: int) -> Floats:
    bearing, elevation, distance = value[:, 0], value[:, 1], value[:, 2]
    if dimension == 2:
        return np.stack([distance * np.cos(bearing), distance * np.sin(bearing)], axis=1)
    flat = distance * np.cos(elevation)
    return np.stack(
        [flat * np.cos(bearing), flat * np.sin(bearing), distance * np.sin(elevation)], axis=1
    )
