"""Joint covariance of any poses and landmarks of a reference, from its stored state.

A stamp t between keyframes i and j takes its error from both and from the odometry between them:

    e(t) = A e_i + B e_j + L(t) g(t),   A = (1 - s) Ad(T^-1 T_i),   B = s Ad(T^-1 T_j),

with s the share of the way. The covariance ``L L'`` of the odometry's part is what the trajectory's
own covariance has beyond ``[A B] Sigma [A B]'``, so that every marginal equals the trajectory's.
Within one interval g is a normalised Brownian bridge, beyond the outer keyframes a random walk:

    Corr(g(s), g(s')) = sqrt(s (1 - s') / (s' (1 - s))),   s <= s'     (bridge)
    Corr(g(t), g(t')) = sqrt(t / t'),                      t <= t'     (walk since the keyframe)

and parts of different intervals are independent. Where the trajectory states other covariances at
its keyframes than the factor gives, the factor gives the correlation and the trajectory the scale.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap import frames
from jointmap.errors import SurveyError
from jointmap.products.interpolate import Poses
from jointmap.trust.solve_pairs import SquareRootFactor

if TYPE_CHECKING:
    from jointmap.products.reference import Reference
    from jointmap.trust.marginals import SelectedInverse

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: What the state of a reference must hold for joint covariances.
NEEDED = (
    "factor_dims", "factor_parent", "factor_key_start", "factor_keys", "factor_frontals",
    "factor_panel_start", "factor_panel", "datum_offset", "datum_component", "datum_motion",
    "datum_cross", "poses", "landmarks", "map_shift", "component", "keyframe_t_s",
    "keyframe_first", "robots", "key_of_landmark", "dims", "track_robot", "track_label",
    "landmark_name",
)  # fmt: skip
#: Pairs for which one column of the covariance matrix is cheaper than a path for each.
COLUMN_PAIRS = 30
#: A stamp this close to a keyframe is the keyframe (float64 epoch seconds resolve 0.24 us).
SLACK_S = 2e-6


@dataclass(frozen=True)
class Located:
    """Stamps of robots, tied to keyframes; see the module's formula.

    Parameters
    ----------
    robot : (m,) int
        Index into the reference's robots.
    t_s : (m,) float
    pose : (m, *pose shape)
        map_T_body as the group keeps it, NaN where the reference has none.
    cov : (m, dof, dof)
        Covariance of the body tangent in the stated datum.
    trust, component : (m,) int
    first, second : (m,) int
        Keys of both keyframes.
    a, b : (m, dof, dof)
    own : (m, dof, dof)
        Covariance of the odometry's own part.
    interval : (m,) int
        Stretch between keyframes; parts of one interval are correlated.
    share : (m,) float
        Share of the way; in walks minus the seconds since the keyframe.
    """

    robot: Ints
    t_s: Floats
    pose: Floats
    cov: Floats
    trust: Ints
    component: Ints
    first: Ints
    second: Ints
    a: Floats
    b: Floats
    own: Floats
    interval: Ints
    share: Floats

    def take(self, index: ArrayLike) -> Located:
        """Some of the stamps."""
        at = np.asarray(index)
        return replace(self, **{name: getattr(self, name)[at] for name in self.__dict__})

    def __len__(self) -> int:
        return len(self.t_s)


@dataclass(frozen=True)
class JointState:
    """The stored state of a reference, ready for questions about joint covariance.

    Made by :meth:`of`; reading the factor costs a few hundredths of a second per million numbers,
    one cross-covariance about the length of two paths to the root of the clique tree
    (:mod:`jointmap.trust.solve_pairs`).

    Parameters
    ----------
    reference : Reference
    factor : SquareRootFactor
    group : Group
    offset, part : (n + 1,), (n,) int
        First scalar and component of every key.
    motion, cross : (N, q)
        The datum, see :mod:`jointmap.trust.datum`.
    poses : (K, *pose shape)
        Keyframes in the map frame.
    scale : (R,) float
        Variance of the trajectory over that of the factor at the keyframes of each robot.
    """

    reference: Reference
    factor: SquareRootFactor
    group: frames.Group
    offset: Ints
    part: Ints
    motion: Floats
    cross: Floats
    poses: Floats
    robots: tuple[str, ...]
    keyframe_t_s: Floats
    keyframe_first: Ints
    landmarks: Mapping[str, int]
    scale: Floats

    @classmethod
    def of(cls, reference: Reference) -> JointState:
        """Read the state of a reference.

        Raises
        ------
        SurveyError
            The reference was written without its state.
        """
        state = reference.state
        missing = [name for name in NEEDED if name not in state]
        if missing:
            raise SurveyError(
                f"the reference holds no {', '.join(missing)} in its state; "
                "write it again with `jointmap fuse`"
            )
        group = frames.group(reference.dimension)
        factor = SquareRootFactor.from_arrays(
            {k.removeprefix("factor_"): v for k, v in state.items() if k.startswith("factor_")}
        )
        shift = np.asarray(state["map_shift"], np.float64)
        part = np.asarray(state["datum_component"], np.int64)
        count = len(state["keyframe_t_s"])
        made = cls(
            reference=reference,
            factor=factor,
            group=group,
            offset=np.asarray(state["datum_offset"], np.int64),
            part=part,
            motion=np.asarray(state["datum_motion"], np.float64),
            cross=np.asarray(state["datum_cross"], np.float64),
            poses=group.compose(shift[part[:count]], state["poses"][:count]),
            robots=tuple(str(r) for r in state["robots"]),
            keyframe_t_s=np.asarray(state["keyframe_t_s"], np.float64),
            keyframe_first=np.asarray(state["keyframe_first"], np.int64),
            landmarks=_landmark_keys(state),
            scale=np.ones(len(state["robots"])),
        )
        return replace(made, scale=made._scales())

    @cached_property
    def inverse(self) -> SelectedInverse:
        """Covariance blocks of all variables that share a clique, computed once."""
        # Imported here: this module of the trust room also knows how to eliminate a graph, and
        # loading that takes longer than most questions.
        from jointmap.trust.marginals import selected_inverse_of

        return selected_inverse_of(self.factor.tree)

    # Stamps ------------------------------------------------------------------------------------

    def locate(self, robot: str | ArrayLike, t_s: ArrayLike) -> Located:
        """Tie stamps to keyframes.

        Parameters
        ----------
        robot : str or (m,) int
            One name, or an index into ``robots`` for every stamp.
        t_s : (m,) float
            Survey time.

        Raises
        ------
        KeyError
            The reference has no such robot.
        """
        stamps = np.atleast_1d(np.asarray(t_s, np.float64))
        if isinstance(robot, str):
            if robot not in self.robots:
                raise KeyError(f"no robot {robot!r} in this reference; it has {self.robots}")
            index = np.full(len(stamps), self.robots.index(robot))
        else:
            index = np.broadcast_to(np.asarray(robot, np.int64), stamps.shape).copy()
        dof = self.group.dof
        pose = np.full((len(stamps), *self.group.shape), np.nan)
        cov = np.full((len(stamps), dof, dof), np.nan)
        trust, component = (np.full(len(stamps), -1, np.int64) for _ in range(2))
        for r in np.unique(index):
            mine = index == r
            found = self.reference.pose_at(self.robots[r], stamps[mine])
            pose[mine] = self.group.from_rows(found.pose)
            cov[mine] = self.group.covariance_from_table(pose[mine], found.cov)
            trust[mine], component[mine] = found.trust, found.component
        return self._tie(index, stamps, pose, cov, trust, component)

    def _tie(
        self, robot: Ints, t_s: Floats, pose: Floats, cov: Floats, trust: Ints, component: Ints
    ) -> Located:
        m, dof, group = len(t_s), self.group.dof, self.group
        first, second, interval = (np.zeros(m, np.int64) for _ in range(3))
        share = np.zeros(m)
        for r in np.unique(robot):
            lo, hi = int(self.keyframe_first[r]), int(self.keyframe_first[r + 1])
            mine = np.flatnonzero(robot == r)
            at, before, after, s = _between(self.keyframe_t_s[lo:hi], t_s[mine])
            first[mine], second[mine], share[mine] = lo + before, lo + after, s
            # One number more per robot than keyframes: the stretch before the first.
            interval[mine] = lo + r + at
        parted = self.part[first] != self.part[second]
        if parted.any():
            # Across a break only the keyframe of the same part carries the stamp.
            near = parted & (share < 0.5)
            second[near] = first[near]
            first[parted & ~near] = second[parted & ~near]
            gap = np.abs(self.keyframe_t_s[first] - t_s)
            share[parted] = -np.maximum(gap[parted], SLACK_S)
        weight = np.clip(share, 0.0, 1.0)[:, None, None]
        a = (1.0 - weight) * group.adjoint(group.between(pose, self.poses[first]))
        b = weight * group.adjoint(group.between(pose, self.poses[second]))
        tied = Located(
            robot, t_s, pose, cov, trust, component, first, second, a, b,
            np.zeros((m, dof, dof)), interval, share,
        )  # fmt: skip
        inside = np.flatnonzero((share != 0.0) & np.isfinite(cov).all(axis=(1, 2)))
        own = tied.own
        if len(inside):
            chosen = tied.take(inside)
            carried = self._carried(chosen, chosen)
            rest = cov[inside] - carried
            # The odometry's noise may not grow with time (an outage, a turn on the spot): where the
            # share of time carries more than the trajectory states, the carried part is shrunk.
            over = np.linalg.eigvalsh(rest)[:, 0] < -1e-9 * np.einsum("nii->n", cov[inside])
            shrink = _root(cov[inside[over]]) @ _root(carried[over], -0.5)
            a[inside[over]] = shrink @ a[inside[over]]
            b[inside[over]] = shrink @ b[inside[over]]
            rest[over] = 0.0
            own[inside] = _positive(rest)
        return replace(tied, own=own)

    # Covariances -------------------------------------------------------------------------------

    def cross_covariance(self, left: Located, right: Located) -> Floats:
        """Cross-covariance (m, dof, dof) of the body tangents of m pairs, stated datum.

        NaN for pairs that no common frame holds.
        """
        out = self._carried(left, right)
        same = (left.interval == right.interval) & (left.share != 0.0) & (right.share != 0.0)
        if same.any():
            one, two = left.take(same), right.take(same)
            rho = _own_correlation(one.share, two.share)
            out[same] += rho[:, None, None] * (_root(one.own) @ np.swapaxes(_root(two.own), 1, 2))
        return out

    def relative_covariance(self, left: Located, right: Located) -> tuple[Floats, Floats]:
        """Relative poses ``T_left^-1 T_right`` (m, *shape) and covariance of their body tangent."""
        between = self.group.between(left.pose, right.pose)
        carry = self.group.adjoint(self.group.inverse(between))
        cross = carry @ self.cross_covariance(left, right)
        cov = right.cov + carry @ left.cov @ np.swapaxes(carry, 1, 2)
        cov = cov - cross - np.swapaxes(cross, 1, 2)
        return between, 0.5 * (cov + np.swapaxes(cov, 1, 2))

    def landmark_cross(self, left: Located, landmarks: ArrayLike) -> Floats:
        """Cross-covariance (m, dof, d) of poses (body tangent) and landmark keys (map axes)."""
        keys = np.asarray(landmarks, np.int64)
        size = self.factor.tree.dims[keys]
        d = self.group.dim
        if np.any(size != d):
            raise KeyError("joint covariance with a tag's orientation is not kept; ask for points")
        out = np.zeros((len(left), self.group.dof, d))
        for key, gain in ((left.first, left.a), (left.second, left.b)):
            out += gain @ self._blocks(key, keys, left.robot)
        return out @ np.swapaxes(self._turn(keys), 1, 2)

    def landmark_pairs(self, i_keys: ArrayLike, j_keys: ArrayLike) -> Floats:
        """Cross-covariance (m, d, d) of landmark positions in map axes, stated datum."""
        i, j = (np.asarray(k, np.int64) for k in (i_keys, j_keys))
        blocks = self._datum(i, j, self.factor.pairs(i, j))
        return self._turn(i) @ blocks @ np.swapaxes(self._turn(j), 1, 2)

    def _turn(self, keys: Ints) -> Floats:
        shift = np.asarray(self.reference.state["map_shift"], np.float64)
        return self.group.rotation(shift[self.part[keys]])

    def _carried(self, left: Located, right: Located) -> Floats:
        """[A B] Sigma [A B]' of pairs."""
        out = np.zeros((len(left), self.group.dof, self.group.dof))
        for key_l, gain_l in ((left.first, left.a), (left.second, left.b)):
            for key_r, gain_r in ((right.first, right.a), (right.second, right.b)):
                used = np.flatnonzero(gain_l.any(axis=(1, 2)) & gain_r.any(axis=(1, 2)))
                if not len(used):
                    continue
                cov = self._key_pairs(key_l[used], key_r[used])
                scale = np.sqrt(self.scale[left.robot[used]] * self.scale[right.robot[used]])
                gain = scale[:, None, None] * gain_l[used]
                out[used] += gain @ cov @ np.swapaxes(gain_r[used], 1, 2)
        apart = self.part[left.first] != self.part[right.first]
        out[apart] = np.nan
        return out

    def _key_pairs(self, i: Ints, j: Ints) -> Floats:
        """Cross-covariance of keyframes in the stated datum, every pair computed once."""
        wide = int(self.offset.size)
        pairs, back = np.unique(i * wide + j, return_inverse=True)
        first, second = pairs // wide, pairs % wide
        out = np.full((len(pairs), self.group.dof, self.group.dof), np.nan)
        joined = self.part[first] == self.part[second]
        if joined.any():
            one, two = first[joined], second[joined]
            made = np.empty((len(one), self.group.dof, self.group.dof))
            near = self.inverse.shares_clique(one, two)
            if near.any():
                made[near] = self.inverse.pairs(one[near], two[near])
            if not near.all():
                made[~near] = self._far_pairs(one[~near], two[~near])
            out[joined] = self._datum(one, two, made)
        return np.asarray(out[back])

    def _far_pairs(self, i: Ints, j: Ints) -> Floats:
        """Cross-covariance of keyframes that share no clique.

        Where one side has few keys, their columns of Sigma come from one solve each, which costs
        less than paths through the tree for every pair.
        """
        flip = len(np.unique(j)) < len(np.unique(i))
        p, q = (j, i) if flip else (i, j)
        few, back = np.unique(p, return_inverse=True)
        if len(few) * COLUMN_PAIRS < len(p):
            dof = self.group.dof
            unit = np.zeros((self.factor.tree.n_scalars, len(few) * dof))
            rows = self.offset[few][:, None] + np.arange(dof)
            unit[rows.ravel(), np.arange(len(few) * dof)] = 1.0
            columns = self.factor.solve(unit).reshape(-1, len(few), dof)
            at = self.offset[q][:, None] + np.arange(dof)
            # Rows of the other key, columns of the few: its transpose is the pair's block.
            far = np.swapaxes(columns[at, back[:, None]], 1, 2)
        else:
            far = self.factor.pairs(p, q)
        return np.asarray(np.swapaxes(far, 1, 2) if flip else far)

    def _blocks(self, keys: Ints, landmarks: Ints, robot: Ints) -> Floats:
        cov = self._datum(keys, landmarks, self.factor.pairs(keys, landmarks))
        return np.sqrt(self.scale[robot])[:, None, None] * cov

    def _datum(self, i: Ints, j: Ints, blocks: Floats) -> Floats:
        u_i, e_i = self._rows(i, blocks.shape[1])
        u_j, e_j = self._rows(j, blocks.shape[2])
        return blocks - u_i @ np.swapaxes(e_j, 1, 2) - e_i @ np.swapaxes(u_j, 1, 2)

    def _rows(self, keys: Ints, dim: int) -> tuple[Floats, Floats]:
        at = self.offset[keys][:, None] + np.arange(dim)
        return self.motion[at], self.cross[at]

    def _scales(self) -> Floats:
        """Ratio of the trajectory's variance at keyframes to the factor's, per robot."""
        out = np.ones(len(self.robots))
        for r, name in enumerate(self.robots):
            lo, hi = int(self.keyframe_first[r]), int(self.keyframe_first[r + 1])
            keys = np.unique(np.linspace(lo, hi - 1, 40).astype(np.int64))
            found = self.reference.pose_at(name, self.keyframe_t_s[keys])
            own = self.group.covariance_from_table(self.group.from_rows(found.pose), found.cov)
            made = self._key_pairs(keys, keys)
            ratio = np.einsum("nii->n", own) / np.einsum("nii->n", made)
            good = np.isfinite(ratio) & (ratio > 0)
            if good.any():
                out[r] = float(np.median(ratio[good]))
        # Rounding through the stored tables is no change of scale.
        return np.where(np.abs(out - 1.0) < 1e-3, 1.0, out)


