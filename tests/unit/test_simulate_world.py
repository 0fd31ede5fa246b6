"""The quarry: walls close, robots stay inside, and what is behind a wall is not seen."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest
from matplotlib.path import Path as Outline

from jointmap.frames import group
from jointmap.simulate import Simulation, SimulationSettings, build
from jointmap.simulate.motion import working_time
from jointmap.simulate.plan import hang_plates, make_plan
from jointmap.simulate.visibility import blocked


@pytest.fixture(scope="module", params=["quarry-2d", "quarry-3d"])
def world(request: pytest.FixtureRequest) -> Simulation:
    settings = SimulationSettings(duration_s=400.0, landmarks=60, sensors=2)
    return build(request.param, settings, 21)


def places(simulation: Simulation, name: str) -> np.ndarray:
    """True positions of a robot in plan."""
    pose = simulation.motions[name].pose
    return np.asarray(group(simulation.dimension).translation(pose)[:, :2])


def inside(simulation: Simulation, points: np.ndarray) -> np.ndarray:
    """Points in the galleries, by the even-odd rule on every wall: crossings of a ray."""
    walls = simulation.plan.walls()
    a, b = walls[:, 0], walls[:, 1]
    odd = np.zeros(len(points), dtype=bool)
    for p, q in zip(a, b, strict=True):
        spans = (p[1] > points[:, 1]) != (q[1] > points[:, 1])
        with np.errstate(divide="ignore", invalid="ignore"):
            x = p[0] + (points[:, 1] - p[1]) / (q[1] - p[1]) * (q[0] - p[0])
        odd ^= spans & (points[:, 0] < x)
    return odd


def test_walls_are_closed(world: Simulation) -> None:
    walls = np.round(world.plan.walls(), 9)
    starts = Counter(map(tuple, walls[:, 0]))
    ends = Counter(map(tuple, walls[:, 1]))
    assert starts == ends
    assert set(starts.values()) == {1}


def test_robots_stay_in_the_galleries(world: Simulation) -> None:
    for robot in world.team:
        assert inside(world, places(world, robot.name)).all()
    centre = world.plan.warp(world.plan.nodes.mean(axis=0) + np.array([500.0, 0.0]))
    assert not inside(world, centre[None]).any()


def test_plates_hang_on_walls_and_face_the_gallery(world: Simulation) -> None:
    plates = world.plates
    ahead = np.stack([np.cos(plates.yaw), np.sin(plates.yaw)], axis=1)
    at = plates.position[:, :2]
    assert inside(world, at + 0.05 * ahead).all()
    assert not inside(world, at - 0.15 * ahead).any()
    assert len(set(plates.names)) == 60 and plates.names[16] == "plate-017"
    gaps = np.linalg.norm(np.diff(at, axis=0), axis=1)
    assert np.std(gaps) > 0.2 * np.mean(gaps)


def test_no_sighting_passes_a_wall_and_walls_do_hide(world: Simulation) -> None:
    walls = [Outline(w) for w in world.plan.walls()]
    space = group(world.dimension)
    hidden_somewhere = 0
    for robot in world.team[:2]:
        seen = world.sightings[robot.name]
        pick = np.random.default_rng(0).permutation(len(seen.log_s))[:60]
        eye = space.translation(world.motions[robot.name].at(seen.log_s[pick]))
        mount = np.array([space.translation(s.mount) for s in robot.sensors])[seen.sensor[pick]]
        eye = space.transform(world.motions[robot.name].at(seen.log_s[pick]), mount)[:, :2]
        for p, q in zip(eye, world.plates.position[seen.target[pick], :2], strict=True):
            sight = Outline([p, q])
            assert not any(sight.intersects_path(w, filled=False) for w in walls)
        # every plate within reach, whatever hides it, against an independent crossing test
        q = world.plates.position[:, :2]
        pairs = [(e, x) for e in eye[:12] for x in q if np.linalg.norm(e - x) < 9.0]
        sights = np.array(pairs)
        got = blocked(sights[:, 0], sights[:, 1], world.plan.walls(), 9.0)
        expected = [any(Outline(s).intersects_path(w, filled=False) for w in walls) for s in sights]
        assert got.tolist() == expected
        hidden_somewhere += int(got.sum())
    assert hidden_somewhere > 10


def test_one_wall_blocks_one_sight_line() -> None:
    wall = np.array([[[1.0, -1.0], [1.0, 1.0]]])
    eye = np.zeros((4, 2))
    point = np.array([[2.0, 0.0], [0.9, 0.0], [2.0, 3.0], [-2.0, 0.0]])
    assert blocked(eye, point, wall, 9.0).tolist() == [True, False, False, False]
    assert blocked(eye, point, wall[:0], 9.0).tolist() == [False] * 4


def test_visits_overlap_and_fields_of_view_hold(world: Simulation) -> None:
    visitors = np.zeros(60, dtype=int)
    for seen in world.sightings.values():
        visitors[np.unique(seen.target)] += 1
    assert np.mean(visitors >= 2) > 0.8
    for robot in world.team:
        seen = world.sightings[robot.name]
        if "range_m" in seen.values:
            assert np.nanmax(seen.values["range_m"]) < 9.0 + 0.6
        assert np.nanmax(np.abs(seen.values["bearing_rad"])) < 1.1 + 0.1


def test_motion_is_realistic(world: Simulation) -> None:
    for robot in world.team:
        twist = world.motions[robot.name].twist()
        shift = twist[:, :2] if world.dimension == 2 else twist[:, 3:]
        turn = twist[:, 2]
        speed = np.linalg.norm(shift, axis=1)
        assert speed.max() < 1.35 * robot.limits.speed
        assert np.abs(turn).max() < 2.0
        assert np.mean(speed < 0.1) > 0.005  # it stops now and then
        assert np.ptp(speed) > 0.4
        if robot.kind == "crawler":
            assert np.abs(shift[:, 0]).mean() > 10 * np.abs(shift[:, 1]).mean()
    if world.dimension == 3:
        up = [world.motions[n].pose[:, 2, 2] for n in ("heron", "swift")]
        assert all(np.arccos(u).max() > 0.1 for u in up)
        heights = world.motions["heron"].pose[:, 2, 3]
        assert np.ptp(heights) > 1.9  # at least one ramp


def test_crawlers_in_the_plane_are_unicycles() -> None:
    settings = SimulationSettings.preset("none", duration_s=300.0)
    twist = build("quarry-2d", settings, 2).motions["otter"].twist()
    assert np.abs(twist[:, 1]).max() < 1e-9


def test_lost_and_late_robots() -> None:
    settings = SimulationSettings(duration_s=300.0, landmarks=30, lost=("vole",), late=("otter",))
    s = build("quarry-2d", settings, 2)
    start = settings.start_s
    assert s.sightings["vole"].log_s.max() <= start + 150.0
    assert s.odometry["vole"].log_s[-1] == pytest.approx(start + 300.0)
    assert s.odometry["otter"].log_s[0] == pytest.approx(start + 100.0)
    ended = SimulationSettings(duration_s=300.0, lost=("vole",), lost_mode="all")
    assert working_time("vole", ended) == (start, start + 150.0)
    assert build("quarry-2d", ended, 2).odometry["vole"].log_s[-1] <= start + 150.0


@pytest.mark.parametrize("landmarks", [4, 40, 700])
@pytest.mark.parametrize("dimension", [2, 3])
def test_every_size_of_world(landmarks: int, dimension: int) -> None:
    for seed in range(5):
        rng = np.random.default_rng(seed)
        plan = make_plan(dimension, landmarks, rng)
        plates = hang_plates(plan, landmarks, 0.5, rng)
        assert plates.position.shape == (landmarks, dimension)
        assert plates.tag.sum() == round(0.5 * landmarks)
        # all crossings hang together: count by union of edges
        reached = {0}
        for _ in range(len(plan.nodes)):
            reached |= {int(n) for e in plan.edges for n in e if set(e.tolist()) & reached}
        assert len(reached) == len(plan.nodes)
