"""Sightings of landmarks and encounters with other robots."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from jointmap import schema
from jointmap.ingest.config import Config
from jointmap.ingest.covariance import read_covariance
from jointmap.ingest.problems import Problems
from jointmap.ingest.stamps import drop_copies, sort_by_time
from jointmap.ingest.survey import SIGMA_COLUMNS, VALUE_COLUMNS, Floats, Observations
from jointmap.ingest.table import Table
from jointmap.ingest.values import (
    check_angle,
    check_sigmas,
    known_names,
    normalise,
    refuse_dimension,
    require,
    require_names,
    used_names,
)

_V = {name: i for i, name in enumerate(VALUE_COLUMNS)}
_POLAR = [_V["range_m"], _V["bearing_rad"], _V["elevation_rad"]]
_CARTESIAN = [_V["x_m"], _V["y_m"], _V["z_m"]]
_QUATERNION = [_V["qx"], _V["qy"], _V["qz"], _V["qw"]]
#: Column of ``Observations.sigma`` for each axis of a pose in table order.
_AXIS_SIGMA = {
    2: [SIGMA_COLUMNS.index(c) for c in ("x_m", "y_m", "rz_rad")],
    3: [SIGMA_COLUMNS.index(c) for c in ("x_m", "y_m", "z_m", "rx_rad", "ry_rad", "rz_rad")],
}


def read_observations(
    table: Table,
    kind: str,
    me: str,
    config: Config,
    problems: Problems,
) -> Observations | None:
    """Sightings or encounters (``kind``) of robot ``me`` from its concatenated files."""
    dimension = config.dimension
    spec = schema.input_table(kind)
    target_column = "landmark" if kind == "sightings" else "robot"
    refuse_dimension(table, spec, dimension, problems)
    if not require(table, ["t_s", "sensor", target_column], (), problems):
        return None
    if not _any_component(table, spec, dimension, problems):
        return None
    table = sort_by_time(table, problems)
    table = _drop_blind(table, dimension, problems)
    sensor, target, targets = _names(table, target_column, me, config, problems)
    contents = [sensor, target, *(v for k, v in table.numbers.items() if k != "t_s")]
    keep = drop_copies(table, contents, table.number("t_s"), problems)
    if not keep.all():
        table, sensor, target = table.take(keep), sensor[keep], target[keep]
    value = _values(table, dimension, problems)
    sigma, cov = _noise(table, value, dimension, problems)
    target, targets = used_names(target, targets)
    return Observations(
        t_s=table.number("t_s"),
        sensor=sensor,
        sensors=tuple(config.robots[me].sensors),
        target=target,
        targets=targets,
        value=value,
        sigma=sigma,
        cov=cov,
        source=table.provenance,
    )


def _components(dimension: int) -> list[str]:
    known = schema.input_table("sightings").names(dimension)
    return [c for c in VALUE_COLUMNS if c in known]


def _any_component(table: Table, spec: schema.Table, dimension: int, problems: Problems) -> bool:
    names = _components(dimension)
    if any(table.has(n) for n in names):
        return True
    for name in table.files:
        mend = f"add some of {' '.join(names)}"
        problems.add(name, "no column holds an observation", mend)
    return False


def _drop_blind(table: Table, dimension: int, problems: Problems) -> Table:
    """Rows that observe nothing are left out."""
    blind = np.ones(table.n, dtype=bool)
    for name in _components(dimension):
        if name in table.numbers:
            blind &= np.isnan(table.numbers[name])
    if not blind.any():
        return table
    table.complain(problems, blind, None, "observes nothing", "the row is left out", mended=True)
    return table.take(~blind)


def _names(
    table: Table,
    column: str,
    me: str,
    config: Config,
    problems: Problems,
) -> tuple[NDArray[np.int64], NDArray[np.int64], tuple[str, ...]]:
    """Codes of sensors and targets, and the names of the targets."""
    require_names(table, "sensor", problems)
    require_names(table, column, problems)
    sensor = known_names(
        table, "sensor", tuple(config.robots[me].sensors), f"sensor of {me}", problems
    )
    if column == "landmark":
        names = table.texts[column]
        return sensor, names.code, names.names
    others = tuple(sorted(config.robots))
    target = known_names(table, column, others, "robot", problems)
    itself = target == others.index(me)
    table.complain(problems, itself, column, "the robot meets itself", "drop the row or rename")
    return sensor, target, others


def _values(table: Table, dimension: int, problems: Problems) -> Floats:
    """Observed components (n, 11), checked; bearings wrapped to (-pi, pi]."""
    names = set(_components(dimension))
    value = np.full((table.n, len(VALUE_COLUMNS)), np.nan)
    for name in names & set(table.numbers):
        value[:, _V[name]] = table.numbers[name]
    with np.errstate(invalid="ignore"):
        short = value[:, _V["range_m"]] <= 0.0
    mend = "leave the cell empty when nothing was measured"
    table.complain(problems, short, "range_m", "a range must be positive", mend)
    check_angle(table, "bearing_rad", problems)
    check_angle(table, "yaw_rad", problems)
    check_angle(table, "elevation_rad", problems, limit=np.pi / 2)
    _refuse_mixture(table, value, problems)
    if dimension == 3:
        value[:, _QUATERNION] = _quaternions(table, value[:, _QUATERNION], problems)
    for name in ("bearing_rad", "yaw_rad"):
        column = value[:, _V[name]]
        with np.errstate(invalid="ignore"):
            beyond = np.abs(column) > np.pi
        column[beyond] = np.pi - np.mod(np.pi - column[beyond], 2.0 * np.pi)
    return value


def _refuse_mixture(table: Table, value: Floats, problems: Problems) -> None:
    """Range and bearing beside x and y would count one detection twice."""
    seen = ~np.isnan(value)
    both = seen[:, _POLAR].any(axis=1) & seen[:, _CARTESIAN].any(axis=1)
    message = "has polar and Cartesian components"
    table.complain(problems, np.asarray(both), "x_m", message, "keep one kind in a row")


def _quaternions(table: Table, quaternion: Floats, problems: Problems) -> Floats:
    given = ~np.isnan(quaternion)
    part = given.any(axis=1) & ~given.all(axis=1)
    table.complain(
        problems, np.asarray(part), "qx", "an incomplete quaternion", "give qx qy qz qw or none"
    )
    return normalise(table, quaternion, problems)


def _noise(
    table: Table, value: Floats, dimension: int, problems: Problems
) -> tuple[Floats, Floats | None]:
    """Sigmas (n, 9) and covariances; where a covariance stands, it replaces the sigmas."""
    sigma = np.full((table.n, len(SIGMA_COLUMNS)), np.nan)
    columns = [f"sigma_{c}" for c in SIGMA_COLUMNS]
    check_sigmas(table, [*columns, "sigma_yaw_rad"], problems)
    for j, column in enumerate(columns):
        if column in table.numbers:
            sigma[:, j] = table.numbers[column]
    if dimension == 2 and "sigma_yaw_rad" in table.numbers:
        sigma[:, -1] = table.numbers["sigma_yaw_rad"]
    cov = read_covariance(table, dimension, problems)
    if cov is None:
        return sigma, None
    unseen = np.isnan(value[:, [_V["x_m"], _V["y_m"], _V["yaw_rad"]]])
    if dimension == 3:
        turned = np.isnan(value[:, _V["qw"]])
        unseen = np.column_stack([np.isnan(value[:, _CARTESIAN]), *[turned] * 3])
    cov[unseen] = np.nan  # rows of the matrices
    np.swapaxes(cov, 1, 2)[unseen] = np.nan  # and their columns
    return _without_doubles(table, sigma, cov, dimension, problems), cov


def _without_doubles(
    table: Table, sigma: Floats, cov: Floats, dimension: int, problems: Problems
) -> Floats:
    given = ~np.isnan(np.einsum("nii->ni", cov))
    axes = _AXIS_SIGMA[dimension]
    double = given & ~np.isnan(sigma[:, axes])
    message, mend = "sigmas beside a covariance", "the covariance is used"
    first = np.flatnonzero(double.any(axis=1))[:1]
    table.complain(problems, first, None, message, mend, mended=True)
    sigma[:, axes] = np.where(double, np.nan, sigma[:, axes])
    return sigma
