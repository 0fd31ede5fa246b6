"""True motion: what each robot really does on its route.

The truth is a pose at each instant of a regular grid, and between two instants a constant body
twist, ``T(t) = T_k exp(s log(T_k^-1 T_k+1))``. Odometry in twist form, held until the next row, is
then exactly the truth where nothing disturbs it.

A planar crawler is a unicycle with wheel slip. Each interval it is commanded ``(v, w)`` from its
plan and from its deviation from it and moves on the arc of ``(v, slip, w)``: what its wheels
report lacks the slip to the side, but the driver brings it back to its gallery.
"""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d

from jointmap.frames import group
from jointmap.simulate.plan import Plan
from jointmap.simulate.route import Route, plan_route
from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.streams import Streams
from jointmap.simulate.team import RobotSpec

Floats = NDArray[np.float64]

_GRAVITY = 9.80665
#: Deceleration of a quadrotor by the air per m/s, 1/s.
_DRAG = 0.5
#: Height of a crawler's body frame above the floor, metres.
_CRAWLER_HEIGHT_M = 0.25
#: Gains that bring a crawler back to its plan: 1/s, 1/m^2, 1/m.
_GAIN_ALONG, _GAIN_ACROSS, _GAIN_HEADING = 0.5, 1.0, 1.6


@dataclass(frozen=True)
class Motion:
    """True motion of one robot in the world.

    ``t_s`` (n,) survey time, ``pose`` (n, 3) or (n, 3, 4) world_T_body, ``dimension`` 2 or 3.
    """

    dimension: int
    t_s: Floats
    pose: Floats

    def at(self, t_s: Floats) -> Floats:
        """Pose at any instants (m,) within the motion."""
        i = np.clip(np.searchsorted(self.t_s, t_s, side="right") - 1, 0, len(self.t_s) - 2)
        share = (t_s - self.t_s[i]) / (self.t_s[i + 1] - self.t_s[i])
        space = group(self.dimension)
        return space.interpolate(self.pose[i], self.pose[i + 1], np.clip(share, 0.0, 1.0))

    def twist(self) -> Floats:
        """Body twist of each interval (n - 1, dof), tangent order of the group."""
        space = group(self.dimension)
        steps = space.local(self.pose[:-1], self.pose[1:])
        return np.asarray(steps / np.diff(self.t_s)[:, None], dtype=np.float64)


def move(
    plan: Plan, robot: RobotSpec, index: int, settings: SimulationSettings, streams: Streams
) -> Motion:
    """Plan and carry out the motion of one robot.

    Parameters
    ----------
    index : int
        Number of the robot in the team; neighbours start at neighbouring crossings.
    """
    start, stop = working_time(robot.name, settings)
    rng = streams.get("route", robot.name)
    t = np.arange(int((stop - start) * settings.odometry_rate_hz) + 1) / settings.odometry_rate_hz
    crossing = index % len(plan.nodes)
    route = plan_route(plan, robot.limits, float(t[-1]) + 10.0, rng, crossing)
    t = t[t <= route.arrive[-1]]
    wobble = streams.get("wobble", robot.name)
    if robot.kind == "crawler" and plan.dimension == 2:
        pose = _drive(plan, route, t, robot, streams.get("slip", robot.name))
    elif robot.kind == "crawler":
        pose = _climb(plan, route, t, wobble)
    else:
        pose = _fly(plan, route, t, wobble)
    return Motion(plan.dimension, start + t, pose)


def working_time(name: str, settings: SimulationSettings) -> tuple[float, float]:
    """First and last instant of a robot's motion: late robots start, lost ones may stop."""
    start, stop = settings.start_s, settings.start_s + settings.duration_s
    if name in settings.lost and settings.lost_mode == "all":
        stop = start + settings.duration_s / 2
    if name in settings.late:
        start += settings.duration_s / 3
    return start, stop


def _smooth_noise(n: int, width: float, rng: np.random.Generator) -> Floats:
    """Normal noise (n,) of unit standard deviation, smooth over ``width`` samples."""
    smooth = gaussian_filter1d(rng.normal(size=n), width, mode="wrap")
    # a Gaussian kernel of width w leaves the variance 1 / (2 sqrt(pi) w) of white noise
    return np.asarray(smooth * np.sqrt(2 * np.sqrt(np.pi) * width), dtype=np.float64)


def _drive(
    plan: Plan, route: Route, t: Floats, robot: RobotSpec, rng: np.random.Generator
) -> Floats:
    """Planar crawler (n, 3): follows the plan by unicycle commands, with slip to the side."""
    uv, s, heading = route.at(t)
    xy = plan.warp(uv)
    dt = np.diff(t)
    moved = np.maximum(np.diff(s), 0.0)
    noise = robot.odometry_noise
    spread = np.sqrt(noise["translation_per_sqrt_m"] ** 2 * moved)
    slip = spread * rng.normal(size=len(dt))
    return np.asarray(_follow(xy, heading, moved, np.diff(heading), slip, dt), dtype=np.float64)


