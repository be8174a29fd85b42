"""The robot's own motion decides between bearings; the plain map to compare with."""

import math

import numpy as np
import pytest
from mapping_helpers import (
    AMBIGUOUS,
    LASTING,
    detection,
    every,
    farthest,
    highest,
    look,
    mapper,
    odometry,
    one_sided,
    ping,
    value,
)

from ros_echo_perception.core.mapping import MappingConfig, plain_arcs_map
from ros_echo_perception.core.mapping.bearings import bearings_of
from ros_echo_perception.core.mapping.motion import Looks, motion_log_likelihood
from ros_echo_perception.core.types import DetectionFlag, OdometrySample, Pose2

CONFIG = MappingConfig()
PLACES = [Pose2(0.05 * k, 0.0, 0.0) for k in range(11)]


def pole_range(pose, x_m, y_m):
    return math.hypot(x_m - pose.x_m, y_m - pose.y_m)


def looks_at(range_of, places=PLACES):
    """What has been heard on the way, and the place at its end."""
    looks = Looks()
    for k, place in enumerate(places[:-1]):
        looks.add(0.1 * k, place, np.array(range_of(place)))
    now = places[-1]
    return looks.asked(0.1 * len(places), now, 10.0), now


def best_direction(looks, now, range_m, low=0.0, high=1.9):
    grid = np.arange(low, high, 0.01)
    same = np.ones(grid.size)
    likelihood = motion_log_likelihood(
        looks, now.x_m * same, now.y_m * same, range_m * same, grid, 0.004 * same
    )
    likely = np.exp(likelihood - likelihood.max())
    return float(likely @ grid / likely.sum())


# ---------------------------------------------------------------------- geometry
@pytest.mark.parametrize("bearing", [0.5, 0.9, 1.3, math.pi / 2])
def test_motion_alone_finds_the_direction_of_a_pole(bearing):
    now = PLACES[-1]
    x, y = now.x_m + 2.0 * math.cos(bearing), 2.0 * math.sin(bearing)
    looks, now = looks_at(lambda p: [pole_range(p, x, y)])
    assert best_direction(looks, now, 2.0) == pytest.approx(bearing, abs=0.05)


@pytest.mark.parametrize("normal", [0.5, 0.9, 1.3, math.pi / 2])
def test_motion_alone_finds_the_normal_of_a_wall(normal):
    """The foot of the perpendicular slides along the wall; its range tells the normal."""
    distance = lambda p: 2.0 - p.x_m * math.cos(normal)  # noqa: E731
    looks, now = looks_at(lambda p: [distance(p)])
    assert best_direction(looks, now, distance(now)) == pytest.approx(normal, abs=0.03)


def test_left_and_right_of_the_way_are_alike_to_the_motion():
    looks, now = looks_at(lambda p: [pole_range(p, 1.0, 1.5)])
    bearings = np.array([0.9, -0.9, 1.2, -1.2])
    same = np.ones(4)
    got = motion_log_likelihood(
        looks, now.x_m * same, 0.0 * same, pole_range(now, 1.0, 1.5) * same, bearings, 0.01 * same
    )
    assert got[0] == pytest.approx(got[1])
    assert got[2] == pytest.approx(got[3])


def test_a_miss_costs_the_same_however_wrong_and_a_hit_nothing():
    looks, now = looks_at(lambda p: [pole_range(p, 2.5, 0.0)])
    same = np.ones(2)
    got = motion_log_likelihood(
        looks, now.x_m * same, 0.0 * same, 2.0 * same, np.array([0.0, 3.0]), 0.004 * same
    )
    assert got[0] == pytest.approx(0.0, abs=1e-6)
    assert got[1] == pytest.approx(len(looks) * math.log(0.25))


def test_a_head_that_stands_or_turns_has_nothing_to_compare():
    looks, _ = looks_at(lambda p: [2.0], [Pose2(0.0, 0.0, 0.1 * k) for k in range(11)])
    assert looks == []


def test_looks_are_bounded_and_neither_old_nor_from_the_future():
    looks = Looks()
    for k in range(1000):
        looks.add(0.1 * k, Pose2(0.03 * k, 0.0, 0.0), np.array([1.0]))
    here = Pose2(0.03 * 999, 0.0, 0.0)
    assert 1 < len(looks.asked(100.0, here, 100.0)) <= 6
    assert looks.asked(100.0, here, 0.05) == []
    assert looks.asked(50.0, here, 100.0) == []
    looks.clear()
    assert looks.asked(100.0, here, 100.0) == []


# ---------------------------------------------------------------------- bearings
def weighed(echo, looks, now):
    heads = np.array([[now.x_m, now.y_m, now.yaw_rad]])
    return bearings_of([echo], heads, looks, CONFIG)


def test_motion_picks_the_right_one_of_equal_alternatives():
    looks, now = looks_at(lambda p: [pole_range(p, 2.0, 1.5)])
    true = math.atan2(1.5, 2.0 - now.x_m)
    listed = tuple((true + 0.2 * k, 0.25) for k in (-2, -1, 0, 1))
    echo = detection(pole_range(now, 2.0, 1.5), true, 0.3, alternatives=listed, flags=AMBIGUOUS)
    got = weighed(echo, looks, now)
    near = np.abs(got.bearing_rad - true) < 0.08
    assert got.weight[near].sum() > 0.9 * got.weight.sum()
    assert got.settled[near].all()
    assert not got.settled[~near].any()
    assert got.weight.sum() == pytest.approx(echo.existence_probability, rel=0.02)


