"""Odometry tables: pose form or twist form."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal

import numpy as np

from jointmap import schema
from jointmap.ingest.covariance import read_covariance
from jointmap.ingest.degrees import check_heading, check_turn_rates
from jointmap.ingest.problems import Problems
from jointmap.ingest.stamps import same_as_before, sort_by_time
from jointmap.ingest.survey import Floats, Odometry
from jointmap.ingest.table import Table
from jointmap.ingest.values import (
    check_sigmas,
    normalise,
    refuse_dimension,
    require,
    require_numbers,
)

SPEC = schema.input_table("odometry")


def read_odometry(table: Table, dimension: int, problems: Problems) -> Odometry | None:
    """A robot's odometry from its concatenated files; ``None`` when there is none to use."""
    refuse_dimension(table, SPEC, dimension, problems)
    form = _form(table, dimension, problems)
    if form is None or not require(table, ["t_s"], (), problems):
        return None
    table = sort_by_time(table, problems)
    if form == "pose":
        return _pose_form(table, dimension, problems)
    return _twist_form(table, dimension, problems)


def _form(table: Table, dimension: int, problems: Problems) -> Literal["pose", "twist"] | None:
    """Which form the files have; columns that are missing for it are reported."""
    pose, twist = schema.pose_columns(dimension), list(schema.twist_columns(dimension))
    if dimension == 2:
        twist.remove("vy_mps")
    has_pose = sum(table.has(c) for c in pose)
    has_twist = sum(table.has(c) for c in twist)
    if has_pose == len(pose):
        if has_twist:
            for name in table.files:
                message = "has poses and velocities"
                problems.add(name, message, "the poses are used", mended=True)
        return "pose"
    if has_twist == len(twist) and has_pose == 0:
        return "twist"
    if has_pose == 0 and has_twist == 0:
        wanted = f"{' '.join(pose)} or {' '.join(schema.twist_columns(dimension))}"
        for name in table.files:
            problems.add(name, "has neither poses nor velocities", f"add columns {wanted}")
        return None
    require(table, pose if has_pose >= has_twist else twist, (), problems)
    return None


def _pose_form(table: Table, dimension: int, problems: Problems) -> Odometry:
    names = schema.pose_columns(dimension)
    require_numbers(table, names, problems)
    table = _drop_repeats(table, names, problems)
    pose = table.matrix(names)
    _refuse_two_poses(table, problems)
    if dimension == 2:
        check_heading(table, problems)
    else:
        pose[:, 3:] = normalise(table, pose[:, 3:], problems)
    sigmas = schema.sigma_columns(dimension)
    check_sigmas(table, sigmas, problems)
    acc = read_covariance(table, dimension, problems, accumulated=True)
    return Odometry(
        form="pose",
        t_s=table.number("t_s"),
        pose=pose,
        twist=None,
        sigma=_given(table, sigmas),
        acc_cov=acc,
        source=table.provenance,
    )


def _twist_form(table: Table, dimension: int, problems: Problems) -> Odometry:
    names = schema.twist_columns(dimension)
    needed = [n for n in names if n != "vy_mps" or dimension == 3]
    require_numbers(table, needed, problems)
    table = _drop_repeats(table, names, problems)
    table = _last_of_stamp(table, problems)
    twist = table.matrix(names)
    if dimension == 2:
        np.nan_to_num(twist[:, 1], copy=False, nan=0.0)
    check_turn_rates(table, [n for n in names if n.endswith("_radps")], problems)
    sigmas = [f"sigma_{n}" for n in names]
    check_sigmas(table, sigmas, problems)
    return Odometry(
        form="twist",
        t_s=table.number("t_s"),
        pose=None,
        twist=twist,
        sigma=_given(table, sigmas),
        acc_cov=None,
        source=table.provenance,
    )


def _given(table: Table, names: Sequence[str]) -> Floats | None:
    return table.matrix(names) if any(table.given(n) for n in names) else None


def _drop_repeats(table: Table, names: Sequence[str], problems: Problems) -> Table:
    """A row that repeats the one before it, stamp and all, counts once."""
    again = same_as_before(table.number("t_s"))
    if not again.any():
        return table
    index = np.flatnonzero(again)
    for name in names:
        values = table.number(name)
        same = values[index] == values[index - 1]
        index = index[same | (np.isnan(values[index]) & np.isnan(values[index - 1]))]
    message = "repeats the row before it"
    table.complain(problems, index, "t_s", message, "the first one is kept", mended=True)
    keep = np.ones(table.n, dtype=bool)
    keep[index] = False
    return table.take(keep)


def _refuse_two_poses(table: Table, problems: Problems) -> None:
    """Two different poses at one time contradict each other, and nothing tells which holds."""
    doubled = same_as_before(table.number("t_s"))
    message = "another pose of the same stamp stands before it"
    table.complain(problems, doubled, "t_s", message, "keep one row per stamp")


def _last_of_stamp(table: Table, problems: Problems) -> Table:
    """A twist holds until the next row, so all but the last of one stamp hold for no time."""
    doubled = same_as_before(table.number("t_s"))
    if not doubled.any():
        return table
    message = "another velocity of the same stamp stands before it"
    table.complain(problems, doubled, "t_s", message, "the last one holds", mended=True)
    keep = np.ones(table.n, dtype=bool)
    keep[:-1] = ~doubled[1:]
    return table.take(keep)
