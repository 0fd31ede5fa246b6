"""Sightings as flat arrays, their residuals, and sums over groups."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.start import row_kernels

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Order of the components in ``SightingRows.value``.
COMPONENTS = ("bearing_rad", "elevation_rad", "range_m", "x_m", "y_m", "z_m")
#: Scale of the robust cost per residual component (Cauchy constant for 95 % efficiency, squared;
#: P. W. Holland & R. E. Welsch, Comm. Statist. A6, 1977).
CAUCHY2 = 2.3849**2


@dataclass(frozen=True)
class SightingRows:
    """Sightings as flat arrays.

    ``group`` (n,) which landmark; ``origin`` (n, d), ``rotation`` (n, d, d) of the sensor in the
    frame of the result; ``value``, ``sigma`` (n, 6) by COMPONENTS, NaN where not observed.
    """

    group: Ints
    origin: Floats
    rotation: Floats
    value: Floats
    sigma: Floats

    def take(self, index: Ints) -> SightingRows:
        """Some of the rows."""
        return SightingRows(
            self.group[index],
            self.origin[index],
            self.rotation[index],
            self.value[index],
            self.sigma[index],
        )


def residuals(rows: SightingRows, points: Floats) -> tuple[Floats, Floats]:
    """Normalised residuals (n, 6) and Jacobians (n, 6, d) by the points (n, d); absent: zero."""
    d = points.shape[1]
    x, y, z = _local(rows, points)
    flat2 = np.maximum(x**2 + y**2, 1e-12)
    flat, full2 = np.sqrt(flat2), flat2 + z**2
    full = np.sqrt(full2)
    by_local = np.zeros((len(x), 6, 3))
    by_local[:, 0, 0], by_local[:, 0, 1] = -y / flat2, x / flat2
    by_local[:, 1, 0], by_local[:, 1, 1] = -x * z / (flat * full2), -y * z / (flat * full2)
    by_local[:, 1, 2] = flat / full2
    by_local[:, 2] = np.stack([x, y, z], axis=1) / full[:, None]
    by_local[:, [3, 4, 5], [0, 1, 2]] = 1.0
    residual, scale = _normalised(rows, x, y, z)
    jacobian = by_local[:, :, :d] @ np.swapaxes(rows.rotation, 1, 2) * scale[:, :, None]
    return residual, jacobian


def _local(rows: SightingRows, points: Floats) -> tuple[Floats, Floats, Floats]:
    """Coordinates of points (n, d) in the sensor frames."""
    difference = points - rows.origin
    local = (np.swapaxes(rows.rotation, 1, 2) @ difference[:, :, None])[:, :, 0]
    z = local[:, 2] if points.shape[1] == 3 else np.zeros(len(local))
    return local[:, 0], local[:, 1], z


def _normalised(rows: SightingRows, x: Floats, y: Floats, z: Floats) -> tuple[Floats, Floats]:
    """Normalised residuals (n, 6) and 1 / sigma (n, 6), both zero where nothing was observed."""
    seen = np.isfinite(rows.value)
    if rows.origin.shape[1] == 2:
        seen[:, [1, 5]] = False
    flat = np.sqrt(x**2 + y**2)
    predicted = (np.arctan2(y, x), np.arctan2(z, flat), np.sqrt(flat**2 + z**2), x, y, z)
    residual, scale = np.zeros(rows.value.shape), np.zeros(rows.value.shape)
    for k, value in enumerate(predicted):
        mine = seen[:, k]
        if not mine.any():
            continue
        rest = value[mine] - rows.value[mine, k]
        if k < 2:
            rest = np.remainder(rest + np.pi, 2.0 * np.pi) - np.pi
        scale[mine, k] = 1.0 / rows.sigma[mine, k]
        residual[mine, k] = rest * scale[mine, k]
    return residual, scale


def robust_cost(rows: SightingRows, points: Floats) -> Floats:
    """Cost (n,) of each row at a point (n, d): c m log(1 + s / (c m)), m components."""
    return np.asarray(row_kernels.robust_cost(*_flat(rows), np.ascontiguousarray(points), CAUCHY2))


def normal_equations(rows: SightingRows, points: Floats) -> tuple[Floats, Floats]:
    """J^T W J (G, d, d) and -J^T W r (G, d) of every group at points (G, d), Cauchy weights.

    Groups without a point (NaN) get zeros.
    """
    groups, d = points.shape
    normal, gradient = np.zeros((groups, d, d)), np.zeros((groups, d))
    group = np.ascontiguousarray(rows.group, dtype=np.int64)
    row_kernels.normal_equations(
        group, *_flat(rows), np.ascontiguousarray(points), CAUCHY2, normal, gradient
    )
    return normal, gradient


def _flat(rows: SightingRows) -> tuple[Floats, Floats, Floats, Floats]:
    """The arrays in the layout that the compiled loops are made for."""
    made = (rows.origin, rows.rotation, rows.value, rows.sigma)
    return tuple(np.ascontiguousarray(a, dtype=np.float64) for a in made)  # type: ignore[return-value]


def sum_by_group(group: Ints, values: Floats, groups: int) -> Floats:
    """Sum values (n, ...) over groups: (groups, ...)."""
    flat = values.reshape(len(values), int(np.prod(values.shape[1:], dtype=np.int64)))
    total = np.stack(
        [np.bincount(group, weights=column, minlength=groups) for column in flat.T], axis=1
    )
    return np.asarray(total.reshape(groups, *values.shape[1:]))