@numba.njit(cache=True)  # type: ignore[untyped-decorator]
def _follow(
    xy: Floats, heading: Floats, moved: Floats, turned: Floats, slip: Floats, dt: Floats
) -> Floats:
    """Closed loop of plan, unicycle and slip; exact arcs of each interval's displacement.

    ``moved``, ``turned`` and ``slip`` (n - 1,) are planned metres ahead, planned radians and true
    metres to the side of each interval.
    """
    pose = np.empty((len(xy), 3))
    pose[0, :2], pose[0, 2] = xy[0], heading[0]
    for k in range(len(dt)):
        yaw = pose[k, 2]
        c, s = np.cos(yaw), np.sin(yaw)
        gap_x, gap_y = xy[k, 0] - pose[k, 0], xy[k, 1] - pose[k, 1]
        ahead, left = c * gap_x + s * gap_y, c * gap_y - s * gap_x
        # corrections only while moving: a robot that stands still stands still
        a = moved[k] + min(_GAIN_ALONG * dt[k], 1.0) * ahead * min(1.0, 10.0 * moved[k])
        w = turned[k] + moved[k] * (_GAIN_ACROSS * left + _GAIN_HEADING * (heading[k] - yaw))
        # displacement on the arc: V(w) (a, slip), the exponential of SE(2)
        if abs(w) < 1e-6:
            along, across = 1.0 - w * w / 6.0, 0.5 * w
        else:
            along, across = np.sin(w) / w, (1.0 - np.cos(w)) / w
        x, y = along * a - across * slip[k], across * a + along * slip[k]
        pose[k + 1, 0] = pose[k, 0] + c * x - s * y
        pose[k + 1, 1] = pose[k, 1] + s * x + c * y
        pose[k + 1, 2] = yaw + w
    return pose


def _climb(plan: Plan, route: Route, t: Floats, rng: np.random.Generator) -> Floats:
    """Crawler on benches and ramps (n, 3, 4): tilted by the floor and by its roughness."""
    uv, s, yaw = route.at(t)
    ahead = np.stack([np.cos(yaw), np.sin(yaw)], axis=1)
    left = np.stack([-ahead[:, 1], ahead[:, 0]], axis=1)
    climb, bank = (_slope(plan, uv, way) for way in (ahead, left))
    # roughness belongs to the place: it is a function of the metres travelled
    where = np.arange(int(s[-1] / 0.1) + 2) * 0.1
    rough = [np.interp(s, where, _smooth_noise(len(where), 5.0, rng)) for _ in range(2)]
    rotation = _rotation(
        yaw, -np.arctan(climb) + 0.02 * rough[0], np.arctan(bank) + 0.025 * rough[1]
    )
    place = np.column_stack([plan.warp(uv), plan.floor(uv) + _CRAWLER_HEIGHT_M])
    return group(3).build(rotation, place)


def _slope(plan: Plan, uv: Floats, way: Floats) -> Floats:
    """Rise of the floor per metre (n,) in world directions ``way`` (n, 2)."""
    h = 0.05
    across = [(plan.warp(uv + d) - plan.warp(uv - d)) / (2 * h) for d in h * np.eye(2)]
    # world direction -> plan direction through the inverse Jacobian of the bending map
    step = np.linalg.solve(np.stack(across, axis=-1), way[:, :, None])[:, :, 0]
    rise = plan.floor(uv + h * step) - plan.floor(uv - h * step)
    return np.asarray(rise / (2 * h), dtype=np.float64)


def _rotation(yaw: Floats, pitch: Floats, roll: Floats) -> Floats:
    """Rz(yaw) Ry(pitch) Rx(roll), (n, 3, 3)."""
    (cy, cp, cr), (sy, sp, sr) = ((f(yaw), f(pitch), f(roll)) for f in (np.cos, np.sin))
    rows = [
        [cy * cp, cy * sp * sr - sy * cr, cy * sp * cr + sy * sr],
        [sy * cp, sy * sp * sr + cy * cr, sy * sp * cr - cy * sr],
        [-sp, cp * sr, cp * cr],
    ]
    return np.moveaxis(np.array(rows), -1, 0)


def _fly(plan: Plan, route: Route, t: Floats, rng: np.random.Generator) -> Floats:
    """Quadrotor: (n, 3) in the plane, (n, 3, 4) with the tilt that its acceleration needs."""
    uv, _, yaw = route.at(t)
    rate = 1.0 / float(np.median(np.diff(t)))
    n = len(t)
    look = yaw + 0.25 * _smooth_noise(n, 6.0 * rate, rng)
    look = gaussian_filter1d(look, 0.5 * rate, mode="nearest")
    sway = np.stack([_smooth_noise(n, 1.2 * rate, rng) for _ in range(2)], axis=1)
    height = 1.5 + 0.3 * _smooth_noise(n, 5.0 * rate, rng)
    xy = gaussian_filter1d(plan.warp(uv), 0.4 * rate, axis=0, mode="nearest") + 0.06 * sway
    if plan.dimension == 2:
        return np.column_stack([xy, look])
    z = gaussian_filter1d(plan.floor(uv), 0.6 * rate, mode="nearest") + np.clip(height, 0.6, 2.4)
    place = np.column_stack([xy, z])
    speed = np.gradient(place, t, axis=0)
    push = np.gradient(speed, t, axis=0) + _DRAG * speed + np.array([0.0, 0.0, _GRAVITY])
    # thrust along body z; heading fixes the rest
    c, s = np.cos(look), np.sin(look)
    roll_axis = c * push[:, 0] + s * push[:, 1], c * push[:, 1] - s * push[:, 0]
    pitch = np.arctan2(roll_axis[0], push[:, 2])
    roll = -np.arctan2(roll_axis[1], np.hypot(roll_axis[0], push[:, 2]))
    return group(3).build(_rotation(look, pitch, roll), place)
