"""Importer of the plain-text layout of the multi-robot localization and mapping data sets.

``Barcodes.dat`` maps subject numbers to the barcodes they carry; ``RobotN_Odometry.dat`` holds
time, commanded forward and angular velocity; ``RobotN_Measurement.dat`` time, barcode, range and
bearing. Ground truth, when it is there, is put aside under ``truth/``; nothing else uses it.

References
----------
K. Y. K. Leung, Y. Halpern, T. D. Barfoot, H. H. T. Liu, The UTIAS multi-robot cooperative
localization and mapping dataset, Int. J. of Robotics Research 30(8):969-974, 2011.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pacsv

from jointmap.atomic import new_folder
from jointmap.errors import SurveyError
from jointmap.ingest.csvtext import blanks_to_commas, parse_csv
from jointmap.ingest.edits import toml_value
from jointmap.ingest.problems import Problems
from jointmap.ingest.survey import Floats, Ints

SENSOR = "camera"
#: Subjects below this number are robots, the others landmarks (the published layout).
FIRST_LANDMARK = 6
_FILE = re.compile(r"Robot(\d+)_(Odometry|Measurement|Groundtruth)\.dat$")


@dataclass(frozen=True)
class ImportReport:
    """What an import found.

    ``unknown_barcodes`` counts the sightings of barcodes that Barcodes.dat does not list,
    ``left_out`` those of robots that have no log, and of a robot by itself; neither is written.
    """

    out: Path
    robots: tuple[str, ...]
    landmarks: tuple[str, ...]
    n_odometry: int
    n_sightings: int
    n_encounters: int
    unknown_barcodes: Mapping[int, int]
    left_out: Mapping[str, int]
    notes: tuple[str, ...] = ()

    def lines(self) -> list[str]:
        """The report as text."""
        unknown = sum(self.unknown_barcodes.values())
        named = ", ".join(f"{b} ({n})" for b, n in sorted(self.unknown_barcodes.items()))
        gone = ", ".join(f"{r} ({n})" for r, n in sorted(self.left_out.items()))
        return [
            f"{self.out}: {len(self.robots)} robots, {len(self.landmarks)} landmarks",
            f"{self.n_odometry} odometry rows, {self.n_sightings} landmark sightings, "
            f"{self.n_encounters} encounters",
            *([f"{unknown} sightings of unknown barcodes left out: {named}"] if unknown else []),
            *([f"sightings of these robots left out: {gone}"] if gone else []),
            *self.notes,
        ]


@dataclass(frozen=True)
class _Log:
    """One robot's files as arrays; ``measured`` columns t, barcode, range, bearing."""

    odometry: Floats
    measured: Floats
    truth: Floats | None


@dataclass(frozen=True)
class _Run:
    """One run: subject by barcode, logs by robot number."""

    name: str
    subjects: Mapping[int, int]
    logs: Mapping[int, _Log]
    truth_landmarks: Floats | None
    notes: tuple[str, ...] = field(default=())

    def is_robot(self, subject: int) -> bool:
        """Robots have files, or a number below the first landmark's."""
        return subject < FIRST_LANDMARK or subject in self.logs


def import_mrclam(folder: Path | str, out: Path | str, *, replace: bool = False) -> ImportReport:
    """Write a survey folder from a run in this layout.

    Parameters
    ----------
    folder : path
        Holds ``Barcodes.dat`` and ``RobotN_*.dat``; ground truth is not needed.
    out : path
        Survey folder to write; appears whole or not at all.
    replace : bool
        Replace an earlier survey there.

    Raises
    ------
    LogFormatError
        Malformed lines, by file and row.
    OutputExistsError
        Something stands at ``out`` that may not be replaced.
    SurveyError
        ``folder`` is no such run, or ``out`` would overwrite it.
    """
    source, target = Path(folder), Path(out)
    if not source.is_dir():
        raise SurveyError(f"{source} is no folder")
    if source.resolve().is_relative_to(target.resolve()):
        raise SurveyError(f"{target} would overwrite the logs in {source}; name another folder")
    problems = Problems()
    run = _read_run(source, problems)
    problems.raise_refused()
    with new_folder(target, replace=replace, marker="survey.toml") as fresh:
        return _write_run(run, fresh, target)


