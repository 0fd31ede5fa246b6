"""Routes through the galleries: where a robot goes, how fast, where it stops and turns.

A route is a walk over the crossings of the plan, rounded at corners. Its speed obeys limits of
speed, lateral acceleration, turn rate and acceleration. With squared speed ``q(s)`` the last is
``|dq/ds| <= 2 a``; the fastest admissible profile below a cap is the lower envelope
``q(s) = min_s' (cap(s') + 2 a |s - s'|)``, two running minima. Between samples ``q`` is linear in
``s``: constant acceleration.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d

from jointmap.simulate.plan import Plan

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Spacing of the samples along a route, metres.
SAMPLE_M = 0.08
#: Standard deviation of the rounding of corners, metres.
ROUNDING_M = 0.7
#: Turn rate on the spot at which the time for a turn is counted, rad/s.
SPOT_RATE = 0.6


@dataclass(frozen=True)
class Limits:
    """What a kind of robot can do: m/s, m/s^2, m/s^2 sideways, rad/s, and turns about on the spot."""

    speed: float
    acceleration: float
    lateral: float
    rate: float


@dataclass(frozen=True)
class Route:
    """A timed route, by samples; see :meth:`at`.

    ``uv`` (n, 2) plan coordinates; ``s`` (n,) metres along the route; ``heading`` (n,) rad,
    without jumps; ``arrive`` and ``depart`` (n,) seconds from the start; ``speed`` (n,) m/s;
    ``turn`` (n,) rad turned on the spot while waiting at a sample.
    """

    uv: Floats
    s: Floats
    heading: Floats
    arrive: Floats
    depart: Floats
    speed: Floats
    turn: Floats

    def at(self, t: Floats) -> tuple[Floats, Floats, Floats]:
        """Plan coordinates (n, 2), metres along the route and heading at seconds ``t`` (n,)."""
        i = np.clip(np.searchsorted(self.arrive, t, side="right") - 1, 0, len(self.s) - 2)
        span = self.arrive[i + 1] - self.depart[i]
        tau = np.clip(t - self.depart[i], 0.0, np.maximum(span, 0.0))
        gain = (self.speed[i + 1] - self.speed[i]) / np.maximum(span, 1e-9)
        s = np.minimum(self.s[i] + self.speed[i] * tau + 0.5 * gain * tau**2, self.s[i + 1])
        wait = np.maximum(self.depart[i] - self.arrive[i], 1e-9)
        part = np.clip((t - self.arrive[i]) / wait, 0.0, 1.0)
        turned = np.cumsum(self.turn)[i] - self.turn[i] * (1 - part**2 * (3 - 2 * part))
        step = np.maximum(self.s[i + 1] - self.s[i], 1e-12)
        share = ((s - self.s[i]) / step)[:, None]
        uv = self.uv[i] + share * (self.uv[i + 1] - self.uv[i])
        heading = self.heading[i] + share[:, 0] * (self.heading[i + 1] - self.heading[i])
        return uv, s, heading + turned


def plan_route(
    plan: Plan, limits: Limits, duration_s: float, rng: np.random.Generator, start: int
) -> Route:
    """Plan a route of at least the given duration.

    Parameters
    ----------
    start : int
        Crossing to start from.
    """
    walk = _walk(plan, start, 1.15 * limits.speed * duration_s + 30.0, rng)
    uv, first = _curve(plan, walk, rng)
    xy = plan.warp(uv)
    step = np.linalg.norm(np.diff(xy, axis=0), axis=1)
    step[first[1:] - 1] = 0.0
    s = np.concatenate([[0.0], np.cumsum(step)])
    heading, turn, curvature = _headings(xy, s, first)
    cap = _speed_cap(s, curvature, limits, rng)
    waits = np.zeros(len(s))
    stops = rng.choice(len(s), max(1, int(s[-1] / 45.0)), replace=False)
    waits[stops] = rng.uniform(2.0, 12.0, len(stops))
    waits[first[1:]] = np.abs(turn[first[1:]]) / SPOT_RATE * 1.5 + rng.uniform(0.5, 2.0)
    cap[stops] = 0.0
    cap[first] = cap[np.concatenate([first[1:] - 1, [len(s) - 1]])] = 0.0
    speed = _envelope(cap, s, limits.acceleration)
    mean = 0.5 * (speed[1:] + speed[:-1])
    travel = np.where(step > 0, step / np.maximum(mean, 1e-6), 0.0)
    arrive = np.concatenate([[0.0], np.cumsum(travel + waits[:-1])])
    return Route(uv, s, heading, arrive, arrive + waits, speed, turn)


def _walk(plan: Plan, start: int, length: float, rng: np.random.Generator) -> list[int]:
    """Crossings in order: a walk that prefers galleries it has used least."""
    near: list[list[int]] = [[] for _ in plan.nodes]
    for a, b in plan.edges.tolist():
        near[a].append(b)
        near[b].append(a)
    used: dict[tuple[int, int], int] = {}
    walk = [start]
    left = length
    chance = iter(rng.random((int(length / 4.0) + 10, 2)).tolist())
    while left > 0:
        here = walk[-1]
        luck, about = next(chance)
        options = near[here]
        if len(walk) > 1 and len(options) > 1 and about > 0.06:
            options = [n for n in options if n != walk[-2]]
        uses = [used.get((min(here, n), max(here, n)), 0) for n in options]
        best = [n for n, k in zip(options, uses, strict=True) if k == min(uses)]
        there = best[int(luck * len(best))]
        key = (min(here, there), max(here, there))
        used[key] = used.get(key, 0) + 1
        walk.append(there)
        left -= float(np.linalg.norm(plan.nodes[there] - plan.nodes[here]))
    return walk


def _curve(plan: Plan, walk: list[int], rng: np.random.Generator) -> tuple[Floats, Ints]:
    """Rounded path (n, 2) in plan coordinates, and the first sample of each leg.

    Legs end where the robot turns about; the next one starts at the same point.
    """
    at = np.array(walk)
    about = [k for k in range(1, len(walk) - 1) if walk[k - 1] == walk[k + 1]]
    points = plan.nodes[at] + rng.uniform(-0.5, 0.5, (len(at), 2))
    middle = 0.5 * (points[1:] + points[:-1]) + rng.uniform(-0.35, 0.35, (len(at) - 1, 2))
    way = np.empty((2 * len(at) - 1, 2))
    way[0::2], way[1::2] = points, middle
    legs: list[Floats] = []
    bounds = [0, *about, len(walk) - 1]
    for a, b in pairwise(bounds):
        corner = way[2 * a : 2 * b + 1]
        if legs:
            corner = np.concatenate([legs[-1][-1:], corner[1:]])
        along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(corner, axis=0), axis=1))])
        where = np.linspace(0.0, along[-1], int(along[-1] / SAMPLE_M) + 2)
        line = np.stack([np.interp(where, along, corner[:, k]) for k in (0, 1)], axis=1)
        smooth = gaussian_filter1d(line, ROUNDING_M / SAMPLE_M, axis=0, mode="nearest")
        if legs:
            smooth += (legs[-1][-1] - smooth[0]) * np.exp(-where / 2.0)[:, None]
        legs.append(smooth)
    first = np.cumsum([0] + [len(leg) for leg in legs[:-1]])
    return np.concatenate(legs), first


def _headings(xy: Floats, s: Floats, first: Ints) -> tuple[Floats, Floats, Floats]:
    """Heading without jumps, turn on the spot at each sample, and curvature along the path."""
    heading, turn, curvature = np.empty(len(s)), np.zeros(len(s)), np.empty(len(s))
    stops = [*first[1:].tolist(), len(s)]
    last = 0.0
    for k, (a, b) in enumerate(zip(first.tolist(), stops, strict=True)):
        ahead = np.gradient(xy[a:b], axis=0)
        leg = np.unwrap(np.arctan2(ahead[:, 1], ahead[:, 0]))
        curvature[a:b] = np.gradient(leg) / np.maximum(np.linalg.norm(ahead, axis=1), 1e-6)
        if k:
            turn[a] = np.angle(np.exp(1j * (leg[0] - heading[a - 1] - last)))
            leg = leg - leg[0] + heading[a - 1]
            last += turn[a]
        heading[a:b] = leg
    return heading, turn, curvature


def _speed_cap(s: Floats, curvature: Floats, limits: Limits, rng: np.random.Generator) -> Floats:
    """Squared speed that limits of speed, lateral acceleration and turn rate allow, (n,)."""
    pieces = max(2, int(s[-1] / 9.0))
    cruise = limits.speed * rng.uniform(0.5, 1.0, pieces)
    speed = cruise[np.minimum((s / (s[-1] + 1e-9) * pieces).astype(int), pieces - 1)]
    bend = np.maximum(np.abs(curvature), 1e-6)
    cap = np.minimum(limits.lateral / bend, (limits.rate / bend) ** 2)
    return np.asarray(np.minimum(speed**2, cap), dtype=np.float64)


def _envelope(cap: Floats, s: Floats, acceleration: float) -> Floats:
    """Fastest speed (n,) below a cap of squared speed with bounded acceleration."""
    slope = 2 * acceleration * s
    ahead = np.minimum.accumulate(cap - slope) + slope
    back = np.minimum.accumulate((ahead + slope)[::-1])[::-1] - slope
    return np.sqrt(np.maximum(back, 0.0))
