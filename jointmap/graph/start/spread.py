"""From chunks back to keyframes, landmarks and tags."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.start.chunks import Chunks
from jointmap.graph.start.gather import Sighted
from jointmap.graph.start.triangulate import Triangulation, triangulate

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


def keyframe_poses(chunks: Chunks, poses: Floats, unit: Ints, dimension: int) -> Floats:
    """Return keyframe poses (K, *shape), the contradiction at chunk joints spread evenly.

    Between two anchors of one run every keyframe is placed from both and the two placements are
    blended by its share of the keyframes in between.
    """
    lie = frames.group(dimension)
    count = len(chunks.of_keyframe)
    index = np.arange(count)
    before = np.maximum(np.searchsorted(chunks.anchor, index, side="right") - 1, 0)
    after = np.minimum(before + 1, chunks.n - 1)
    own = chunks.of_keyframe
    # At the ends of a run there is only one anchor to count from.
    before = np.where(unit[before] == unit[own], before, own)
    after = np.where(unit[after] == unit[own], after, own)
    gap = np.maximum(chunks.anchor[after] - chunks.anchor[before], 1)
    share = np.clip((index - chunks.anchor[before]) / gap, 0.0, 1.0)
    share = np.where(after == before, 0.0, share)
    return lie.interpolate(
        _placed(chunks, poses, before, index, lie), _placed(chunks, poses, after, index, lie), share
    )


def _placed(
    chunks: Chunks, poses: Floats, chunk: Ints, keyframe: Ints, lie: frames.Group
) -> Floats:
    """Place keyframes from a chunk at most one away from their own, by the joint's odometry."""
    own = chunks.of_keyframe[keyframe]
    local = chunks.local[keyframe]
    ahead = lie.compose(chunks.joint[own], local)
    behind = lie.compose(lie.inverse(chunks.joint[np.minimum(own + 1, chunks.n - 1)]), local)
    pick = [1] * len(lie.shape)
    local = np.where((chunk == own - 1).reshape(-1, *pick), ahead, local)
    local = np.where((chunk == own + 1).reshape(-1, *pick), behind, local)
    return lie.compose(poses[chunk], local)


def track_points(sighted: Sighted, poses: Floats, tracks: int, dimension: int) -> Triangulation:
    """Triangulate every track (T) from all its sightings at keyframe poses (K, *shape)."""
    rows = sighted.rows(poses[sighted.keyframe], sighted.track, dimension)
    return triangulate(rows, tracks)


def track_turns(sighted: Sighted, poses: Floats, tracks: int, dimension: int) -> Floats:
    """Return the mean rotation (T, d, d) of tags, NaN without any; gross errors weigh little.

    The chordal mean (largest rotation part of the weighted sum of matrices) is re-weighted by
    1 / max(angle, 0.05), which approaches the geodesic median (Hartley et al., Rotation
    averaging, IJCV 103, 2013).
    """
    lie = frames.group(dimension)
    rows = np.flatnonzero(np.isfinite(sighted.turn[:, 0, 0]))
    result = np.full((tracks, dimension, dimension), np.nan)
    if not len(rows):
        return result
    sensor = lie.compose(poses[sighted.keyframe[rows]], sighted.frame[rows])
    turn = lie.rotation(sensor) @ sighted.turn[rows]
    track = sighted.track[rows]
    weight = np.ones(len(rows))
    seen = np.unique(track)
    for _ in range(6):
        total = np.zeros((tracks, dimension, dimension))
        np.add.at(total, track, weight[:, None, None] * turn)
        u, _, vt = np.linalg.svd(total[seen])
        sign = np.linalg.det(u @ vt)
        u[..., :, -1] *= sign[:, None]
        result[seen] = u @ vt
        relative = np.swapaxes(result[track], -1, -2) @ turn
        cosine = (np.trace(relative, axis1=1, axis2=2) - (dimension - 2)) / 2.0
        weight = 1.0 / np.maximum(np.arccos(np.clip(cosine, -1.0, 1.0)), 0.05)
    return result
