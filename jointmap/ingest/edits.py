"""edits.toml: the user's mends, read and written.

::

    [[reject_association]]      # the robot's label is not the landmark that it is taken for
    robot = "heron"
    label = "plate-017"

    [[force_association]]       # the robot's label is this landmark, whatever the tests say
    robot = "heron"
    label = "plate-017"
    landmark = "plate-071"

    [[mask]]                    # ignore what a sensor saw (without `sensor`: all its sensors)
    robot = "heron"
    sensor = "front"
    t_from_s = 120.0            # by the robot's clock; a missing end is open
    t_to_s = 130.0

    [[split_odometry]]          # the motion across this time is unknown
    robot = "heron"
    t_s = 250.0

    [[fix_sigma]]               # with `sensor`: a noise term of it, without: of the odometry
    robot = "heron"
    sensor = "front"
    name = "range_m"
    value = 0.1

    [[fix_calibration]]         # hold odometry_scale, odometry_turn_scale or odometry_lag_s of a
    robot = "heron"             # robot, or with `sensor` the lag_s of that sensor
    name = "odometry_scale"
    value = 1.0

    [[fix_clock]]               # offset_s or drift_ppm
    robot = "heron"
    name = "offset_s"
    value = 0.25
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from typing import Any, Literal

from jointmap.ingest.config import ODOMETRY_NOISE, SENSOR_NOISE
from jointmap.ingest.files import SurveyFiles
from jointmap.ingest.problems import Problems, did_you_mean
from jointmap.ingest.section import Section, load_toml
from jointmap.ingest.survey import (
    AssociationEdit,
    Edits,
    FixedValueEdit,
    MaskEdit,
    SplitEdit,
)

FILE = "edits.toml"
Edit = AssociationEdit | MaskEdit | SplitEdit | FixedValueEdit
_CLOCK = ("offset_s", "drift_ppm")
_ODOMETRY_CALIBRATION = ("odometry_scale", "odometry_turn_scale", "odometry_lag_s")
_SENSOR_CALIBRATION = ("lag_s",)


def format_edit(edit: Edit) -> str:
    """The lines of edits.toml that state this edit, ending with a line break."""
    match edit:
        case AssociationEdit(action, robot, label, landmark):
            return _lines(f"{action}_association", robot=robot, label=label, landmark=landmark)
        case MaskEdit(robot, sensor, t_from, t_to):
            first = None if t_from == -math.inf else t_from
            last = None if t_to == math.inf else t_to
            return _lines("mask", robot=robot, sensor=sensor, t_from_s=first, t_to_s=last)
        case SplitEdit(robot, t_s):
            return _lines("split_odometry", robot=robot, t_s=t_s)
        case FixedValueEdit(what, robot, sensor, name, value):
            return _lines(f"fix_{what}", robot=robot, sensor=sensor, name=name, value=value)


def _lines(kind: str, **values: str | float | None) -> str:
    rows = [f"{k} = {toml_value(v)}" for k, v in values.items() if v is not None]
    return "\n".join([f"[[{kind}]]", *rows]) + "\n"


def toml_value(value: str | float) -> str:
    """A TOML text or number that reads back exactly."""
    if isinstance(value, str):
        # JSON escapes are TOML escapes; only DEL, which TOML forbids, is left to be escaped.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    return repr(float(value))


def read_edits(files: SurveyFiles, sensors: Mapping[str, Sequence[str]]) -> Edits:
    """edits.toml of the survey, checked; ``sensors`` are the sensors' names by robot."""
    values = load_toml(files, FILE)
    if values is None:
        return Edits()
    root = Section(FILE, "", values, files.problems)
    found: list[Edit] = []
    readers = {
        "reject_association": _association,
        "force_association": _association,
        "mask": _mask,
        "split_odometry": _split,
        "fix_sigma": _fixed,
        "fix_calibration": _fixed,
        "fix_clock": _fixed,
    }
    for kind, reader in readers.items():
        for section in _entries(root, kind, files.problems):
            edit = reader(section, kind, sensors)
            section.done()
            if edit is not None:
                found.append(edit)
    root.done()
    edits = _sorted(found)
    _refuse_contradictions(edits.associations, files.problems)
    return edits


