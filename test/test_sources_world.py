"""World files, the robot's path and its odometry."""

import copy
import math

import numpy as np
import pytest
import yaml
from echo_data import ROOT

from ros_echo_perception.core.errors import FileFormatError
from ros_echo_perception.core.types import Pose2
from ros_echo_perception.sources.robot_path import (
    RobotPath,
    Waypoint,
    drifting_odometry,
    load_path,
    path_from_mapping,
)
from ros_echo_perception.sources.world import Round, Surface, World, load_world, world_from_mapping

DEMO = ROOT / "config" / "worlds" / "demo_room.yaml"


@pytest.fixture(scope="module")
def demo():
    return yaml.safe_load(DEMO.read_text())


def distance_to_surfaces(world, x_m, y_m):
    point = np.array([x_m, y_m])
    along = np.clip(np.sum((point - world.starts) * world.directions, 1), 0.0, world.lengths)
    nearest = world.starts + along[:, None] * world.directions
    rounds = np.hypot(*(world.centres - point).T) - world.radii
    return min(np.hypot(*(nearest - point).T).min(), rounds.min())


def test_demo_room_has_what_it_promises():
    world = load_world(DEMO)
    assert {s.kind for s in world.surfaces} == {"wall", "glass", "box"}
    assert len(world.rounds) >= 3
    x0, y0, x1, y1 = world.bounds_m
    assert (x0, y0) == (0.0, 0.0)
    assert x1 == pytest.approx(6.4)
    assert y1 == pytest.approx(6.3)


def test_robot_in_the_demo_room_touches_nothing_and_is_smooth():
    world, path = load_world(DEMO), load_path(DEMO)
    assert 55.0 < path.duration_s < 75.0
    clearance = [distance_to_surfaces(world, x, y) for x, y, _ in path.poses[::20]]
    assert min(clearance) > 0.25
    assert np.max(path.speeds[:, 0]) <= 0.5
    assert np.max(np.abs(np.diff(path.speeds, axis=0))) < 0.02
    # The middle of the way lies in open sight of its neighbours: never through a wall.
    middle = path.poses[::40, :2]
    assert np.all(world.sight(middle[:-1], middle[1:]))


def test_sight_against_sampling():
    rng = np.random.default_rng(8)
    world = load_world(DEMO)
    eye, target = rng.uniform(0.3, 4.5, (2, 200, 2))
    free = world.sight(eye, target)
    steps = np.linspace(0.0, 1.0, 1500)[:, None]
    for start, end, seen in zip(eye[:60], target[:60], free[:60], strict=True):
        way = start + steps * (end - start)
        gaps = [distance_to_surfaces(world, x, y) for x, y in way[5:-5:3]]
        if seen:
            assert min(gaps) > 1e-6
        elif math.dist(start, end) > 0.2:
            assert min(gaps) < 0.02


def test_sight_from_both_sides_and_at_surfaces():
    wall = World("w", (Surface("a", "wall", (1.0, -1.0), (1.0, 1.0)),), ())
    eye = np.zeros((3, 2))
    target = np.array([[2.0, 0.0], [1.0, 0.0], [2.0, 2.5]])
    assert wall.sight(eye, target).tolist() == [False, True, True]
    assert wall.sight(target, eye).tolist() == [False, True, True]
    pole = World("p", (), (Round("a", "pole", (1.0, 0.0), 0.1),))
    target = np.array([[0.9, 0.0], [2.0, 0.0], [2.0, 0.3]])
    assert pole.sight(eye, target).tolist() == [True, False, True]


def test_vertices_join_surfaces_that_meet():
    data = {"name": "l", "surfaces": [
        {"id": "l", "kind": "wall", "points_m": [[0, 0], [1, 0], [1, 1]]}]}  # fmt: skip
    vertices = world_from_mapping(data).vertices
    assert len(vertices) == 3
    (joint,) = [v for v in vertices if v.along_second is not None]
    assert joint.position_m == (1.0, 0.0)
    assert {joint.along_first, joint.along_second} == {(-1.0, 0.0), (0.0, 1.0)}


DELETE = object()


