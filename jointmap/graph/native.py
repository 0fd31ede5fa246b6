"""The same graph out of GTSAM's own factors, where these say exactly what our models say.

For comparison only: as a baseline of speed, and as the outside check of our linearisation. A plain
loop with cached noise models is the fastest way to build (no bulk call exists in the wheel).

Keys are variable indices: pose ``i`` is key ``i``, landmark ``l`` is key ``P + l``.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import gtsam
import numpy as np
from numpy.typing import NDArray

from jointmap.frames import Group
from jointmap.graph.problem import Block, State

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Makes the factor of one row from its keys, what was observed and its noise model.
_Make = Callable[[int, int, Any, Any], Any]
_POLAR = ("bearing_rad", "range_m")


@dataclass(frozen=True)
class NativeBlock:
    """A block and how its residuals are whitened.

    ``whiten`` (n, m, m) with ``W^T W`` the information, or standard deviations (n, m);
    ``robust`` a ``gtsam.noiseModel.mEstimator`` or None.
    """

    block: Block
    whiten: Floats
    robust: Any = None


def native_graph(
    group: Group,
    blocks: Sequence[NativeBlock],
    landmark_of_track: Ints,
    n_poses: int,
    oriented: Bools | None = None,
) -> gtsam.NonlinearFactorGraph:
    """GTSAM's nonlinear graph of blocks.

    Parameters
    ----------
    group : Group
    blocks : sequence of NativeBlock
    landmark_of_track : (T,) int
        Landmark that each track is.
    n_poses : int
        Landmark ``l`` has the key ``n_poses + l``.
    oriented : (L,) bool or None
        Landmarks that are poses.

    Raises
    ------
    ValueError
        GTSAM has no factor that equals our model of a block; see :func:`expressible`.
    """
    graph = gtsam.NonlinearFactorGraph()
    for item in blocks:
        block = item.block
        a, b, poses = _ends(block, landmark_of_track, n_poses, oriented)
        make = _factor(group, block, poses)
        if make is None:
            raise ValueError(f"no factor of GTSAM equals {block.kind} of {block.components}")
        models = noise_models(item.whiten, item.robust)
        for key_a, key_b, z, model in zip(a, b, _observed(group, block), models, strict=True):
            graph.add(make(key_a, key_b, z, model))
    return graph


def expressible(
    group: Group, block: Block, oriented: Bools | None, landmark_of_track: Ints
) -> bool:
    """Whether :func:`native_graph` has a factor for the block.

    It has: relative poses between bodies themselves (no mounting, no motion to the instant) or to
    a tag; in the plane bearing, range or both, of points and of bodies, and range in space, all
    from the body's origin; fixes (in the plane: antenna at the origin); control points. It has not:
    Cartesian sightings, elevations (GTSAM's bearing in space is a direction with a tangent of its
    own), gravity (GTSAM takes the sine of the tilt).
    """
    return _factor(group, block, _ends(block, landmark_of_track, 0, oriented)[2]) is not None


def native_values(group: Group, state: State, oriented: Bools | None = None) -> gtsam.Values:
    """GTSAM's values of a state; landmarks without a value are left out."""
    values, count = gtsam.Values(), len(state.poses)
    for key, pose in enumerate(_native_poses(group, state.poses)):
        values.insert(key, pose)
    for index, point in enumerate(state.landmarks):
        if np.isnan(point).any():
            continue
        if oriented is not None and oriented[index]:
            assert state.orientations is not None
            tag = group.build(state.orientations[index], point)
            values.insert(count + index, _native_poses(group, tag[None])[0])
        else:
            values.insert(count + index, point)
    return values


def noise_models(whiten: Floats, robust: Any = None) -> list[Any]:
    """One noise model per row (n,), made once for equal rows."""
    if whiten.ndim == 2:
        root = (1.0 / whiten)[:, :, None] * np.eye(whiten.shape[1])
    else:
        # GTSAM wants the upper triangular root of the information (it reads no more than that).
        lower = np.linalg.cholesky(np.swapaxes(whiten, 1, 2) @ whiten)
        root = np.ascontiguousarray(np.swapaxes(lower, 1, 2))
    known: dict[bytes, Any] = {}
    out = []
    for r in root:
        name = r.tobytes()
        model = known.get(name)
        if model is None:
            model = gtsam.noiseModel.Gaussian.SqrtInformation(r)
            if robust is not None:
                model = gtsam.noiseModel.Robust.Create(robust, model)
            known[name] = model
        out.append(model)
    return out


