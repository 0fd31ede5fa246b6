"""Importer of the plain-text team logs, on a small made-up run and on a real one."""

from __future__ import annotations

import shutil
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest

from jointmap.errors import LogFormatError, OutputExistsError, SurveyError
from jointmap.ingest.mrclam import import_mrclam
from jointmap.ingest.read import read_survey
from jointmap.ingest.survey import VALUE_COLUMNS

RUN = {
    "Barcodes.dat": "# Subject #    Barcode #\r\n  1 \t   5 \r\n  2 \t  14\r\n  6 72\r\n 17\t9\r\n",
    "Robot1_Odometry.dat": "# comment\n10.0 \t 0.1 \t 0.0 \n10.5 \t 0.2 \t -0.1 \n\n11.0 0.1 0\n",
    "Robot1_Measurement.dat": (
        "# Time  Subject range bearing\n10.1 \t 72 \t 2.5 \t 0.1 \n10.2 14 3.0 -0.2\n"
        "10.3 9 1.0 0.0\n10.3 99 1.0 0.0\n10.4 99 1.0 0.0\n10.5 5 1.0 0.0\n"
    ),
    "Robot2_Odometry.dat": "10.0 0.1 0.0\n11.0 0.1 0.0\n",
    "Robot2_Measurement.dat": "10.1 5 2.9 0.3 # seen\n",
}
TRUTH = {
    "Robot1_Groundtruth.dat": "10.0 1.0 2.0 0.5\n",
    "Landmark_Groundtruth.dat": "6 0.5 -4.25 0.0001 0.0002\n17 1 2 0.0001 0.0002\n",
}


def run(folder: Path, files: Mapping[str, str]) -> Path:
    folder.mkdir()
    for name, text in files.items():
        (folder / name).write_bytes(text.encode())
    return folder


