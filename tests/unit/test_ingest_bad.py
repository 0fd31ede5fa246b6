"""One test per kind of bad input: what is said, where, and how to mend it."""

from __future__ import annotations

import gzip
import math
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from survey_folder import (
    HERON,
    OTTER,
    SIGHTINGS,
    SWIFT,
    TOML,
    TOML_3D,
    good,
    good_3d,
    mended,
    one_refused,
    refused,
)

from jointmap.errors import LogFormatError
from jointmap.ingest.read import read_survey


def rows(header: str, *lines: str) -> str:
    return "\n".join([header, *lines]) + "\n"


# --- files ---------------------------------------------------------------------------------


def test_no_folder(tmp_path: Path) -> None:
    assert "is no folder" in one_refused(tmp_path / "nothing").message


def test_no_survey_toml(tmp_path: Path) -> None:
    problem = one_refused(tmp_path)
    assert (problem.path, problem.message) == ("survey.toml", "'survey.toml' is missing")
    assert problem.column is None


def test_missing_file_names_the_close_one(tmp_path: Path) -> None:
    good(tmp_path, survey_toml=TOML.replace("heron/sightings", "heron/sigthings"))
    problem = one_refused(tmp_path)
    assert problem.column == "robots.heron.sightings" and "is missing" in problem.message
    assert problem.mend == "did you mean 'sightings.csv'?"


@pytest.mark.parametrize("name", ["../x.csv", "/etc/x.csv", "heron/../../x.csv", "C:\\x.csv", ""])
def test_path_that_leaves_the_folder(tmp_path: Path, name: str) -> None:
    (tmp_path / "x.csv").write_text(OTTER)
    text = TOML.replace('"otter/odometry.csv"', f"'{name}'")
    problem = refused(good(tmp_path / "survey", survey_toml=text))[0]
    assert problem.column == "robots.otter.odometry"
    wanted = "names no files" if name == "" else "leads out of the survey folder"
    assert wanted in problem.message


def test_link_that_leaves_the_folder(tmp_path: Path) -> None:
    folder = good(tmp_path / "survey")
    (tmp_path / "x.csv").write_text(OTTER)
    (folder / "otter" / "odometry.csv").unlink()
    (folder / "otter" / "odometry.csv").symlink_to(tmp_path / "x.csv")
    assert "leads out of the survey folder" in one_refused(folder).message


def test_link_of_a_default_table_that_leaves_the_folder(tmp_path: Path) -> None:
    folder = good(tmp_path / "survey")
    (tmp_path / "a.csv").write_text("robot,label,landmark\n")
    (folder / "associations.csv").symlink_to(tmp_path / "a.csv")
    assert "leads out of the survey folder" in one_refused(folder).message


def test_link_inside_the_folder_is_fine(tmp_path: Path) -> None:
    folder = good(tmp_path)
    (folder / "otter" / "odometry.csv").rename(folder / "real.csv")
    (folder / "otter" / "odometry.csv").symlink_to(folder / "real.csv")
    assert len(read_survey(folder).robots["otter"].odometry.t_s) == 10


def test_two_formats_of_one_default_table(tmp_path: Path) -> None:
    text = "robot,label,landmark\nheron,plate-017,A\n"
    good(tmp_path, associations_csv=text)
    (tmp_path / "associations.csv.gz").write_bytes(gzip.compress(text.encode()))
    problem = one_refused(tmp_path)
    assert "in 2 formats: associations.csv, associations.csv.gz" in problem.message


def test_unknown_ending(tmp_path: Path) -> None:
    toml = TOML.replace("otter/odometry.csv", "otter/odometry.txt")
    problem = one_refused(good(tmp_path, survey_toml=toml, **{"otter/odometry.txt": OTTER}))
    assert problem.message == "unknown kind of file"


def test_broken_gzip_and_parquet(tmp_path: Path) -> None:
    toml = TOML.replace("otter/odometry.csv", "a.csv.gz").replace("heron/odometry.csv", "b.parquet")
    changes: dict[str, str | bytes] = {"a.csv.gz": b"\x1f\x8b no", "b.parquet": b"PAR1 no"}
    problems = refused(good(tmp_path, survey_toml=toml, **changes))
    assert {p.path for p in problems} == {"a.csv.gz", "b.parquet"}