def test_motion_finds_a_bearing_at_the_side_that_is_not_listed():
    looks, now = looks_at(lambda p: [pole_range(p, 0.6, 1.0)])
    true = math.atan2(1.0, 0.6 - now.x_m)
    listed = ((0.6, 0.6), (0.8, 0.4))
    echo = detection(pole_range(now, 0.6, 1.0), 0.68, 0.1, alternatives=listed, flags=AMBIGUOUS)
    got = weighed(echo, looks, now)
    assert got.weight[np.abs(got.bearing_rad - true) < 0.1].sum() > 0.6
    still = weighed(echo, [], now)
    assert still.weight[np.abs(still.bearing_rad - 0.7) < 0.15].sum() > 0.7


def test_certain_bearing_that_the_motion_contradicts_is_not_settled():
    looks, now = looks_at(lambda p: [pole_range(p, 2.0, 1.5)])
    true = math.atan2(1.5, 2.0 - now.x_m)
    got = weighed(detection(pole_range(now, 2.0, 1.5), true - 0.2, 0.005), looks, now)
    wrong = np.abs(got.bearing_rad - (true - 0.2)) < 0.01
    assert not got.settled[wrong].any()
    assert got.weight[wrong].sum() < 0.2


def test_weights_stay_finite_when_nothing_fits():
    looks, now = looks_at(lambda p: [0.5, 4.5])
    echoes = [detection(2.0, 0.1), one_sided(2.5, 0.0, 1.5)]
    got = bearings_of(echoes, np.zeros((2, 3)), looks, CONFIG)
    assert np.isfinite(got.weight).all()
    assert np.bincount(got.detection, got.weight).max() <= 1.0 + 1e-9
    assert bearings_of([], np.zeros((0, 3)), looks, CONFIG).weight.size == 0


def test_a_wall_at_the_side_is_drawn_although_the_ears_say_otherwise():
    """Driving along a wall 1 m to the left, the ears place it 0.6 to 0.8 rad off the axis."""
    wrong = ((0.6, 0.6), (0.8, 0.4))

    def heard(pose):
        return [detection(1.0 - pose.y_m, 0.68, 0.1, alternatives=wrong, flags=AMBIGUOUS)]

    def drawn(**settings):
        found = look(
            mapper(**(LASTING | settings)),
            every(80),
            heard,
            lambda t: Pose2(0.25 * t - 1.0, 0.0, 0.0),
        )
        rows = np.nonzero(found.data >= 65)[0]
        y = found.origin_y_m + (rows + 0.5) * found.resolution_m
        return np.sum(np.abs(y - 1.0) < 0.1), np.sum(np.abs(y - 1.0) > 0.15)

    right, phantoms = drawn()
    assert right > 15
    assert phantoms < 0.1 * right
    assert drawn(motion_span_s=0.0)[0] == 0  # the ears alone never find it


# ---------------------------------------------------------------------- plain arcs
def plain(echoes_at, times, pose_at=lambda t: Pose2(), **settings):
    events = [OdometrySample(0.02 * k, pose_at(0.02 * k)) for k in range(int(times[-1] / 0.02) + 9)]
    events += [("front", ping(t, *echoes_at(pose_at(t)))) for t in times]
    return plain_arcs_map(MappingConfig(**settings), {"front": Pose2()}, events)


def test_plain_arcs_add_log_odds_cell_by_cell():
    """Three echoes of 0.4 each: 1 / (1 + exp(-1.2)) = 0.77; three passes of -0.1: 0.43."""
    found = plain(lambda _: [detection(1.0, 0.0, 0.1)], every(3))
    assert value(found, 1.01, 0.01) == 77
    assert value(found, 0.61, 0.01) == 43
    assert value(found, 1.51, 0.01) == -1
    assert value(found, -1.0, 0.0) == -1


def test_plain_arcs_fill_the_whole_interval():
    found = plain(lambda _: [one_sided(2.0, 0.0, 1.0)], every(5))
    for bearing in (0.1, 0.5, 0.9):
        assert highest(found, 2.0 * math.cos(bearing), 2.0 * math.sin(bearing), 0.05) >= 65
    assert farthest(found, 2.0, 0.0) > 1.5


def test_plain_arcs_leave_out_what_the_mapper_leaves_out():
    bad = [
        detection(math.nan, 0.0),
        detection(2.0, 0.0, existence_probability=0.2),
        detection(6.0, 0.0),
    ]
    assert plain(lambda _: bad, every(5)).data.max() == -1
    nothing = plain_arcs_map(MappingConfig(), {"front": Pose2()}, [])
    assert nothing.data.max() == -1
    assert math.isnan(nothing.time_s)


def test_plain_arcs_have_the_window_of_the_mapper():
    pose_at = lambda t: Pose2(0.5 * t, 0.1 * t, 0.2)  # noqa: E731
    echoes = lambda _: [detection(1.0, 0.2, flags=DetectionFlag.NONE)]  # noqa: E731
    arcs = plain(echoes, every(20), pose_at)
    to = mapper()
    expected = look(to, every(20), echoes, pose_at)
    odometry(to, 2.2, 2.3, pose_at)
    assert arcs.data.shape == expected.data.shape
    assert (arcs.origin_x_m, arcs.origin_y_m) == (expected.origin_x_m, expected.origin_y_m)
    assert arcs.time_s == pytest.approx(expected.time_s)
