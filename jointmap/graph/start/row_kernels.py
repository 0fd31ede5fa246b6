"""Compiled loops over sightings: robust cost, and normal equations summed over groups.

What they compute is :mod:`jointmap.graph.start.rows` row by row, without arrays in between.
Components by ``rows.COMPONENTS``: bearing, elevation, range, x, y, z; NaN where not observed.
"""

from __future__ import annotations

import math

import numba
import numpy as np


@numba.njit(cache=True)
def _fill(origin, rotation, value, sigma, point, residual, jacobian):  # type: ignore[no-untyped-def]
    """Normalised residuals (6,) and Jacobian (6, 3) of one row; return its observed components."""
    d = len(point)
    local = np.zeros(3)
    for i in range(d):
        for j in range(d):
            local[i] += rotation[j, i] * (point[j] - origin[j])
    x, y, z = local
    flat2 = max(x * x + y * y, 1e-12)
    flat, full2 = math.sqrt(flat2), flat2 + z * z
    full = math.sqrt(full2)  # like flat, never zero
    used = 0
    for k in range(6):
        residual[k] = 0.0
        for i in range(3):
            jacobian[k, i] = 0.0
        if not math.isfinite(value[k]):
            continue
        used += 1
        if d == 2 and (k == 1 or k == 5):
            continue
        a = b = c = 0.0
        if k == 0:
            predicted, a, b = math.atan2(y, x), -y / flat2, x / flat2
        elif k == 1:
            predicted = math.atan2(z, math.sqrt(x * x + y * y))
            a, b, c = -x * z / (flat * full2), -y * z / (flat * full2), flat / full2
        elif k == 2:
            predicted = math.sqrt(x * x + y * y + z * z)
            a, b, c = x / full, y / full, z / full
        else:
            predicted = local[k - 3]
            if k == 3:
                a = 1.0
            elif k == 4:
                b = 1.0
            else:
                c = 1.0
        rest = predicted - value[k]
        if k < 2:
            rest = (rest + np.pi) % (2.0 * np.pi) - np.pi
        scale = 1.0 / sigma[k]
        residual[k] = rest * scale
        for i in range(d):
            # Back from the sensor's axes; in the plane its z axis is that of the result.
            jacobian[k, i] = (a * rotation[i, 0] + b * rotation[i, 1]) * scale
            if d == 3:
                jacobian[k, i] += c * rotation[i, 2] * scale
    return used


@numba.njit(cache=True)
def robust_cost(origin, rotation, value, sigma, point, cauchy2):  # type: ignore[no-untyped-def]
    """Cost (n,) of each row at a point (n, d): c m log(1 + s / (c m)), m components."""
    out = np.empty(len(point))
    residual, jacobian = np.zeros(6), np.zeros((6, 3))
    for n in range(len(point)):
        used = _fill(origin[n], rotation[n], value[n], sigma[n], point[n], residual, jacobian)
        limit = cauchy2 * max(used, 1)
        out[n] = limit * math.log1p(np.sum(residual**2) / limit)
    return out


@numba.njit(cache=True)
def normal_equations(  # type: ignore[no-untyped-def]
    group, origin, rotation, value, sigma, point, cauchy2, normal, gradient
):
    """Add J' w J to ``normal`` (G, d, d) and -J' w r to ``gradient`` (G, d), points (G, d)."""
    d = point.shape[1]
    residual, jacobian = np.zeros(6), np.zeros((6, 3))
    for n in range(len(group)):
        g = group[n]
        if math.isnan(point[g, 0]):
            continue
        used = _fill(origin[n], rotation[n], value[n], sigma[n], point[g], residual, jacobian)
        weight = 1.0 / (1.0 + np.sum(residual**2) / (cauchy2 * max(used, 1)))
        for k in range(6):
            if not math.isfinite(value[n, k]):
                continue
            for i in range(d):
                lever = weight * jacobian[k, i]
                gradient[g, i] -= lever * residual[k]
                for j in range(d):
                    normal[g, i, j] += lever * jacobian[k, j]