# --- survey.toml ---------------------------------------------------------------------------


def test_toml_syntax_has_its_row(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, survey_toml="[survey]\nformat = 1\ndimension == 2\n"))
    assert (problem.path, problem.row) == ("survey.toml", 3)


@pytest.mark.parametrize("value", ["4", '"2"', "true", "2.0"])
def test_wrong_dimension(tmp_path: Path, value: str) -> None:
    toml = TOML.replace("dimension = 2", f"dimension = {value}")
    assert one_refused(good(tmp_path, survey_toml=toml)).column == "survey.dimension"


def test_unknown_key_like_a_known_one_is_refused(tmp_path: Path) -> None:
    toml = TOML.replace("sigma_range_m", "sigma_raneg_m")
    problem = one_refused(good(tmp_path, survey_toml=toml))
    assert problem.column == "robots.heron.sensors.front.sigma_raneg_m"
    assert problem.mend == "did you mean 'sigma_range_m'?"


def test_unknown_key_like_none_is_ignored(tmp_path: Path) -> None:
    good(tmp_path, survey_toml=TOML.replace("format = 1", "format = 1\nweather = 'rain'"))
    assert mended(tmp_path, "survey.toml", "unknown key").column == "survey.weather"


def test_unknown_datum_robot(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, survey_toml=TOML + '[datum]\nrobot = "hero"\n'))
    assert (problem.column, problem.mend) == ("datum.robot", "did you mean 'heron'?")


def test_control_datum_without_control(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, survey_toml=TOML + '[datum]\nkind = "control"\n'))
    assert problem.column == "datum.kind"


def test_no_robot(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, survey_toml="[survey]\nformat = 1\ndimension = 2\n"))
    assert problem.message == "the survey has no robot"


def test_no_robot_with_odometry(tmp_path: Path) -> None:
    toml = TOML.replace('odometry = "heron/odometry.csv"\n', "")
    toml = toml.replace('odometry = "otter/odometry.csv"\n', "")
    assert one_refused(good(tmp_path, survey_toml=toml)).message == "no robot has odometry"


def test_one_robot_is_fine_and_said_so(tmp_path: Path) -> None:
    assert "fine" in mended(good_3d(tmp_path), "survey.toml", "the survey has one robot").mend


@pytest.mark.parametrize(
    ("old", "new", "column"),
    [
        ("sigma_range_m = 0.1", "sigma_range_m = 0", "sigma_range_m"),
        ("sigma_range_m = 0.1", "sigma_range_m = -1.0", "sigma_range_m"),
        ("sigma_range_m = 0.1", "sigma_range_m = inf", "sigma_range_m"),
        ("sigma_range_m = 0.1", 'sigma_range_m = "0.1"', "sigma_range_m"),
        ("sigma_range_m = 0.1", "sigma_bearing_rad = 5.0", "sigma_bearing_rad"),
        ("[0.1, 0.0, 0.0]", "[0.1, 0.0]", "body_T_sensor"),
        ("[0.1, 0.0, 0.0]", "[0.1, 0.0, 90.0]", "body_T_sensor"),
    ],
)
def test_wrong_sensor_values(tmp_path: Path, old: str, new: str, column: str) -> None:
    problem = one_refused(good(tmp_path, survey_toml=TOML.replace(old, new)))
    assert problem.column == f"robots.heron.sensors.front.{column}"


def test_robot_name_with_a_slash(tmp_path: Path) -> None:
    toml = TOML.replace("[robots.otter", '[robots."ot/ter"').replace("robots.heron", "robots.heron")
    problems = refused(good(tmp_path, survey_toml=toml))
    assert problems[0].message == "the name holds a slash"


# --- cells and columns ---------------------------------------------------------------------


def test_every_text_in_a_number_is_found(tmp_path: Path) -> None:
    lines = HERON.splitlines()
    lines[3], lines[5] = "2.0,one,0.0,0.0", "4.0,2.0,0.0,0;0"
    problems = refused(good(tmp_path, heron__odometry_csv="\n".join(lines)))
    found = [(p.path, p.row, p.column, p.message) for p in problems if "is not a" in p.message]
    assert found == [
        ("heron/odometry.csv", 4, "x_m", "'one' is not a number"),
        ("heron/odometry.csv", 6, "yaw_rad", "'0;0' is not a number"),
    ]


