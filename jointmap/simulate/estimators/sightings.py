"""Sightings of one robot as ranges and bearings, with variances."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.noise import DEFAULT_SIGMA
from jointmap.ingest.survey import Associations, RobotLog, Sensor

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Sightings:
    """Rows (n,) in time: ``range_bearing`` (n, 2), ``variance`` (n, 2), ``mount`` (n, 3) pose of
    the sensor in the body, ``target`` into ``names``. Rows without range or bearing are left out.
    """

    t_s: Floats
    range_bearing: Floats
    variance: Floats
    mount: Floats
    target: Ints
    names: tuple[str, ...]


def sightings_of(log: RobotLog, associations: Associations | None) -> Sightings:
    """The sightings of a robot; landmarks by their shared names where associated."""
    seen = log.sightings
    if seen is None:
        none = np.zeros((0, 2))
        return Sightings(np.zeros(0), none, none, np.zeros((0, 3)), np.zeros(0, np.int64), ())
    value = seen.value
    bearing, distance = value[:, 0], value[:, 2]
    cartesian = np.isnan(distance) & np.isfinite(value[:, 3])
    distance = np.where(cartesian, np.hypot(value[:, 3], value[:, 4]), distance)
    bearing = np.where(cartesian, np.arctan2(value[:, 4], value[:, 3]), bearing)
    sensors = [log.sensors[name] for name in seen.sensors]
    stated = np.array([_sigmas(s) for s in sensors]).reshape(-1, 4)[seen.sensor]
    sigma_range = np.hypot(stated[:, 0], stated[:, 1] * distance)
    sigma_bearing = stated[:, 2].copy()
    sigma_bearing[cartesian] = (stated[:, 3] / np.maximum(distance, 0.1))[cartesian]
    sigma_range[cartesian] = stated[cartesian, 3]
    for column, sigma in ((2, sigma_range), (0, sigma_bearing)):
        own = seen.sigma[:, column]
        sigma[np.isfinite(own)] = own[np.isfinite(own)]
    lag = np.array([s.lag_s for s in sensors])[seen.sensor]
    mount = np.array([s.body_T_sensor for s in sensors])[seen.sensor]
    good = np.isfinite(distance) & np.isfinite(bearing)
    order = np.argsort(seen.t_s + lag, kind="stable")
    order = order[good[order]]
    return Sightings(
        (seen.t_s + lag)[order],
        np.stack([distance, bearing], axis=1)[order],
        np.stack([sigma_range**2, sigma_bearing**2], axis=1)[order],
        mount[order],
        seen.target[order],
        tuple(shared_name(log.name, label, associations) for label in seen.targets),
    )


def _sigmas(sensor: Sensor) -> tuple[float, float, float, float]:
    """Range, range per metre, bearing, Cartesian."""
    given = sensor.sigma
    whole = "range_m" in given or "range_per_m" in given
    share = 0.0 if whole else 0.1 * DEFAULT_SIGMA["range_m"]
    return (
        given.get("range_m", 0.0 if whole else DEFAULT_SIGMA["range_m"]),
        given.get("range_per_m", share),
        given.get("bearing_rad", DEFAULT_SIGMA["bearing_rad"]),
        given.get("x_m", DEFAULT_SIGMA["x_m"]),
    )


def shared_name(robot: str, label: str, associations: Associations | None) -> str:
    """Landmark that a label stands for; one not listed is private (validity times are ignored)."""
    if associations is None:
        return label
    for owner, own, landmark in zip(
        associations.robots, associations.labels, associations.landmarks, strict=True
    ):
        if owner == robot and own == label:
            return landmark
    return f"{robot}:{label}"
