"""Surveys that are as they should be."""

from __future__ import annotations

import gzip
import hashlib
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq
import pytest
from survey_folder import FILES, HERON, TOML, good, good_3d, write

from jointmap.graph.build import build_problem
from jointmap.ingest.read import read_survey
from jointmap.ingest.survey import SIGMA_COLUMNS, VALUE_COLUMNS, Survey

V = {n: i for i, n in enumerate(VALUE_COLUMNS)}
S = {n: i for i, n in enumerate(SIGMA_COLUMNS)}


def test_small_survey(tmp_path: Path) -> None:
    survey = read_survey(good(tmp_path))
    assert (survey.name, survey.dimension, survey.dof) == ("gallery 7", 2, 3)
    assert (survey.datum_kind, survey.datum_robot) == ("landmarks", "heron")
    assert list(survey.robots) == ["heron", "otter"]
    heron, otter = survey.robots["heron"], survey.robots["otter"]
    assert heron.odometry.form == "pose" and heron.odometry.pose is not None
    np.testing.assert_array_equal(heron.odometry.pose[:, 0], 0.5 * np.arange(10))
    assert otter.odometry.form == "twist" and otter.odometry.twist is not None
    np.testing.assert_array_equal(otter.odometry.twist, np.tile([0.5, 0.0, 0.1], (10, 1)))
    sightings = heron.sightings
    assert sightings is not None and sightings.targets == ("plate-017", "plate-018")
    np.testing.assert_array_equal(sightings.target, [0, 0, 1])
    np.testing.assert_array_equal(sightings.value[:, V["range_m"]], [2.0, 1.5, 3.0])
    np.testing.assert_array_equal(sightings.value[:, V["bearing_rad"]], [0.5, 0.6, -0.2])
    assert np.isnan(sightings.value[:, V["x_m"] :]).all()
    np.testing.assert_array_equal(sightings.source.row, [2, 3, 4])
    assert heron.encounters is not None and heron.encounters.targets == ("otter",)
    assert heron.sensors["front"].sigma == {"range_m": 0.1}
    assert otter.sensors["mast"].sigma == {}


def test_inputs_carry_their_fingerprints(tmp_path: Path) -> None:
    survey = read_survey(good(tmp_path))
    expected = {n: hashlib.sha256(str(c).encode()).hexdigest() for n, c in FILES.items()}
    assert survey.inputs == dict(sorted(expected.items()))


def test_arrays_are_read_only(tmp_path: Path) -> None:
    survey = read_survey(good(tmp_path))
    sightings = survey.robots["heron"].sightings
    assert sightings is not None
    with pytest.raises(ValueError, match="read-only"):
        sightings.value[0, 0] = 1.0


def test_survey_toml_may_be_named_itself(tmp_path: Path) -> None:
    good(tmp_path)
    assert read_survey(tmp_path / "survey.toml").name == read_survey(str(tmp_path)).name


def _in_format(tmp_path: Path, ending: str) -> Survey:
    """The small survey with every table in one format."""
    folder = write(tmp_path / ending.replace(".", "_"), FILES)
    (folder / "survey.toml").write_text(TOML.replace(".csv", ending))
    for path in list(folder.glob("*/*.csv")):
        new = path.with_name(path.name.replace(".csv", ending))
        if ending == ".parquet":
            pq.write_table(pacsv.read_csv(path), new)
        elif ending == ".csv.gz":
            new.write_bytes(gzip.compress(path.read_bytes()))
    return read_survey(folder)


@pytest.mark.parametrize("ending", [".csv.gz", ".parquet"])
def test_formats_are_equal(tmp_path: Path, ending: str) -> None:
    plain, other = _in_format(tmp_path, ".csv"), _in_format(tmp_path, ending)
    for name in plain.robots:
        a, b = plain.robots[name], other.robots[name]
        np.testing.assert_array_equal(a.odometry.t_s, b.odometry.t_s)
        assert (a.odometry.pose is None) == (b.odometry.pose is None)
        if a.odometry.pose is not None and b.odometry.pose is not None:
            np.testing.assert_array_equal(a.odometry.pose, b.odometry.pose)
        for x, y in ((a.sightings, b.sightings), (a.encounters, b.encounters)):
            assert (x is None) == (y is None)
            if x is not None and y is not None:
                assert x.targets == y.targets and x.sensors == y.sensors
                for key in ("t_s", "sensor", "target", "value", "sigma"):
                    np.testing.assert_array_equal(getattr(x, key), getattr(y, key))
    shift = 1 if ending == ".parquet" else 0  # records have no header row
    np.testing.assert_array_equal(
        plain.robots["heron"].odometry.source.row - shift, other.robots["heron"].odometry.source.row
    )