def _read_run(source: Path, problems: Problems) -> _Run:
    numbers: dict[int, set[str]] = {}
    for path in sorted(source.iterdir()):
        found = _FILE.match(path.name)
        if found:
            numbers.setdefault(int(found.group(1)), set()).add(found.group(2))
    logs, notes = {}, []
    for n, kinds in sorted(numbers.items()):
        if "Odometry" not in kinds:
            if kinds != {"Groundtruth"}:
                notes.append(f"{robot_name(n)} has no odometry and is left out")
            continue
        if "Measurement" not in kinds:
            notes.append(f"{robot_name(n)} has no measurements")
        logs[n] = _read_log(source, n, kinds, problems)
    if not logs:
        problems.add(str(source), "no RobotN_Odometry.dat", "name the folder with the logs")
    landmarks = source / "Landmark_Groundtruth.dat"
    truth = (
        _read_text(landmarks, ("subject", "x", "y", "x sigma", "y sigma"), problems)
        if landmarks.is_file()
        else None
    )
    subjects = _read_barcodes(source / "Barcodes.dat", problems)
    return _Run(source.resolve().name, subjects, logs, truth, tuple(notes))


def _read_log(source: Path, n: int, kinds: set[str], problems: Problems) -> _Log:
    def read(kind: str, columns: Sequence[str]) -> Floats | None:
        if kind not in kinds:
            return None
        return _read_text(source / f"Robot{n}_{kind}.dat", columns, problems)

    measured = read("Measurement", ("time", "barcode", "range", "bearing"))
    return _Log(
        odometry=_read_text(
            source / f"Robot{n}_Odometry.dat", ("time", "forward", "angular"), problems
        ),
        measured=np.empty((0, 4)) if measured is None else measured,
        truth=read("Groundtruth", ("time", "x", "y", "heading")),
    )


def _read_text(path: Path, names: Sequence[str], problems: Problems) -> Floats:
    """Numbers (n, columns) of a text file separated by blanks, comments skipped."""
    text = memoryview(blanks_to_commas(path.read_bytes()))
    if not bytes(text).strip():
        return np.empty((0, len(names)))
    parsed = parse_csv(text, path.name, names, dict.fromkeys(names, "float64"), problems, skip=0)
    table = np.column_stack([parsed.columns[n].to_numpy() for n in names])
    for name, column in zip(names, table.T, strict=True):
        rows = parsed.row[~np.isfinite(column)]
        message = "the number is missing or infinite"
        problems.rows(path.name, rows, name, message, "mend or drop the line")
    return table


def _read_barcodes(path: Path, problems: Problems) -> dict[int, int]:
    """Subject number of each barcode."""
    if not path.is_file():
        problems.add(path.name, "is missing", "name the folder that holds it")
        return {}
    table = _read_text(path, ("subject", "barcode"), problems)
    subjects: dict[int, int] = {}
    for subject, barcode in table.tolist():
        if subject != subject // 1 or barcode != barcode // 1:
            problems.add(
                path.name, f"{subject:g} {barcode:g} are no whole numbers", "mend the line"
            )
        elif int(barcode) in subjects:
            problems.add(path.name, f"barcode {int(barcode)} stands twice", "keep one of the lines")
        else:
            subjects[int(barcode)] = int(subject)
    return subjects


def robot_name(subject: int) -> str:
    """Name of the robot of a subject number."""
    return f"robot-{subject}"


def landmark_name(subject: int) -> str:
    """Name of the landmark of a subject number."""
    return f"landmark-{subject:02d}"


