"""Tables that go in."""

from __future__ import annotations

from dataclasses import replace

from jointmap.schema.columns import Column, Table, by_dimension, family, stamp, text, unit_of

#: Survey-wide tables with default names, and the endings that are tried.
DEFAULT_FILES = ("associations", "closures", "control_points")

_POLAR = (
    Column("range_m", "float64", "m", "from the sensor's origin to the target point"),
    Column(
        "bearing_rad", "float64", "rad", "from the sensor's x axis, positive to the left, about z"
    ),
    Column(
        "elevation_rad",
        "float64",
        "rad",
        "positive up from the sensor's xy plane",
        dimensions=(3,),
    ),
)


def _axis(name: str, meaning: str, *dimensions: int) -> Column:
    unit = unit_of(name)
    return Column(name, "float64", unit, meaning, dimensions=dimensions or (2, 3))


def _observation_columns() -> tuple[Column, ...]:
    """Components of a sighting or encounter, their sigmas and full covariance."""
    where = "target point in the sensor frame"
    turn = "orientation of the target in the sensor frame"
    cartesian = (_axis("x_m", where), _axis("y_m", where), _axis("z_m", where, 3))
    orientation = (
        _axis("yaw_rad", turn, 2),
        *(_axis(q, turn, 3) for q in ("qx", "qy", "qz", "qw")),
    )
    sigmas = tuple(
        replace(c, name=f"sigma_{c.name}", meaning="its standard deviation")
        for c in (*_POLAR, *cartesian)
    )
    turns = (
        _axis("sigma_yaw_rad", "its standard deviation", 2),
        *(_axis(f"sigma_{a}_rad", "about this sensor axis", 3) for a in ("rx", "ry", "rz")),
    )
    cov = by_dimension("cov", "full covariance, sensor axes, instead of the sigmas")
    return (*_POLAR, *cartesian, *orientation, *sigmas, *turns, *cov)


def _twist_sigmas() -> tuple[Column, ...]:
    twist = by_dimension("twist", "", form="twist")
    return tuple(
        replace(c, name=f"sigma_{c.name}", meaning="standard deviation of the component")
        for c in twist
    )


def _odometry() -> Table:
    pose = by_dimension(
        "pose", "pose of the body in the robot's odometry frame", required=True, form="pose"
    )
    sigma = by_dimension(
        "sigma", "of the increment from the row before, body frame of that row", form="pose"
    )
    acc = by_dimension(
        "cov", "accumulated covariance, axes of the odometry frame", form="pose", prefix="acc_cov_"
    )
    twist = tuple(
        replace(c, required=c.name != "vy_mps")
        for c in by_dimension("twist", "in the body frame, held until the next row", form="twist")
    )
    return Table(
        "odometry",
        "as named in survey.toml",
        "one row per odometry message, pose form or twist form",
        (
            *stamp("t_s", "time by the robot's clock"),
            *pose,
            *sigma,
            *acc,
            *twist,
            *_twist_sigmas(),
        ),
        "One form per robot. In two dimensions a missing `vy_mps` is zero with the noise model's "
        "sigma. Rows of one stamp: identical ones count once; of different twists the last holds "
        "(the others last no time); different poses are refused.",
    )


def _sightings() -> Table:
    return Table(
        "sightings",
        "as named in survey.toml",
        "one row per observation of a landmark; any subset of the components",
        (
            *stamp("t_s", "time by the robot's clock"),
            text("sensor", "name of a sensor of this robot"),
            text("landmark", "the robot's label of the landmark"),
            *_observation_columns(),
        ),
        "Polar or Cartesian components in one row, not both. A row that observes nothing is left "
        "out, a full copy of another row too.",
    )


def _encounters() -> Table:
    return Table(
        "encounters",
        "as named in survey.toml",
        "one row per observation of another robot",
        (
            *stamp("t_s", "time by the robot's clock"),
            text("sensor", "name of a sensor of this robot"),
            text("robot", "the robot that is seen (its target point)"),
            *_observation_columns(),
        ),
    )


