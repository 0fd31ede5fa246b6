"""Tables of the reference folder."""

from __future__ import annotations

from jointmap.schema.columns import (
    Column,
    Table,
    by_dimension,
    family,
    pose_columns,
    stamp,
    text,
)
from jointmap.schema.scores import SCORE_TABLES

_TRUST = text("trust", "`checked`, `weak` or `unchecked`")
#: Components that a measurement row can have, by dimension (observed, residual and sigma alike).
COMPONENTS = (
    "bearing_rad",
    "elevation_rad",
    "range_m",
    "x_m",
    "y_m",
    "z_m",
    "yaw_rad",
    "rx_rad",
    "ry_rad",
    "rz_rad",
)
_ONLY_3D = {"elevation_rad", "z_m", "rx_rad", "ry_rad", "rz_rad"}


def _real(name: str, unit: str, meaning: str, *dimensions: int) -> Column:
    return Column(name, "float64", unit, meaning, True, dimensions or (2, 3))


def _whole(name: str, meaning: str) -> Column:
    return Column(name, "int64", "", meaning, True)


def _trajectory() -> Table:
    return Table(
        "trajectory",
        "trajectory/ROBOT.parquet",
        "one row per odometry row, in the map frame",
        (
            *stamp("t_s", "survey time", ns=False),
            *by_dimension("pose", "map_T_body", required=True),
            *by_dimension("cov", "covariance in the stated datum, map axes", required=True),
            Column("keyframe", "bool", "", "the pose is a variable of the graph", True),
            _whole("component", "number of the connected part"),
            _TRUST,
        ),
    )


def _landmarks() -> Table:
    return Table(
        "landmarks",
        "landmarks.csv",
        "one row per landmark",
        (
            text("landmark", "name; private ones are `robot:label`"),
            _whole("component", "number of the connected part"),
            *family(("x_m", "y_m"), "map_p_landmark", required=True),
            *family(("z_m",), "map_p_landmark", required=True, dimensions=(3,)),
            *family(("yaw_rad",), "orientation of a tag", dimensions=(2,)),
            *family(pose_columns(3)[3:], "orientation of a tag", dimensions=(3,)),
            *by_dimension("cov", "covariance in the stated datum, map axes"),
            _whole("n_sightings", "sightings used"),
            _whole("n_robots", "robots that saw it"),
            text("robots", "their names, joined by blanks"),
            _TRUST,
            Column("datum", "bool", "", "the landmark carries the datum", True),
        ),
    )


def _per_component() -> tuple[Column, ...]:
    columns = []
    for prefix, meaning in (
        ("obs", "observed"),
        ("res", "residual, observed minus computed"),
        ("sigma", "standard deviation in force"),
    ):
        for name in COMPONENTS:
            dimensions = (3,) if name in _ONLY_3D else (2,) if name == "yaw_rad" else (2, 3)
            unit = name.rsplit("_", 1)[1]
            columns.append(Column(f"{prefix}_{name}", "float64", unit, meaning, False, dimensions))
    return tuple(columns)


def _measurements() -> Table:
    return Table(
        "measurements",
        "measurements.parquet",
        "one row per measurement with its verdict",
        (
            _whole("id", "number of the measurement"),
            text("kind", "sighting, encounter, fix, closure, control, odometry or gravity"),
            text("robot", "who measured"),
            *stamp("t_s", "survey time", ns=False),
            text("sensor", "by what", required=False),
            text("target", "label or robot that was seen", required=False),
            text("landmark", "landmark that it was taken for", required=False),
            text("file", "file of the survey"),
            _whole("row", "row of the file"),
            _whole("burst", "rows of one burst share the number"),
            *_per_component(),
            _real("weight", "", "robust weight, 0 to 1"),
            _real("redundancy", "", "redundancy number (trace of the block)"),
            _real("w", "", "normalised residual"),
            *(
                _real(f"mdb_{c}", c.rsplit("_", 1)[1], "minimal detectable bias", *dims)
                for c, dims in (("range_m", (2, 3)), ("bearing_rad", (2, 3)), ("x_m", (2, 3)),
                                ("y_m", (2, 3)), ("z_m", (3,)), ("elevation_rad", (3,)))
            ),
            text("verdict", "`kept`, `down-weighted`, `rejected` or `unusable`"),
            text("reason", "why", required=False),
        ),
    )  # fmt: skip


def _robots() -> Table:
    cov = by_dimension("cov", "covariance of map_T_odom, map axes", required=True)
    return Table(
        "robots",
        "robots.csv",
        "one row per robot",
        (
            text("robot", "name"),
            _whole("component", "number of the connected part"),
            *by_dimension("pose", "map_T_odom", required=True),
            *cov,
            _real("path_m", "m", "length of its path"),
            *(_real(f"share_{t}", "", f"share of {t} rows") for t in
              ("checked", "weak", "unchecked")),
            _real("clock_offset_s", "s", "offset of its clock"),
            _real("sigma_clock_offset_s", "s", "its standard deviation"),
            text("outages", "times without odometry", required=False),
        ),
    )  # fmt: skip


def _lists() -> tuple[Table, ...]:
    robot, sensor = text("robot", "whose"), text("sensor", "which", required=False)
    return (
        Table("associations_verdict", "associations.csv", "one row per label of a robot",
              (robot, text("label", "as the robot calls it"), text("landmark", "what it is"),
               _whole("n_sightings", "sightings of the label"), text("verdict", "what was decided"),
               text("reason", "why"), _real("statistic", "", "value of the test"),
               text("alternative", "landmark that would fit", required=False))),
        Table("noise", "noise.csv", "noise terms, given and estimated",
              (robot, sensor, text("component", "of the measurement"),
               text("term", "constant, per_m, correlated, correlation_time_s, per_sqrt_m ..."),
               _real("given", "", "from the survey"), _real("estimated", "", "from the data"),
               _real("sigma", "", "of the estimate"), _real("redundancy", "", "behind it"))),
        Table("calibration", "calibration.csv", "calibration values",
              (robot, sensor, text("parameter", "name"), _real("value", "", "estimate"),
               _real("sigma", "", "of the estimate"),
               *(Column(n, "bool", "", m, True) for n, m in
                 (("significant", "differs from its nominal value"),
                  ("observable", "the data can tell"), ("used", "in force in the result"))))),
        Table("suspects", "suspects.csv", "ranked suspects with their mends",
              (text("kind", "what is suspected"), robot, *stamp("t_from_s", "from", ns=False),
               *stamp("t_to_s", "to", ns=False), text("target", "label, robot or sensor"),
               _real("statistic", "", "ranking value"), text("reason", "why"),
               text("edit", "lines for edits.toml"))),
        Table("holdout", "holdout.csv", "hold-out evidence",
              (text("fold_kind", "landmark, robot or time"), text("fold", "what was left out"),
               _whole("n", "predictions"), _real("n_effective", "", "independent ones"),
               _real("normalized_square", "", "mean per degree of freedom"),
               _real("lower", "", "of the 95 % band"), _real("upper", "", "of the 95 % band"))),
    )  # fmt: skip


OUTPUT_TABLES: tuple[Table, ...] = (
    _trajectory(),
    _landmarks(),
    _measurements(),
    *_lists(),
    _robots(),
    *SCORE_TABLES,
)


def output_table(name: str) -> Table:
    """The output table of this name; ``KeyError`` when there is none."""
    return {table.name: table for table in OUTPUT_TABLES}[name]