def test_whole_number_labels_in_parquet_are_names(tmp_path: Path) -> None:
    toml = TOML.replace("heron/sightings.csv", "heron/sightings.parquet")
    good(tmp_path, survey_toml=toml)
    table = {"t_s": [1.0, 2.0], "sensor": ["front"] * 2, "landmark": [17, 18], "range_m": [1, 2]}
    pq.write_table(
        pa.table({**table, "bearing_rad": [0.0, 0.1]}), tmp_path / "heron" / "sightings.parquet"
    )
    sightings = read_survey(tmp_path).robots["heron"].sightings
    assert sightings is not None and sightings.targets == ("17", "18")
    np.testing.assert_array_equal(sightings.value[:, V["range_m"]], [1.0, 2.0])


@pytest.mark.parametrize("kind", ["int64", "timestamp", "csv"])
def test_nanoseconds(tmp_path: Path, kind: str) -> None:
    ns = np.array([1_248_444_187_156_000_123, 1_248_444_187_256_000_000], dtype=np.int64)
    if kind == "csv":
        name, text = "odometry.csv", "t_ns,vx_mps,wz_radps\n" + "".join(f"{v},1,0\n" for v in ns)
        good(tmp_path, otter__odometry_csv=text)
    else:
        name = "odometry.parquet"
        good(tmp_path, survey_toml=TOML.replace("otter/odometry.csv", "otter/" + name))
        stamps = pa.array(ns) if kind == "int64" else pa.array(ns).cast(pa.timestamp("ns"))
        table = pa.table({"t_ns": stamps, "vx_mps": [1.0, 1.0], "wz_radps": [0.0, 0.0]})
        pq.write_table(table, tmp_path / "otter" / name)
    t = read_survey(tmp_path).robots["otter"].odometry.t_s
    # One unit in the last place of a stamp of this size is 0.24 microseconds.
    np.testing.assert_allclose(t - 1_248_444_187.0, [0.156000123, 0.256], atol=2.5e-7)


def test_missing_values_are_not_observed(tmp_path: Path) -> None:
    text = (
        "t_s,sensor,landmark,range_m,bearing_rad,sigma_range_m\n"
        "1.0,front,plate-017,2.0,NaN,0.1\n"
        "2.0,front,plate-017,,0.5,nan\n"
        "3.0,front,plate-017,1.0, ,\n"
    )
    sightings = read_survey(good(tmp_path, heron__sightings_csv=text)).robots["heron"].sightings
    assert sightings is not None
    nan = np.nan
    np.testing.assert_array_equal(sightings.value[:, V["range_m"]], [2.0, nan, 1.0])
    np.testing.assert_array_equal(sightings.value[:, V["bearing_rad"]], [nan, 0.5, nan])
    np.testing.assert_array_equal(sightings.sigma[:, S["range_m"]], [0.1, nan, nan])


def test_several_files_are_concatenated(tmp_path: Path) -> None:
    lines = HERON.splitlines(keepends=True)
    toml = TOML.replace('"heron/odometry.csv"', '["heron/a.csv", "heron/b.csv"]')
    first, second = "".join(lines[:5]), "".join([lines[0], *lines[5:]])
    survey = read_survey(good(tmp_path, survey_toml=toml, heron__a_csv=first, heron__b_csv=second))
    odometry = survey.robots["heron"].odometry
    np.testing.assert_array_equal(odometry.t_s, np.arange(10.0))
    assert odometry.source.files == ("heron/a.csv", "heron/b.csv")
    np.testing.assert_array_equal(odometry.source.file, [0] * 4 + [1] * 6)
    np.testing.assert_array_equal(odometry.source.row, [2, 3, 4, 5, 2, 3, 4, 5, 6, 7])