def test_bad_cells_keep_their_rows_beside_blank_lines(tmp_path: Path) -> None:
    text = "t_s,vx_mps,wz_radps\n0,1,0\n\n1,x,0\n1,2\n2,1,0\n"
    problems = refused(good(tmp_path, otter__odometry_csv=text))
    assert [(p.row, p.message) for p in problems] == [
        (5, "2 cells where there should be 3"),
        (4, "'x' is not a number"),
    ]


def test_problems_of_all_files_come_together(tmp_path: Path) -> None:
    good(
        tmp_path,
        heron__odometry_csv=HERON.replace("1.5,", "abc,"),
        otter__odometry_csv=OTTER.replace("wz_radps", "omega"),
        heron__sightings_csv=SIGHTINGS.replace("front", "fornt"),
        survey_toml=TOML.replace("sigma_range_m = 0.1", "sigma_range_m = -1"),
    )
    paths = {p.path for p in refused(tmp_path)}
    assert paths == {
        "survey.toml", "heron/odometry.csv", "otter/odometry.csv", "heron/sightings.csv",
    }  # fmt: skip


@pytest.mark.parametrize("cell", ["inf", "-inf", "Infinity", "1e999"])
def test_infinite(tmp_path: Path, cell: str) -> None:
    text = SIGHTINGS.replace("1.5,", f"{cell},")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert (problem.row, problem.column) == (3, "range_m")
    assert problem.message == "the number is infinite"


def test_absurd_number(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, heron__sightings_csv=SIGHTINGS.replace("1.5,", "1e200,")))
    assert (problem.row, problem.message) == (3, "the number is beyond 1e+12")


@pytest.mark.parametrize("cell", ["", "NaN", "nan"])
def test_nan_where_a_number_is_needed(tmp_path: Path, cell: str) -> None:
    text = HERON.replace("3.0,1.5,", f"3.0,{cell},")
    problem = one_refused(good(tmp_path, heron__odometry_csv=text))
    assert (problem.row, problem.column) == (5, "x_m")
    assert problem.message == "empty or NaN where a number is needed"


def test_missing_stamp(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, heron__odometry_csv=HERON.replace("3.0,1.5", ",1.5")))
    assert (problem.row, problem.column) == (5, "t_s")


def test_missing_column(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, heron__odometry_csv=HERON.replace("yaw_rad", "heading")))
    assert (problem.path, problem.column) == ("heron/odometry.csv", "yaw_rad")
    assert problem.message == "the column is missing"


def test_neither_poses_nor_velocities(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, heron__odometry_csv="t_s,speed\n1,2\n"))
    assert problem.message == "has neither poses nor velocities"


def test_unknown_columns_are_listed_and_ignored(tmp_path: Path) -> None:
    text = "t_s,sensor,landmark,range_m,bering_rad,note\n1.0,front,plate-017,2.0,0.5,x\n"
    problem = mended(good(tmp_path, heron__sightings_csv=text), "heron/sightings.csv", "unknown")
    assert problem.row == 1
    assert "bering_rad (did you mean bearing_rad?)" in problem.message and "note" in problem.message


def test_doubled_column(tmp_path: Path) -> None:
    text = "t_s,vx_mps,vx_mps,wz_radps\n1,1,1,0\n"
    problem = one_refused(good(tmp_path, otter__odometry_csv=text))
    assert problem.column == "vx_mps" and "more than once" in problem.message


def test_semicolons(tmp_path: Path) -> None:
    problems = refused(good(tmp_path, otter__odometry_csv=OTTER.replace(",", ";")))
    assert problems[0].mend == "separate the cells by commas"


def test_no_utf8(tmp_path: Path) -> None:
    text = SIGHTINGS.replace("plate-018", "Tür").encode("latin-1")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert (problem.row, problem.message) == (4, "the text is not UTF-8")