def _ends(
    block: Block, landmark_of_track: Ints, n_poses: int, oriented: Bools | None
) -> tuple[list[int], list[int], bool | None]:
    """Keys of both ends, and whether end b is a pose; None where it is now one, now the other."""
    if block.kind not in ("sighting", "control"):
        return block.a.tolist(), block.b.tolist(), True
    landmark = landmark_of_track[block.b] if block.kind == "sighting" else block.b
    posed = np.zeros(block.n, dtype=bool) if oriented is None else oriented[landmark]
    poses = None if posed.any() and not posed.all() else bool(posed.any())
    return block.a.tolist(), (n_poses + landmark).tolist(), poses


def _observed(group: Group, block: Block) -> Sequence[Any]:
    """What each row observed, in GTSAM's types."""
    if block.components == ("pose",):
        return _native_poses(group, block.obs)
    if block.kind == "fix" and group.dim == 3:
        lever = np.broadcast_to(group.translation(block.frame_a), block.obs.shape)
        return list(zip(block.obs, np.ascontiguousarray(lever), strict=True))
    if block.kind in ("fix", "control"):
        return list(block.obs)
    if block.components == _POLAR:
        angle, distance = block.obs.T.tolist()
        return list(zip(map(gtsam.Rot2.fromAngle, angle), distance, strict=True))
    column = block.obs[:, 0].tolist()
    return list(map(gtsam.Rot2.fromAngle, column)) if "bearing" in block.components[0] else column


def _native_poses(group: Group, poses: Floats) -> list[Any]:
    if group.dim == 2:
        return [gtsam.Pose2(x, y, yaw) for x, y, yaw in poses.tolist()]
    turns = np.ascontiguousarray(group.rotation(poses))
    shifts = np.ascontiguousarray(group.translation(poses))
    return [gtsam.Pose3(gtsam.Rot3(r), t) for r, t in zip(turns, shifts, strict=True)]


def _factor(group: Group, block: Block, poses: bool | None) -> _Make | None:
    """The maker of a block's factors, None where GTSAM has none that is equal."""
    plane = group.dim == 2
    if poses is None:
        return None
    if block.kind == "control":
        prior: Any
        if poses:
            prior = gtsam.PoseTranslationPrior2D if plane else gtsam.PoseTranslationPrior3D
        else:
            prior = gtsam.PriorFactorPoint2 if plane else gtsam.PriorFactorPoint3
        return lambda _, b, z, model: prior(b, z, model)
    if block.kind == "fix":
        if plane:
            fix = gtsam.PoseTranslationPrior2D
            none = not group.translation(block.frame_a).any()
            return (lambda a, _, z, model: fix(a, z, model)) if none else None
        return lambda a, _, z, model: gtsam.GPSFactorArm(a, z[0], z[1], model)
    if not (_is_identity(group, block.frame_a) and _ends_at_body(group, block)):
        return None
    if block.components == ("pose",):
        between = gtsam.BetweenFactorPose2 if plane else gtsam.BetweenFactorPose3
        return between if poses else None
    return _sight(block.components, plane, poses)


def _sight(components: tuple[str, ...], plane: bool, poses: bool) -> _Make | None:
    """Makers for bearing and range."""
    if components == ("range_m",):
        solid = gtsam.RangeFactorPose3 if poses else gtsam.RangeFactor3D
        flat = gtsam.RangeFactorPose2 if poses else gtsam.RangeFactor2D
        return flat if plane else solid
    if not plane:
        return None
    if components == ("bearing_rad",):
        return gtsam.BearingFactorPose2 if poses else gtsam.BearingFactor2D
    if components == _POLAR:
        kind = gtsam.BearingRangeFactorPose2 if poses else gtsam.BearingRangeFactor2D
        return lambda a, b, z, model: kind(a, b, z[0], z[1], model)
    return None


def _ends_at_body(group: Group, block: Block) -> bool:
    """Whether what is seen is the origin (for poses: the frame) of the other end itself."""
    if block.kind == "sighting":
        return True
    if block.components == ("pose",):
        return _is_identity(group, block.frame_b)
    return not group.translation(block.frame_b).any()


def _is_identity(group: Group, pose: Floats) -> bool:
    return bool((pose == group.identity(1)).all())
