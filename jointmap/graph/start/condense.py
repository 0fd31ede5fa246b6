"""Sightings, encounters, closures and fixes condensed to statements about chunks.

All sightings of a track within a chunk become one point in the chunk's frame; a closure or an
encounter becomes a relative pose, or a point, between two chunks. The odometry's drift between
the measuring keyframes and the anchors is added to every covariance.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.start.candidates import local_points, row_kind
from jointmap.graph.start.chunks import Chunks
from jointmap.graph.start.gather import Absolute, Material, Met, Sighted
from jointmap.graph.start.net import Joints, Pins, Seen, Touches
from jointmap.graph.start.rows import SightingRows, sum_by_group
from jointmap.graph.start.triangulate import INDEPENDENT, triangulate

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Rows of one unbroken meeting count as no more independent ones than this.
_MEETING = 3
#: Smallest standard deviation of a condensed point, metres (what a plate's own size hides).
_LEAST_SIGMA = 1e-3


@dataclass(frozen=True)
class Condensed:
    """Statements about chunks; ``seen.point`` is a track here.

    ``closures`` and ``touches`` carry the row of ``Met`` each came from.
    """

    seen: Seen
    closures: Joints
    closure_row: Ints
    touches: Touches
    touch_row: Ints
    pins: Pins


def condense(material: Material, chunks: Chunks, dimension: int) -> Condensed:
    """Return what the measurements say about chunks."""
    closures, closure_row = _closures(material.met, chunks, dimension)
    touches, touch_row = _touches(material.met, chunks, dimension)
    return Condensed(
        seen=_points(material.sighted, chunks, dimension),
        closures=closures,
        closure_row=closure_row,
        touches=touches,
        touch_row=touch_row,
        pins=_pins(material.absolute, chunks, dimension),
    )


def _points(sighted: Sighted, chunks: Chunks, dimension: int) -> Seen:
    chunk = chunks.of_keyframe[sighted.keyframe]
    tracks = int(sighted.track.max(initial=-1)) + 1
    key, group = np.unique(chunk * max(tracks, 1) + sighted.track, return_inverse=True)
    rows = sighted.rows(chunks.local[sighted.keyframe], group, dimension)
    found = triangulate(rows, len(key))
    distance = np.linalg.norm(found.position[group] - rows.origin, axis=1)
    drift = chunks.shift[sighted.keyframe] + chunks.turn[sighted.keyframe] * distance**2
    mean = sum_by_group(group, np.nan_to_num(drift), len(key)) / np.maximum(found.rows, 1)
    # A fit far worse than the noise says that the noise is understated (median of chi-square).
    worse = np.maximum(np.nan_to_num(found.fit) / 0.7, 1.0)
    covariance = found.covariance * worse[:, None, None]
    covariance = covariance + (mean + _LEAST_SIGMA**2)[:, None, None] * np.eye(dimension)
    keep = found.determined
    return Seen(
        (key // max(tracks, 1))[keep].astype(np.int64),
        (key % max(tracks, 1))[keep].astype(np.int64),
        found.position[keep],
        covariance[keep],
    )


def _drift_covariance(chunks: Chunks, keyframe: Ints, dimension: int) -> Floats:
    """Covariance (n, dof, dof) of a keyframe against its anchor, in the body tangent."""
    dof = frames.group(dimension).dof
    diagonal = np.empty((len(keyframe), dof))
    turn, shift = chunks.turn[keyframe][:, None], chunks.shift[keyframe][:, None]
    if dimension == 2:
        diagonal[:, :2], diagonal[:, 2:] = shift, turn
    else:
        diagonal[:, :3], diagonal[:, 3:] = turn, shift
    return np.asarray(diagonal[:, :, None] * np.eye(dof))


def _meeting_size(met: Met, chunks: Chunks, rows: Ints) -> Floats:
    """Number (n,) of rows in the same unbroken meeting and the same pair of chunks."""
    code = np.stack([met.burst, chunks.of_keyframe[met.a], chunks.of_keyframe[met.b]], axis=1)
    _, inverse, size = np.unique(code[rows], axis=0, return_inverse=True, return_counts=True)
    return np.asarray(size[inverse.ravel()], dtype=np.float64)


def _closures(met: Met, chunks: Chunks, dimension: int) -> tuple[Joints, Ints]:
    """Z between keyframes -> A Z B^-1 between anchors, covariance moved by the adjoint of B."""
    lie = frames.group(dimension)
    rows = np.flatnonzero(met.is_pose & (chunks.of_keyframe[met.a] != chunks.of_keyframe[met.b]))
    a, b = met.a[rows], met.b[rows]
    from_a = lie.compose(chunks.local[a], met.frame_a[rows])
    to_b = lie.compose(chunks.local[b], met.frame_b[rows])
    pose = lie.compose(lie.compose(from_a, met.pose[rows]), lie.inverse(to_b))
    move = lie.adjoint(to_b)
    many = np.maximum(_meeting_size(met, chunks, rows) / _MEETING, 1.0)
    many = np.where(met.closure[rows], 1.0, many)
    own = met.covariance[rows] * many[:, None, None]
    # Drift of a, seen from b: turned through the relative pose; the lever is small in a chunk.
    seen_from_b = lie.adjoint(lie.inverse(met.pose[rows]))
    drift_a = seen_from_b @ _drift_covariance(chunks, a, dimension)
    drift_a = drift_a @ np.swapaxes(seen_from_b, -1, -2)
    covariance = own + drift_a + _drift_covariance(chunks, b, dimension)
    covariance = move @ covariance @ np.swapaxes(move, -1, -2)
    covariance = covariance + 1e-10 * np.eye(lie.dof)
    joints = Joints(chunks.of_keyframe[a], chunks.of_keyframe[b], pose, covariance)
    return joints, rows.astype(np.int64)


def _touches(met: Met, chunks: Chunks, dimension: int) -> tuple[Touches, Ints]:
    """Encounters that observe a whole position, as points between anchors."""
    lie = frames.group(dimension)
    empty = np.zeros(met.n, dtype=np.int64)
    sensor = lie.compose(chunks.local[met.a], met.frame_a)
    all_rows = SightingRows(
        empty, lie.translation(sensor), lie.rotation(sensor), met.value, met.sigma
    )
    whole = ~met.is_pose & (row_kind(all_rows) == 0)
    rows = np.flatnonzero(whole & (chunks.of_keyframe[met.a] != chunks.of_keyframe[met.b]))
    mine = all_rows.take(rows)
    a, b = met.a[rows], met.b[rows]
    at = np.einsum("nij,nj->ni", mine.rotation, local_points(mine)) + mine.origin
    target = lie.translation(lie.compose(chunks.local[b], met.frame_b[rows]))
    distance2 = np.sum((at - mine.origin) ** 2, axis=1)
    drift = chunks.shift[a] + chunks.shift[b] + chunks.turn[a] * distance2
    many = np.maximum(_meeting_size(met, chunks, rows) / _MEETING, 1.0)
    variance = sight_covariance(mine) * many[:, None, None]
    covariance = variance + (drift + _LEAST_SIGMA**2)[:, None, None] * np.eye(dimension)
    touches = Touches(chunks.of_keyframe[a], chunks.of_keyframe[b], at, target, covariance)
    return touches, rows.astype(np.int64)


def sight_covariance(rows: SightingRows) -> Floats:
    """Covariance (n, d, d) of wholly observed positions, in the frame of the result."""
    d = rows.origin.shape[1]
    local = local_points(rows)
    distance = np.linalg.norm(local, axis=1)
    unit = local / np.maximum(distance, 1e-9)[:, None]
    radial = np.einsum("ni,nj->nij", unit, unit)
    sigma = rows.sigma
    along = np.where(np.isfinite(sigma[:, 2]), sigma[:, 2], 0.0) ** 2
    angle = np.nan_to_num(sigma[:, 0])
    if d == 3:
        angle = np.maximum(angle, np.nan_to_num(sigma[:, 1]))
    across = (angle * distance) ** 2
    polar = along[:, None, None] * radial + across[:, None, None] * (np.eye(d) - radial)
    axes = np.nan_to_num(sigma[:, 3 : 3 + d]) ** 2
    cartesian = axes[:, :, None] * np.eye(d)
    absent = np.isnan(rows.value[:, 3 : 3 + d]).sum(axis=1)
    covariance = np.where((absent == 0)[:, None, None], cartesian, polar)
    return np.asarray(rows.rotation @ covariance @ np.swapaxes(rows.rotation, -1, -2))


def _pins(absolute: Absolute, chunks: Chunks, dimension: int) -> Pins:
    lie = frames.group(dimension)
    keyframe = absolute.fix_keyframe
    of = lie.transform(chunks.local[keyframe], absolute.fix_antenna)
    chunk = chunks.of_keyframe[keyframe]
    count = np.bincount(chunk, minlength=max(chunks.n, 1))[chunk]
    many = np.maximum(count / INDEPENDENT, 1.0)
    variance = absolute.fix_sigma**2 * many[:, None] + chunks.shift[keyframe][:, None]
    covariance = (variance + _LEAST_SIGMA**2)[:, :, None] * np.eye(dimension)
    return Pins(chunk, of, absolute.fix_position, covariance)