def test_text_column_in_parquet(tmp_path: Path) -> None:
    good(tmp_path, survey_toml=TOML.replace("otter/odometry.csv", "o.parquet"))
    table = pa.table({"t_s": ["0", "1"], "vx_mps": [1.0, 1.0], "wz_radps": [0.0, 0.0]})
    pq.write_table(table, tmp_path / "o.parquet")
    problem = refused(tmp_path)[0]
    assert (problem.column, problem.message) == ("t_s", "holds string, not numbers")


@pytest.mark.parametrize("column", ["z_m", "elevation_rad", "qx", "sigma_rx_rad", "cov_x_z"])
def test_columns_of_three_dimensions_in_two(tmp_path: Path, column: str) -> None:
    text = f"t_s,sensor,landmark,range_m,bearing_rad,{column}\n1.0,front,plate-017,2,0.5,0.1\n"
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert problem.column == column and "3 dimensions, this one has 2" in problem.message


def test_empty_columns_of_the_other_dimension_are_fine(tmp_path: Path) -> None:
    text = "t_s,sensor,landmark,range_m,bearing_rad,z_m\n1.0,front,plate-017,2.0,0.5,\n"
    assert read_survey(good(tmp_path, heron__sightings_csv=text)).dimension == 2


def test_pose_of_two_dimensions_in_three(tmp_path: Path) -> None:
    problems = refused(good_3d(tmp_path, odometry_csv="t_s,x_m,y_m,yaw_rad\n0,0,0,0.1\n"))
    assert {p.column for p in problems} == {"yaw_rad", "z_m", "qx", "qy", "qz", "qw"}


def test_no_observation_column(tmp_path: Path) -> None:
    text = "t_s,sensor,landmark\n1.0,front,plate-017\n"
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert problem.message == "no column holds an observation"


def test_row_that_observes_nothing(tmp_path: Path) -> None:
    good(tmp_path, heron__sightings_csv=SIGHTINGS + "3.0,front,plate-018,,\n")
    assert mended(tmp_path, "heron/sightings.csv", "observes nothing").row == 5
    sightings = read_survey(tmp_path).robots["heron"].sightings
    assert sightings is not None and len(sightings.t_s) == 3


def test_polar_beside_cartesian(tmp_path: Path) -> None:
    text = "t_s,sensor,landmark,range_m,x_m,y_m\n1.0,front,plate-017,2.0,1.9,0.1\n"
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert (problem.row, problem.message) == (2, "has polar and Cartesian components")


@pytest.mark.parametrize("cell", ["0.0", "-1.5"])
def test_range_that_is_not_positive(tmp_path: Path, cell: str) -> None:
    text = SIGHTINGS.replace("1.5,", f"{cell},")
    assert one_refused(good(tmp_path, heron__sightings_csv=text)).column == "range_m"


def test_empty_table(tmp_path: Path) -> None:
    good(tmp_path, heron__sightings_csv=SIGHTINGS.splitlines()[0] + "\n")
    assert mended(tmp_path, "heron/sightings.csv", "has no rows").mended


@pytest.mark.parametrize("text", ["", "\n"])
def test_empty_file(tmp_path: Path, text: str) -> None:
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert problem.message == "no header in the first line"


def test_empty_odometry_leaves_the_robot_out(tmp_path: Path) -> None:
    good(tmp_path, otter__odometry_csv=OTTER.splitlines()[0])
    assert list(read_survey(tmp_path).robots) == ["heron"]


def test_listing_is_limited(tmp_path: Path) -> None:
    text = "t_s,vx_mps,wz_radps\n" + "".join(f"{i},x,0\n" for i in range(100))
    problems = refused(good(tmp_path, otter__odometry_csv=text))
    texts = [p for p in problems if p.column == "vx_mps" and "not a number" in p.message]
    assert len(texts) == 21
    assert [p.row for p in texts[:20]] == list(range(2, 22)) and texts[20].row is None
    assert texts[20].message.startswith("80 more rows of the same kind")


# --- times ---------------------------------------------------------------------------------