def _fixes() -> Table:
    site = "antenna in the site frame"
    return Table(
        "fixes",
        "as named in survey.toml",
        "one row per absolute position, local or geographic",
        (
            *stamp("t_s", "time by the robot's clock"),
            *family(("x_m", "y_m"), site, required=True, form="local"),
            *family(("z_m",), site, required=True, dimensions=(3,), form="local"),
            *family(("lat_deg", "lon_deg"), "geodetic", required=True, form="geographic"),
            Column(
                "height_m",
                "float64",
                "m",
                "ellipsoidal height (two dimensions: zero where missing)",
                form="geographic",
            ),
            *family(("sigma_x_m", "sigma_y_m"), "x or east, y or north"),
            *family(("sigma_z_m",), "z or up", dimensions=(3,)),
        ),
        "Geographic fixes are converted to east, north, up at the site's origin (EPSG method "
        "9836): `site_origin` of survey.toml, otherwise the earliest geographic fix of the first "
        "robot that has any. Beside control points or local fixes the origin must be stated.",
    )


def _closures() -> Table:
    return Table(
        "closures",
        "closures.csv, .csv.gz or .parquet",
        "relative pose between two times, of one robot or of two",
        (
            text("robot_a", "robot that the pose is relative to"),
            *stamp("t_a_s", "by the clock of robot a"),
            text("robot_b", "the other robot, or the same"),
            *stamp("t_b_s", "by the clock of robot b"),
            *by_dimension("pose", "body b at t_b in body a at t_a", required=True),
            *by_dimension("sigma", "axes of body a"),
            *by_dimension("cov", "full covariance, axes of body a, instead of the sigmas"),
        ),
    )


def _associations() -> Table:
    return Table(
        "associations",
        "associations.csv, .csv.gz or .parquet",
        "the label of a robot is a shared landmark",
        (
            text("robot", "whose label"),
            text("label", "as in its sightings"),
            text("landmark", "shared landmark"),
            *stamp("t_from_s", "holds from this time of the robot's clock", required=False),
            *stamp("t_to_s", "holds until this time, included", required=False),
        ),
        "Without the file, equal labels mean the same landmark. With it, a label that it does not "
        "list is private to its robot and named `robot:label`.",
    )


def _control_points() -> Table:
    where = "surveyed, site frame"
    return Table(
        "control_points",
        "control_points.csv, .csv.gz or .parquet",
        "landmarks with surveyed coordinates",
        (
            text("landmark", "shared landmark"),
            *family(("x_m", "y_m"), where, required=True),
            *family(("z_m",), where, required=True, dimensions=(3,)),
            *family(("sigma_x_m", "sigma_y_m"), "standard deviation", required=True),
            *family(("sigma_z_m",), "standard deviation", required=True, dimensions=(3,)),
        ),
        "Repeated points that agree are averaged by weight; contradicting ones are refused.",
    )


def _online() -> tuple[Table, ...]:
    pose = by_dimension("pose", "in the frame that estimator.toml names", required=True)
    cov = by_dimension("cov", "as estimator.toml says: fixed axes or body tangent")
    stamps = stamp("t_s", "time by the robot's clock")
    return (
        Table("online_trajectory", "online/NAME/ROBOT.csv", "what an estimator reported then",
              (*stamps, *pose, *cov)),
        Table("online_joint", "online/NAME/joint.parquet", "cross-covariance of two robots",
              (*stamps, text("robot_a", "rows"), text("robot_b", "columns"),
               *by_dimension("xcov", "row-major cross-covariance", required=True))),
        Table("online_map", "online/NAME/map.csv", "landmarks of an estimator",
              (text("robot", "whose map"), text("landmark", "name"),
               *family(("x_m", "y_m"), "position", required=True),
               *family(("z_m",), "position", required=True, dimensions=(3,)),
               *family(("cov_x_x", "cov_x_y", "cov_y_y"), "covariance"),
               *family(("cov_x_z", "cov_y_z", "cov_z_z"), "covariance", dimensions=(3,)))),
    )  # fmt: skip


def _truth() -> tuple[Table, ...]:
    return (
        Table("truth_robot", "truth/ROBOT.csv", "true poses, survey time; `fuse` never opens them",
              (*stamp("t_s", "survey time"), *by_dimension("pose", "true pose", required=True))),
        Table("truth_landmarks", "truth/landmarks.csv", "true landmarks",
              (text("landmark", "name"), *family(("x_m", "y_m"), "true position", required=True),
               *family(("z_m",), "true position", required=True, dimensions=(3,)))),
    )  # fmt: skip


INPUT_TABLES: tuple[Table, ...] = (
    _odometry(),
    _sightings(),
    _encounters(),
    _fixes(),
    _closures(),
    _associations(),
    _control_points(),
    *_online(),
    *_truth(),
)


def input_table(name: str) -> Table:
    """The input table of this name; ``KeyError`` when there is none."""
    return {table.name: table for table in INPUT_TABLES}[name]