def test_rows_are_numbered_as_an_editor_does(tmp_path: Path) -> None:
    text = "t_s,vx_mps,wz_radps\r\n\r\n0.0,1,0\r\n1.0,1,0\r\n\r\n\r\n2.0,1,0"
    survey = read_survey(good(tmp_path, otter__odometry_csv=text))
    np.testing.assert_array_equal(survey.robots["otter"].odometry.source.row, [3, 4, 7])


def test_header_and_names_may_be_padded_and_quoted(tmp_path: Path) -> None:
    text = '\ufefft_s, "sensor" , landmark,range_m\n1.0, front ,"plate-017", 2.0\n'
    sightings = read_survey(good(tmp_path, heron__sightings_csv=text)).robots["heron"].sightings
    assert sightings is not None and sightings.targets == ("plate-017",)


def test_plus_signs_are_numbers(tmp_path: Path) -> None:
    text = "t_s,vx_mps,wz_radps\n0,+0.5,-1e-3\n1,+.5,0\n"
    twist = read_survey(good(tmp_path, otter__odometry_csv=text)).robots["otter"].odometry.twist
    assert twist is not None
    np.testing.assert_array_equal(twist[:, 0], [0.5, 0.5])


def test_three_dimensions(tmp_path: Path) -> None:
    columns = "t_s,sensor,landmark,x_m,y_m,z_m,qx,qy,qz,qw,sigma_rx_rad\n"
    text = columns + "1.0,belly,plate-001,1,2,3,0,0,0.6,0.8,0.01\n"
    survey = read_survey(good_3d(tmp_path, sightings_csv=text))
    log = survey.robots["swift"]
    assert survey.dof == 6 and survey.gravity_aligned
    assert log.odometry.pose is not None and log.odometry.pose.shape == (10, 7)
    assert log.sightings is not None
    np.testing.assert_allclose(log.sightings.value[0, V["qx"] :], [0, 0, 0.6, 0.8], atol=1e-15)
    assert log.sightings.sigma[0, S["rx_rad"]] == 0.01
    np.testing.assert_array_equal(log.sensors["belly"].body_T_sensor, [0, 0, -0.1, 0, 0, 0, 1])


def test_twist_in_three_dimensions(tmp_path: Path) -> None:
    text = "t_s,vx_mps,vy_mps,vz_mps,wx_radps,wy_radps,wz_radps,sigma_vz_mps\n0,1,2,3,4,5,6,0.1\n"
    odometry = read_survey(good_3d(tmp_path, odometry_csv=text)).robots["swift"].odometry
    assert odometry.twist is not None and odometry.sigma is not None
    np.testing.assert_array_equal(odometry.twist, [[1, 2, 3, 4, 5, 6]])
    nan = np.nan
    np.testing.assert_array_equal(odometry.sigma, [[nan, nan, 0.1, nan, nan, nan]])


def test_full_covariance_of_a_tag(tmp_path: Path) -> None:
    text = (
        "t_s,sensor,landmark,x_m,y_m,yaw_rad,"
        "cov_x_x,cov_x_y,cov_x_yaw,cov_y_y,cov_y_yaw,cov_yaw_yaw\n"
        "1.0,front,plate-017,1,2,0.5,0.04,0.01,0.0,0.09,0.002,0.0001\n"
        "2.0,front,plate-017,1,2,,0.04,0.01,,0.09,,\n"
        "3.0,front,plate-017,1,2,0.5,,,,,,\n"
    )
    sightings = read_survey(good(tmp_path, heron__sightings_csv=text)).robots["heron"].sightings
    assert sightings is not None and sightings.cov is not None
    nan = np.nan
    whole = [[0.04, 0.01, 0.0], [0.01, 0.09, 0.002], [0.0, 0.002, 0.0001]]
    part = [[0.04, 0.01, nan], [0.01, 0.09, nan], [nan, nan, nan]]
    np.testing.assert_array_equal(sightings.cov[:2], [whole, part])
    assert np.isnan(sightings.cov[2]).all()