def test_unsorted_stamps_are_sorted(tmp_path: Path) -> None:
    lines = HERON.splitlines(keepends=True)
    lines[3], lines[6] = lines[6], lines[3]
    good(tmp_path, heron__odometry_csv="".join(lines))
    problem = mended(tmp_path, "heron/odometry.csv", "stamps go back 2 times")
    assert problem.row == 5
    odometry = read_survey(tmp_path).robots["heron"].odometry
    np.testing.assert_array_equal(odometry.t_s, np.arange(10.0))
    np.testing.assert_array_equal(odometry.source.row, [2, 3, 7, 5, 6, 4, 8, 9, 10, 11])


def test_repeated_row_counts_once(tmp_path: Path) -> None:
    good(tmp_path, heron__odometry_csv=HERON + HERON.splitlines()[-1] + "\n")
    assert mended(tmp_path, "heron/odometry.csv", "repeats").row == 12
    assert len(read_survey(tmp_path).robots["heron"].odometry.t_s) == 10


def test_two_poses_of_one_stamp(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, heron__odometry_csv=HERON + "9.0,4.6,0.0,0.0\n"))
    assert (problem.row, problem.column) == (12, "t_s")


def test_last_velocity_of_a_stamp_holds(tmp_path: Path) -> None:
    good(tmp_path, otter__odometry_csv=OTTER + "9.0,0.7,0.0\n")
    assert mended(tmp_path, "otter/odometry.csv", "another velocity").row == 12
    twist = read_survey(tmp_path).robots["otter"].odometry.twist
    assert twist is not None
    assert twist.shape == (10, 3) and twist[-1, 0] == 0.7


def test_repeated_sighting_counts_once(tmp_path: Path) -> None:
    text = SIGHTINGS + SIGHTINGS.splitlines()[2] + "\n"
    good(tmp_path, heron__sightings_csv=text)
    assert mended(tmp_path, "heron/sightings.csv", "repeats another row").row == 5


def test_sightings_beyond_the_odometry(tmp_path: Path) -> None:
    good(tmp_path, heron__sightings_csv=SIGHTINGS + "9.5,front,plate-017,2.0,0.5\n")
    problem = mended(tmp_path, "heron/sightings.csv", "1 rows lie before or after")
    assert problem.row == 5


# --- angles, sigmas, covariances -----------------------------------------------------------


def test_bearing_in_degrees(tmp_path: Path) -> None:
    text = SIGHTINGS.replace("0.5\n", "28.6\n").replace("-0.2", "-11.5")
    problems = refused(good(tmp_path, heron__sightings_csv=text))
    assert {(p.row, p.column, p.mend) for p in problems} == {
        (2, "bearing_rad", "multiply by pi/180"),
        (4, "bearing_rad", "multiply by pi/180"),
    }


def test_elevation_beyond_a_right_angle(tmp_path: Path) -> None:
    text = "t_s,sensor,landmark,range_m,bearing_rad,elevation_rad\n1,belly,p,2,0.1,1.7\n"
    problem = one_refused(good_3d(tmp_path, sightings_csv=text))
    assert problem.column == "elevation_rad" and "angle beyond" in problem.message


@pytest.mark.parametrize("robot", ["turning slowly", "wrapping", "standing and turning"])
def test_yaw_in_degrees(tmp_path: Path, robot: str) -> None:
    t = np.arange(0.0, 200.0, 0.1)
    turn = {"turning slowly": 0.02, "wrapping": 0.2, "standing and turning": 0.5}[robot]
    yaw = turn * t
    speed = 0.0 if robot.startswith("standing") else 0.05
    x, y = np.cumsum(speed * np.cos(yaw)), np.cumsum(speed * np.sin(yaw))
    degrees = np.degrees(yaw)
    if robot == "wrapping":
        degrees = (degrees + 180.0) % 360.0 - 180.0
    lines = "".join(f"{a},{b},{c},{d}\n" for a, b, c, d in zip(t, x, y, degrees, strict=True))
    problem = one_refused(good(tmp_path, heron__odometry_csv="t_s,x_m,y_m,yaw_rad\n" + lines))
    assert (problem.column, problem.mend) == ("yaw_rad", "multiply by pi/180")


def test_turn_rate_in_degrees(tmp_path: Path) -> None:
    problem = one_refused(good(tmp_path, otter__odometry_csv=OTTER.replace("0.1\n", "25\n")))
    assert (problem.column, problem.mend) == ("wz_radps", "multiply by pi/180")


