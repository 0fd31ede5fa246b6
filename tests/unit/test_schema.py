"""The tables as data: complete, free of contradictions, and documented from one source."""

from __future__ import annotations

import itertools

import pytest

from jointmap import schema
from jointmap.schema import Table, input_table, output_table

TABLES = [*schema.INPUT_TABLES, *schema.OUTPUT_TABLES]
UNITS = {"m": "m", "s": "s", "ns": "ns", "rad": "rad", "deg": "deg", "mps": "m/s", "radps": "rad/s"}


@pytest.mark.parametrize("table", TABLES, ids=lambda t: t.name)
@pytest.mark.parametrize("dimension", [2, 3])
def test_names_are_unique(table: Table, dimension: int) -> None:
    names = table.names(dimension)
    assert len(names) == len(set(names))


@pytest.mark.parametrize("table", TABLES, ids=lambda t: t.name)
def test_numbers_carry_their_unit(table: Table) -> None:
    for column in table.columns:
        suffix = column.name.rsplit("_", 1)[-1] if "_" in column.name else ""
        if suffix in UNITS:
            assert column.unit == UNITS[suffix], column.name
        else:
            assert column.unit == "", column.name


def test_covariances_stand_in_the_stated_order() -> None:
    # Upper triangle in the order x, y, yaw or x, y, z, rx, ry, rz.
    assert schema.covariance_columns(2) == (
        "cov_x_x", "cov_x_y", "cov_x_yaw", "cov_y_y", "cov_y_yaw", "cov_yaw_yaw",
    )  # fmt: skip
    axes = ("x", "y", "z", "rx", "ry", "rz")
    pairs = itertools.combinations_with_replacement(axes, 2)
    assert schema.covariance_columns(3) == tuple(f"cov_{a}_{b}" for a, b in pairs)
    both = {*schema.covariance_columns(3), *schema.covariance_lower_columns(3)}
    assert both == {f"cov_{a}_{b}" for a, b in itertools.product(axes, axes)}
    assert schema.xcov_columns(2)[:4] == ("xcov_x_x", "xcov_x_y", "xcov_x_yaw", "xcov_y_x")


def test_forms_of_odometry() -> None:
    table = input_table("odometry")
    pose = ("t_s", "t_ns", "x_m", "y_m", "yaw_rad", "sigma_x_m", "sigma_y_m", "sigma_yaw_rad")
    assert table.names(2, "pose")[:8] == pose
    twist = [n for n in table.names(3, "twist") if not n.startswith(("sigma", "t_"))]
    assert set(twist) == {"vx_mps", "vy_mps", "vz_mps", "wx_radps", "wy_radps", "wz_radps"}


@pytest.mark.parametrize(
    ("table", "dimension", "names"),
    [
        ("control_points", 2, "landmark x_m y_m sigma_x_m sigma_y_m"),
        ("control_points", 3, "landmark x_m y_m z_m sigma_x_m sigma_y_m sigma_z_m"),
        ("associations", 2, "robot label landmark t_from_s t_from_ns t_to_s t_to_ns"),
    ],
)
def test_small_input_tables(table: str, dimension: int, names: str) -> None:
    assert input_table(table).names(dimension) == tuple(names.split())


@pytest.mark.parametrize(
    ("table", "names"),
    [
        (
            "associations_verdict",
            "robot label landmark n_sightings verdict reason statistic alternative",
        ),
        ("noise", "robot sensor component term given estimated sigma redundancy"),
        ("calibration", "robot sensor parameter value sigma significant observable used"),
        ("suspects", "kind robot t_from_s t_to_s target statistic reason edit"),
        ("holdout", "fold_kind fold n n_effective normalized_square lower upper"),
    ],
)  # fmt: skip
def test_small_output_tables(table: str, names: str) -> None:
    assert output_table(table).names(2) == tuple(names.split())


def test_documentation_names_every_column() -> None:
    text = schema.tables_markdown()
    for table in TABLES:
        section = text.split(f"### {table.name}\n")[1].split("\n### ")[0]
        assert table.file in section
        rows = [line.split(" | ") for line in section.splitlines() if line.startswith("| `")]
        told = {(name, row[1]) for row in rows for name in row[0].removeprefix("| ").split()}
        # Columns of which the same is said share a row; none is left out, none comes twice.
        assert told == {(f"`{c.name}`", c.dtype) for c in table.columns}
        assert sum(len(row[0].removeprefix("| ").split()) for row in rows) == len(table.columns)


def test_unknown_tables_and_columns() -> None:
    with pytest.raises(KeyError):
        input_table("odometer")
    assert input_table("sightings").column("elevation_rad", 2) is None
    column = input_table("sightings").column("elevation_rad", 3)
    assert column is not None
    assert column.unit == "rad"