def test_bearings_are_wrapped(tmp_path: Path) -> None:
    text = "t_s,sensor,landmark,range_m,bearing_rad\n1,front,a,2,6.0\n2,front,a,2,-3.5\n"
    sightings = read_survey(good(tmp_path, heron__sightings_csv=text)).robots["heron"].sightings
    assert sightings is not None
    expected = [6.0 - 2 * np.pi, 2 * np.pi - 3.5]
    np.testing.assert_allclose(sightings.value[:, V["bearing_rad"]], expected, atol=1e-15)


def test_unwrapped_yaw_is_no_degrees(tmp_path: Path) -> None:
    t = np.arange(0.0, 100.0, 0.1)
    yaw = 0.5 * t  # eight turns
    x, y = np.cumsum(0.05 * np.cos(yaw)), np.cumsum(0.05 * np.sin(yaw))
    rows = "".join(f"{a:.2f},{b},{c},{d}\n" for a, b, c, d in zip(t, x, y, yaw, strict=True))
    survey = read_survey(good(tmp_path, heron__odometry_csv="t_s,x_m,y_m,yaw_rad\n" + rows))
    assert survey.robots["heron"].odometry.pose is not None


def test_accumulated_covariance_keeps_the_axes_of_the_odometry_frame(tmp_path: Path) -> None:
    # A robot heading along y: its increment is worst sideways, which the odometry frame calls x.
    text = (
        "t_s,x_m,y_m,yaw_rad,acc_cov_x_x,acc_cov_x_y,acc_cov_x_yaw,"
        "acc_cov_y_y,acc_cov_y_yaw,acc_cov_yaw_yaw\n"
        f"0.0,0,0,{np.pi / 2},0.0,0.0,0.0,0.0,0.0,0.0\n"
        f"1.0,0,1,{np.pi / 2},0.04,0.0,0.001,0.01,0.0,0.0004\n"
    )
    survey = read_survey(good(tmp_path, heron__odometry_csv=text))
    acc = survey.robots["heron"].odometry.acc_cov
    assert acc is not None
    table = [[0.04, 0.0, 0.001], [0.0, 0.01, 0.0], [0.001, 0.0, 0.0004]]
    np.testing.assert_allclose(acc[1], table, atol=1e-15)
    np.testing.assert_array_equal(acc[0], np.zeros((3, 3)))
    # What the graph makes of it: along the body's x 0.01, odometry x is the body's -y.
    block = next(b for b in build_problem(survey).blocks if b.kind == "odometry" and b.robot == 0)
    assert block.covariance is not None
    body = [[0.01, 0.0, 0.0], [0.0, 0.04, -0.001], [0.0, -0.001, 0.0004]]
    np.testing.assert_allclose(block.covariance[0], body, atol=1e-15)


def test_closures(tmp_path: Path) -> None:
    text = (
        "robot_a,t_a_s,robot_b,t_b_s,x_m,y_m,yaw_rad,sigma_x_m,sigma_y_m,sigma_yaw_rad\n"
        "heron,1,otter,2,0.5,0.1,0.2,0.1,0.2,0.03\n"
        "otter,1,otter,8,0.5,0.1,0.2,,,\n"
    )
    closures = read_survey(good(tmp_path, closures_csv=text)).closures
    assert closures is not None
    assert [closures.robots[i] for i in closures.robot_a] == ["heron", "otter"]
    assert [closures.robots[i] for i in closures.robot_b] == ["otter", "otter"]
    np.testing.assert_allclose(closures.cov[0], np.diag([0.01, 0.04, 0.0009]), rtol=1e-12)
    assert np.isnan(closures.cov[1]).all()


def test_closures_in_three_dimensions(tmp_path: Path) -> None:
    text = "robot_a,t_a_s,robot_b,t_b_s,x_m,y_m,z_m,qx,qy,qz,qw\nswift,1,swift,8,1,2,3,0,0,0,1\n"
    closures = read_survey(good_3d(tmp_path, closures_csv=text)).closures
    assert closures is not None
    np.testing.assert_array_equal(closures.pose, [[1, 2, 3, 0, 0, 0, 1]])