def test_closure_in_degrees(tmp_path: Path) -> None:
    text = "robot_a,t_a_s,robot_b,t_b_s,x_m,y_m,yaw_rad\nheron,1,otter,2,0.5,0.1,90\n"
    assert one_refused(good(tmp_path, closures_csv=text)).mend == "multiply by pi/180"


@pytest.mark.parametrize("cell", ["0", "-0.1"])
def test_sigma_that_is_not_positive(tmp_path: Path, cell: str) -> None:
    text = rows("t_s,sensor,landmark,range_m,sigma_range_m", f"1.0,front,plate-017,2.0,{cell}")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert (problem.row, problem.column) == (2, "sigma_range_m")


def test_sigma_in_degrees(tmp_path: Path) -> None:
    head = "t_s,sensor,landmark,bearing_rad,sigma_bearing_rad"
    text = rows(head, "1.0,front,plate-017,0.2,5.0")
    assert one_refused(good(tmp_path, heron__sightings_csv=text)).mend == "multiply by pi/180"


COV = "t_s,sensor,landmark,x_m,y_m,cov_x_x,cov_x_y,cov_y_y"


@pytest.mark.parametrize("cov", ["0.01,0.02,0.01", "0.01,0,-0.01", "0,0,0.01", "0.01,0.01,0.01"])
def test_indefinite_covariance(tmp_path: Path, cov: str) -> None:
    text = rows(COV, "1.0,front,plate-017,2,1,0.01,0,0.01", f"2.0,front,plate-017,2,1,{cov}")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert (problem.row, problem.message) == (3, "the covariance is not positive definite")


def test_incomplete_covariance(tmp_path: Path) -> None:
    text = rows(COV, "1.0,front,plate-017,2,1,0.01,,0.01")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert problem.message == "the covariance is incomplete"


def test_asymmetric_covariance(tmp_path: Path) -> None:
    text = rows(COV + ",cov_y_x", "1.0,front,plate-017,2,1,0.01,0.001,0.01,0.002")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert problem.column == "cov_y_x" and "not symmetric" in problem.message


def test_symmetric_covariance_with_both_triangles(tmp_path: Path) -> None:
    text = rows(COV + ",cov_y_x", "1.0,front,plate-017,2,1,0.01,0.001,0.01,0.001")
    sightings = read_survey(good(tmp_path, heron__sightings_csv=text)).robots["heron"].sightings
    assert sightings is not None and sightings.cov is not None
    assert sightings.cov[0, 0, 1] == 0.001


def test_sigma_beside_covariance(tmp_path: Path) -> None:
    text = rows(COV + ",sigma_x_m", "1.0,front,plate-017,2,1,0.01,0.001,0.01,0.3")
    good(tmp_path, heron__sightings_csv=text)
    assert mended(tmp_path, "heron/sightings.csv", "sigmas beside a covariance").row == 2


def test_faulty_accumulated_covariance_is_left_out(tmp_path: Path) -> None:
    head = "t_s,x_m,y_m,yaw_rad,acc_cov_x_x,acc_cov_x_y,acc_cov_x_yaw,acc_cov_y_y,acc_cov_y_yaw"
    text = rows(head + ",acc_cov_yaw_yaw", "0,0,0,0,1,0,0,1,0,1", "1,1,0,0,1,2,0,1,0,1")
    good(tmp_path, heron__odometry_csv=text)
    assert mended(tmp_path, "heron/odometry.csv", "not positive definite").row == 3
    acc = read_survey(tmp_path).robots["heron"].odometry.acc_cov
    assert acc is not None
    assert np.isfinite(acc[0]).all() and np.isnan(acc[1]).all()


def test_quaternion_near_unit_length_is_normalised(tmp_path: Path) -> None:
    good_3d(tmp_path, odometry_csv=SWIFT.replace("0.6,0.8\n", "0.603,0.804\n"))
    problem = read_survey(tmp_path).problems[0]
    assert problem.mended and "quaternion of a length other than one" in problem.message
    pose = read_survey(tmp_path).robots["swift"].odometry.pose
    assert pose is not None
    np.testing.assert_allclose(pose[:, 3:], np.tile([0, 0, 0.6, 0.8], (10, 1)), atol=1e-15)