def _write_run(run: _Run, fresh: Path, target: Path) -> ImportReport:
    unknown: dict[int, int] = {}
    left_out: dict[str, int] = {}
    landmarks: set[str] = set()
    n_sightings = n_encounters = 0
    for n, log in run.logs.items():
        folder = fresh / robot_name(n)
        folder.mkdir()
        _write(folder / "odometry.csv", ("t_s", "vx_mps", "wz_radps"), log.odometry)
        subject = _subjects(log.measured[:, 1], run.subjects)
        _count(log.measured[subject < 0, 1], unknown)
        is_robot = np.isin(subject, [s for s in run.subjects.values() if run.is_robot(s)])
        met = is_robot & np.isin(subject, list(run.logs)) & (subject != n)
        for s in subject[is_robot & ~met].tolist():
            left_out[robot_name(s)] = left_out.get(robot_name(s), 0) + 1
        seen = (subject >= 0) & ~is_robot
        names = [landmark_name(s) for s in subject[seen].tolist()]
        landmarks.update(names)
        _write_seen(folder / "sightings.csv", "landmark", log.measured[seen], names)
        others = [robot_name(s) for s in subject[met].tolist()]
        _write_seen(folder / "encounters.csv", "robot", log.measured[met], others)
        n_sightings += len(names)
        n_encounters += len(others)
    _write_truth(run, fresh / "truth")
    (fresh / "survey.toml").write_text(_survey_toml(run), encoding="utf-8")
    return ImportReport(
        out=target,
        robots=tuple(robot_name(n) for n in run.logs),
        landmarks=tuple(sorted(landmarks)),
        n_odometry=sum(len(log.odometry) for log in run.logs.values()),
        n_sightings=n_sightings,
        n_encounters=n_encounters,
        unknown_barcodes=unknown,
        left_out=left_out,
        notes=run.notes,
    )


def _subjects(barcodes: Floats, subjects: Mapping[int, int]) -> Ints:
    """Subject of each barcode, -1 where unknown."""
    known, place = np.unique(barcodes, return_inverse=True)
    found = [subjects.get(int(b), -1) if b == b // 1 else -1 for b in known.tolist()]
    return np.array([*found, -1], dtype=np.int64)[place]


def _count(barcodes: Floats, into: dict[int, int]) -> None:
    values, times = np.unique(barcodes, return_counts=True)
    for value, n in zip(values.tolist(), times.tolist(), strict=True):
        into[int(value)] = into.get(int(value), 0) + n


def _write(path: Path, names: Sequence[str], columns: Floats | Sequence[object]) -> None:
    """A CSV table from columns (or a matrix of them)."""
    parts = list(columns.T) if isinstance(columns, np.ndarray) else list(columns)
    table = pa.table(dict(zip(names, parts, strict=True)))
    options = pacsv.WriteOptions(quoting_style="needed", quoting_header="none")
    pacsv.write_csv(table, str(path), write_options=options)


def _write_seen(path: Path, target: str, measured: Floats, names: Sequence[str]) -> None:
    sensor = pa.array([SENSOR] * len(names), pa.string())
    columns = [measured[:, 0], sensor, pa.array(names, pa.string()), *measured[:, 2:].T]
    _write(path, ("t_s", "sensor", target, "range_m", "bearing_rad"), columns)


def _write_truth(run: _Run, folder: Path) -> None:
    truths = {n: log.truth for n, log in run.logs.items() if log.truth is not None}
    if not truths and run.truth_landmarks is None:
        return
    folder.mkdir()
    for n, truth in truths.items():
        _write(folder / f"{robot_name(n)}.csv", ("t_s", "x_m", "y_m", "yaw_rad"), truth)
    if run.truth_landmarks is not None:
        names = [landmark_name(int(s)) for s in run.truth_landmarks[:, 0].tolist()]
        columns = [pa.array(names, pa.string()), *run.truth_landmarks[:, 1:3].T]
        _write(folder / "landmarks.csv", ("landmark", "x_m", "y_m"), columns)


def _survey_toml(run: _Run) -> str:
    """survey.toml; noise is left out, so that it is estimated."""
    lines = ["[survey]", "format = 1", f"name = {toml_value(run.name)}", "dimension = 2", ""]
    for n in run.logs:
        name = robot_name(n)
        lines += [f"[robots.{name}]"]
        lines += [f'{k} = "{name}/{k}.csv"' for k in ("odometry", "sightings", "encounters")]
        lines += ["", f"[robots.{name}.sensors.{SENSOR}]", "body_T_sensor = [0.0, 0.0, 0.0]", ""]
    return "\n".join(lines)