@pytest.mark.parametrize(
    ("where", "value", "message"),
    [
        (("name",), DELETE, "name is 'missing'"),
        (("walls",), [], "walls is []; allowed: only name, surfaces"),
        (("surfaces", 0, "kind"), "brick", "surfaces[0].kind is 'brick'; allowed: one of wall"),
        (("surfaces", 0, "points_m"), [[0, 0]], "surfaces[0].points_m is [[0, 0]]"),
        (("surfaces", 0, "points_m"), [[0, 0], [0, math.nan]], "points_m is [0, nan]"),
        (("surfaces", 0, "points_m"), [[0, 0], [0, 0]], "at least 0.01 m apart"),
        (("surfaces", 0, "id"), "glass_front", "id is 'glass_front/0'; allowed: an id used only"),
        (("boxes", 0, "size_m"), [0.5, 0.0], "boxes[0].size_m is [0.5, 0.0]"),
        (("poles", 0, "radius_m"), -1.0, "poles[0].radius_m is -1.0"),
        (("poles",), {"a": 1}, "poles is {'a': 1}"),
        (("poles", 0, "color"), "red", "poles[0].color is 'red'"),
        (("path",), DELETE, "path is 'missing'"),
        (("path", "start"), [0, 0], "path.start is [0, 0]"),
        (("path", "waypoints"), [], "path.waypoints is []"),
        (("path", "waypoints", 0), {}, "path.waypoints[0].waypoint is {}"),
        (("path", "waypoints", 0), {"go": 1}, "path.waypoints[0].go is 1"),
        (("path", "speed_m_s"), 0.0, "path.speed_m_s is 0.0"),
    ],
)
def test_malformed_worlds(demo, where, value, message):
    data = copy.deepcopy(demo)
    section = data
    for name in where[:-1]:
        section = section[name]
    if value is DELETE:
        del section[where[-1]]
    else:
        section[where[-1]] = value
    read = path_from_mapping if where[0] == "path" else world_from_mapping
    with pytest.raises(FileFormatError) as error:
        read(data, "room.yaml")
    assert message in str(error.value)
    assert "room.yaml" in str(error.value)


def test_path_reaches_its_waypoints_and_stops():
    path = RobotPath.along(
        Pose2(), (Waypoint(2.0, 1.0), Waypoint(yaw_rad=1.5), Waypoint(wait_s=1.0)), 0.5, 1.0
    )
    assert np.min(np.hypot(path.poses[:, 0] - 2.0, path.poses[:, 1] - 1.0)) < 0.1
    assert path.pose(1e9).yaw_rad == pytest.approx(1.5, abs=0.05)
    assert path.velocity(path.duration_s - 0.5) == (0.0, 0.0)
    assert path.pose(-1.0) == path.pose(0.0) == Pose2()


def test_unreachable_waypoint_is_refused(monkeypatch):
    monkeypatch.setattr("ros_echo_perception.sources.robot_path.MAX_DURATION_S", 30.0)
    with pytest.raises(FileFormatError, match="waypoint 0 is"):
        RobotPath.along(Pose2(), (Waypoint(900.0, 900.0),), 0.05, 0.1)


def test_velocity_is_the_derivative_of_the_pose():
    path = load_path(DEMO)
    for time_s in np.linspace(0.5, path.duration_s - 0.5, 50):
        before, after = path.pose(time_s - 0.005), path.pose(time_s + 0.005)
        forward, turn = path.velocity(time_s)
        way = math.hypot(after.x_m - before.x_m, after.y_m - before.y_m)
        assert way / 0.01 == pytest.approx(forward, abs=0.01)
        assert math.remainder(after.yaw_rad - before.yaw_rad, 2 * math.pi) / 0.01 == pytest.approx(
            turn, abs=0.03
        )


def test_odometry_without_errors_is_the_path_seen_from_its_start():
    path = load_path(DEMO)
    odometry = drifting_odometry(path, seed=1, error_scale=0.0)
    assert odometry[0].pose == Pose2()
    for sample in odometry[::100]:
        true = path.start.inverse().compose(path.pose(sample.time_s))
        assert sample.pose.x_m == pytest.approx(true.x_m, abs=2e-3)
        assert sample.pose.y_m == pytest.approx(true.y_m, abs=2e-3)


def test_odometry_drifts_within_reason_and_is_seeded():
    path = load_path(DEMO)
    drifts = []
    for seed in range(8):
        end = drifting_odometry(path, seed)[-1]
        true = path.start.inverse().compose(path.pose(end.time_s))
        drifts.append(math.hypot(end.pose.x_m - true.x_m, end.pose.y_m - true.y_m))
    way_m = np.sum(np.abs(path.speeds[:, 0])) * 0.005
    assert 0.001 * way_m < np.median(drifts) < 0.03 * way_m
    assert drifting_odometry(path, 3) == drifting_odometry(path, 3)
    assert drifting_odometry(path, 3) != drifting_odometry(path, 4)
    times = [s.time_s for s in drifting_odometry(path, 0)]
    np.testing.assert_allclose(np.diff(times), 0.02, atol=1e-9)
    heading = [s.covariance[2, 2] for s in drifting_odometry(path, 0)[::200]]
    assert np.all(np.diff(heading) >= 0.0)
    place = [np.trace(s.covariance[:2, :2]) for s in drifting_odometry(path, 0)[::200]]
    assert place[0] < place[len(place) // 2] < place[-1] < (0.1 * way_m) ** 2