@pytest.mark.parametrize("quaternion", ["0,0,0.7,0.8", "0,0,0,0"])
def test_quaternion_far_from_unit_length(tmp_path: Path, quaternion: str) -> None:
    text = SWIFT + f"10.0,5,0,2,{quaternion}\n"
    problem = one_refused(good_3d(tmp_path, odometry_csv=text))
    assert problem.row == 12 and problem.message.startswith("quaternion of length")


def test_incomplete_quaternion(tmp_path: Path) -> None:
    text = "t_s,sensor,landmark,x_m,y_m,z_m,qx,qy,qz,qw\n1,belly,p,1,2,3,0,0,0,\n"
    assert one_refused(good_3d(tmp_path, sightings_csv=text)).message == "an incomplete quaternion"


def test_mounting_with_a_quaternion_that_is_none(tmp_path: Path) -> None:
    toml = TOML_3D.replace("0.0, 1.0]", "1.0, 1.0]")
    assert one_refused(good_3d(tmp_path, survey_toml=toml)).column is not None


# --- names ---------------------------------------------------------------------------------


def test_unknown_sensor(tmp_path: Path) -> None:
    text = SIGHTINGS.replace("2.0,front,plate-018", "2.0,fornt,plate-018")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert (problem.row, problem.column) == (4, "sensor")
    assert problem.mend == "did you mean 'front'?"


def test_unknown_robot_in_encounters(tmp_path: Path) -> None:
    text = "t_s,sensor,robot,range_m,bearing_rad\n4.0,front,oter,2.0,0.1\n"
    problem = one_refused(good(tmp_path, heron__encounters_csv=text))
    assert (problem.message, problem.mend) == ("no robot 'oter'", "did you mean 'otter'?")


def test_robot_that_meets_itself(tmp_path: Path) -> None:
    text = "t_s,sensor,robot,range_m,bearing_rad\n4.0,front,heron,2.0,0.1\n"
    assert one_refused(good(tmp_path, heron__encounters_csv=text)).row == 2


def test_unknown_robot_in_closures_and_associations(tmp_path: Path) -> None:
    closures = "robot_a,t_a_s,robot_b,t_b_s,x_m,y_m,yaw_rad\nheron,1,vole,2,0.5,0.1,0\n"
    named = "robot,label,landmark\nvole,plate-017,A\n"
    problems = refused(good(tmp_path, closures_csv=closures, associations_csv=named))
    assert [(p.path, p.row, p.column) for p in problems] == [
        ("closures.csv", 2, "robot_b"),
        ("associations.csv", 2, "robot"),
    ]


def test_missing_name(tmp_path: Path) -> None:
    text = SIGHTINGS.replace("1.0,front,plate-017", "1.0,front,")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert (problem.row, problem.message) == (2, "the name is missing")


def test_landmark_name_with_a_slash(tmp_path: Path) -> None:
    text = SIGHTINGS.replace("plate-018", "plate/018")
    problem = one_refused(good(tmp_path, heron__sightings_csv=text))
    assert (problem.row, problem.column) == (4, "landmark")


# --- survey-wide tables --------------------------------------------------------------------


def test_landmark_seen_once_by_bearing_only(tmp_path: Path) -> None:
    good(tmp_path, heron__sightings_csv=SIGHTINGS + "3.0,front,plate-020,,0.3\n")
    problem = mended(tmp_path, "heron/sightings.csv", "'plate-020' is seen once")
    assert problem.row == 5 and "unusable" in problem.mend


def test_association_to_nothing(tmp_path: Path) -> None:
    text = "robot,label,landmark\nheron,plate-017,A\nheron,plate-099,B\n"
    good(tmp_path, associations_csv=text)
    problem = mended(tmp_path, "associations.csv", "heron never sighted 'plate-099'")
    assert problem.row == 3
    associations = read_survey(tmp_path).associations
    assert associations is not None and associations.labels == ("plate-017",)