def relative_poses(joint: JointState, a: tuple[str, ArrayLike], b: tuple[str, ArrayLike]) -> Poses:
    """Relative poses of two robots or of two times; see :meth:`Reference.relative`."""
    t_a, t_b = np.broadcast_arrays(np.asarray(a[1], np.float64), np.asarray(b[1], np.float64))
    left, right = joint.locate(a[0], t_a.ravel()), joint.locate(b[0], t_b.ravel())
    group, n = joint.group, len(left)
    pose = np.full((n, joint.reference.trajectories[a[0]].pose.shape[-1]), np.nan)
    cov = np.full((n, group.dof, group.dof), np.nan)
    known = np.isfinite(left.cov).all(axis=(1, 2)) & np.isfinite(right.cov).all(axis=(1, 2))
    tied = known & (joint.part[left.first] == joint.part[right.first])
    if tied.any():
        between, body = joint.relative_covariance(left.take(tied), right.take(tied))
        pose[tied] = group.to_rows(between)
        cov[tied] = group.covariance_to_table(between, body)
    reason = np.full(n, "", dtype="U100")
    reason[~known] = "one of the two poses is unknown"
    reason[known & ~tied] = "nothing connects the two parts"
    shape = t_a.shape
    return Poses(
        pose.reshape(*shape, pose.shape[-1]),
        cov.reshape(*shape, group.dof, group.dof),
        np.where(tied, np.maximum(left.trust, right.trust), -1).reshape(shape),
        np.where(tied, left.component, -1).reshape(shape),
        reason.reshape(shape),
    )


