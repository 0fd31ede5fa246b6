"""Relative poses between two times, from place recognition."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from jointmap import schema
from jointmap.ingest.covariance import read_covariance
from jointmap.ingest.problems import Problems
from jointmap.ingest.stamps import drop_copies, sort_by_time
from jointmap.ingest.survey import Closures, Floats
from jointmap.ingest.table import Table
from jointmap.ingest.values import (
    check_angle,
    check_sigmas,
    known_names,
    normalise,
    refuse_dimension,
    require,
    require_names,
    require_numbers,
)

SPEC = schema.input_table("closures")


def read_closures(
    table: Table, dimension: int, robots: Sequence[str], problems: Problems
) -> Closures | None:
    """The closures of a survey; ``robots`` are all of its robots."""
    refuse_dimension(table, SPEC, dimension, problems)
    pose_names = schema.pose_columns(dimension)
    needed = ["robot_a", "t_a_s", "robot_b", "t_b_s", *pose_names]
    if not require(table, needed, (), problems):
        return None
    table = sort_by_time(table, problems, "t_a_s")
    require_numbers(table, ["t_b_s", *pose_names], problems)
    require_names(table, "robot_a", problems)
    require_names(table, "robot_b", problems)
    contents = [*(table.texts[c].code for c in ("robot_a", "robot_b")), *table.numbers.values()]
    table = table.take(drop_copies(table, contents, table.number("t_a_s"), problems))
    pose = table.matrix(pose_names)
    if dimension == 2:
        check_angle(table, "yaw_rad", problems)
    else:
        pose[:, 3:] = normalise(table, pose[:, 3:], problems)
    a = known_names(table, "robot_a", robots, "robot", problems)
    b = known_names(table, "robot_b", robots, "robot", problems)
    t_a, t_b = table.number("t_a_s"), table.number("t_b_s")
    nothing = (a == b) & (a >= 0) & (t_a == t_b)
    message = "joins a time of a robot to itself"
    table.complain(problems, nothing, "t_b_s", message, "drop the row")
    return Closures(
        robots=tuple(robots),
        robot_a=a,
        t_a_s=t_a,
        robot_b=b,
        t_b_s=t_b,
        pose=pose,
        cov=_covariances(table, dimension, problems),
        source=table.provenance,
    )


def _covariances(table: Table, dimension: int, problems: Problems) -> Floats:
    """Full covariance, else the squared sigmas where all are given, else NaN."""
    sigmas = schema.sigma_columns(dimension)
    check_sigmas(table, sigmas, problems)
    sigma = table.matrix(sigmas)
    given = ~np.isnan(sigma)
    part = np.asarray(given.any(axis=1) & ~given.all(axis=1))
    message = "sigmas of some components only"
    table.complain(problems, part, sigmas[0], message, "give all of them or none")
    diagonal = np.zeros((table.n, len(sigmas), len(sigmas)))
    np.einsum("nii->ni", diagonal)[:] = sigma**2
    diagonal[~given.all(axis=1)] = np.nan
    full = read_covariance(table, dimension, problems)
    if full is None:
        return diagonal
    there = ~np.isnan(full)
    whole = np.asarray(there.all(axis=(1, 2)))
    part = np.asarray(there.any(axis=(1, 2)) & ~whole)
    table.complain(
        problems, part, "cov_x_x", "the covariance is incomplete", "give all of it or nothing"
    )
    return np.where(whole[:, None, None], full, diagonal)