def test_label_that_is_two_landmarks_at_once(tmp_path: Path) -> None:
    text = "robot,label,landmark,t_from_s\nheron,plate-017,A,\nheron,plate-017,B,1.5\n"
    problem = one_refused(good(tmp_path, associations_csv=text))
    assert (problem.row, problem.column) == (3, "landmark")


def test_association_that_ends_before_it_begins(tmp_path: Path) -> None:
    text = "robot,label,landmark,t_from_s,t_to_s\nheron,plate-017,A,5,3\n"
    assert one_refused(good(tmp_path, associations_csv=text)).column == "t_to_s"


def test_control_point_that_contradicts_another(tmp_path: Path) -> None:
    text = (
        "landmark,x_m,y_m,sigma_x_m,sigma_y_m\n"
        "plate-017,1,2,0.01,0.01\nplate-018,1,2,0.01,0.01\nplate-017,1.5,2,0.01,0.01\n"
    )
    problem = one_refused(good(tmp_path, control_points_csv=text))
    # 0.5 m over hypot(0.01, 0.01) m
    assert problem.row == 4
    assert (
        problem.message
        == f"'plate-017' contradicts row 2 by {0.5 / math.hypot(0.01, 0.01):.3g} sigmas"
    )


def test_control_point_of_a_landmark_nobody_saw(tmp_path: Path) -> None:
    text = "landmark,x_m,y_m,sigma_x_m,sigma_y_m\nplate-099,1,2,0.01,0.01\n"
    good(tmp_path, control_points_csv=text)
    assert mended(tmp_path, "control_points.csv", "was never sighted").row == 2


def test_closure_of_one_time_with_itself(tmp_path: Path) -> None:
    text = "robot_a,t_a_s,robot_b,t_b_s,x_m,y_m,yaw_rad\nheron,1,heron,1,0,0,0\n"
    assert one_refused(good(tmp_path, closures_csv=text)).row == 2


# --- fixes ---------------------------------------------------------------------------------

GEO = "t_s,lat_deg,lon_deg,height_m\n1,53.0,-4.0,200\n"
FIX_TOML = TOML.replace("[robots.heron.sensors", 'fixes = "fixes.csv"\n[robots.heron.sensors')


@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:4978", "EPSG:32630", "EPSG:1", "moon"])
def test_reference_system_of_the_wrong_kind(tmp_path: Path, crs: str) -> None:
    toml = FIX_TOML.replace("dimension = 2", f'dimension = 2\ncrs = "{crs}"')
    problem = one_refused(good(tmp_path, survey_toml=toml, fixes_csv=GEO))
    assert problem.column == "survey.crs" and "EPSG:4979" in problem.mend


def test_geographic_fixes_without_system(tmp_path: Path) -> None:
    good(tmp_path, survey_toml=FIX_TOML, fixes_csv=GEO)
    assert mended(tmp_path, "survey.toml", "is missing beside").mend == "EPSG:4979 is taken"


def test_swapped_latitude(tmp_path: Path) -> None:
    text = "t_s,lat_deg,lon_deg,height_m\n1,174.81,-41.32,10\n"
    problem = one_refused(good(tmp_path, survey_toml=FIX_TOML, fixes_csv=text))
    assert problem.column == "lat_deg" and "swapped" in problem.mend


def test_geographic_fixes_beside_control_need_an_origin(tmp_path: Path) -> None:
    control = "landmark,x_m,y_m,sigma_x_m,sigma_y_m\nplate-017,1,2,0.01,0.01\n"
    good(tmp_path, survey_toml=FIX_TOML, fixes_csv=GEO, control_points_csv=control)
    assert one_refused(tmp_path).column == "survey.site_origin"


def test_local_beside_geographic(tmp_path: Path) -> None:
    text = "t_s,x_m,y_m,lat_deg,lon_deg\n1,1,2,53,-4\n"
    problem = one_refused(good(tmp_path, survey_toml=FIX_TOML, fixes_csv=text))
    assert problem.message == "has local and geographic positions"


def test_the_error_is_one_text(tmp_path: Path) -> None:
    good(tmp_path, heron__odometry_csv=HERON.replace("3.0,1.5", "3.0,abc"))
    with pytest.raises(LogFormatError, match=r"heron/odometry.csv, row 5, column x_m: 'abc'"):
        read_survey(tmp_path)