def joint_covariance(joint: JointState, poses: Located, landmarks: tuple[str, ...]) -> Floats:
    """Joint covariance of poses and landmarks of one component, in table order, stated datum.

    Parameters
    ----------
    poses : Located
        m poses, from :meth:`JointState.locate`.
    landmarks : tuple of str
        n names as in landmarks.csv.

    Returns
    -------
    (m dof + n d, m dof + n d)
        Poses first; metres and radians about the map axes.

    Raises
    ------
    KeyError
        The reference has no such landmark.
    """
    group, m, n = joint.group, len(poses), len(landmarks)
    dof, d = group.dof, group.dim
    keys = np.array([joint.landmarks[name] for name in landmarks], np.int64)
    out = np.empty((m * dof + n * d, m * dof + n * d))
    axes = group.table_axes(poses.pose)
    i, j = (x.ravel() for x in np.meshgrid(np.arange(m), np.arange(m), indexing="ij"))
    if m:
        cross = axes[i] @ joint.cross_covariance(poses.take(i), poses.take(j))
        cross = (cross @ np.swapaxes(axes[j], 1, 2)).reshape(m, m, dof, dof)
        out[: m * dof, : m * dof] = cross.swapaxes(1, 2).reshape(m * dof, m * dof)
    if n:
        p, q = (x.ravel() for x in np.meshgrid(np.arange(n), np.arange(n), indexing="ij"))
        inner = joint.landmark_pairs(keys[p], keys[q]).reshape(n, n, d, d)
        out[m * dof :, m * dof :] = inner.swapaxes(1, 2).reshape(n * d, n * d)
    if m and n:
        i, q = (x.ravel() for x in np.meshgrid(np.arange(m), np.arange(n), indexing="ij"))
        side = (axes[i] @ joint.landmark_cross(poses.take(i), keys[q])).reshape(m, n, dof, d)
        out[: m * dof, m * dof :] = side.swapaxes(1, 2).reshape(m * dof, n * d)
        out[m * dof :, : m * dof] = out[: m * dof, m * dof :].T
    return 0.5 * (out + out.T)


