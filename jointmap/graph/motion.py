"""Odometry of one robot on its way into the graph: clock, lag, scale, gaps and splits."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.clock import SurveyClock
from jointmap.graph.noise import DEFAULT_SIGMA
from jointmap.graph.odometry import dead_reckon, increments
from jointmap.graph.problem import ODOMETRY_TERMS, Block, Keyframes
from jointmap.ingest.survey import Odometry, Provenance, Survey

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Motion:
    """A robot's odometry in survey time with the calibration in force.

    ``t_rows`` (N,) survey time of the motion that each row describes (lag applied).
    """

    robot: str
    odometry: Odometry
    t_rows: Floats
    translation_scale: float
    turn_scale: float
    splits: tuple[float, ...]

    @property
    def span(self) -> tuple[float, float]:
        """First and last survey time that the rows describe."""
        return float(self.t_rows[0]), float(self.t_rows[-1])


@dataclass(frozen=True)
class OdometryMade:
    """Block(s), dead-reckoned keyframes and breaks of one robot, with notes for the page."""

    blocks: list[Block]
    poses: Floats
    breaks: Bools
    notes: list[str]


def prepare_motion(
    survey: Survey, clock: SurveyClock, name: str, values: Mapping[tuple[str, str, str], float]
) -> Motion:
    """Apply clock, lag and scale to one robot's odometry."""
    log = survey.robots[name]
    lag = values.get((name, "", "odometry_lag_s"), log.odometry_lag_s or 0.0)
    splits = tuple(
        float(clock.survey_time(name, np.array([e.t_s]))[0])
        for e in survey.edits.splits
        if e.robot == name
    )
    return Motion(
        robot=name,
        odometry=log.odometry,
        t_rows=clock.survey_time(name, log.odometry.t_s) + lag,
        translation_scale=values.get((name, "", "odometry_scale"), 1.0),
        turn_scale=values.get((name, "", "odometry_turn_scale"), 1.0),
        splits=splits,
    )


def odometry_blocks(
    motion: Motion, keyframes: Keyframes, robot: int, survey: Survey, max_gap_s: float | None
) -> OdometryMade:
    """The increments of one robot between neighbouring keyframes."""
    lo, hi = int(keyframes.first[robot]), int(keyframes.first[robot + 1])
    stamps = keyframes.t_s[lo:hi]
    scale = {
        "translation_scale": motion.translation_scale,
        "rotation_scale": motion.turn_scale,
    }
    poses = dead_reckon(motion.odometry, motion.t_rows, stamps, survey.dimension, **scale)
    made = increments(
        motion.odometry, motion.t_rows, stamps, survey.dimension, max_gap_s=max_gap_s, **scale
    )
    cut = np.zeros(hi - lo, dtype=bool)
    notes = _gap_notes(motion, stamps, made.gap_s, made.gap)
    for split in motion.splits:
        i = int(np.searchsorted(stamps, split, side="left"))
        if 0 < i < hi - lo:
            cut[i] = True
        else:
            notes.append(
                f"{motion.robot}: the edit that splits its odometry at {split:.3f} s lies outside "
                "the odometry and does nothing"
            )
    keep = np.flatnonzero(~cut[1:])
    covariance = np.array(made.row_cov)
    gap: Bools = np.asarray(made.gap & np.isfinite(made.gap_cov).all(axis=(1, 2)))
    defaults = np.array([DEFAULT_SIGMA[n] for n in ODOMETRY_TERMS]) ** 2
    weak = np.tensordot(made.basis, defaults, axes=(1, 0)) + made.gap_cov
    stated: Bools = np.asarray(np.isfinite(covariance).all(axis=(1, 2)))
    base = np.where(stated[:, None, None], np.nan_to_num(covariance), 0.0) + made.gap_cov
    covariance[gap] = np.where(stated[gap, None, None], base[gap], weak[gap])
    rows = np.clip(np.searchsorted(motion.t_rows, stamps[:-1], side="right") - 1, 0, None)
    source = motion.odometry.source
    dof = covariance.shape[-1]
    n = len(keep)
    nothing = frames.group(survey.dimension).identity(1)
    block = Block(
        kind="odometry",
        robot=robot,
        sensor="",
        components=("pose",),
        a=lo + keep,
        b=lo + keep + 1,
        obs=made.delta[keep],
        frame_a=nothing,
        frame_b=nothing,
        sigma=np.full((n, dof), np.nan),
        covariance=covariance[keep],
        odometry_basis=made.basis[keep],
        t_s=stamps[:-1][keep],
        source=Provenance(source.files, source.file[rows[keep]], source.row[rows[keep]]),
        burst=np.arange(n),
    )
    return OdometryMade([block] if n else [], poses, cut, notes)


def _gap_notes(motion: Motion, stamps: Floats, gap_s: Floats, gap: Bools) -> list[str]:
    if not gap.any():
        return []
    longest = int(np.argmax(np.where(gap, gap_s, 0.0)))
    return [
        f"{motion.robot}: {int(gap.sum())} odometry gaps became weak factors; the longest, "
        f"{gap_s[longest]:.2f} s, lies near {stamps[longest]:.2f} s"
    ]