def test_control_points_are_averaged_where_they_agree(tmp_path: Path) -> None:
    text = (
        "landmark,x_m,y_m,sigma_x_m,sigma_y_m\n"
        "plate-018,5,6,0.01,0.01\nplate-017,1.0,2.0,0.1,0.1\nplate-017,1.2,2.0,0.1,0.2\n"
    )
    control = read_survey(good(tmp_path, control_points_csv=text)).control_points
    assert control is not None and control.landmarks == ("plate-017", "plate-018")
    np.testing.assert_allclose(control.position, [[1.1, 2.0], [5.0, 6.0]], rtol=1e-15)
    # 1/sigma^2 add: 100 + 100 in x, 100 + 25 in y.
    np.testing.assert_allclose(control.sigma[0], [200**-0.5, 125**-0.5], rtol=1e-15)


def test_local_fixes(tmp_path: Path) -> None:
    toml = TOML.replace("[robots.heron.sensors", 'fixes = "fixes.csv"\n[robots.heron.sensors')
    text = "t_s,x_m,y_m,sigma_x_m,sigma_y_m\n1,10,20,0.5,0.5\n2,11,20,,\n"
    survey = read_survey(good(tmp_path, survey_toml=toml, fixes_csv=text))
    fixes = survey.robots["heron"].fixes
    assert fixes is not None and survey.geodetic_origin is None
    np.testing.assert_array_equal(fixes.position, [[10, 20], [11, 20]])
    np.testing.assert_array_equal(fixes.sigma, [[0.5, 0.5], [np.nan, np.nan]])


def test_a_robot_without_odometry_is_left_out(tmp_path: Path) -> None:
    toml = TOML.replace('odometry = "otter/odometry.csv"\n', "")
    survey = read_survey(good(tmp_path, survey_toml=toml))
    assert list(survey.robots) == ["heron"]
    encounters = survey.robots["heron"].encounters
    assert encounters is not None and len(encounters.t_s) == 0 and encounters.targets == ()
    messages = " ".join(p.message for p in survey.problems)
    assert "has no odometry" in messages and "name a robot without odometry" in messages
    assert "the survey has one robot" in messages


def test_clock_and_noise_of_survey_toml(tmp_path: Path) -> None:
    toml = TOML + (
        "lag_s = 0.05\nsigma_body_T_sensor = [0.01, 0.0, 0.02]\nsigma_range_per_m = 0.0\n"
        "[robots.otter.clock]\noffset_s = 0.5\nsigma_offset_s = 1.0\n"
        "[robots.otter.odometry_noise]\ntranslation_per_sqrt_m = 0.02\n"
        '[datum]\nkind = "robot"\nrobot = "otter"\n'
    )
    survey = read_survey(good(tmp_path, survey_toml=toml))
    otter = survey.robots["otter"]
    assert (survey.datum_kind, survey.datum_robot) == ("robot", "otter")
    assert (otter.clock.offset_s, otter.clock.sigma_offset_s, otter.clock.drift_ppm) == (0.5, 1, 0)
    assert otter.odometry_noise == {"translation_per_sqrt_m": 0.02}
    mast = otter.sensors["mast"]
    assert mast.lag_s == 0.05 and mast.sigma == {"range_per_m": 0.0}
    np.testing.assert_array_equal(mast.sigma_body_T_sensor, [0.01, 0.0, 0.02])


def test_association_intervals(tmp_path: Path) -> None:
    text = (
        "robot,label,landmark,t_from_s,t_to_s\n"
        "heron,plate-017,A,,1.5\nheron,plate-017,B,1.6,\notter,plate-017,A,,\n"
    )
    associations = read_survey(good(tmp_path, associations_csv=text)).associations
    assert associations is not None and associations.landmarks == ("A", "B", "A")
    np.testing.assert_array_equal(associations.t_from_s, [-np.inf, 1.6, -np.inf])
    np.testing.assert_array_equal(associations.t_to_s, [1.5, np.inf, np.inf])