def _landmark_keys(state: Mapping[str, Any]) -> dict[str, int]:
    """Key of every landmark in use, by its name in landmarks.csv."""
    shared = [str(n) for n in state["landmark_name"]]
    robots = [str(r) for r in state["robots"]]
    private = [
        f"{robots[r]}:{label}"
        for r, label in zip(state["track_robot"], state["track_label"], strict=False)
    ]
    keys = np.asarray(state["key_of_landmark"], np.int64)
    names = [*shared, *private][: len(keys)]
    return {n: int(k) for n, k in zip(names, keys, strict=True) if k >= 0}


def _between(keyframes: Floats, t_s: Floats) -> tuple[Ints, Ints, Ints, Floats]:
    """Number of keyframes passed, keyframe before and after, share of the way (or minus seconds)."""
    n = len(keyframes)
    at = np.searchsorted(keyframes, t_s, side="right")
    before, after = np.clip(at - 1, 0, n - 1), np.clip(at, 0, n - 1)
    gap = keyframes[after] - keyframes[before]
    into = t_s - keyframes[before]
    share = np.where(gap > 0, into / np.where(gap > 0, gap, 1.0), -np.abs(into))
    share = np.where(np.abs(into) <= SLACK_S, 0.0, share)
    near = (gap > 0) & (np.abs(keyframes[after] - t_s) <= SLACK_S)
    before, share = np.where(near, after, before), np.where(near, 0.0, share)
    return at, before.astype(np.int64), after.astype(np.int64), share