def tree(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


def test_small_run(tmp_path: Path) -> None:
    report = import_mrclam(run(tmp_path / "logs", RUN), tmp_path / "survey")
    assert report.robots == ("robot-1", "robot-2")
    assert report.landmarks == ("landmark-06", "landmark-17")
    assert (report.n_odometry, report.n_sightings, report.n_encounters) == (5, 2, 2)
    assert report.unknown_barcodes == {99: 2}
    assert report.left_out == {"robot-1": 1}
    assert any("2 sightings of unknown barcodes left out: 99 (2)" in x for x in report.lines())
    survey = read_survey(tmp_path / "survey")
    one = survey.robots["robot-1"]
    assert one.odometry.twist is not None
    np.testing.assert_array_equal(one.odometry.t_s, [10.0, 10.5, 11.0])
    np.testing.assert_array_equal(one.odometry.twist, [[0.1, 0, 0], [0.2, 0, -0.1], [0.1, 0, 0]])
    assert one.sightings is not None
    assert one.sightings.targets == ("landmark-06", "landmark-17")
    columns = [VALUE_COLUMNS.index(c) for c in ("range_m", "bearing_rad")]
    np.testing.assert_array_equal(one.sightings.value[:, columns], [[2.5, 0.1], [1.0, 0.0]])
    assert one.encounters is not None
    assert one.encounters.targets == ("robot-2",)
    assert dict(one.sensors["camera"].sigma) == {}
    np.testing.assert_array_equal(one.sensors["camera"].body_T_sensor, [0, 0, 0])
    two = survey.robots["robot-2"]
    assert two.encounters is not None
    np.testing.assert_array_equal(two.encounters.value[:, columns], [[2.9, 0.3]])


def test_truth_is_put_aside_and_never_needed(tmp_path: Path) -> None:
    import_mrclam(run(tmp_path / "logs", {**RUN, **TRUTH}), tmp_path / "with")
    shutil.rmtree(tmp_path / "logs")
    import_mrclam(run(tmp_path / "logs", RUN), tmp_path / "without")
    with_truth, without = tree(tmp_path / "with"), tree(tmp_path / "without")
    truth = {k: v.decode() for k, v in with_truth.items() if k.startswith("truth")}
    assert {k: v for k, v in with_truth.items() if k not in truth} == without
    assert truth["truth/robot-1.csv"].splitlines() == ["t_s,x_m,y_m,yaw_rad", "10,1,2,0.5"]
    assert truth["truth/landmarks.csv"].splitlines()[1] == '"landmark-06",0.5,-4.25'
    assert not any(name.startswith("truth") for name in read_survey(tmp_path / "with").inputs)


def test_a_robot_without_log_is_no_landmark(tmp_path: Path) -> None:
    files = {k: v for k, v in RUN.items() if not k.startswith("Robot2")}
    report = import_mrclam(run(tmp_path / "logs", files), tmp_path / "survey")
    assert (report.robots, report.n_encounters) == (("robot-1",), 0)
    assert report.left_out == {"robot-2": 1, "robot-1": 1}
    assert report.landmarks == ("landmark-06", "landmark-17")


def test_robots_beyond_the_published_five(tmp_path: Path) -> None:
    files = {**RUN, "Robot6_Odometry.dat": "10.0 0.1 0.0\n"}
    report = import_mrclam(run(tmp_path / "logs", files), tmp_path / "survey")
    assert report.robots == ("robot-1", "robot-2", "robot-6")
    assert report.landmarks == ("landmark-17",)
    assert report.notes == ("robot-6 has no measurements",)
    assert read_survey(tmp_path / "survey").robots["robot-6"].sightings is not None


def test_every_malformed_line_is_named(tmp_path: Path) -> None:
    files = {
        **RUN,
        "Robot1_Odometry.dat": "# comment\n10.0 0.1 0.0\n10.5 fast 0\n11 0.1\n12 0.1 0 0\n",
        "Robot2_Measurement.dat": "10.1 5 2.9 nan\n",
    }
    with pytest.raises(LogFormatError) as caught:
        import_mrclam(run(tmp_path / "logs", files), tmp_path / "survey")
    assert {(p.path, p.row, p.message) for p in caught.value.problems} == {
        ("Robot1_Odometry.dat", 3, "'fast' is not a number"),
        ("Robot1_Odometry.dat", 4, "2 cells where there should be 3"),
        ("Robot1_Odometry.dat", 5, "4 cells where there should be 3"),
        ("Robot2_Measurement.dat", 1, "the number is missing or infinite"),
    }
    assert not (tmp_path / "survey").exists()
    assert not list(tmp_path.glob(".survey*"))


def test_one_barcode_of_two_subjects(tmp_path: Path) -> None:
    files = {**RUN, "Barcodes.dat": "1 5\n2 14\n6 72\n7 72\n"}
    with pytest.raises(LogFormatError, match="barcode 72 stands twice"):
        import_mrclam(run(tmp_path / "logs", files), tmp_path / "survey")


def test_no_logs(tmp_path: Path) -> None:
    with pytest.raises(SurveyError, match="is no folder"):
        import_mrclam(tmp_path / "logs", tmp_path / "survey")
    with pytest.raises(LogFormatError, match=r"no RobotN_Odometry\.dat"):
        import_mrclam(run(tmp_path / "logs", {}), tmp_path / "survey")


def test_an_existing_survey_is_replaced_only_when_asked(tmp_path: Path) -> None:
    logs, out = run(tmp_path / "logs", RUN), tmp_path / "survey"
    import_mrclam(logs, out)
    (out / "note.txt").write_text("mine")
    with pytest.raises(OutputExistsError):
        import_mrclam(logs, out)
    assert (out / "note.txt").exists()
    import_mrclam(logs, out, replace=True)
    assert not (out / "note.txt").exists()


@pytest.mark.parametrize("out", ["logs", "."])
def test_the_logs_are_never_overwritten(tmp_path: Path, out: str) -> None:
    logs = run(tmp_path / "logs", RUN)
    before = tree(logs)
    with pytest.raises(SurveyError, match="would overwrite"):
        import_mrclam(logs, tmp_path / out, replace=True)
    assert tree(logs) == before


def test_real_run_has_the_published_counts(real_run: Path, tmp_path: Path) -> None:
    report = import_mrclam(real_run, tmp_path / "survey")
    assert report.robots == tuple(f"robot-{i}" for i in range(1, 6))
    assert report.landmarks == tuple(f"landmark-{i:02d}" for i in range(6, 21))
    assert (report.n_sightings, report.n_encounters) == (15383, 3988)
    assert sum(report.unknown_barcodes.values()) == 6
    assert report.left_out == {}


def test_real_run_reads_back_as_it_stands_in_the_files(real_run: Path, tmp_path: Path) -> None:
    import_mrclam(real_run, tmp_path / "survey")
    survey = read_survey(tmp_path / "survey")
    assert survey.dimension == 2
    barcodes = np.loadtxt(real_run / "Barcodes.dat")
    for n in range(1, 6):
        log = survey.robots[f"robot-{n}"]
        odometry = np.loadtxt(real_run / f"Robot{n}_Odometry.dat")
        assert log.odometry.twist is not None
        # Rows of one stamp count once; row numbers start after the header of the CSV.
        kept = log.odometry.source.row - 2
        np.testing.assert_array_equal(log.odometry.t_s, odometry[kept, 0])
        np.testing.assert_array_equal(log.odometry.twist[:, [0, 2]], odometry[kept, 1:])
        assert len(kept) == len(np.unique(odometry[:, 0]))
        measured = np.loadtxt(real_run / f"Robot{n}_Measurement.dat")
        landmarks = np.isin(measured[:, 1], barcodes[5:, 1])
        assert log.sightings is not None
        value = log.sightings.value
        columns = [VALUE_COLUMNS.index(c) for c in ("range_m", "bearing_rad")]
        np.testing.assert_array_equal(log.sightings.t_s, measured[landmarks, 0])
        np.testing.assert_array_equal(value[:, columns], measured[landmarks, 2:])
        subject = dict(zip(barcodes[:, 1], barcodes[:, 0], strict=True))
        expected = [f"landmark-{int(subject[b]):02d}" for b in measured[landmarks, 1]]
        assert [log.sightings.targets[i] for i in log.sightings.target] == expected


def test_real_run_does_without_the_truth(real_run: Path, tmp_path: Path) -> None:
    logs = tmp_path / "logs"
    shutil.copytree(real_run, logs, ignore=shutil.ignore_patterns("*Groundtruth*"))
    import_mrclam(logs, tmp_path / "without" / "survey")
    import_mrclam(real_run, tmp_path / "with" / "survey")
    kept = {k: v for k, v in tree(tmp_path / "with" / "survey").items() if "truth" not in k}
    found = tree(tmp_path / "without" / "survey")
    # The survey is named after the folder of the logs.
    assert kept.pop("survey.toml").replace(real_run.name.encode(), b"logs") == found.pop(
        "survey.toml"
    )
    assert kept == found
