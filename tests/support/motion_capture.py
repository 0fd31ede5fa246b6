"""The motion-capture truth of the five-robot run, and grades against it.

Leung, Halpern, Barfoot, Liu: The UTIAS multi-robot cooperative localization and mapping dataset,
Int. J. Robotics Research 30(8):969-974, 2011. Read here, never copied.
"""

from __future__ import annotations

import os
from dataclasses import replace
from pathlib import Path

import numpy as np


def folder() -> Path | None:
    """Where the files lie; None when they are not there."""
    named = os.environ.get("JOINTMAP_DATA")
    root = Path(__file__).resolve().parents[2]
    path = Path(named) if named else root.parent / "shared" / "data" / "mrclam6"
    return path if (path / "Robot1_Groundtruth.dat").is_file() else None


def truth(path: Path, robot: str, t_s):
    """Poses (n, 3) and which of them lie between truth rows less than half a second apart."""
    rows = np.loadtxt(path / f"Robot{robot.removeprefix('robot-')}_Groundtruth.dat")
    k = np.clip(np.searchsorted(rows[:, 0], t_s), 1, len(rows) - 1)
    known = (rows[k, 0] - rows[k - 1, 0] < 0.5) & (t_s > rows[0, 0]) & (t_s < rows[-1, 0])
    yaw = np.interp(t_s, rows[:, 0], np.unwrap(rows[:, 3]))
    xy = [np.interp(t_s, rows[:, 0], rows[:, c]) for c in (1, 2)]
    return np.stack([*xy, yaw], axis=1), known


def with_truth(matched, stage, path: Path):
    """Matched instants with motion capture in place of the reference, and which are known."""
    pose, known = matched.reference.copy(), np.zeros(len(matched), bool)
    robot = stage.located.robot[matched.row]
    for r in np.unique(robot):
        mine = robot == r
        pose[mine], known[mine] = truth(path, stage.robots[r], matched.t_s[mine])
    return replace(matched, reference=pose), known