def own_step(share: Floats, interval: Ints) -> Floats:
    """Correlation (m,) of every stamp's odometry part with the one before, 0 in a new interval."""
    out = np.zeros(len(share))
    same = (np.diff(interval) == 0) & (share[1:] != 0) & (share[:-1] != 0)
    out[1:][same] = _own_correlation(share[:-1][same], share[1:][same])
    return out


def _own_correlation(one: Floats, two: Floats) -> Floats:
    """Correlation of the odometry's parts of one interval; negative numbers are walks."""
    low, high = np.minimum(one, two), np.maximum(one, two)
    walk = low < 0
    safe_low, safe_high = np.where(walk, 0.5, low), np.where(walk, 0.5, high)
    bridge = safe_low * (1.0 - safe_high) / np.maximum(safe_high * (1.0 - safe_low), 1e-300)
    # In a walk low is the longer one, both negative.
    longer, shorter = np.where(walk, low, -1.0), np.where(walk, high, -1.0)
    out = np.where(walk, np.clip(shorter / longer, 0.0, 1.0), np.clip(bridge, 0.0, 1.0))
    return np.asarray(np.sqrt(out))


def _positive(matrices: Floats) -> Floats:
    """Nearest positive semi-definite matrices."""
    values, vectors = np.linalg.eigh(0.5 * (matrices + np.swapaxes(matrices, 1, 2)))
    kept = vectors * np.maximum(values, 0.0)[:, None, :]
    return np.asarray(kept @ np.swapaxes(vectors, 1, 2))


def _root(matrices: Floats, power: float = 0.5) -> Floats:
    """Symmetric power of positive semi-definite matrices; what is zero stays zero."""
    values, vectors = np.linalg.eigh(matrices)
    known = values > 1e-14 * np.maximum(values[:, -1:], 1e-300)
    kept = vectors * np.where(known, np.where(known, values, 1.0) ** power, 0.0)[:, None, :]
    return np.asarray(kept @ np.swapaxes(vectors, 1, 2))