def _refuse_contradictions(edits: Sequence[AssociationEdit], problems: Problems) -> None:
    """One label cannot be forced to two landmarks, nor be forced to what it is rejected from.

    An edit that rejects without a landmark beside one that forces is fine: it says what the label
    is not, the other what it is.
    """
    forced: dict[tuple[str, str], str | None] = {}
    for edit in (e for e in edits if e.action == "force"):
        if forced.setdefault((edit.robot, edit.label), edit.landmark) != edit.landmark:
            message = f"{edit.label!r} of {edit.robot} is forced to two landmarks"
            problems.add(FILE, message, "keep one of them", column="force_association")
    for edit in (e for e in edits if e.action == "reject" and e.landmark is not None):
        if forced.get((edit.robot, edit.label)) == edit.landmark:
            message = f"{edit.label!r} of {edit.robot} is forced and rejected"
            problems.add(FILE, message, "keep one of them", column="reject_association")


def _sorted(found: Sequence[Edit]) -> Edits:
    return Edits(
        associations=tuple(e for e in found if isinstance(e, AssociationEdit)),
        masks=tuple(e for e in found if isinstance(e, MaskEdit)),
        splits=tuple(e for e in found if isinstance(e, SplitEdit)),
        values=tuple(e for e in found if isinstance(e, FixedValueEdit)),
    )


def _entries(root: Section, kind: str, problems: Problems) -> list[Section]:
    if not root.has(kind):
        return []
    value: Any = root.values[kind]
    if isinstance(value, list) and all(isinstance(v, dict) for v in value):
        return [Section(FILE, f"{kind}[{i + 1}]", v, problems) for i, v in enumerate(value)]
    root.wrong(kind, "is not a list of edits", f"write each one under [[{kind}]]")
    return []


def _robot(section: Section, sensors: Mapping[str, Sequence[str]]) -> str | None:
    robot = _needed(section, "robot")
    if robot is not None and robot not in sensors:
        section.wrong("robot", f"there is no robot {robot!r}", did_you_mean(robot, sensors))
        return None
    return robot


def _sensor(
    section: Section, robot: str | None, sensors: Mapping[str, Sequence[str]]
) -> str | None:
    sensor = section.text("sensor")
    if sensor is not None and robot is not None and sensor not in sensors[robot]:
        mend = did_you_mean(sensor, sensors[robot])
        section.wrong("sensor", f"{robot} has no sensor {sensor!r}", mend)
    return sensor


def _needed(section: Section, name: str) -> str | None:
    if not section.has(name):
        section.wrong(name, "is missing", "write it")
    return section.text(name)


def _needed_number(section: Section, name: str, above: float = -math.inf) -> float | None:
    if not section.has(name):
        section.wrong(name, "is missing", "write it")
    return section.number(name, above=above)


def _association(
    section: Section, kind: str, sensors: Mapping[str, Sequence[str]]
) -> AssociationEdit | None:
    robot, label = _robot(section, sensors), _needed(section, "label")
    action: Literal["reject", "force"] = "reject" if kind.startswith("reject") else "force"
    landmark = section.text("landmark") if action == "reject" else _needed(section, "landmark")
    if robot is None or label is None or (action == "force" and landmark is None):
        return None
    return AssociationEdit(action, robot, label, landmark)


def _mask(section: Section, _: str, sensors: Mapping[str, Sequence[str]]) -> MaskEdit | None:
    robot = _robot(section, sensors)
    sensor = _sensor(section, robot, sensors)
    t_from, t_to = section.number("t_from_s", -math.inf), section.number("t_to_s", math.inf)
    if robot is None or t_from is None or t_to is None:
        return None
    if t_from > t_to:
        section.wrong("t_to_s", "ends before it begins", "swap the times")
    return MaskEdit(robot, sensor, t_from, t_to)


def _split(section: Section, _: str, sensors: Mapping[str, Sequence[str]]) -> SplitEdit | None:
    robot, t_s = _robot(section, sensors), _needed_number(section, "t_s")
    return None if robot is None or t_s is None else SplitEdit(robot, t_s)


def _fixed(
    section: Section, kind: str, sensors: Mapping[str, Sequence[str]]
) -> FixedValueEdit | None:
    what: Literal["sigma", "calibration", "clock"] = kind.removeprefix("fix_")  # type: ignore[assignment]
    robot = _robot(section, sensors)
    sensor = None if what == "clock" else _sensor(section, robot, sensors)
    name = _needed(section, "name")
    of_sensor, of_robot = {
        "sigma": (SENSOR_NOISE, ODOMETRY_NOISE),
        "calibration": (_SENSOR_CALIBRATION, _ODOMETRY_CALIBRATION),
        "clock": (_CLOCK, _CLOCK),
    }[what]
    known = of_sensor if sensor else of_robot
    if name is not None and name not in known:
        section.wrong("name", f"{name!r} cannot be fixed here", did_you_mean(name, known))
    value = _needed_number(section, "value", above=0.0 if what == "sigma" else -math.inf)
    if robot is None or name is None or value is None:
        return None
    return FixedValueEdit(what, robot, sensor, name, value)
